"""From fragments to a plan: shots, promised error, quantum limit, costs in other states."""

from collections.abc import Sequence
from dataclasses import replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fragkit.core import Fragment, Hamiltonian, cheapest_form
from fragkit.planning._budget import Budget
from fragkit.planning._choose import Design
from fragkit.planning._cost import fragment_deviations
from fragkit.planning._exact.coefficients import Weighting
from fragkit.planning._plan import Plan, PlanBound
from fragkit.planning._robust import noise_of, robust_state, share_state
from fragkit.states import DeterminantState, ReferenceState

Array = NDArray[np.float64]

NOISE_LEVELS = (0.01, 0.05)
"""Depolarisations within the sector under which every plan states its cost."""


def assemble(
    hamiltonian: Hamiltonian,
    state: ReferenceState,
    fragments: Sequence[Fragment],
    budget: Budget,
    *,
    planned_on: ReferenceState | None = None,
    reorder: bool = True,
    **promises: Any,
) -> Plan:
    """A plan whose error is predicted in `state` and whose shots are shared as `planned_on` asks (`state` if None).

    With `reorder` each fragment is brought to the form that is cheapest to compile. `promises` are
    the remaining fields of the plan.
    """
    ordered = [cheapest_form(f) for f in fragments] if reorder else list(fragments)
    deviations = fragment_deviations(ordered, state)
    guide = deviations if planned_on is None else fragment_deviations(ordered, planned_on)
    plan = with_shots(hamiltonian, ordered, budget, deviations, guide, reference=state.description, **promises)

    def cost_in(other: ReferenceState) -> float:
        return float(np.sum(fragment_deviations(ordered, other) ** 2 / plan.shares))

    diagnostics = {
        "reference": float(np.sum(deviations**2 / plan.shares)),
        "Hartree-Fock": cost_in(DeterminantState.hartree_fock(hamiltonian)),
    }
    for level in NOISE_LEVELS:
        diagnostics[f"reference with {100 * level:g} % noise"] = cost_in(state.with_noise(level))
    return replace(plan, bound=PlanBound(state.variance(hamiltonian)), diagnostics=diagnostics)


def with_shots(
    hamiltonian: Hamiltonian,
    fragments: Sequence[Fragment],
    budget: Budget,
    deviations: Array,
    guide: Array,
    **promises: Any,
) -> Plan:
    """A plan for known deviations, without costs in other states."""
    return Plan(
        fragments=tuple(fragments),
        shots=budget.shots(deviations, guide, [fragment.rotation for fragment in fragments]),
        deviations=deviations,
        electrons=hamiltonian.electrons,
        hamiltonian_digest=hamiltonian.digest,
        target_error=budget.target_error,
        **promises,
    )


def plan_of_design(
    hamiltonian: Hamiltonian,
    state: ReferenceState,
    design: Design,
    budget: Budget,
    planning_noise: float | None,
    *,
    seconds: float = 0.0,
) -> Plan:
    """A plan with the rotations and coefficients of a design."""
    return assemble(
        hamiltonian,
        state,
        weighting_fragments(design.rotations, design.weighting),
        budget,
        planned_on=share_state(state, planning_noise),
        **weighting_promises(design.weighting),
        converged=design.converged,
        message=design.message,
        method=f"{design.method}, {budget.goal}, planning noise {noise_of(robust_state(state, planning_noise)):g}",
        seconds=seconds,
    )


def weighting_fragments(rotations: Array, weighting: Weighting) -> list[Fragment]:
    """Fragments of least-variance coefficients."""
    return [Fragment.from_coefficients(u, c) for u, c in zip(rotations, weighting.coefficients, strict=True)]


def weighting_promises(weighting: Weighting) -> dict[str, Any]:
    """The fields of a plan that follow from how exact its coefficients are."""
    return {
        "constant": weighting.constant,
        "residual_norm": weighting.residual_norm,
        "energy_bound": weighting.energy_bound,
        "sector_exact": weighting.sector_exact,
    }
