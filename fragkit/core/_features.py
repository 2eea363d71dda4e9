"""The features of one measurement basis, and the order in which they are packed.

With n spatial orbitals a vector of features has n² + n entries, in this order:

1. opposite spin, `o_ij`, i ≤ j, n(n+1)/2 entries in the order of `numpy.triu_indices(n)`:
   `o_ii = n_iα n_iβ`, `o_ij = n_iα n_jβ + n_jα n_iβ`;
2. same spin, `s_ij`, i < j, n(n−1)/2 entries in the order of `numpy.triu_indices(n, 1)`:
   `s_ij = n_iα n_jα + n_iβ n_jβ`;
3. linear, `n_i = n_iα + n_iβ`, n entries.

Occupations are uint8 arrays (shots, 2n) in blocked order: the n alpha orbitals, then the n beta.
"""

from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]


def feature_count(orbitals: int) -> int:
    """Number of features of one basis, n² + n.

    >>> feature_count(2)
    6
    """
    return orbitals * (orbitals + 1)


@lru_cache(maxsize=64)
def pair_indices(orbitals: int, *, strict: bool = False) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
    """Rows and columns of the packed pairs i ≤ j (or i < j when `strict`), read-only arrays."""
    rows, columns = np.triu_indices(orbitals, 1 if strict else 0)
    rows.setflags(write=False)
    columns.setflags(write=False)
    return rows, columns


def pack_features(opposite_spin: Array, same_spin: Array, linear: Array) -> Array:
    """Pack coefficient matrices (…, n, n), (…, n, n) and (…, n) into vectors (…, n² + n).

    >>> pack_features(np.array([[1., 2.], [2., 3.]]), np.array([[0., 4.], [4., 0.]]), np.array([5., 6.]))
    array([1., 2., 3., 4., 5., 6.])
    """
    n = linear.shape[-1]
    i, j = pair_indices(n)
    a, b = pair_indices(n, strict=True)
    return np.concatenate([opposite_spin[..., i, j], same_spin[..., a, b], linear], axis=-1)


def unpack_features(vector: Array, orbitals: int) -> tuple[Array, Array, Array]:
    """Inverse of `pack_features`: symmetric matrices (…, n, n), (…, n, n) and the linear part (…, n)."""
    n = orbitals
    i, j = pair_indices(n)
    a, b = pair_indices(n, strict=True)
    opposite = np.zeros((*vector.shape[:-1], n, n))
    same = np.zeros_like(opposite)
    opposite[..., i, j] = opposite[..., j, i] = vector[..., : len(i)]
    same[..., a, b] = same[..., b, a] = vector[..., len(i) : len(i) + len(a)]
    return opposite, same, np.array(vector[..., len(i) + len(a) :])


def evaluate_features(occupations: NDArray[np.integer]) -> Array:
    """Values of all features for each row of occupations (shots, 2n), as (shots, n² + n).

    >>> evaluate_features(np.array([[1, 0, 1, 1]], dtype=np.uint8))
    array([[1., 1., 0., 1., 2., 1.]])
    """
    n = occupations.shape[1] // 2
    alpha = occupations[:, :n].astype(np.float64)
    beta = occupations[:, n:].astype(np.float64)
    i, j = pair_indices(n)
    a, b = pair_indices(n, strict=True)
    opposite = alpha[:, i] * beta[:, j] + np.where(i == j, 0.0, alpha[:, j] * beta[:, i])
    same = alpha[:, a] * alpha[:, b] + beta[:, a] * beta[:, b]
    return np.concatenate([opposite, same, alpha + beta], axis=1)


def evaluate_polynomial(
    occupations: NDArray[np.integer], opposite_spin: Array, same_spin: Array, linear: Array
) -> Array:
    """Value of one fragment for each row of occupations (shots, 2n), without forming the features.

    >>> evaluate_polynomial(np.array([[1, 0, 1, 1]]), np.eye(2), np.zeros((2, 2)), np.array([1., 10.]))
    array([13.])
    """
    n = len(linear)
    alpha = occupations[:, :n].astype(np.float64)
    beta = occupations[:, n:].astype(np.float64)
    half = 0.5 * same_spin
    opposite = np.einsum("si,si->s", alpha @ opposite_spin, beta)
    same = np.einsum("si,si->s", alpha @ half, alpha) + np.einsum("si,si->s", beta @ half, beta)
    return opposite + same + (alpha + beta) @ linear
