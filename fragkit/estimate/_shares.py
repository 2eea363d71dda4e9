"""Whole numbers of shots from shares."""

import numpy as np
from numpy.typing import NDArray


def whole_shots(shares: NDArray[np.float64], total: int, minimum: int) -> NDArray[np.int64]:
    """`total` shots, `minimum` for each circuit and the rest in these shares, by largest remainders.

    >>> whole_shots(np.array([0.5, 0.3, 0.2]), 13, 1)
    array([6, 4, 3])
    """
    spare = total - minimum * len(shares)
    exact = shares / np.sum(shares) * spare
    shots = np.floor(exact).astype(np.int64)
    order = np.argsort(shots - exact, kind="stable")
    shots[order[: spare - int(np.sum(shots))]] += 1
    return shots + minimum
