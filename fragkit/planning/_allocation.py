"""Whole numbers of shots for a target error, a number of shots or a time, with a minimum for every circuit."""

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]
Shots = NDArray[np.int64]


def shots_for_error(deviations: Array, target_error: float, *, minimum: int = 1, guide: Array | None = None) -> Shots:
    """Fewest shots, in the proportions of `guide`, with Σ σ²/shots ≤ target_error².

    Parameters
    ----------
    deviations
        (K,) standard deviation σ of one shot of each circuit, hartree.
    target_error
        Standard error to reach, hartree.
    minimum
        Shots that every circuit gets at least.
    guide
        (K,) proportions; σ when left out, which needs the fewest shots (Neyman, J. R. Stat. Soc. 97, 558 (1934)),
        or σ/√(seconds of a shot), which needs the least time.

    Examples
    --------
    >>> shots_for_error(np.array([3.0, 1.0]), 0.1)
    array([1200,  400])
    """
    shape = _shape(deviations, guide)

    def error(shots: Array | Shots) -> float:
        return float(np.sqrt(np.sum(deviations**2 / shots)))

    def clamped(scale: float) -> Array:
        return np.maximum(minimum, scale * shape)

    high = float(np.sum(deviations**2 / np.maximum(shape, 1e-300))) / target_error**2
    scale = _bisect(lambda s: error(clamped(s)) <= target_error, high)
    exact = clamped(scale)
    shots = np.maximum(minimum, np.floor(exact)).astype(np.int64)
    # Rounding down misses the target by a little: round up again, largest remainder first, until it is met.
    for m in np.argsort(-(exact - shots), kind="stable"):
        if error(shots) <= target_error:
            break
        shots[m] += 1
    while error(shots) > target_error:
        shots[np.argmax(deviations**2 / (shots * (shots + 1.0)))] += 1
    return shots


def shots_for_total(deviations: Array, total: int, *, minimum: int = 1, guide: Array | None = None) -> Shots:
    """Exactly `total` shots in the proportions of `guide` (σ when left out), at least `minimum` each.

    Examples
    --------
    >>> shots_for_total(np.array([3.0, 1.0]), 100)
    array([75, 25])
    """
    return _fill(_shape(deviations, guide), np.ones(len(deviations)), float(total), minimum, deviations)


def shots_for_seconds(
    deviations: Array, seconds: float, shot_seconds: Array, *, minimum: int = 1, guide: Array | None = None
) -> Shots:
    """As many shots as fit into `seconds`, in the proportions of `guide` (σ/√t when left out).

    `shot_seconds` (K,) are the times t of one shot; changes of circuit are to be subtracted from `seconds` before.

    Examples
    --------
    >>> shots_for_seconds(np.array([1.0, 1.0]), 6.0, np.array([1.0, 4.0]))
    array([2, 1])
    """
    shape = _shape(deviations, deviations / np.sqrt(shot_seconds) if guide is None else guide)
    return _fill(shape, shot_seconds, seconds, minimum, deviations)


def _fill(shape: Array, prices: Array, budget: float, minimum: int, deviations: Array) -> Shots:
    """Shots with Σ price × shots ≤ budget that leave no room for another of the cheapest."""

    def clamped(scale: float) -> Array:
        return np.maximum(minimum, scale * shape)

    high = budget / float(np.max(shape * prices))
    scale = _bisect(lambda s: bool(prices @ clamped(s) >= budget), high)
    exact = clamped(scale)
    slack = 1e-9
    shots = np.maximum(minimum, np.floor(exact + slack)).astype(np.int64)
    while shots @ prices > budget * (1 + slack) and np.any(shots > minimum):
        shots[np.argmax(np.where(shots > minimum, shots - exact, -np.inf))] -= 1
    for m in np.argsort(-(exact - shots), kind="stable"):
        if shots @ prices + prices[m] <= budget * (1 + slack):
            shots[m] += 1
    while np.any(room := shots @ prices + prices <= budget * (1 + slack)):
        gain = deviations**2 / (shots * (shots + 1.0)) / prices
        shots[np.argmax(np.where(room, gain, -1.0))] += 1
    return shots


def _shape(deviations: Array, guide: Array | None) -> Array:
    """Proportions above zero for every circuit whose deviation is above zero."""
    shape = np.array(deviations if guide is None else guide, dtype=np.float64)
    if not np.any(deviations > 0):
        return np.ones(len(deviations))
    largest = float(np.max(shape))
    shape = shape / largest if largest > 0 else np.ones(len(deviations))
    # A circuit that the guide leaves out although it fluctuates would need infinitely many shots of the others.
    return np.where(deviations > 0, np.maximum(shape, 1e-9), shape)


def _bisect(enough: Callable[[float], bool], high: float) -> float:
    """Smallest scale (to 1e-13 relative) for which `enough` holds; `high` is grown until it does."""
    low = 0.0
    if enough(low):
        return low
    for _ in range(200):
        if enough(high):
            break
        low, high = high, 2.0 * high
    while high - low > 1e-13 * high:
        middle = 0.5 * (low + high)
        if enough(middle):
            high = middle
        else:
            low = middle
    return high
