"""Operators of unit variance in blocks, and the linear systems of least-variance weights."""

from collections.abc import Sequence
from itertools import pairwise

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import cho_solve, cholesky, solve_triangular
from scipy.linalg.blas import dsyrk  # pyright: ignore[reportAttributeAccessIssue]

Array = NDArray[np.float64]

RANK_TOLERANCE = 1e-9
"""Singular values of unit-norm operators below this fraction of the largest are rounding noise."""


class UnitDesign:
    """Operators of unit variance per shot, a block B_m of columns for each circuit, and the vector h they must sum to.

    `matrix` (rows, columns) holds the blocks side by side, `sizes` their numbers of columns, `wanted` (rows,) is h, and
    `projected` are orthonormal columns, (rows, s) each, that were projected out of both and complete M when it is
    inverted. `blocks` are slices of the columns.

    Where the circuits span less than that leaves, `matrix` and `wanted` change to a basis of their span; `to_rows` and
    `from_rows` translate.
    """

    def __init__(self, matrix: Array, sizes: Sequence[int], wanted: Array, *, projected: Sequence[Array] = ()) -> None:
        self.matrix, self.wanted, self.projected = np.asfortranarray(matrix), wanted, projected
        self.blocks = [slice(int(a), int(b)) for a, b in pairwise(np.cumsum([0, *sizes]))]
        self._basis: Array | None = None
        if matrix.shape[1] < len(wanted) - sum(basis.shape[1] for basis in projected):
            self.reduce()

    @property
    def count(self) -> int:
        """Number of circuits."""
        return len(self.blocks)

    def reduce(self) -> None:
        """Change to a basis of the operators that the circuits span."""
        if self._basis is not None:
            return
        lengths = np.linalg.norm(self.matrix, axis=0)
        self._basis = column_space(self.matrix / np.where(lengths > 0, lengths, 1.0), RANK_TOLERANCE)
        self.matrix = np.asfortranarray(self._basis.T @ self.matrix)
        self.wanted = self._basis.T @ self.wanted

    def to_rows(self, vector: Array) -> Array:
        """A vector of the working basis as operator rows."""
        return vector if self._basis is None else self._basis @ vector

    def from_rows(self, rows: Array) -> Array:
        """Operator rows, already without `projected`, in the working basis."""
        return rows if self._basis is None else self._basis.T @ rows

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


class Information:
    """The information matrix M(w) at some weights, factorised."""

    def __init__(self, design: UnitDesign, weights: Array) -> None:
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
            for basis in design.projected:
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


def column_space(matrix: Array, tolerance: float) -> Array:
    """Orthonormal basis of the column space: left singular vectors above `tolerance` times the largest column."""
    if matrix.size == 0:
        return np.zeros((len(matrix), 0))
    left, singular, _ = np.linalg.svd(matrix, full_matrices=False)
    return np.ascontiguousarray(left[:, singular > tolerance * max(1.0, singular[0])])
