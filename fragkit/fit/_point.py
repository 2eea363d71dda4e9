"""One point of a fit: fragments, the residual tensor, and products with the residual's derivative.

Everything is a few large matrix products over weighted pairs, so that one evaluation or product for 24
orbitals and 30 fragments is some 10⁸ operations. The residual is formed itself, never as a difference of squares,
which keeps all digits of small residuals. Tangent vectors are pairs of arrays (M, n, n): an antisymmetric X, for
the step U → U exp(X), and a symmetric change of λ.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fragkit.core import pair_indices
from fragkit.fit._pairs import pair_positions, pair_weights

Array = NDArray[np.float64]
Tangent = tuple[Array, Array]


@dataclass(frozen=True, eq=False)
class Point:
    """Fragments (rotations and coefficients (M, n, n)), and target minus fragments (P, P).

    `pairs` (M, n, P) holds the weighted pair vector of each occupation operator as a row; in this order all products
    are of contiguous blocks.
    """

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
    n = rotations.shape[-1]
    rows, columns = pair_indices(n)
    orbitals = np.ascontiguousarray(rotations.transpose(0, 2, 1))
    pairs = orbitals[:, :, rows] * orbitals[:, :, columns] * pair_weights(n)
    flat = pairs.reshape(-1, len(rows))
    residual = target - (coefficients @ pairs).reshape(flat.shape).T @ flat
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
    n = turn.shape[-1]
    rows, columns = pair_indices(n)
    orbitals = np.ascontiguousarray(point.rotations.transpose(0, 2, 1))
    moving = turn.transpose(0, 2, 1) @ orbitals
    pairs = moving[:, :, rows] * orbitals[:, :, columns]
    pairs += orbitals[:, :, rows] * moving[:, :, columns]
    pairs *= pair_weights(n)
    half = (0.5 * change) @ point.pairs
    half += point.coefficients @ pairs
    flat = point.pairs.reshape(-1, len(rows))
    tensor = half.reshape(flat.shape).T @ flat
    return tensor + tensor.T


def adjoint(point: Point, tensor: Array) -> Tangent:
    """Transpose of `derivative`: the tangent v with ⟨v, w⟩ = ⟨tensor, derivative(w)⟩ for all w.

    ⟨v, w⟩ is Σ_{a<b} v_ab w_ab of the antisymmetric parts plus Σ_ij of the symmetric ones.
    """
    _, n, size = point.pairs.shape
    applied = (point.pairs.reshape(-1, size) @ tensor).reshape(point.pairs.shape)
    change = applied @ point.pairs.transpose(0, 2, 1)
    # Σ_j λ_ij (tensor w_j) as a symmetric matrix of orbitals p, q, applied to orbital i.
    weighted = (point.coefficients @ applied) / pair_weights(n)
    orbitals = np.ascontiguousarray(point.rotations.transpose(0, 2, 1))
    matrices = weighted[:, :, pair_positions(n)]
    slope = 4.0 * (matrices @ orbitals[:, :, :, None])[..., 0]
    local = slope @ point.rotations
    # Row i of `local` is slope_i · u_a, so the derivative with respect to X_ai is its transpose.
    return local.transpose(0, 2, 1) - local, 0.5 * (change + change.transpose(0, 2, 1))


def inner(left: Tangent, right: Tangent) -> float:
    """Inner product of tangents, each independent number of X and each entry of λ counted once."""
    return 0.5 * float(np.vdot(left[0], right[0])) + float(np.vdot(left[1], right[1]))
