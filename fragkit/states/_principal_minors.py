"""Wick's theorem for occupations: the mean of x_i x_j … of one spin is a principal minor of its density matrix."""

from functools import lru_cache
from itertools import combinations

import numpy as np
from numpy.typing import NDArray

from fragkit.core import pair_indices
from fragkit.states._assembly import SpinMoments

Array = NDArray[np.float64]
Index = NDArray[np.intp]


@lru_cache(maxsize=16)
def _subsets(orbitals: int) -> tuple[Index, ...]:
    """All subsets of 0 … 4 orbitals, one array (count, size) per size."""
    tables = []
    for size in range(5):
        listed = list(combinations(range(orbitals), size))
        tables.append(np.array(listed, dtype=np.intp).reshape(len(listed), size))
    return tuple(tables)


@lru_cache(maxsize=16)
def _union_positions(orbitals: int) -> tuple[Index, Index]:
    """Where the product of two single-spin features, and of an orbital and a feature, stands among all subsets.

    Features are pairs i < j, then orbitals. Subsets are numbered through by size, then in lexicographic order.
    """
    i, j = pair_indices(orbitals, strict=True)
    masks = np.concatenate([(1 << i.astype(object)) | (1 << j.astype(object)), 1 << np.arange(orbitals).astype(object)])
    number = {}
    for table in _subsets(orbitals):
        for row in table:
            number[sum(1 << int(k) for k in row)] = len(number)
    square = np.array([[number[a | b] for b in masks] for a in masks], dtype=np.intp)
    return square, square[-orbitals:]


def all_principal_minors(density: Array) -> Array:
    """Determinants of the principal submatrices of all subsets of 0 … 4 orbitals, in the order of the subsets."""
    n = len(density)
    values = []
    for table in _subsets(n):
        blocks = density[table[:, :, None], table[:, None, :]]
        values.append(np.linalg.det(blocks) if len(table) else np.zeros(0))
    return np.concatenate(values)


def uniform_subset_means(orbitals: int, electrons: int) -> Array:
    """Means of products over all subsets of 0 … 4 orbitals when all strings of one spin are equally likely."""
    by_size, mean = [], 1.0
    for size, table in enumerate(_subsets(orbitals)):
        by_size.append(np.full(len(table), mean))
        mean *= (electrons - size) / (orbitals - size) if orbitals > size else 0.0
    return np.concatenate(by_size)


def independent_spin_moments(alpha: Array, beta: Array, orbitals: int) -> SpinMoments:
    """Moments of two independent spins from the means of products over all subsets of 0 … 4 orbitals."""
    n = orbitals
    square, strip = _union_positions(n)
    tables = (alpha, beta)
    single = [t[np.diag(square)] for t in tables]
    i, j = pair_indices(n)
    first = len(square) - n
    product = [t[square[first + i, first + j]] for t in tables]
    alpha_strip, beta_strip = (t[strip] for t in tables)  # E[x_i S_k]
    return SpinMoments(
        alpha=single[0],
        beta=single[1],
        alpha_alpha=alpha[square],
        beta_beta=beta[square],
        alpha_beta=np.outer(single[0], single[1]),
        alpha_cross=alpha_strip[:, None, :] * single[1][None, first:, None],
        beta_cross=single[0][first:, None, None] * beta_strip[None, :, :],
        products=np.outer(product[0], product[1]),
    )
