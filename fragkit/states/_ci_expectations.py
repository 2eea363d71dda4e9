"""Expectation values of fragments on a CI vector, and their gradient by the rotation, without a covariance matrix.

With c the vector in a rotated basis, p = c², f the fragment's value and g = (f − center)², the derivative of
Σ p g for U → U exp(X) is 2 Σ_pq X_pq ⟨c| E_pq |g∘c⟩: rotating by exp(X) changes c by its transposed one-electron
operator, so nothing has to be differentiated through the rotation of the vector.
"""

from typing import TYPE_CHECKING

import numpy as np

from fragkit.core import pack_features, pair_indices, unpack_features
from fragkit.states._base import Array, Expectations
from fragkit.states._strings import Strings, compound_matrix, strings

if TYPE_CHECKING:
    from fragkit.states._ci import CIState


class CIExpectations(Expectations):
    """K fragments on one CI vector."""

    def __init__(self, state: "CIState", rotations: Array, coefficients: Array) -> None:
        n, (a, b) = state.orbitals, state.electrons
        self._alpha, self._beta = strings(n, a), strings(n, b)
        left = compound_matrix(rotations, a)
        right = left if a == b else compound_matrix(rotations, b)
        self._vectors = left @ state.vector @ right.swapaxes(-1, -2)
        self._weights = self._vectors**2
        opposite, same, linear = unpack_features(coefficients, n)
        at_alpha = _single_spin_values(self._alpha, same, linear)
        at_beta = _single_spin_values(self._beta, same, linear)
        values = (self._alpha.occupations @ opposite) @ self._beta.occupations.T
        values += at_alpha[:, :, None]
        values += at_beta[:, None, :]
        self._values = values
        self.mean = np.einsum("kab,kab->k", self._weights, values)

    def about(self, center: Array) -> tuple[Array, Array, Array]:
        """See `Expectations.about`."""
        alpha, beta = self._alpha, self._beta
        n = alpha.orbitals
        deviation = self._values - center[:, None, None]
        weighted = self._weights * deviation
        second = np.einsum("kab,kab->k", weighted, deviation)

        cross = alpha.occupations.T @ (weighted @ beta.occupations)
        i, j = pair_indices(n)
        packed = np.where(i == j, 0.5, 1.0) * (cross[:, i, j] + cross[:, j, i])
        single = weighted.sum(axis=2) @ alpha.features + weighted.sum(axis=1) @ beta.features
        product = np.concatenate([packed, single], axis=1)

        tilted = self._vectors * deviation**2
        gradient = np.zeros((len(center), n, n))
        if 0 < alpha.electrons < n:
            gradient += _antisymmetric_transition(self._vectors @ tilted.swapaxes(1, 2), alpha)
        if 0 < beta.electrons < n:
            gradient += _antisymmetric_transition(self._vectors.swapaxes(1, 2) @ tilted, beta)
        return second, product, gradient


def _single_spin_values(spin: Strings, same: Array, linear: Array) -> Array:
    coefficients = pack_features(np.zeros_like(same), same, linear)[:, -spin.features.shape[1] :]
    return coefficients @ spin.features.T


def _antisymmetric_transition(transition: Array, spin: Strings) -> Array:
    """2 (D_pq − D_qp) of one spin from T[I, J] = Σ c[I] (g∘c)[J] over the other spin, (K, N, N) → (K, n, n)."""
    n = spin.orbitals
    left, right, signs, labels = spin.singles
    entries = signs * (transition[:, left, right] - transition[:, right, left])
    i, j = pair_indices(n, strict=True)
    starts = np.searchsorted(labels, np.arange(len(i)))
    sums = np.add.reduceat(entries, starts, axis=1)
    gradient = np.zeros((len(transition), n, n))
    gradient[:, i, j] = 2.0 * sums
    gradient[:, j, i] = -2.0 * sums
    return gradient
