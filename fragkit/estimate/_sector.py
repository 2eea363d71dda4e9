"""Post-selection on electron numbers, and the errors that impossible electron numbers point to."""

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from fragkit.core import InputError
from fragkit.estimate._bits import Bits
from fragkit.estimate._counts import Counts


def in_sector(bits: Bits, electrons: tuple[int, int]) -> NDArray[np.bool_]:
    """Whether each row (2n bits, blocked) has exactly these (alpha, beta) electron numbers.

    >>> in_sector(np.array([[1, 0, 0, 1], [1, 1, 0, 0]], dtype=np.uint8), (1, 1))
    array([ True, False])
    """
    n = bits.shape[1] // 2
    return (np.sum(bits[:, :n], axis=1) == electrons[0]) & (np.sum(bits[:, n:], axis=1) == electrons[1])


def kept_shots(counts: Counts, electrons: tuple[int, int]) -> NDArray[np.int64]:
    """(circuits,) number of shots with the right electron numbers."""
    return np.array(
        [
            np.sum(numbers[in_sector(bits, electrons)])
            for bits, numbers in zip(counts.bits, counts.numbers, strict=True)
        ],
        dtype=np.int64,
    )


def check_sector(counts: Counts, electrons: tuple[int, int], least_kept: float) -> NDArray[np.int64]:
    """(circuits,) shots with the right electron numbers.

    Raises `InputError` if they are fewer than `least_kept` of all, or if far more would be right when the bits are
    read in another order, which the message names.
    """
    kept = kept_shots(counts, electrons)
    share = float(np.sum(kept) / counts.total_shots)
    shares: dict[str, float] = {}
    better = None
    if share < 0.95:
        shares = {
            name: _share(counts, columns, electrons) for name, columns in alternative_readings(counts.orbitals).items()
        }
        best = max(shares, key=lambda name: shares[name])
        # No reading does clearly better than the right one, however noisy the device: half of the impossible shots,
        # and enough of them not to be chance.
        gained = (shares[best] - share) * counts.total_shots
        better = best if gained > max(10.0, 0.5 * (1.0 - share) * counts.total_shots) else None
    if better is not None or share < least_kept:
        if better is not None:
            cause = f"read {better}, {shares[better]:.0%} would have, so the bit order or spin order is probably wrong"
        else:
            cause = (
                "no other bit or spin order makes more of them possible, so the state preparation or the choice of "
                "qubits is probably wrong, or the device is very noisy (then lower `least_kept`)"
            )
        raise InputError(
            f"most shots must have {electrons[0]} alpha and {electrons[1]} beta electrons (got {share:.0%} of "
            f"{counts.total_shots}); {cause}"
        )
    return kept


def check_every_circuit_keeps_shots(counts: Counts, kept: NDArray[np.int64], electrons: tuple[int, int]) -> None:
    """Raise `InputError` if post-selection leaves a circuit without shots."""
    empty = [str(m) for m in np.flatnonzero((counts.shots > 0) & (kept == 0))]
    if empty:
        raise InputError(
            f"every circuit must keep shots with {electrons} electrons (got none in circuit {', '.join(empty)}); "
            "check how that circuit was run, or take more shots"
        )


def alternative_readings(orbitals: int) -> dict[str, NDArray[np.intp]]:
    """Wrong ways to have read the bits: the columns that would put them right, by name."""
    n = orbitals
    every = np.arange(2 * n)
    interleaved = np.concatenate([every[0::2], every[1::2]])
    inverse = np.argsort(interleaved)
    swapped = np.concatenate([every[n:], every[:n]])
    return {
        "in reverse bit order": every[::-1],
        "with interleaved instead of blocked spins": interleaved,
        "with blocked instead of interleaved spins": inverse,
        "in reverse bit order and with interleaved instead of blocked spins": every[::-1][interleaved],
        "in reverse bit order and with blocked instead of interleaved spins": inverse[::-1],
        "with alpha and beta exchanged": swapped,
        "in reverse order within each spin": np.concatenate([every[:n][::-1], every[n:][::-1]]),
    }


def _share(counts: Counts, columns: Sequence[int] | NDArray[np.intp], electrons: tuple[int, int]) -> float:
    kept = sum(
        int(np.sum(numbers[in_sector(bits[:, columns], electrons)]))
        for bits, numbers in zip(counts.bits, counts.numbers, strict=True)
    )
    return kept / counts.total_shots
