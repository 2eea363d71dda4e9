"""Circuits without shots: what the energy would lack."""

from math import comb

import numpy as np

from fragkit.core import Fragment, InputError
from fragkit.estimate._counts import Counts
from fragkit.estimate._rare import MOST_DETERMINANTS, determinants
from fragkit.planning import Plan


def check_complete(plan: Plan, counts: Counts) -> None:
    """Raise `InputError` unless every circuit has shots, saying what each missing one could contribute."""
    missing = np.flatnonzero(counts.shots == 0)
    if not len(missing):
        return
    lines = []
    for m in missing[:8]:
        low, high = value_range(plan.fragments[m], plan.electrons)
        lines.append(f"circuit {m} contributes between {low:.4f} and {high:.4f} Ha")
    more = f" and {len(missing) - 8} more" if len(missing) > 8 else ""
    raise InputError(
        f"every circuit of the plan must have shots (got none for {len(missing)} of {len(plan)}: "
        f"{'; '.join(lines)}{more}); the energy is the sum over all circuits, so run the missing ones and merge"
    )


def value_range(fragment: Fragment, electrons: tuple[int, int]) -> tuple[float, float]:
    """Bounds in hartree on a fragment's value in any state of these electron numbers.

    The exact extremes where the determinants can be listed, bounds term by term otherwise.

    >>> value_range(Fragment.one_body(np.eye(3), [-1.0, 0.0, 2.0]), (1, 1))
    (-2.0, 4.0)
    """
    n, (alpha, beta) = fragment.orbitals, electrons
    if comb(n, alpha) * comb(n, beta) <= MOST_DETERMINANTS:
        values = fragment.values(determinants(n, electrons))
        return float(np.min(values)), float(np.max(values))
    # No feature is above 2.
    coefficients = fragment.coefficients
    return 2.0 * float(np.sum(np.minimum(coefficients, 0.0))), 2.0 * float(np.sum(np.maximum(coefficients, 0.0)))
