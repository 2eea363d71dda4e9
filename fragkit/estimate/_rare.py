"""Rare outcomes that few shots did not show, but that the plan's predicted deviation speaks of."""

from functools import lru_cache
from itertools import combinations
from math import comb

import numpy as np
from numpy.typing import NDArray

from fragkit.core import Fragment
from fragkit.estimate._statistics import Sample

Array = NDArray[np.float64]
Bits = NDArray[np.uint8]

MOST_DETERMINANTS = 20_000
"""Largest number of determinants that are listed to look for outcomes that were not seen."""


def missed_variance(
    fragment: Fragment, bits: Bits, sample: Sample, predicted: float, electrons: tuple[int, int]
) -> float | None:
    """Variance of one shot, in hartree², that outcomes which were not seen may add; None if prediction and data agree.

    An observed variance far below the predicted one means that the state is quieter than the reference, or that the
    shots missed rare outcomes of large value. An outcome at distance Δ from the mean has probability L/Δ² if it is to
    supply what lacks, L = σ² − s². N shots can miss it if N L/Δ² is at most 3 (5 % chance). If there is such an
    outcome among the determinants, what lacks is added; if not, the prediction was wrong and nothing is. An outcome
    that is expected λ < 1 times counts with λ: as long as it is not seen the mean is off by λΔ/N, the square of which
    is λ times its part of the variance of the mean.
    """
    if sample.shots < 2 or predicted == 0.0:
        return None
    kurtosis = max(sample.fourth / sample.variance**2 if sample.variance > 0.0 else 3.0, 3.0)
    chance = 1.0 - 2.5 * np.sqrt((kurtosis - 1.0) / sample.shots)
    if sample.variance >= max(chance, 0.25) * predicted**2:
        return None
    lack = predicted**2 - sample.variance
    n = fragment.orbitals
    if comb(n, electrons[0]) * comb(n, electrons[1]) > MOST_DETERMINANTS:
        return lack
    listed = determinants(n, electrons)
    powers = 2.0 ** np.arange(2 * n)
    unseen = listed[~np.isin(listed @ powers, bits @ powers)]
    expected = sample.shots * lack / np.maximum((fragment.values(unseen) - sample.mean) ** 2, 1e-300)
    possible = expected[expected <= 3.0]
    return lack * min(1.0, float(np.max(possible, initial=0.0)))


@lru_cache(maxsize=8)
def determinants(orbitals: int, electrons: tuple[int, int]) -> Bits:
    """All rows of bits (determinants, 2n) with these electron numbers, read-only."""
    sides = []
    for count in electrons:
        rows = np.zeros((comb(orbitals, count), orbitals), dtype=np.uint8)
        for row, occupied in enumerate(combinations(range(orbitals), count)):
            rows[row, list(occupied)] = 1
        sides.append(rows)
    alpha, beta = sides
    rows = np.concatenate([np.repeat(alpha, len(beta), axis=0), np.tile(beta, (len(alpha), 1))], axis=1)
    rows.setflags(write=False)
    return rows
