"""What a plan costs in any state."""

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from fragkit.core import Fragment, InputError, MismatchError
from fragkit.planning._plan import Plan, as_plan
from fragkit.states import ReferenceState

Array = NDArray[np.float64]


def fragment_deviations(fragments: Sequence[Fragment], state: ReferenceState) -> Array:
    """(K,) standard deviation in hartree of one shot of each fragment in the state."""
    rotations = np.stack([fragment.rotation for fragment in fragments])
    coefficients = np.stack([fragment.coefficients for fragment in fragments])
    return np.sqrt(np.maximum(state.variance_and_gradient(rotations, coefficients)[0], 0.0))


def plan_cost(plan: Plan, state: ReferenceState) -> float:
    """Shots × error² in hartree² of a plan in any state, at the plan's own shot shares.

    The number of shots for a standard error ε in that state is this cost over ε². It is at least the variance of
    the Hamiltonian in the state, and at least (Σ σ)² with the deviations of that state.

    Raises
    ------
    InputError
        If `plan` is not a plan, `state` not a reference state, or their orbitals or electrons differ.

    Examples
    --------
    >>> import fragkit
    >>> from fragkit.planning import plan
    >>> from fragkit.states import reference_state
    >>> ham = fragkit.hubbard(2, repulsion=4.0, electrons=(1, 1), periodic=False)
    >>> two_site = plan(ham, reference_state(ham, "fci"), total_shots=1000)
    >>> plan_cost(two_site, reference_state(ham, "hf")) > 0
    True
    """
    as_plan(plan)
    check_state(state, plan.orbitals, plan.electrons)
    return float(np.sum(fragment_deviations(plan.fragments, state) ** 2 / plan.shares))


def check_state(state: object, orbitals: int, electrons: tuple[int, int]) -> None:
    """Raise unless `state` is a reference state of these orbitals and electrons."""
    if not isinstance(state, ReferenceState):
        raise InputError(
            f"`state` must be a ReferenceState (got {type(state).__name__}); make one with fragkit.reference_state"
        )
    if (state.orbitals, state.electrons) != (orbitals, electrons):
        raise MismatchError(
            f"`state` must have {orbitals} orbitals and electrons {electrons} "
            f"(got {state.orbitals} orbitals, {state.electrons}); make it from the same Hamiltonian"
        )
