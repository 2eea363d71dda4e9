"""One point of a fit: fragments, the residual tensor, and products with the residual's derivative.

Everything is a few large matrix products over weighted pairs (P, M n), so that one evaluation or product for 24
orbitals and 30 fragments is some 10⁸ operations. The residual is formed itself, never as a difference of squares,
which keeps all digits of small residuals. Tangent vectors are pairs of arrays (M, n, n): an antisymmetric X, for
the step U → U exp(X), and a symmetric change of λ.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fragkit.core import pair_indices
from fragkit.fit._pairs import pair_weights

Array = NDArray[np.float64]
Tangent = tuple[Array, Array]


@dataclass(frozen=True, eq=False)
class Point:
    """Fragments (rotations and coefficients (M, n, n)), their pairs (P, M n), and target minus fragments (P, P)."""

    rotations: Array
    coefficients: Array
    pairs: Array
    residual: Array

    @property
    def squared(self) -> float:
        """Squared Frobenius norm of the residual."""
        return float(np.vdot(self.residual, self.residual))

    @property
    def norm(self) -> float:
        """Frobenius norm of the residual, hartree."""
        return float(np.sqrt(self.squared))


def point_at(target: Array, rotations: Array, coefficients: Array) -> Point:
    """The point of fragments of the tensor `target` (P, P)."""
    rows, columns = pair_indices(rotations.shape[-1])
    beside = rotations.transpose(1, 0, 2)
    pairs = (beside[rows] * beside[columns]).reshape(len(rows), -1) * pair_weights(rotations.shape[-1])[:, None]
    residual = target - _by_blocks(pairs, coefficients) @ pairs.T
    # Exact symmetry matters: an antisymmetric part would be invisible to the derivative and grow.
    return Point(rotations, coefficients, pairs, 0.5 * (residual + residual.T))


def moved(target: Array, point: Point, tangent: Tangent) -> Point:
    """The point after a step: U → U (1 − X/2)⁻¹ (1 + X/2), which is U exp(X) to second order, and λ → λ + change."""
    turn, change = tangent
    identity = np.eye(turn.shape[-1])
    step = np.linalg.solve(identity - 0.5 * turn, identity + 0.5 * turn)
    return point_at(target, point.rotations @ step, point.coefficients + change)


def derivative(point: Point, tangent: Tangent) -> Array:
    """Change of Σ_m F_m along a tangent, (P, P) symmetric."""
    turn, change = tangent
    rotations = point.rotations
    rows, columns = pair_indices(rotations.shape[-1])
    beside, moving = rotations.transpose(1, 0, 2), (rotations @ turn).transpose(1, 0, 2)
    pairs = moving[rows] * beside[columns] + beside[rows] * moving[columns]
    pairs = pairs.reshape(len(rows), -1) * pair_weights(rotations.shape[-1])[:, None]
    half = (_by_blocks(point.pairs, 0.5 * change) + _by_blocks(pairs, point.coefficients)) @ point.pairs.T
    return half + half.T


def adjoint(point: Point, tensor: Array) -> Tangent:
    """Transpose of `derivative`: the tangent v with ⟨v, w⟩ = ⟨tensor, derivative(w)⟩ for all w.

    ⟨v, w⟩ is Σ_{a<b} v_ab w_ab of the antisymmetric parts plus Σ_ij of the symmetric ones.
    """
    count, n, _ = point.rotations.shape
    rows, columns = pair_indices(n)
    applied = (tensor @ point.pairs).reshape(len(rows), count, n).transpose(1, 0, 2)
    blocks = point.pairs.reshape(len(rows), count, n).transpose(1, 2, 0)
    change = blocks @ applied
    # Σ_j (tensor W)_j λ_ji as symmetric matrices of orbitals p, q, applied to orbital i.
    position = np.empty((n, n), dtype=np.intp)
    position[rows, columns] = position[columns, rows] = np.arange(len(rows))
    weighted = (applied @ point.coefficients) / pair_weights(n)[:, None]
    slope = 4.0 * np.einsum("mpqi,mqi->mpi", weighted[:, position, :], point.rotations)
    local = point.rotations.transpose(0, 2, 1) @ slope
    return local - local.transpose(0, 2, 1), 0.5 * (change + change.transpose(0, 2, 1))


def inner(left: Tangent, right: Tangent) -> float:
    """Inner product of tangents, each independent number of X and each entry of λ counted once."""
    return 0.5 * float(np.vdot(left[0], right[0])) + float(np.vdot(left[1], right[1]))


def _by_blocks(pairs: Array, coefficients: Array) -> Array:
    """Each fragment's columns of (P, M n) times its own (n, n)."""
    size, (count, n, _) = len(pairs), coefficients.shape
    return (pairs.reshape(size, count, n).transpose(1, 0, 2) @ coefficients).transpose(1, 0, 2).reshape(size, -1)
