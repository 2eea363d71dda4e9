"""From moments of single-spin occupation products to means and covariances of the packed features."""

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from fragkit.core import pair_indices

Array = NDArray[np.float64]
Index = NDArray[np.intp]


@dataclass(frozen=True, eq=False)
class SpinMoments:
    """Expectation values of products of occupations x (alpha) and y (beta) in one basis.

    S lists the single-spin features: products of two different occupations (packed), then the occupations.
    Q lists the products x_i x_j, i ≤ j (packed). Both have the same form for both spins.
    """

    alpha: Array  # E[S], (s,)
    beta: Array
    alpha_alpha: Array  # E[S_k S_l] of one spin, (s, s)
    beta_beta: Array
    alpha_beta: Array  # E[S_k(x) S_l(y)], (s, s)
    alpha_cross: Array  # E[x_i y_j S_k(x)], (n, n, s)
    beta_cross: Array  # E[x_i y_j S_k(y)], (n, n, s)
    products: Array  # E[Q_k(x) Q_l(y)], (q, q)


@lru_cache(maxsize=64)
def packed_positions(orbitals: int) -> Index:
    """(n, n) position of the pair {i, j} in the packed list i ≤ j."""
    i, j = pair_indices(orbitals)
    table = np.empty((orbitals, orbitals), dtype=np.intp)
    table[i, j] = table[j, i] = np.arange(len(i))
    table.setflags(write=False)
    return table


def feature_moments(moments: SpinMoments, orbitals: int) -> tuple[Array, Array]:
    """Mean (F,) and covariance (F, F) of the features, F = n² + n."""
    n = orbitals
    i, j = pair_indices(n)
    # o_ij = x_i y_j + x_j y_i; on the diagonal the two terms are one and the same.
    weight = np.where(i == j, 0.5, 1.0)
    cross_mean = moments.alpha_beta[-n:, -n:]
    opposite = weight * (cross_mean[i, j] + cross_mean[j, i])
    mean = np.concatenate([opposite, moments.alpha + moments.beta])

    single = moments.alpha_alpha + moments.beta_beta + moments.alpha_beta + moments.alpha_beta.T
    mixed = moments.alpha_cross + moments.beta_cross
    mixed = weight[:, None] * (mixed[i, j] + mixed[j, i])
    place = packed_positions(n)

    def ordered(a: Index, b: Index) -> Array:
        return moments.products[place[a[:, None], i[None, :]], place[b[:, None], j[None, :]]]

    # E[x_a y_b x_i y_j] over the four orders of the two pairs; swapping both pairs is covered by symmetry of Q.
    def swapped(a: Index, b: Index) -> Array:
        return moments.products[place[a[:, None], j[None, :]], place[b[:, None], i[None, :]]]

    double = ordered(i, j) + swapped(i, j) + ordered(j, i) + swapped(j, i)
    double = weight[:, None] * double * weight[None, :]
    second = np.block([[double, mixed], [mixed.T, single]])
    covariance = second - np.outer(mean, mean)
    return mean, 0.5 * (covariance + covariance.T)
