"""Fixed rotations and covariances as operators of unit variance."""

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import lstsq

from fragkit.planning._exact.unit_design import UnitDesign, column_space
from fragkit.planning._operators.shifts import Shifts
from fragkit.planning._operators.space import OperatorSpace

Array = NDArray[np.float64]

NULL_VARIANCE = 1e-12
"""Eigenvalues of a covariance below this fraction of the largest (or of one) are zero: they cost no shots."""

FREE_TOLERANCE = 1e-8
"""Operators without variance that are smaller than this outside the shifts are shifts, but for rounding."""


class WhitenedDesign:
    """The operators that each circuit measures, scaled to unit variance per shot.

    For circuit m with covariance C_m = V Λ Vᵀ the block is B_m = A_m V Λ^{-1/2} over the eigenvalues that are not zero,
    so that coefficients c_m = V Λ^{-1/2} x have variance |x|². Directions without variance cost nothing; the operators
    they span, and the shifts, are projected out of everything and put back by `free_part`. `unit` are the blocks.
    """

    def __init__(
        self, space: OperatorSpace, rotations: Array, covariances: Sequence[Array], target: Array, shifts: Shifts
    ) -> None:
        self.space, self.rotations, self.shifts = space, rotations, shifts
        self.columns = space.pair_columns(rotations)
        self.target = target
        self.whiteners: list[Array] = []
        self._null: list[Array] = []
        for covariance in covariances:
            values, vectors = np.linalg.eigh(covariance)
            keep = values > NULL_VARIANCE * max(values[-1], 1.0)
            self.whiteners.append(vectors[:, keep] / np.sqrt(values[keep]))
            self._null.append(vectors[:, ~keep])
        sizes = [whitener.shape[1] for whitener in self.whiteners]
        matrix = np.empty((space.size, sum(sizes)), order="F")
        free: list[Array] = []
        for m, block in enumerate(np.split(matrix, np.cumsum(sizes)[:-1], axis=1)):
            operators = space.dense(self.columns[m], rotations[m])
            block[:] = shifts.project(operators @ self.whiteners[m])
            free.append(shifts.project(operators @ self._null[m]))
        self._free_operators = np.concatenate(free, axis=1)
        self.free_basis = np.zeros((space.size, 0))
        if np.any(np.abs(self._free_operators) > FREE_TOLERANCE):
            self.free_basis = column_space(self._free_operators, FREE_TOLERANCE)
        if self.free_basis.shape[1]:
            matrix -= self.free_basis @ (self.free_basis.T @ matrix)
        projected = (shifts.basis, self.free_basis)
        self.unit = UnitDesign(matrix, sizes, self.project(target), projected=projected)

    def project(self, rows: Array) -> Array:
        """`rows` without their parts that cost nothing."""
        rows = self.shifts.project(rows)
        if self.free_basis.shape[1]:
            rows = rows - self.free_basis @ (self.free_basis.T @ rows)
        return rows

    def from_rows(self, rows: Array) -> Array:
        """Operator rows, without what costs nothing, in the working basis of `unit`."""
        return self.unit.from_rows(self.project(rows))

    def coefficients(self, weights: Array, dual: Array) -> Array:
        """Feature coefficients (K, F) c_m = w_m C_m⁻¹ A_mᵀ ν of every circuit."""
        whitened = self.unit.coefficients(weights, dual)
        return np.stack([w @ x for w, x in zip(self.whiteners, whitened, strict=True)])

    def residual(self, coefficients: Array) -> Array:
        """Rows of the Hamiltonian minus the fragments, without the shifts."""
        return self.shifts.project(self.target - self.space.apply(self.columns, self.rotations, coefficients))

    def free_part(self, residual: Array) -> Array:
        """Coefficients (K, F), of no variance, whose operator is the part of `residual` that costs nothing."""
        features = self.whiteners[0].shape[0]
        if not self.free_basis.shape[1]:
            return np.zeros((len(self.whiteners), features))
        inside = self.free_basis @ (self.free_basis.T @ residual)
        # QR with column pivoting: several times faster than singular values for a few thousand rows.
        found: Any = lstsq(self._free_operators, inside, cond=FREE_TOLERANCE, lapack_driver="gelsy")
        solution = np.asarray(found[0])
        ends = np.cumsum([null.shape[1] for null in self._null])
        parts = np.split(solution, ends[:-1])
        return np.stack([null @ part for null, part in zip(self._null, parts, strict=True)])
