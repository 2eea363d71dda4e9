"""From a rotation of orbitals to layers of neighbour rotations on the line of a layout."""

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from fragkit.circuits._circuit import Givens, Layers, Layout, line_places
from fragkit.core import best_column_order, elimination, mesh_matrix, mesh_positions

Array = NDArray[np.float64]
Order = NDArray[np.intp]
Readout = Literal["fixed", "free"]


@dataclass(frozen=True, eq=False)
class LineAngles:
    """Angles at every position of the full mesh on the line, zero where no gate is needed.

    Blocked: the mesh of each spin register, alpha first. Interleaved: the mesh of the line of 2n places.
    `readout`, `signs` and `dropped` are as in `RotationCircuit`.
    """

    positions: tuple[int, ...]
    angles: Array
    readout: tuple[int, ...]
    signs: Array
    dropped: int


def readout_order(rotation: Array, layout: Layout, readout: Readout, tolerance: float) -> Order:
    """New spin-orbital (blocked order) that ends on each place of the line, shape (2n,)."""
    n = len(rotation)
    in_place = np.argsort(line_places(n, layout))
    if readout == "fixed":
        return in_place
    spatial = best_column_order(rotation, tolerance=tolerance)
    side_by_side = np.concatenate([spatial, n + spatial])
    if layout == "blocked":
        return side_by_side
    in_turn = np.stack([spatial, n + spatial], axis=1).ravel()
    candidates = [in_place.tolist(), side_by_side.tolist(), in_turn.tolist()]
    return best_column_order(_line_matrix(rotation), tolerance=tolerance, candidates=candidates)


def line_angles(rotation: Array, layout: Layout, order: Order, tolerance: float) -> LineAngles:
    """Compile a rotation (n, n) for a layout and an order of readout.

    Blocked: each spin register is a line of its own, so no gate has a Jordan-Wigner string.

    Interleaved: neighbours of one spin have a place of the other spin between them. The line is compiled as a whole,
    as the 2n × 2n orthogonal matrix of all spin-orbitals: orbitals of opposite spin pass each other by a quarter turn,
    which is a swap of fermions up to a sign that is carried along. Strings never appear, and the count is the smallest
    for the order of readout.
    """
    n = len(rotation)
    place_of = np.argsort(order)
    if layout == "blocked":
        angles, signs, dropped = elimination(rotation[:, order[:n]], tolerance=tolerance)
        angles, signs, dropped = np.concatenate([angles, angles]), np.concatenate([signs, signs]), 2 * dropped
        places = mesh_positions(n)
        places = (*places, *(n + i for i in places))
    else:
        angles, signs, dropped = elimination(_line_matrix(rotation)[:, order], tolerance=tolerance)
        places = mesh_positions(2 * n)
    return LineAngles(places, angles, tuple(int(p) for p in place_of), signs[place_of], dropped)


def _line_matrix(rotation: Array) -> Array:
    """Rotation of the spin-orbitals (2n, 2n): rows are places of the interleaved line, columns in blocked order."""
    n = len(rotation)
    line = np.zeros((2 * n, 2 * n))
    line[0::2, :n] = rotation
    line[1::2, n:] = rotation
    return line


def earliest_layers(positions: "tuple[int, ...]", angles: Array, size: int) -> Layers:
    """Put each gate with a non-zero angle in the first layer after the last one that shares a qubit with it."""
    ready = [0] * size
    layers: list[list[Givens]] = []
    for i, angle in zip(positions, angles.tolist(), strict=True):
        if angle == 0.0:
            continue
        layer = max(ready[i], ready[i + 1])
        if layer == len(layers):
            layers.append([])
        layers[layer].append((i, i + 1, angle))
        ready[i] = ready[i + 1] = layer + 1
    return tuple(tuple(sorted(layer)) for layer in layers)


def distribution_bound(
    rotation: Array, layout: Layout, compiled: LineAngles, electrons: tuple[int, int] | None
) -> float:
    """Bound on the total variation distance between the readout of the compiled and of the exact rotation.

    The two rotations of spin-orbitals differ by an orthogonal matrix with eigenvalues exp(±i x_k). On N fermions its
    generator has norm at most the sum of the min(N, n − N) largest |x_k|, which bounds the distance of the two states
    and therefore the total variation distance of any readout.
    """
    n = len(rotation)
    product = mesh_matrix(compiled.positions, compiled.angles, 2 * n)
    made = product[np.ix_(line_places(n, layout), compiled.readout)] * compiled.signs
    bound = 0.0
    for spin in (0, 1):
        block = slice(spin * n, (spin + 1) * n)
        others = slice((1 - spin) * n, (2 - spin) * n)
        turns = np.sort(np.abs(np.angle(np.linalg.eigvals(made[block, block].T @ rotation))))[::-1]
        active = n // 2 if electrons is None else min(electrons[spin], n - electrons[spin])
        bound += float(np.sum(turns[: 2 * active : 2])) + float(np.sum(np.abs(made[block, others])))
    return bound
