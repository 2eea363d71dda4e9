"""The verb `plan`: from a Hamiltonian and the expected state to circuits with shots."""

import os
import time
from dataclasses import replace
from typing import Any, Literal

import numpy as np

from fragkit.core import Fragmentation, Hamiltonian, InputError, TimeModel, as_count, as_hamiltonian, as_positive
from fragkit.fit import fragment
from fragkit.planning._assemble import assemble, plan_of_design
from fragkit.planning._budget import Budget
from fragkit.planning._choose import (
    Design,
    Settings,
    default_count,
    design_for,
    fewest_circuits,
    from_fragments,
    weighted,
)
from fragkit.planning._cost import check_state
from fragkit.planning._counts import least_count
from fragkit.planning._exact.coefficients import EXACT
from fragkit.planning._memory import MEMORY
from fragkit.planning._plan import Plan
from fragkit.planning._robust import robust_state, share_state
from fragkit.planning._rotations.optimise import as_ridge, as_surplus
from fragkit.planning._threads import sized_blas_threads
from fragkit.planning._trade_off import plan_seconds
from fragkit.states import ReferenceState


@sized_blas_threads
def plan(
    hamiltonian: Hamiltonian,
    state: ReferenceState,
    *,
    circuits: int | Literal["auto", "minimal"] | None = None,
    fragments: Fragmentation | None = None,
    reweight: bool = True,
    shifts: bool = True,
    target_error: float | None = None,
    total_shots: int | None = None,
    seconds: float | None = None,
    maximum_circuits: int | None = None,
    minimum_shots: int = 10,
    time_model: TimeModel | None = None,
    circuit_overhead: float = 100.0,
    planning_noise: float | None = None,
    ridge: float = 0.0,
    starts: int = 1,
    surplus: float = 0.0,
    rng: np.random.Generator | int | None = 0,
    tolerance: float = 5e-3,
    max_evaluations: int = 4000,
    progress: bool = False,
    checkpoint: str | os.PathLike[str] | None = None,
    resume: bool = False,
    memory: float = MEMORY,
) -> Plan:
    """Choose circuits, coefficients and shots so that the energy has the smallest error in the expected state.

    The result is unbiased for every state with the Hamiltonian's electron numbers; `state` only decides how the
    effort is spent. Without `fragments`, rotations, coefficients and shares are optimised together.

    Parameters
    ----------
    hamiltonian
        What to measure.
    state
        The expected state, from `reference_state`.
    circuits
        Number of circuits. None takes two more (beyond 12 orbitals a tenth more) than ⌈(n+1)(n+2)/4⌉, the fewest with
        which generic rotations reproduce the Hamiltonian. "auto" looks for the number from which on a further circuit
        costs more than the shots it saves; "minimal" takes the fewest with which a fit reproduces the Hamiltonian, at
        up to 100 times the shots. Circuits that need no shots are left out.
    fragments
        Measure the rotations of this fragmentation; together with `circuits`, start the optimisation from them.
    reweight
        With `fragments`: choose coefficients of least variance. False takes the coefficients as they are.
    shifts
        Use operators that vanish at the Hamiltonian's electron numbers; the plan is then exact only there, and its
        estimates post-select. False makes it exact as an operator. The cost with shifts on the same rotations is then
        stated in `diagnostics`.
    target_error
        Standard error to reach in `state`, hartree; 1 kcal/mol when no budget is given.
    total_shots, seconds
        Budgets instead of a target error. `seconds` needs a `time_model`.
    maximum_circuits
        Upper limit for None and "auto".
    minimum_shots
        Shots that every circuit gets at least; a few are needed to estimate each circuit's variance.
    time_model
        Times of a device. With it coefficients and shots are chosen for the least time instead of the fewest shots,
        unless `total_shots` is given; least in `state` with its planning noise. Rotations are those of the fewest
        shots.
    circuit_overhead
        For "auto" without a time model: shots that a further circuit is worth. With one, its `switch_seconds` count.
    planning_noise
        Weight of the maximally mixed state of the sector in the state that rotations and coefficients are chosen for.
        It bounds the coefficients and so keeps the plan good on states that differ from `state`; see the page on
        planning for what it costs and saves. None is 1e-3, or 2e-2 for a determinant, which must have some, or a
        Gaussian state. Noise that `state` has already counts.
    ridge
        Variance added to every feature (dimensionless) when rotations and coefficients are chosen, which bounds the
        coefficients. 1e-4 to 3e-4 with a planning noise of 1e-4 gives the least cost on the true state where `state`
        is a good but approximate one, such as CISD.
    starts, rng, tolerance, max_evaluations
        Independent starts of the optimisation, their seed, the relative fall of the cost at which it ends, and its
        most evaluations. The same seed gives the same plan on the same machine.
    surplus
        Begin the optimisation with this fraction of circuits more, and leave the lightest out step by step. With 1.0
        that takes three times the time, and the cost is up to 2 % lower.
    progress
        Show a bar with the current cost.
    checkpoint, resume
        File (.npz) that keeps the best rotations so far, and whether to go on from it.
    memory
        Bytes that planning may use; a plan that needs more is refused before the work begins.

    Returns
    -------
    Plan
        With the quantum limit in `bound`, and in `diagnostics` the cost on the reference, on the Hartree-Fock
        state and under 1 % and 5 % noise. Ctrl-C during the optimisation ends it and returns the best exact plan so
        far, with `converged` False.

    Raises
    ------
    InputError
        If an argument is not what it must be, a budget is too small for the minimum of every circuit, or more `memory`
        is needed.
    MismatchError
        If `state`, `fragments` or the checkpoint belong to another Hamiltonian.

    Notes
    -----
    Unbiased for any state and efficient for the expected one is c-optimal experimental design (Elfving, Ann. Math.
    Stat. 23, 255 (1952); Sagnol, arXiv:0912.5467). Shots in proportion to deviations: Neyman (1934).

    Examples
    --------
    >>> import fragkit
    >>> from fragkit.states import reference_state
    >>> ham = fragkit.hubbard(2, repulsion=4.0, electrons=(1, 1), periodic=False)
    >>> two_site = plan(ham, reference_state(ham, "fci"), target_error=1e-3)
    >>> two_site.predicted_error <= 1e-3, two_site.residual_norm < 1e-9
    (True, True)
    """
    began = time.perf_counter()
    as_hamiltonian(hamiltonian)
    check_state(state, hamiltonian.orbitals, hamiltonian.electrons)
    budget = Budget(target_error, total_shots, seconds, minimum_shots, time_model)
    planned_on = robust_state(state, planning_noise)
    if fragments is not None:
        if not isinstance(fragments, Fragmentation):
            raise InputError(
                f"`fragments` must be a Fragmentation (got {type(fragments).__name__}); make one with "
                "fragkit.fragment or Fragmentation.of"
            )
        fragments.check_belongs_to(hamiltonian)
    if not reweight:
        return _as_given(hamiltonian, state, fragments, circuits, budget, planning_noise, began)
    settings = Settings(
        budget,
        shifts=bool(shifts),
        starts=as_count(starts, "starts", minimum=1),
        surplus=as_surplus(surplus),
        rng=rng,
        tolerance=as_positive(tolerance, "tolerance"),
        max_evaluations=as_count(max_evaluations, "max_evaluations", minimum=1),
        progress=progress,
        checkpoint=checkpoint,
        resume=resume,
        ridge=as_ridge(ridge),
        memory=as_positive(memory, "memory"),
    )
    limit = None if maximum_circuits is None else as_count(maximum_circuits, "maximum_circuits", minimum=1)
    if isinstance(circuits, str) and fragments is not None:
        raise InputError(f"`circuits` must be a whole number or None with `fragments` (got {circuits!r})")
    if circuits == "auto" and checkpoint is not None:
        raise InputError("`checkpoint` must be left out with circuits='auto', which makes many optimisations")
    if circuits == "auto":
        overhead = float(circuit_overhead)
        if not 0.0 <= overhead < np.inf:
            raise InputError(f"`circuit_overhead` must be a number of at least 0 (got {circuit_overhead!r})")
        design = _knee(hamiltonian, state, planned_on, settings, planning_noise, limit, overhead)
    elif circuits == "minimal":
        design = fewest_circuits(hamiltonian, planned_on, settings)
    elif circuits is None and fragments is not None:
        design = from_fragments(hamiltonian, planned_on, fragments, settings)
    elif isinstance(circuits, str):
        raise InputError(f"`circuits` must be a whole number, 'auto', 'minimal' or None (got {circuits!r})")
    else:
        count = (
            default_count(hamiltonian.orbitals, limit)
            if circuits is None
            else as_count(circuits, "circuits", minimum=1)
        )
        design = design_for(hamiltonian, planned_on, count, settings, start=fragments)
    made = plan_of_design(hamiltonian, state, design, budget, planning_noise, seconds=time.perf_counter() - began)
    if settings.shifts:
        return made
    with_shifts = _cost_with_shifts(hamiltonian, state, planned_on, design, settings, planning_noise)
    return replace(made, diagnostics=made.diagnostics | {"reference, with symmetry shifts": with_shifts})


