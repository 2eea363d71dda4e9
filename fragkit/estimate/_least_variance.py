"""Least-variance coefficients of any operator for circuits whose shots are already fixed."""

from collections.abc import Sequence
from copy import copy
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fragkit.planning import OperatorSpace, WhitenedDesign, no_shifts, sector_shifts

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Combination:
    """Coefficients (K, n² + n) of one operator, the constant that goes with them, and what they cannot reproduce.

    `missing` are the operator rows outside the span, `relative` their size over the operator's.
    """

    coefficients: Array
    constant: float
    missing: Array
    relative: float


class FixedShots:
    """Rotations with covariances and shots, ready to give the least-variance coefficients of operators one by one.

    With M = Σ_m N_m A_m C_m⁻¹ A_mᵀ and rows t of the operator, c_m = N_m C_m⁻¹ A_mᵀ M⁻¹ t minimises the variance
    Σ_m c_mᵀ C_m c_m / N_m under Σ_m A_m c_m = t (Gauss and Markov; Aitken 1935).
    """

    def __init__(
        self,
        rotations: Array,
        covariances: Sequence[Array] | Array,
        shots: NDArray[Any],
        electrons: tuple[int, int],
        *,
        shifts: bool,
    ) -> None:
        n = rotations.shape[1]
        self.space = OperatorSpace(n)
        self.shifts = sector_shifts(self.space, electrons) if shifts else no_shifts(self.space)
        self._design = WhitenedDesign(self.space, rotations, list(covariances), np.zeros(self.space.size), self.shifts)
        self._rotations = rotations
        self._shares = shots / np.sum(shots)
        self._information = self._design.unit.information(self._shares)

    def with_shots(self, shots: NDArray[Any]) -> "FixedShots":
        """The same circuits and covariances with other shots."""
        other = copy(self)
        other._shares = shots / np.sum(shots)
        other._information = self._design.unit.information(other._shares)
        return other

    def slopes(self, rows: Array) -> Array:
        """(K,) φ_m = νᵀ A_m C_m⁻¹ A_mᵀ ν of an operator: minus the derivative of its variance by the shares."""
        design = self._design
        response = design.unit.matrix.T @ self._information.inverse(design.from_rows(rows))
        return np.array([response[block] @ response[block] for block in design.unit.blocks])

    def combination(self, rows: Array) -> Combination:
        """Coefficients for the operator with these rows of `OperatorSpace`."""
        design, size = self._design, float(np.linalg.norm(rows))
        coefficients = np.zeros((design.unit.count, design.whiteners[0].shape[0]))
        left, previous = self.shifts.project(rows), np.inf
        # Repeated because M is ill-conditioned: each pass removes most of what rounding left.
        for _ in range(6):
            now = float(np.linalg.norm(left))
            if now <= 1e-14 * size or now > 0.5 * previous:
                break
            previous = now
            dual = self._information.inverse(design.from_rows(left))
            coefficients = coefficients + design.coefficients(self._shares, dual)
            coefficients = coefficients + design.free_part(self.shifts.project(self._left(rows, coefficients)))
            left = self.shifts.project(self._left(rows, coefficients))
        missing, constant = self.shifts.split(self._left(rows, coefficients))
        return Combination(coefficients, constant, missing, float(np.linalg.norm(missing)) / size if size else 0.0)

    def _left(self, rows: Array, coefficients: Array) -> Array:
        return rows - self.space.apply(self._design.columns, self._rotations, coefficients)
