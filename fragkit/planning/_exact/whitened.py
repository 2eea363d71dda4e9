"""Fixed rotations and covariances as one whitened matrix, and the linear systems of least-variance weights."""

from collections.abc import Sequence
from itertools import pairwise
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import cho_solve, cholesky, lstsq, solve_triangular
from scipy.linalg.blas import dsyrk  # pyright: ignore[reportAttributeAccessIssue]

from fragkit.planning._operators.shifts import Shifts
from fragkit.planning._operators.space import OperatorSpace

Array = NDArray[np.float64]

NULL_VARIANCE = 1e-12
"""Eigenvalues of a covariance below this fraction of the largest (or of one) are zero: they cost no shots."""

FREE_TOLERANCE = 1e-8
"""Operators without variance that are smaller than this outside the shifts are shifts, but for rounding."""

RANK_TOLERANCE = 1e-9
"""Singular values of unit-norm operators below this fraction of the largest are rounding noise."""


class WhitenedDesign:
    """The operators that each circuit measures, scaled to unit variance per shot.

    For circuit m with covariance C_m = V Λ Vᵀ the block is B_m = A_m V Λ^{-1/2} over the eigenvalues that are not zero,
    so that coefficients c_m = V Λ^{-1/2} x have variance |x|². Directions without variance cost nothing; the operators
    they span, and the shifts, are projected out of everything (P below) and put back by `free_part`.

    Rows are in a basis of the operators that the circuits span outside of those; what of the Hamiltonian is not
    spanned is `unreachable`.
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
        ends = np.cumsum([0, *sizes])
        self.blocks = [slice(int(a), int(b)) for a, b in pairwise(ends)]
        self.matrix = np.empty((space.size, int(ends[-1])), order="F")
        free: list[Array] = []
        for m, block in enumerate(self.blocks):
            operators = space.dense(self.columns[m], rotations[m])
            self.matrix[:, block] = shifts.project(operators @ self.whiteners[m])
            free.append(shifts.project(operators @ self._null[m]))
        self._free_operators = np.concatenate(free, axis=1)
        self.free_basis = np.zeros((space.size, 0))
        if np.any(np.abs(self._free_operators) > FREE_TOLERANCE):
            self.free_basis = _range(self._free_operators, FREE_TOLERANCE)
        if self.free_basis.shape[1]:
            self.matrix -= self.free_basis @ (self.free_basis.T @ self.matrix)
        self.wanted = self.project(target)
        self._basis: Array | None = None
        self._lengths = np.linalg.norm(self.matrix, axis=0)
        self.unreachable = 0.0
        if self.matrix.shape[1] < space.size - shifts.basis.shape[1] - self.free_basis.shape[1]:
            self.reduce()

    @property
    def count(self) -> int:
        """Number of circuits."""
        return len(self.blocks)

    def project(self, rows: Array) -> Array:
        """`rows` without their parts that cost nothing."""
        rows = self.shifts.project(rows)
        if self.free_basis.shape[1]:
            rows = rows - self.free_basis @ (self.free_basis.T @ rows)
        return rows

    def reduce(self) -> None:
        """Change to a basis of the operators that the circuits span."""
        if self._basis is not None:
            return
        lengths = np.where(self._lengths > 0, self._lengths, 1.0)
        basis = _range(self.matrix / lengths, RANK_TOLERANCE)
        full = self.wanted
        self.matrix = np.asfortranarray(basis.T @ self.matrix)
        self.wanted = basis.T @ full
        self.unreachable = float(np.linalg.norm(full - basis @ self.wanted))
        self._basis = basis

    def to_rows(self, vector: Array) -> Array:
        """A vector of the working basis as operator rows."""
        return vector if self._basis is None else self._basis @ vector

    def from_rows(self, rows: Array) -> Array:
        """Operator rows, without what costs nothing, in the working basis."""
        projected = self.project(rows)
        return projected if self._basis is None else self._basis.T @ projected

    def information(self, weights: Array) -> "Information":
        """M = Σ_m w_m B_m B_mᵀ, ready to solve with; changes to a smaller basis once if M is singular."""
        found = Information(self, weights)
        if found.singular and self._basis is None:
            self.reduce()
            found = Information(self, weights)
        return found

    def coefficients(self, weights: Array, dual: Array) -> list[Array]:
        """Whitened coefficients x_m = w_m B_mᵀ ν of every circuit."""
        response = self.matrix.T @ dual
        return [weight * response[block] for weight, block in zip(weights, self.blocks, strict=True)]

    def features(self, whitened: Sequence[Array]) -> Array:
        """Feature coefficients (K, F) from whitened ones."""
        return np.stack([w @ x for w, x in zip(self.whiteners, whitened, strict=True)])

    def residual(self, coefficients: Array) -> Array:
        """Rows of the Hamiltonian minus the fragments, without the shifts."""
        return self.shifts.project(self.target - self.space.apply(self.columns, self.rotations, coefficients))

    def free_part(self, residual: Array) -> Array:
        """Coefficients (K, F), of no variance, whose operator is the part of `residual` that costs nothing."""
        features = self.whiteners[0].shape[0]
        if not self.free_basis.shape[1]:
            return np.zeros((self.count, features))
        inside = self.free_basis @ (self.free_basis.T @ residual)
        # QR with column pivoting: several times faster than singular values for a few thousand rows.
        found: Any = lstsq(self._free_operators, inside, cond=FREE_TOLERANCE, lapack_driver="gelsy")
        solution = np.asarray(found[0])
        ends = np.cumsum([null.shape[1] for null in self._null])
        parts = np.split(solution, ends[:-1])
        return np.stack([null @ part for null, part in zip(self._null, parts, strict=True)])


class Information:
    """The information matrix M(w) at some weights, factorised."""

    def __init__(self, design: WhitenedDesign, weights: Array) -> None:
        self.design = design
        self.weights = np.array(weights)
        size = design.matrix.shape[0]
        matrix = np.zeros((size, size), order="F")
        # A few circuits at a time keep the scaled copy small.
        step = max(1, int(2e7 / max(1, size * max(b.stop - b.start for b in design.blocks))))
        for first in range(0, design.count, step):
            chosen = range(first, min(first + step, design.count))
            columns = slice(design.blocks[chosen[0]].start, design.blocks[chosen[-1]].stop)
            scale = np.concatenate(
                [np.full(design.blocks[m].stop - design.blocks[m].start, np.sqrt(weights[m])) for m in chosen]
            )
            matrix = dsyrk(1.0, design.matrix[:, columns] * scale, beta=1.0, c=matrix, lower=1, overwrite_c=1)
        self.scale = float(np.mean(np.diag(matrix)))
        if design._basis is None:
            # Complete M on the directions that were projected out, so that it can be inverted.
            for basis in (design.shifts.basis, design.free_basis):
                if basis.shape[1]:
                    matrix = dsyrk(self.scale, basis, beta=1.0, c=matrix, lower=1, overwrite_c=1)
        self.singular = False
        diagonal = np.diag(matrix).copy()
        # In the smaller basis M can still be singular to rounding, as circuits that are just enough leave directions
        # of almost no weight; a small multiple of its scale is added then, and refinement takes out what that costs.
        added = 0.0
        while True:
            try:
                self._factor = cholesky(matrix, lower=True, overwrite_a=design._basis is None, check_finite=False)
                pivots = np.diag(self._factor) ** 2
                self.singular = bool(np.min(pivots / diagonal) < 1e-11)
                break
            except np.linalg.LinAlgError:
                self.singular = True
                if design._basis is None:
                    break
                if added > 1e-6:
                    raise
                more = max(99.0 * added, 1e-14)
                matrix[np.diag_indices_from(matrix)] += more * self.scale
                added += more

    def inverse(self, vectors: Array) -> Array:
        """M⁻¹ applied to vectors of the working basis."""
        return cho_solve((self._factor, True), vectors, check_finite=False)

    def half_inverse(self, vectors: Array) -> Array:
        """L⁻¹ applied to vectors, M = L Lᵀ."""
        return solve_triangular(self._factor, vectors, lower=True, check_finite=False)


def _range(matrix: Array, tolerance: float) -> Array:
    """Orthonormal basis of the column space: left singular vectors above `tolerance` times the largest column."""
    if matrix.size == 0:
        return np.zeros((len(matrix), 0))
    left, singular, _ = np.linalg.svd(matrix, full_matrices=False)
    return np.ascontiguousarray(left[:, singular > tolerance * max(1.0, singular[0])])
