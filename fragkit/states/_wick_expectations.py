"""Variances of fragments on uncorrelated states in closed form, with all derivatives.

Per spin, with P the density matrix in the rotated basis, Q = 1 − P, d = diag P and S = P∘Q, the mean field of a
fragment is F = diag(l + Z d + Y d') − Z∘P (d' of the other spin), and

    Var = Σ_σ [tr(F Q F P) + ½ tr(Z S Z S) − ½ Σ Z_ab Z_cd P_ac P_bd Q_ad Q_bc] + tr(Y S_α Y S_β),

the sum of the single and double contractions of Wick's theorem between the two copies of f.
"""

from dataclasses import dataclass

import numpy as np

from fragkit.core import pair_indices, unpack_features
from fragkit.states._base import Array, Expectations


@dataclass(frozen=True, eq=False)
class _Spin:
    """One spin's matrices for K rotations."""

    density: Array  # P, (K, n, n)
    holes: Array  # Q
    filling: Array  # d, (K, n)
    spread: Array  # S


def _spin(density: Array, rotations: Array) -> _Spin:
    rotated = rotations.swapaxes(1, 2) @ density @ rotations
    rotated = 0.5 * (rotated + rotated.swapaxes(1, 2))
    holes = np.eye(rotated.shape[-1]) - rotated
    return _Spin(rotated, holes, np.diagonal(rotated, axis1=1, axis2=2).copy(), rotated * holes)


def _diagonal(vectors: Array) -> Array:
    return vectors[:, :, None] * np.eye(vectors.shape[-1])


def _diagonal_of(matrices: Array) -> Array:
    return np.diagonal(matrices, axis1=1, axis2=2)


class WickExpectations(Expectations):
    """K fragments on one uncorrelated state."""

    def __init__(self, density_alpha: Array, density_beta: Array, rotations: Array, coefficients: Array) -> None:
        self._opposite, self._same, linear = unpack_features(coefficients, rotations.shape[-1])
        self._equal = np.array_equal(density_alpha, density_beta)
        alpha = _spin(density_alpha, rotations)
        beta = alpha if self._equal else _spin(density_beta, rotations)
        self._spins = (alpha, beta)
        self._fields = []
        mean = np.einsum("ki,kij,kj->k", alpha.filling, self._opposite, beta.filling, optimize=True)
        for one, other in ((alpha, beta), (beta, alpha)):
            inner = np.einsum("kij,kj->ki", self._same, one.filling)
            outer = np.einsum("kij,kj->ki", self._opposite, other.filling)
            exchange = self._same * one.density
            self._fields.append(_diagonal(linear + inner + outer) - exchange)
            mean = mean + np.einsum("ki,ki->k", linear + 0.5 * inner, one.filling)
            mean = mean - 0.5 * np.einsum("kij,kij->k", exchange, one.density)
        self.mean = mean

    def about(self, center: Array) -> tuple[Array, Array, Array]:
        """See `Expectations.about`."""
        alpha, beta = self._spins
        first = _same_spin_part(alpha, self._same, self._fields[0])
        second = first if self._equal else _same_spin_part(beta, self._same, self._fields[1])
        y = self._opposite
        through = alpha.spread @ y @ beta.spread
        variance = first.variance + second.variance + np.einsum("kij,kij->k", y, through)

        seen_by_alpha = y @ beta.spread @ y
        seen_by_beta = y @ alpha.spread @ y
        by_density = []
        for one, part, other, seen in ((alpha, first, second, seen_by_alpha), (beta, second, first, seen_by_beta)):
            shift = np.einsum("kij,kj->ki", y, other.response) + _diagonal_of(seen)
            by_density.append(part.by_density + _diagonal(shift) - 2.0 * seen * one.density)

        n = y.shape[-1]
        i, j = pair_indices(n)
        a, b = pair_indices(n, strict=True)
        by_opposite = (
            first.response[:, :, None] * beta.filling[:, None, :]
            + alpha.filling[:, :, None] * second.response[:, None, :]
            + 2.0 * through
        )
        by_same = first.by_same + second.by_same
        product = 0.5 * np.concatenate(
            [
                np.where(i == j, 0.5, 1.0) * (by_opposite[:, i, j] + by_opposite[:, j, i]),
                by_same[:, a, b] + by_same[:, b, a],
                first.response + second.response,
            ],
            axis=1,
        )

        offset = self.mean - center
        product += offset[:, None] * self._mean_features()
        gradient = np.zeros_like(y)
        for one, field, slope in zip(self._spins, self._fields, by_density, strict=True):
            # P becomes P + PX − XP, so tr(Γ dP) = −Σ_pq (ΓP − PΓ)_pq X_pq; each pair p < q counts twice.
            slope = slope + 2.0 * offset[:, None, None] * field
            turned = slope @ one.density
            gradient -= 2.0 * (turned - turned.swapaxes(1, 2))
        return variance + offset**2, product, gradient

    def _mean_features(self) -> Array:
        alpha, beta = self._spins
        n = alpha.filling.shape[1]
        i, j = pair_indices(n)
        a, b = pair_indices(n, strict=True)
        x, y = alpha.filling, beta.filling
        opposite = np.where(i == j, 0.5, 1.0) * (x[:, i] * y[:, j] + x[:, j] * y[:, i])
        same = x[:, a] * x[:, b] + y[:, a] * y[:, b] - alpha.density[:, a, b] ** 2 - beta.density[:, a, b] ** 2
        return np.concatenate([opposite, same, x + y], axis=1)


