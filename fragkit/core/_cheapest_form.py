"""The form of a fragment that needs the fewest gates: order, signs, and rotations that its value does not see."""

import numpy as np
from numpy.typing import NDArray

from fragkit.core._elimination import ROUNDING_ZERO
from fragkit.core._fragment import Fragment
from fragkit.core._ordering import cheapest_order, givens_count

Array = NDArray[np.float64]


def interchangeable_orbitals(fragment: Fragment, *, tolerance: float = 1e-13) -> list[list[int]]:
    """Groups of orbitals on which a fragment depends only through the number of electrons in the group.

    That is so if all entries of `opposite_spin` within the group are equal, all off-diagonal ones of `same_spin` are,
    and every row of coefficients towards other orbitals is the same. Any rotation within a group then leaves the
    operator as it is. Orbitals that do not appear at all are the commonest case.

    Parameters
    ----------
    fragment
        The fragment.
    tolerance
        Largest difference of coefficients, relative to the largest coefficient, that is taken for rounding.

    >>> interchangeable_orbitals(Fragment.one_body(np.eye(4), [0.0, 1.0, 0.0, 2.0]))
    [[0, 2], [1], [3]]
    """
    opposite, same, linear = fragment.opposite_spin, fragment.same_spin, fragment.linear
    allowed = tolerance * float(np.max(np.abs(fragment.coefficients), initial=0.0))

    def fits(group: list[int], k: int) -> bool:
        first = group[0]
        if abs(linear[k] - linear[first]) > allowed:
            return False
        others = [m for m in range(len(linear)) if m not in group and m != k]
        pairs = same[np.ix_([*group, k], [*group, k])]
        differences = [
            opposite[k, others] - opposite[first, others],
            same[k, others] - same[first, others],
            (opposite[np.ix_([*group, k], [*group, k])] - opposite[first, first]).ravel(),
            pairs[np.triu_indices(len(pairs), 1)] - pairs[0, 1],
        ]
        return max(float(np.max(np.abs(difference), initial=0.0)) for difference in differences) <= allowed

    groups: list[list[int]] = []
    for k in range(len(linear)):
        for group in groups:
            if fits(group, k):
                group.append(k)
                break
        else:
            groups.append([k])
    return groups


def cheapest_form(fragment: Fragment, tolerance: float = 1e-8) -> Fragment:
    """The same operator in the orbitals, their order and their signs for which its circuit needs the fewest gates.

    Besides the freedom that `cheapest_order` uses, orbitals that a fragment does not tell apart are rotated among
    themselves: m of them save up to m(m−1)/2 neighbour rotations per spin. The result never costs more than the order
    alone.

    Parameters
    ----------
    fragment
        The fragment.
    tolerance
        As for `cheapest_order`.

    Examples
    --------
    >>> turn = np.linalg.qr(np.arange(9.0).reshape(3, 3) ** 2 + np.eye(3))[0]
    >>> one = Fragment.one_body(turn, [1.0, 0.0, 0.0])
    >>> givens_count(one.rotation), givens_count(cheapest_form(one).rotation)
    (3, 2)
    """
    zero = max(tolerance, ROUNDING_ZERO)
    best = fragment.reordered(*cheapest_order(fragment.rotation, tolerance))
    groups = interchangeable_orbitals(fragment)
    if len(groups) == fragment.orbitals:
        return best
    count = givens_count(best.rotation, tolerance=tolerance)
    # Clearing from the foot of the line serves a group that is read at its top, and the other way round.
    for flip in (False, True):
        rotation = fragment.rotation[::-1] if flip else fragment.rotation
        rotated, order = _cleared(np.array(rotation), groups, zero)
        if flip:
            rotated, order = rotated[::-1], order[::-1]
        cost = givens_count(rotated[:, order], tolerance=tolerance)
        if cost < count:
            turned = Fragment(rotated, fragment.opposite_spin, fragment.same_spin, fragment.linear)
            best, count = turned.reordered(order), cost
    order, signs = cheapest_order(best.rotation, tolerance)
    return best.reordered(order, signs)


def _cleared(rotation: Array, groups: list[list[int]], zero: float) -> tuple[Array, list[int]]:
    """Rotate the columns within groups so that they reach down the line as little as possible; and their order.

    Works down the line: the group that reaches least far comes next; its columns are cleared from the foot upwards as
    far as its own freedom goes, and the rest of the matrix is then reduced by neighbour rotations as the circuit will.
    """
    size = len(rotation)
    work = rotation.copy()
    order: list[int] = []
    waiting = [list(group) for group in groups]
    while waiting:
        place = len(order)
        reaches = []
        for group in waiting:
            pivots = _concentrate(rotation, work, group, place, zero)
            reaches.append((sum(pivots) - sum(range(place, place + len(group)))) / len(group))
        chosen = waiting.pop(int(np.argmin(reaches)))
        pivots = _concentrate(rotation, work, chosen, place, zero)
        for column in [chosen[k] for k in np.argsort(pivots, kind="stable")]:
            target = len(order)
            for row in range(size - 1, target, -1):
                element, pivot = work[row, column], work[row - 1, column]
                if abs(element) > zero:
                    radius = np.hypot(element, pivot)
                    upper = work[row - 1].copy()
                    work[row - 1] = (pivot * upper + element * work[row]) / radius
                    work[row] = (pivot * work[row] - element * upper) / radius
            order.append(column)
    return rotation, order


def _concentrate(rotation: Array, work: Array, group: list[int], place: int, zero: float) -> list[int]:
    """Rotate a group's columns in place so that each has a lowest row of its own; return those rows."""
    active = list(range(len(group)))
    pivots = [place] * len(group)
    for row in range(len(work) - 1, place - 1, -1):
        if not active:
            break
        entries = work[row, [group[k] for k in active]]
        if np.max(np.abs(entries)) <= zero:
            continue
        keeper = active[int(np.argmax(np.abs(entries)))]
        for k in active:
            element, pivot = work[row, group[k]], work[row, group[keeper]]
            if k == keeper or abs(element) <= zero:
                continue
            radius = np.hypot(element, pivot)
            cosine, sine = pivot / radius, element / radius
            for matrix in (work, rotation):
                kept = matrix[:, group[keeper]].copy()
                matrix[:, group[keeper]] = cosine * kept + sine * matrix[:, group[k]]
                matrix[:, group[k]] = cosine * matrix[:, group[k]] - sine * kept
        pivots[keeper] = row
        active.remove(keeper)
    return pivots
