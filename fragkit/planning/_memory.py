"""What planning needs to keep in memory, so that too much is refused before the work begins."""

from typing import Any

from fragkit.core import InputError, as_positive, feature_count
from fragkit.planning._operators.factor import is_factorised
from fragkit.planning._operators.space import OperatorSpace

MEMORY = 8e9
"""Bytes that planning may use unless more is allowed."""


def memory_needed(orbitals: int, circuits: int) -> float:
    """Bytes, to within a factor of about 1.5, that planning so many circuits takes at its peak.

    >>> memory_needed(7, 20) < 2e8 < memory_needed(20, 130) < 2e9
    True
    """
    rows, features = OperatorSpace(orbitals).size, feature_count(orbitals)
    shifts = orbitals * (orbitals + 1) + 1
    # Scaling of three refreshes, there and back, and the memory of the quasi-Newton steps, twice.
    kept = 6 * circuits * features**2 + 400 * circuits * (features + orbitals**2 // 2)
    if is_factorised(rows):
        return 8.0 * (kept + 2 * rows * circuits * features + 3 * rows**2)
    return 8.0 * (kept + 3 * rows * shifts)


def require_memory(orbitals: int, circuits: int, memory: Any) -> None:
    """Raise `InputError` when planning so many circuits would need more than `memory` bytes."""
    allowed = as_positive(memory, "memory")
    needed = memory_needed(orbitals, circuits)
    if needed > allowed:
        raise InputError(
            f"`memory` must be larger for {circuits} circuits of {orbitals} orbitals (got {allowed / 1e9:.3g} GB of "
            f"some {needed / 1e9:.3g} GB needed); raise it if the machine has that much, take fewer circuits or a "
            "smaller active space, or keep the coefficients of a fragmentation as they are with reweight=False"
        )
