"""The Jacobian of the residual as a matrix, and normal equations solved by Cholesky factorisation."""

from functools import lru_cache

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import get_blas_funcs, get_lapack_funcs

from fragkit.core import pair_indices
from fragkit.fit._levenberg import LinearSolver
from fragkit.fit._pairs import pair_weights
from fragkit.fit._point import Point, Tangent

Array = NDArray[np.float64]

(dsyrk,) = get_blas_funcs(("syrk",), dtype=np.float64)
dpotrf, dpotrs = get_lapack_funcs(("potrf", "potrs"), dtype=np.float64)


def dense_solver(point: Point, weights: Array) -> LinearSolver:
    """Solver with the whole Jacobian: unknowns M n² × equations P(P+1)/2 numbers.

    Where there are more unknowns than equations and no weights, the step of least length comes from J Jᵀ, the smaller
    matrix. The square of the condition number that normal equations cost touches only the step, not the residual,
    and the next iteration corrects it.
    """
    jacobian = jacobian_of(point)
    unknowns, equations = jacobian.shape
    count, n, _ = point.rotations.shape
    price = _to_vector(np.zeros_like(weights), weights, square=True)
    pull = _to_vector(np.zeros_like(weights), weights * point.coefficients)
    short = equations < unknowns and not np.any(weights)
    # The transpose of a C-ordered array is what LAPACK calls column-major: no copy.
    normal = dsyrk(1.0, jacobian.T, trans=0 if short else 1, lower=1)

    def solve(tensor: Array, damping: float, *, shrink: bool) -> Tangent | None:
        matrix = normal.copy(order="F")
        np.einsum("ii->i", matrix)[:] += damping if short else damping + price
        factor, failed = dpotrf(matrix, lower=1, overwrite_a=1, clean=0)
        if failed:
            return None
        packed = _pack(tensor)
        if short:
            step = jacobian @ dpotrs(factor, packed, lower=1)[0]
        else:
            right = jacobian @ packed
            step = dpotrs(factor, right - pull if shrink else right, lower=1)[0]
        return _to_tangent(step, count, n)

    return solve


def dense_size(count: int, orbitals: int) -> int:
    """Number of entries of the Jacobian."""
    pairs = orbitals * (orbitals + 1) // 2
    return count * orbitals**2 * (pairs * (pairs + 1) // 2)


def jacobian_of(point: Point) -> Array:
    """Derivatives (M n², P(P+1)/2) of the packed Σ_m F_m, for each fragment first λ (√2 λ_ij for i < j), then X_ab.

    Every one is a symmetrised product of two pair vectors: w_i w_j for λ_ij; for X_ab the mixed pair of the orbitals
    a and b, and Σ_j (λ_bj − λ_aj) w_j.
    """
    count, n, _ = point.rotations.shape
    rows, columns = pair_indices(n)
    a, b = pair_indices(n, strict=True)
    size = len(rows)
    occupation = point.pairs
    orbitals = np.ascontiguousarray(point.rotations.transpose(0, 2, 1))
    left, right = np.empty((count, n * n, size)), np.empty((count, n * n, size))
    left[:, :size] = occupation[:, rows] * pair_weights(n)[:, None]
    right[:, :size] = occupation[:, columns]
    first, second = orbitals[:, a], orbitals[:, b]
    mixed = first[:, :, rows] * second[:, :, columns] + second[:, :, rows] * first[:, :, columns]
    left[:, size:] = 2.0 * mixed * pair_weights(n)
    weighted = point.coefficients @ occupation
    right[:, size:] = weighted[:, b] - weighted[:, a]
    left, right = left.reshape(-1, size), right.reshape(-1, size)
    i, j, half = _packing(size)
    jacobian = left[:, i] * right[:, j]
    jacobian += left[:, j] * right[:, i]
    jacobian *= half
    return jacobian


@lru_cache(maxsize=16)
def _packing(size: int) -> tuple[NDArray[np.intp], NDArray[np.intp], Array]:
    """Packed order of symmetric (P, P) matrices, and the factor that makes a symmetrised product of one pair."""
    i, j = np.triu_indices(size)
    return i, j, np.where(i == j, 0.5, np.sqrt(0.5))


def _pack(tensor: Array) -> Array:
    i, j, half = _packing(len(tensor))
    return tensor[i, j] * (1.0 / half) * np.where(i == j, 0.5, 1.0)


def _to_vector(turn: Array, change: Array, *, square: bool = False) -> Array:
    """Unknowns in the order of `jacobian_of`; with `square`, for quantities that multiply squares of the unknowns."""
    n = turn.shape[-1]
    rows, columns = pair_indices(n)
    a, b = pair_indices(n, strict=True)
    scale = 1.0 if square else pair_weights(n)
    return np.concatenate([change[:, rows, columns] * scale, turn[:, a, b]], axis=1).ravel()


def _to_tangent(vector: Array, count: int, n: int) -> Tangent:
    rows, columns = pair_indices(n)
    a, b = pair_indices(n, strict=True)
    parts = vector.reshape(count, n * n)
    change, turn = np.zeros((count, n, n)), np.zeros((count, n, n))
    change[:, rows, columns] = change[:, columns, rows] = parts[:, : len(rows)] / pair_weights(n)
    turn[:, a, b] = parts[:, len(rows) :]
    turn[:, b, a] = -turn[:, a, b]
    return turn, change
