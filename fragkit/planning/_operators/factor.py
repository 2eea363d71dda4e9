"""Factorised sums of B Bᵀ over operator rows."""

from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import blas, lapack

Array = NDArray[np.float64]

SINGLE_PRECISION_ROWS = 1000
"""From this many rows on M is factorised in single precision; coefficients are then refined to double precision."""

LARGEST_FACTORISED = 5500
"""Rows up to which matrices of rows × rows are formed and factorised: 12 orbitals. Beyond that conjugate gradients are
faster and need little memory."""


def is_factorised(rows: int) -> bool:
    """Whether matrices of rows × rows are formed for so many operator rows."""
    return rows <= LARGEST_FACTORISED


_DOUBLE: Any = (blas.dsyrk, lapack.dpotrf, lapack.dpotri, lapack.dpotrs, lapack.dtrtrs)  # pyright: ignore
_SINGLE: Any = (blas.ssyrk, lapack.spotrf, lapack.spotri, lapack.spotrs, lapack.strtrs)  # pyright: ignore


def working_precision(rows: int) -> type[np.floating[Any]]:
    """float32 for many rows, else float64."""
    return np.float32 if rows >= SINGLE_PRECISION_ROWS else np.float64


class Factor:
    """Cholesky factor of B Bᵀ, completed on the shifts, which it does not see, so that it can be inverted."""

    def __init__(self, blocks: NDArray[Any], shifts: Array) -> None:
        size = len(blocks)
        self._kind = blocks.dtype
        routines = _SINGLE if blocks.dtype == np.float32 else _DOUBLE
        syrk, potrf, self._potri, self._potrs, self._trtrs = routines
        matrix = syrk(1.0, blocks, lower=1)
        matrix = syrk(np.trace(matrix) / size, shifts.astype(self._kind), beta=1.0, c=matrix, lower=1, overwrite_c=1)
        self._factor, failed = potrf(matrix, lower=1, overwrite_a=1, clean=0)
        pivots = np.diag(self._factor)
        self.singular = bool(failed) or bool(np.min(pivots) < 1e3 * np.finfo(self._kind).eps * np.max(pivots))

    def solve(self, rows: Array) -> Array:
        """M⁻¹ applied to a vector."""
        return self._potrs(self._factor, rows.astype(self._kind), lower=1)[0].astype(np.float64)

    def half_solve(self, rows: NDArray[Any]) -> NDArray[Any]:
        """L⁻¹ applied to the columns of a matrix, M = L Lᵀ."""
        return self._trtrs(self._factor, rows.astype(self._kind), lower=1)[0]

    def into_inverse(self) -> NDArray[Any]:
        """Lower triangle of M⁻¹; the factor is gone afterwards."""
        return self._potri(self._factor, lower=1, overwrite_c=1)[0]


def symmetric_product(lower: NDArray[Any], vector: Array) -> Array:
    """A symmetric matrix, given by its lower triangle, times a vector."""
    if lower.dtype == np.float32:
        return blas.ssymv(1.0, lower, vector.astype(np.float32), lower=1).astype(np.float64)  # pyright: ignore
    return blas.dsymv(1.0, lower, vector, lower=1)  # pyright: ignore