@dataclass(frozen=True, eq=False)
class _SameSpinPart:
    """What one spin adds by itself: its variance and half-finished derivatives."""

    variance: Array  # (K,)
    response: Array  # (K, n), derivative by the linear coefficients; the other spin's field needs it too
    by_density: Array  # (K, n, n), symmetric
    by_same: Array  # (K, n, n), derivative by Z_ij, i and j independent


def _same_spin_part(spin: _Spin, z: Array, field: Array) -> _SameSpinPart:
    count, n, _ = z.shape
    p, q, s = spin.density, spin.holes, spin.spread
    field_holes = field @ q @ field
    field_density = field @ p @ field
    variance = np.einsum("kij,kij->k", field_holes, p)
    mixed = q @ field @ p
    mixed = mixed + mixed.swapaxes(1, 2)
    response = _diagonal_of(mixed)

    twice = z @ s @ z
    variance = variance + 0.5 * np.einsum("kij,kij->k", twice, s)

    # outer[b, (d, c)] = P_bd Q_bc and inner[a, (d, c)] = Σ_b Z_ab P_bd Q_bc carry the exchange contraction.
    outer = p[:, :, :, None] * q[:, :, None, :]
    inner = (z @ outer.reshape(count, n, n * n)).reshape(count, n, n, n)
    inner *= z[:, None, :, :]
    by_p = (q[:, :, None, :] @ inner)[:, :, 0, :]
    by_q = (inner @ p[:, :, :, None])[:, :, :, 0]
    variance = variance - 0.5 * np.einsum("kac,kac->k", p, by_p)
    weighted = outer.swapaxes(2, 3) * z[:, None, :, :]  # [a, c, d] = Z_cd P_ad Q_ac
    exchange = weighted.reshape(count, n, n * n) @ outer.reshape(count, n, n * n).swapaxes(1, 2)

    by_density = field_holes - field_density - z * mixed
    by_density = by_density + _diagonal(np.einsum("kij,kj->ki", z, response) + _diagonal_of(twice))
    by_density = by_density - 2.0 * twice * p - by_p + by_q
    by_same = response[:, :, None] * spin.filling[:, None, :] - p * mixed + s @ z @ s - exchange
    return _SameSpinPart(variance, response, by_density, by_same)