def _as_given(
    hamiltonian: Hamiltonian,
    state: ReferenceState,
    fragments: Fragmentation | None,
    circuits: Any,
    budget: Budget,
    planning_noise: float | None,
    began: float,
) -> Plan:
    """Shots for fragments with the coefficients they have."""
    if circuits is not None:
        raise InputError(f"`circuits` must be left out when `reweight` is False (got {circuits!r})")
    given = fragment(hamiltonian) if fragments is None else fragments
    return assemble(
        hamiltonian,
        state,
        given.fragments,
        budget,
        planned_on=share_state(state, planning_noise),
        constant=given.constant,
        residual_norm=given.residual_norm,
        energy_bound=given.energy_bound,
        converged=given.converged,
        message=given.message,
        method=f"{given.method}, coefficients as given",
        seconds=time.perf_counter() - began,
    )


def _knee(
    hamiltonian: Hamiltonian,
    state: ReferenceState,
    planned_on: ReferenceState,
    settings: Settings,
    planning_noise: float | None,
    limit: int | None,
    overhead: float,
) -> Design:
    """The number of circuits from which on a further circuit costs more than the shots it saves."""
    fewest = least_count(hamiltonian.orbitals)
    best: Design | None = None
    least, stopped = np.inf, False

    def better(count: int, warm: Any) -> bool:
        """Try a number of circuits; keep it if it spends less than the best so far."""
        nonlocal best, least, stopped
        try:
            design = design_for(hamiltonian, planned_on, count, settings, start=warm)
            made = plan_of_design(hamiltonian, state, design, settings.budget, planning_noise)
        except InputError:
            if best is None:
                raise
            return False  # too few circuits to be exact, or too many for the budget
        stopped = design.interrupted
        spent = _spent(made, settings.budget, overhead)
        if best is not None and (spent >= least or design.weighting.relative_residual > EXACT):
            return False
        best, least = design, spent
        return not stopped

    count = fewest if limit is None else min(fewest, limit)
    first = count
    going = better(count, None)
    step = 2
    while going and best is not None and (limit is None or count + step <= limit):
        count += step
        going = better(count, best.rotations)
        step = max(2, round(0.15 * count))
    # Fewer than generic rotations allow: worth a look when more are not better. A third of that number is never exact.
    while best is not None and not stopped and len(best.rotations) <= first and first > 2 + fewest // 3:
        first -= max(1, round(0.1 * fewest))
        heavy = np.sort(np.argsort(-best.weighting.shares)[:first])
        if not better(first, best.rotations[heavy]):
            break
    if best is None:
        raise RuntimeError("no number of circuits was tried")
    return replace(best, message=f"{best.message} {len(best.rotations)} circuits are the knee.")


def _spent(made: Plan, budget: Budget, overhead: float) -> float:
    """What a plan spends, circuits included, in a measure that is less for the better plan of one budget."""
    if budget.seconds is not None:
        return made.predicted_error
    times = plan_seconds([made], budget)
    if times is not None:
        return float(times[0])
    if budget.total_shots is not None:
        left = budget.total_shots - overhead * len(made)
        return made.diagnostics["reference"] / left if left > 0 else np.inf
    return made.total_shots + overhead * len(made)


def _cost_with_shifts(
    hamiltonian: Hamiltonian,
    state: ReferenceState,
    planned_on: ReferenceState,
    design: Design,
    settings: Settings,
    planning_noise: float | None,
) -> float:
    """Cost on the reference of the same rotations when symmetry shifts may be used."""
    rotations, weighting = weighted(
        hamiltonian,
        planned_on,
        design.rotations,
        replace(settings, shifts=True),
        start=design.weighting.shares,
        prune=False,
    )
    other = replace(design, rotations=rotations, weighting=weighting)
    return plan_of_design(hamiltonian, state, other, settings.budget, planning_noise).diagnostics["reference"]
