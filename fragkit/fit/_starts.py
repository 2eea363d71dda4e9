"""Where joint fits begin, and how fragments are added to or taken from a set."""

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from fragkit.core import Fragment, Hamiltonian, InputError
from fragkit.fit._jacobi import diagonalise
from fragkit.fit._low_rank import pair_eigenvectors, rank_one_fragments
from fragkit.fit._pairs import unpack_symmetric
from fragkit.fit._point import Point, adjoint, derivative, point_at

Array = NDArray[np.float64]

# Radian. A large turn leaves the symmetry and the valley of the low-rank start; a small one keeps its head start, which
# is worth most for large molecules.
FIRST_TURN = 0.1
FIRST_TURN_OF_LARGE = 0.05
# From the fourth start on every other one leaves the best point by a turn of this size: smaller ones were seen to fall
# back to the same minimum.
KICK = 0.1


def random_turn(rng: np.random.Generator) -> float:
    """Size of the turn of a further start, 0.01 to 0.3 radian, each power of ten as likely."""
    return float(10.0 ** rng.uniform(-2.0, -0.5))


def low_rank_start(hamiltonian: Hamiltonian, count: int) -> tuple[Array, Array]:
    """The `count` largest rank-one fragments; where there are fewer, the rest are empty, in the same orbitals."""
    n = hamiltonian.orbitals
    values, vectors = pair_eigenvectors(hamiltonian)
    rotations, coefficients = rank_one_fragments(values[:count], vectors[:, :count], n)
    missing = count - len(rotations)
    if missing > 0:
        rotations = np.concatenate([rotations, np.broadcast_to(np.eye(n), (missing, n, n))])
        coefficients = np.concatenate([coefficients, np.zeros((missing, n, n))])
    return rotations, coefficients


def turned(rotations: Array, amount: float, rng: np.random.Generator) -> Array:
    """Rotations followed by random ones, normal angles of `amount` radian in every plane."""
    n = rotations.shape[-1]
    turn = rng.normal(size=rotations.shape) * amount
    turn = turn - turn.transpose(0, 2, 1)
    return rotations @ np.linalg.solve(np.eye(n) - 0.5 * turn, np.eye(n) + 0.5 * turn)


def orbital_starts(tensor: Array, count: int, orbitals: int, rng: np.random.Generator) -> Array:
    """Orbitals (count, n, n) to diagonalise a tensor from: of its largest eigenvectors, and as many random ones."""
    values, vectors = np.linalg.eigh(tensor)
    largest = np.argsort(-np.abs(values), kind="stable")[: (count + 1) // 2]
    informed = np.linalg.eigh(unpack_symmetric(vectors[:, largest].T, orbitals))[1]
    random = np.linalg.qr(rng.normal(size=(count - len(informed), orbitals, orbitals)))[0]
    return np.concatenate([informed, random])


def grown(target: Array, point: Point, count: int, rng: np.random.Generator) -> Point:
    """Add fragments, each the most diagonal orbitals of what is left, until there are `count`."""
    while len(point.rotations) < count:
        n = point.rotations.shape[-1]
        rotation, coefficients, _ = diagonalise(point.residual, orbital_starts(point.residual, 4, n, rng))
        point = point_at(
            target,
            np.concatenate([point.rotations, rotation[None]]),
            np.concatenate([point.coefficients, coefficients[None]]),
        )
    return point


def pruned(target: Array, point: Point, count: int) -> Point:
    """Take away the fragments with the smallest coefficients until there are `count`, and refit the others' λ."""
    if len(point.rotations) <= count:
        return point
    sizes = np.linalg.norm(point.coefficients, axis=(1, 2))
    kept = np.sort(np.argsort(-sizes, kind="stable")[:count])
    return refitted(target, point_at(target, point.rotations[kept], point.coefficients[kept]))


def refitted(target: Array, point: Point, *, max_steps: int = 30, accuracy: float = 1e-3) -> Point:
    """The same rotations with better λ: conjugate gradients on the linear least-squares problem, never worse."""
    coefficients = point.coefficients
    turn = np.zeros_like(coefficients)
    left = adjoint(point, point.residual)[1]
    direction, size = left, float(np.vdot(left, left))
    first = size
    for _ in range(max_steps):
        if size <= accuracy**2 * first or size == 0.0:
            break
        image = adjoint(point, derivative(point, (turn, direction)))[1]
        length = size / float(np.vdot(direction, image))
        coefficients = coefficients + length * direction
        left = left - length * image
        size, previous = float(np.vdot(left, left)), size
        direction = left + (size / previous) * direction
    new = point_at(target, point.rotations, coefficients)
    return new if new.squared <= point.squared else point


def given_start(fragments: Sequence[Fragment], orbitals: int) -> tuple[Array, Array]:
    """Rotations and λ of the two-electron fragments of a fragmentation."""
    used = [fragment for fragment in fragments if not fragment.is_one_body]
    if not used or any(fragment.orbitals != orbitals for fragment in used):
        raise InputError(
            f"`start` must hold two-electron fragments of {orbitals} orbitals (got {len(used)} fragments"
            + (f" of {used[0].orbitals}" if used else "")
            + "); pass the result of `fragment` for the same Hamiltonian"
        )
    return np.stack([f.rotation for f in used]), np.stack([f.opposite_spin for f in used])
