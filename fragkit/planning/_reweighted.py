"""A plan's coefficients and shots chosen again for other covariances, its circuits unchanged."""

import time
from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fragkit.core import Hamiltonian, TimeModel, as_real_array, feature_count
from fragkit.planning._assemble import assemble, weighting_fragments, weighting_promises, with_shots
from fragkit.planning._budget import Budget
from fragkit.planning._cost import check_state
from fragkit.planning._exact.coefficients import exact_coefficients
from fragkit.planning._plan import Plan, as_plan
from fragkit.planning._robust import robust_state, share_state
from fragkit.planning._threads import sized_blas_threads
from fragkit.states import ReferenceState

Array = NDArray[np.float64]


@sized_blas_threads
def reweighted(
    plan: Plan,
    hamiltonian: Hamiltonian,
    reference: ReferenceState | Sequence[Array] | Array,
    *,
    shifts: bool | None = None,
    planning_noise: float | None = None,
    target_error: float | None = None,
    total_shots: int | None = None,
    seconds: float | None = None,
    minimum_shots: int = 10,
    time_model: TimeModel | None = None,
    tolerance: float = 1e-6,
) -> Plan:
    """The same circuits with least-variance coefficients and shots for another state or for measured covariances.

    The rotations, their order and the order of their orbitals stay as they are, so that results already measured
    belong to the new plan's circuits as well. The new coefficients are as exact as the old ones.

    Parameters
    ----------
    plan
        Gives the rotations.
    hamiltonian
        The Hamiltonian that was planned for.
    reference
        A reference state, or the covariances (K, n² + n, n² + n) of the features in each circuit's basis, for example
        measured ones. Measured covariances must be made regular first (shrunk towards a model): directions in which
        they vanish are taken to cost nothing.
    shifts
        Use operators that vanish at the electron numbers; as the plan does when None.
    planning_noise
        As in `fragkit.plan`; not used with covariances.
    target_error, total_shots, seconds, minimum_shots, time_model
        As in `fragkit.plan`. Without any, the plan's own target error, or its own number of shots.
    tolerance
        Relative distance of the cost from its least value at which the coefficients are good enough.

    Raises
    ------
    InputError
        If an argument is not what it must be.
    MismatchError
        If the plan belongs to another Hamiltonian or the state to other electrons.

    Examples
    --------
    >>> import fragkit
    >>> from fragkit.planning import plan
    >>> from fragkit.states import reference_state
    >>> ham = fragkit.hubbard(2, repulsion=4.0, electrons=(1, 1), periodic=False)
    >>> first = plan(ham, reference_state(ham, "hf"))
    >>> better = reweighted(first, ham, reference_state(ham, "fci"))
    >>> len(better) == len(first)
    True
    """
    began = time.perf_counter()
    as_plan(plan).check_belongs_to(hamiltonian)
    if target_error is None and total_shots is None and seconds is None:
        target_error, total_shots = plan.target_error, None if plan.target_error else plan.total_shots
    budget = Budget(target_error, total_shots, seconds, minimum_shots, time_model)
    use_shifts = plan.sector_exact if shifts is None else bool(shifts)
    rotations = np.stack([fragment.rotation for fragment in plan.fragments])
    state = None
    if isinstance(reference, ReferenceState):
        check_state(reference, plan.orbitals, plan.electrons)
        state = robust_state(reference, planning_noise)
        covariances: Any = [state.moments(rotation)[1] for rotation in rotations]
    else:
        features = feature_count(plan.orbitals)
        covariances = as_real_array(reference, "reference", (len(plan), features, features))
    weights = budget.shot_weights(list(rotations), reorder=False)
    weighting = exact_coefficients(
        hamiltonian,
        rotations,
        [weight * covariance for weight, covariance in zip(weights, covariances, strict=True)],
        shifts=use_shifts,
        start=plan.shares,
        tolerance=tolerance,
    )
    promises = weighting_promises(weighting) | {
        "converged": weighting.converged,
        "message": weighting.message,
        "method": f"least-variance coefficients on the circuits of an earlier plan, {budget.goal}",
        "seconds": time.perf_counter() - began,
    }
    fragments = weighting_fragments(rotations, weighting)
    if isinstance(reference, ReferenceState):
        return assemble(
            hamiltonian,
            reference,
            fragments,
            budget,
            planned_on=share_state(reference, planning_noise),
            reorder=False,
            **promises,
        )
    deviations = weighting.deviations / np.sqrt(weights)
    return with_shots(
        hamiltonian,
        fragments,
        budget,
        deviations,
        deviations,
        reference="given covariances",
        **promises,
    )
