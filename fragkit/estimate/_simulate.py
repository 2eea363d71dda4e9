"""What a device would return for a plan, drawn from a state that is known exactly."""

from typing import TYPE_CHECKING, Any

import numpy as np

from fragkit.core import InputError, MismatchError, as_count
from fragkit.estimate._bits import distinct_rows
from fragkit.estimate._counts import Counts
from fragkit.planning import Plan

if TYPE_CHECKING:
    from fragkit.states import ReferenceState


def simulate(
    plan: Plan,
    state: "ReferenceState",
    *,
    shots: Any = None,
    flips: Any = None,
    rng: np.random.Generator | int | None = None,
    batch: str | None = None,
) -> Counts:
    """Counts that an ideal device would return for a plan, with readout flips if asked for.

    Parameters
    ----------
    plan
        What to run.
    state
        The prepared state, in the orbitals of the plan's Hamiltonian; `noise` of the state is included.
    shots
        Shots of each circuit (circuits,), or one number for all; the plan's own when left out.
    flips
        Pair (P(1 read | 0), P(0 read | 1)) of probabilities, each one number or (2n,) numbers in blocked order;
        every bit flips independently of the others.
    rng
        Seed or generator.
    batch
        Name of the run.

    Returns
    -------
    Counts

    Examples
    --------
    >>> import fragkit
    >>> ham = fragkit.hubbard(2, repulsion=4.0, electrons=(1, 1))
    >>> state = fragkit.reference_state(ham, "fci")
    >>> plan = fragkit.plan(ham, state, fragments=fragkit.fragment(ham), total_shots=1000)
    >>> fragkit.simulate(plan, state, rng=7).total_shots
    1000
    """
    if state.orbitals != plan.orbitals or tuple(state.electrons) != plan.electrons:
        raise MismatchError(
            f"`state` must have the plan's {plan.orbitals} orbitals and {plan.electrons} electrons "
            f"(got {state.orbitals} and {tuple(state.electrons)})"
        )
    generator = np.random.default_rng(rng)
    found = {}
    for index, (fragment, number) in enumerate(zip(plan.fragments, shots_of(plan, shots), strict=True)):
        bits = state.sample(fragment.rotation, number, generator)
        if flips is not None:
            to_one, to_zero = flip_probabilities(flips, plan.orbitals)
            bits = bits ^ (generator.random(bits.shape) < np.where(bits, to_zero, to_one)).astype(np.uint8)
        found[index] = distinct_rows(bits)
    return Counts.of_rows(plan, found, batch)


def shots_of(plan: Plan, shots: Any) -> list[int]:
    """One number of shots for each circuit, from one number, a sequence, or None for the plan's own."""
    if shots is None:
        return [int(number) for number in plan.shots]
    if np.ndim(shots) == 0:
        return [as_count(shots, "shots")] * len(plan)
    numbers = [as_count(number, "shots") for number in shots]
    if len(numbers) != len(plan):
        raise InputError(f"`shots` must be one number or {len(plan)} numbers (got {len(numbers)})")
    return numbers


def flip_probabilities(flips: Any, orbitals: int) -> tuple[np.ndarray, np.ndarray]:
    """Both probabilities for each of the 2n qubits, from a pair of numbers or arrays."""
    if not isinstance(flips, tuple | list) or len(flips) != 2:
        raise InputError(f"`flips` must be a pair (P(1 read | 0), P(0 read | 1)) (got {flips!r})")
    pair = []
    for value in flips:
        array = np.asarray(value, dtype=np.float64)
        if array.shape not in ((), (2 * orbitals,)) or not np.all((array >= 0) & (array <= 1)):
            raise InputError(f"`flips` must hold probabilities, one or {2 * orbitals} of each kind (got {value!r})")
        pair.append(np.broadcast_to(array, (2 * orbitals,)))
    return pair[0], pair[1]
