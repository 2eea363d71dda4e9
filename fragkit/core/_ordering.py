"""The order and signs of new orbitals for which a rotation needs the fewest gates on a line.

A measurement of occupations does not care in which order the new orbitals are listed, nor about their signs. The
number of neighbour rotations that a circuit needs depends on the order: none for a permutation, and fewer than
n(n−1)/2 when symmetry or locality makes matrix elements vanish.
"""

from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fragkit.core._elimination import ROUNDING_ZERO, eliminate
from fragkit.core._validate import as_rotation

Array = NDArray[np.float64]
MOST_BLOCKS = 10


def givens_count(rotation: Any, *, tolerance: float = 0.0) -> int:
    """Number of neighbour rotations that an orthogonal matrix (n, n) needs in its present order, for one spin.

    Matrix elements of at most `tolerance` (and of 1e-14) are taken for zero.

    >>> givens_count(np.eye(3)), givens_count(np.eye(3)[::-1])
    (0, 3)
    """
    angles, _ = eliminate(as_rotation(rotation), tolerance=tolerance)
    return int(np.count_nonzero(angles))


def cheapest_order(rotation: Any, tolerance: float = 1e-8) -> tuple[NDArray[np.intp], Array]:
    """Order and signs of the columns of a rotation for which its circuit needs the fewest gates.

    `rotation[:, order] * signs` is a product of neighbour rotations with no signs left over. The order is the best
    of several candidates (as given, nearest permutation, shortest reach first from either end of the line, blocks
    in the order with the fewest crossings); among equals the one with the smallest angles wins, then the first.
    The count is the smallest possible for the order chosen; that no other order has a smaller one is not proved.

    Parameters
    ----------
    rotation
        (n, n) orthogonal; columns are the new orbitals.
    tolerance
        Matrix elements of at most this size are taken for zero while the order is chosen. Whether a circuit then
        leaves them out is decided when it is compiled.

    Returns
    -------
    order, signs
        (n,) permutation and (n,) of ±1, to be used as `fragment.reordered(order, signs)`: new orbital k is
        `signs[k]` times old orbital `order[k]`.

    Examples
    --------
    >>> cheapest_order(np.array([[0.0, -1.0], [1.0, 0.0]]))
    (array([1, 0]), array([-1.,  1.]))
    """
    rotation = as_rotation(rotation)
    order = best_column_order(rotation, tolerance=tolerance)
    _, signs = eliminate(rotation[:, order], tolerance=tolerance)
    return order, signs


def best_column_order(matrix: Array, *, tolerance: float, candidates: Sequence[Sequence[int]] = ()) -> NDArray[np.intp]:
    """The best column order among the built-in candidates and the given ones; see `cheapest_order`."""
    size = len(matrix)
    # Every column has an entry of at least 1/√size, so that none is taken for empty.
    zero = min(max(tolerance, ROUNDING_ZERO), 0.5 / np.sqrt(size))
    nearest = _nearest_permutation(matrix)
    tried: dict[tuple[int, ...], tuple[int, float]] = {}
    for candidate in (
        np.arange(size),
        *candidates,
        nearest,
        _shortest_reach_first(matrix, nearest, zero),
        size - 1 - _shortest_reach_first(matrix[::-1, ::-1], size - 1 - nearest[::-1], zero)[::-1],
        _blocks_in_order(matrix, nearest, zero),
    ):
        key = tuple(int(k) for k in candidate)
        if key not in tried:
            angles, _ = eliminate(matrix[:, list(key)], tolerance=tolerance)
            tried[key] = int(np.count_nonzero(angles)), round(float(np.sum(np.abs(angles))), 6)
    return np.array(min(tried, key=tried.__getitem__), dtype=np.intp)


def _nearest_permutation(matrix: Array) -> NDArray[np.intp]:
    """Column for each place so that the new orbital overlaps most with the old one there."""
    from scipy.optimize import linear_sum_assignment  # slow to import, and not needed by most of core

    return linear_sum_assignment(matrix**2, maximize=True)[1]


def _shortest_reach_first(matrix: Array, preferred: NDArray[np.intp], zero: float) -> NDArray[np.intp]:
    """Fill the places from the top of the line, each with the column whose lowest non-zero row is the highest."""
    work = matrix[:, preferred].copy()
    names = preferred.copy()
    size = len(work)
    for place in range(size - 1):
        present = np.abs(work[place:, place:]) > zero
        reach = size - place - 1 - np.argmax(present[::-1], axis=0)
        reach[~present.any(axis=0)] = size
        chosen = place + int(np.argmin(reach))
        for array in (names, work.T):
            array[place : chosen + 1] = np.roll(array[place : chosen + 1], 1, axis=0)
        for row in range(size - 1, place, -1):
            element, pivot = work[row, place], work[row - 1, place]
            if abs(element) > zero:
                radius = np.hypot(element, pivot)
                cosine, sine = pivot / radius, element / radius
                upper = work[row - 1].copy()
                work[row - 1] = cosine * upper + sine * work[row]
                work[row] = cosine * work[row] - sine * upper
    return names


def _blocks_in_order(matrix: Array, preferred: NDArray[np.intp], zero: float) -> NDArray[np.intp]:
    """Columns block by block, the blocks in the order whose rows cross least often on the line.

    The best order of b blocks is found by dynamic programming over their 2^b subsets. With more than `MOST_BLOCKS`
    blocks they are sorted by the mean position of their rows instead.
    """
    size = len(matrix)
    present = np.abs(matrix) > zero
    # Rows are linked when a column has entries in both; powers of the links reach everything in the block.
    linked = present @ present.T
    for _ in range(size.bit_length()):
        linked = linked @ linked
    first = np.argmax(linked, axis=1)
    rows = [np.flatnonzero(first == k) for k in range(size) if first[k] == k]
    columns = [[int(c) for c in preferred if present[block, c].any()] for block in rows]
    count = len(rows)
    if count > MOST_BLOCKS:
        order = sorted(range(count), key=lambda b: float(np.mean(rows[b])))
        return np.array([c for b in order for c in columns[b]], dtype=np.intp)
    # crossings[a, b]: how many rows of b lie above rows of a, which must be crossed if a comes first.
    crossings = np.array([[int(np.sum(below[:, None] > above[None, :])) for above in rows] for below in rows])
    best: dict[int, tuple[int, tuple[int, ...]]] = {0: (0, ())}
    for subset in range(1, 1 << count):
        members = [b for b in range(count) if subset >> b & 1]
        best[subset] = min(
            (cost + int(sum(crossings[a, last] for a in before)), (*before, last))
            for last in members
            for cost, before in [best[subset ^ (1 << last)]]
        )
    return np.array([c for b in best[(1 << count) - 1][1] for c in columns[b]], dtype=np.intp)
