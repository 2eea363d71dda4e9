"""The augmented Lagrangian over rotations and coefficients, with shares and shifts eliminated.

    L = (Σ σ_m)² + ν·r + κ rᵀ M⁻¹ r,   r = h − Σ_m A_m c_m without shifts,   σ_m² = c_mᵀ C_m c_m, w_m = σ_m/Σσ,
    ∂L/∂c_m = 2 C_m c_m / w_m − A_mᵀ ν_eff,   ∂L/∂X_m = (1/w_m) ∂σ_m²/∂X_m − ∂Φ/∂X_m at fixed ν_eff,

ν_eff = ν + 2κ M⁻¹ r, Φ = Σ_m c_m · A_mᵀ ν_eff, U_m → U_m exp(X_m). No covariance matrix and no information matrix is
formed in an evaluation; M⁻¹ and the scaling belong to the last refresh. (Method of multipliers: Hestenes,
J. Optim. Theory Appl. 4, 303 (1969).)
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fragkit.core import pair_indices
from fragkit.planning._operators.design_map import DesignMap
from fragkit.planning._rotations.covariances import Covariances, cayley
from fragkit.planning._rotations.refresh import Refresh

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Point:
    """A value of the Lagrangian with its gradient by the scaled variables.

    Parameters
    ----------
    rotations, scaled
        Where it was taken, (K, n, n) and (K, F').
    value, cost
        L and (Σ σ)², hartree².
    gradient
        (K n(n−1)/2 + K F',) by the scaled generators (pairs p < q of each rotation), then by `scaled`.
    multiplier_step
        (rows,) 2κ M⁻¹ r, what the method of multipliers adds to ν.
    moments
        Variances, covariances times coefficients and gradients by the generators: what does not depend on ν.
    """

    rotations: Array
    scaled: Array
    value: float
    cost: float
    gradient: Array
    multiplier_step: Array
    moments: tuple[Array, Array, Array]


class Lagrangian:
    """The Lagrangian in the scaling of one refresh: c_m = scale_m z_m, generators X_m = steps_m x_m."""

    def __init__(self, design: DesignMap, covariances: Covariances, base: Refresh, penalty: float) -> None:
        self._design = design
        self._covariances = covariances
        self.base = base
        self.penalty = penalty
        self._pairs = pair_indices(design.orbitals, strict=True)

    def evaluate(
        self, rotations: Array, scaled: Array, dual: Array, moments: tuple[Array, Array, Array] | None = None
    ) -> Point:
        """L and its gradient; `moments` of a `Point` at the same place are used again when given."""
        base = self.base
        coefficients = np.matmul(base.scale, scaled[:, :, None])[:, :, 0]
        if moments is None:
            moments = self._covariances.evaluate(rotations, coefficients)
        variances, products, turning = moments
        deviations = np.sqrt(np.maximum(variances, 1e-300))
        total = deviations.sum()
        inverse_shares = total / deviations
        added = np.zeros(0)
        penalty = 0.0

        def dual_of(residual: Array) -> Array:
            nonlocal added, penalty
            step = base.metric(residual)
            penalty = float(dual @ residual + self.penalty * (residual @ step))
            added = self._design.shifts.project(2.0 * self.penalty * step)
            return dual + added

        found = self._design.evaluate(rotations, coefficients, dual_of)
        by_coefficients = 2.0 * inverse_shares[:, None] * products - found.adjoint
        by_scaled = np.matmul(by_coefficients[:, None, :], base.scale)[:, 0, :]
        by_turning = inverse_shares[:, None, None] * turning - found.gradient
        p, q = self._pairs
        gradient = np.concatenate([(by_turning[:, p, q] * base.steps).ravel(), by_scaled.ravel()])
        cost = float(total**2)
        return Point(rotations, scaled, cost + penalty, cost, gradient, added, moments)

    def step(self, point: Point, direction: Array) -> tuple[Array, Array]:
        """Rotations and scaled coefficients after a step from `point`; rotations by Cayley's map."""
        p, q = self._pairs
        count, n = len(point.rotations), self._design.orbitals
        turns = direction[: count * len(p)].reshape(count, len(p)) * self.base.steps
        generators = np.zeros((count, n, n))
        generators[:, p, q] = turns
        generators[:, q, p] = -turns
        return cayley(point.rotations, generators), point.scaled + direction[count * len(p) :].reshape(count, -1)

    def largest_turn(self, direction: Array) -> float:
        """Largest rotation angle, in radian, that a step makes between two orbitals."""
        count, pairs = len(self.base.steps), len(self._pairs[0])
        turns = np.abs(direction[: count * pairs].reshape(count, pairs)) * self.base.steps
        return float(np.max(turns, initial=0.0))
