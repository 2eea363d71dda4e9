"""An orthogonal matrix as a product of rotations of neighbouring orbitals, in rectangular order.

U = M(i_1, θ_1) M(i_2, θ_2) … M(i_K, θ_K) diag(signs), where M(i, θ) is the identity except for
[[cos θ, −sin θ], [sin θ, cos θ]] in rows and columns i, i + 1. The first factor is the first gate of the circuit.
The i_k are the same for every U of one size (`mesh_positions`); a position that is not needed has θ = 0.

The order of elimination is that of Clements, Humphreys, Metcalf, Kolthammer & Walmsley, Optica 3, 1460 (2016).
Rotations whose matrix element is already zero are left out. What remains is the smallest number possible for the
given order of rows and columns: every rotation that is used lowers by one the length of the permutation that
labels the Bruhat cell of U, and no product of fewer neighbour rotations reaches that cell.
"""

from functools import lru_cache
from math import atan, copysign, hypot, pi
from typing import NamedTuple

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

ROUNDING_ZERO = 1e-14
"""Matrix elements below this are zeros that rounding has touched."""

ANGLE_TOLERANCE = 1e-9
"""Default tolerance of circuits in radian: above what the rounding of integrals and fits leaves of symmetry zeros."""


@lru_cache(maxsize=64)
def _elimination_steps(size: int) -> tuple[tuple[tuple[int, int], ...], tuple[tuple[int, int], ...]]:
    """(upper row, column to clear) of the row steps and (row to clear, left column) of the column steps, in order."""
    rows, columns = [], []
    for diagonal in range(1, size):
        if diagonal % 2:
            columns += [(size - 1 - j, diagonal - 1 - j) for j in range(diagonal)]
        else:
            rows += [(size + j - diagonal - 2, j - 1) for j in range(1, diagonal + 1)]
    return tuple(rows), tuple(columns)


@lru_cache(maxsize=64)
def mesh_positions(size: int) -> tuple[int, ...]:
    """Left neighbour i of every rotation M(i, θ) of the full mesh in the order of the circuit, size(size−1)/2 entries.

    >>> mesh_positions(4)
    (1, 2, 0, 1, 2, 0)
    """
    rows, columns = _elimination_steps(size)
    return tuple(i for i, _ in rows) + tuple(i for _, i in reversed(columns))


class Elimination(NamedTuple):
    """Angles of the mesh, signs of the new orbitals, and how many matrix elements above rounding were left."""

    angles: Array
    signs: Array
    left: int


def eliminate(matrix: Array, *, tolerance: float = 0.0) -> tuple[Array, Array]:
    """Angles of the mesh and signs of the new orbitals for an orthogonal matrix (size, size).

    Parameters
    ----------
    matrix
        Orthogonal; not checked.
    tolerance
        Radian. A matrix element of at most this size is left where it is instead of being cleared by a rotation.

    Returns
    -------
    angles, signs
        (size(size−1)/2,) radian in [−π/2, π/2], zero where no rotation is needed, in the order of
        `mesh_positions`; (size,) of ±1.
    """
    angles, signs, _ = elimination(matrix, tolerance=tolerance)
    return angles, signs


def elimination(matrix: Array, *, tolerance: float = 0.0) -> Elimination:
    """As `eliminate`, with the number of matrix elements left because of the tolerance."""
    work = np.array(matrix, dtype=np.float64)
    size = len(work)
    zero = max(tolerance, ROUNDING_ZERO)
    row_steps, column_steps = _elimination_steps(size)
    row_angles, column_angles = [], []
    left = 0
    next_row, next_column = 0, 0
    for diagonal in range(1, size):
        for _ in range(diagonal):
            if diagonal % 2:
                row, i = column_steps[next_column]
                next_column += 1
                element, pivot = float(work[row, i]), float(work[row, i + 1])
                angles, kept, cleared = column_angles, work[:, i + 1], work[:, i]
            else:
                i, column = row_steps[next_row]
                next_row += 1
                element, pivot = float(work[i + 1, column]), float(work[i, column])
                angles, kept, cleared = row_angles, work[i], work[i + 1]
            if abs(element) > zero:
                angles.append(_rotate(kept, cleared, pivot, element))
            else:
                angles.append(0.0)
                left += abs(element) > ROUNDING_ZERO
    signs = np.where(np.diag(work) < 0.0, -1.0, 1.0)
    # diag(signs) M(i, θ) = M(i, ± θ) diag(signs) moves the signs behind the rotations of the columns.
    moved = [
        float(angle * signs[i] * signs[i + 1])
        for angle, (_, i) in zip(reversed(column_angles), reversed(column_steps), strict=True)
    ]
    return Elimination(np.array(row_angles + moved) + 0.0, signs, left)


def _rotate(kept: Array, cleared: Array, pivot: float, element: float) -> float:
    """Clear `element` of one vector with `pivot` of the other, in place; return the angle."""
    radius = hypot(pivot, element)
    if pivot == 0.0:
        cosine, sine, angle = 0.0, copysign(1.0, element), copysign(pi / 2, element)
    else:
        # The sign of the pivot goes into the kept vector, so that the angle is at most a quarter turn.
        cosine, sine, angle = abs(pivot) / radius, copysign(1.0, pivot) * element / radius, atan(element / pivot)
    old = kept.copy()
    kept *= cosine
    kept += sine * cleared
    cleared *= cosine
    cleared -= sine * old
    return angle


def mesh_matrix(positions: "tuple[int, ...] | list[int]", angles: "Array | list[float]", size: int) -> Array:
    """The product M(i_1, θ_1) … M(i_K, θ_K), shape (size, size)."""
    product = np.eye(size)
    for i, angle in zip(positions, angles, strict=True):
        if angle == 0.0:
            continue
        cosine, sine = np.cos(angle), np.sin(angle)
        left = product[:, i].copy()
        product[:, i] = cosine * left + sine * product[:, i + 1]
        product[:, i + 1] = cosine * product[:, i + 1] - sine * left
    return product
