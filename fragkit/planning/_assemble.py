"""From fragments to a plan: shots, promised error, quantum limit, costs in other states."""

from collections.abc import Sequence

import numpy as np

from fragkit.core import Fragment, Hamiltonian, cheapest_order
from fragkit.planning._budget import Budget
from fragkit.planning._cost import fragment_deviations
from fragkit.planning._plan import Plan, PlanBound
from fragkit.states import DeterminantState, ReferenceState

NOISE_LEVELS = (0.01, 0.05)
"""Depolarisations within the sector under which every plan states its cost."""


def assemble(
    hamiltonian: Hamiltonian,
    state: ReferenceState,
    fragments: Sequence[Fragment],
    budget: Budget,
    *,
    constant: float,
    residual_norm: float,
    energy_bound: float,
    sector_exact: bool,
    planned_on: ReferenceState | None = None,
    converged: bool = True,
    message: str = "",
    method: str = "",
    seconds: float = 0.0,
) -> Plan:
    """A plan whose error is predicted in `state` and whose shots are shared as `planned_on` asks (`state` if None)."""
    ordered = [fragment.reordered(*cheapest_order(fragment.rotation)) for fragment in fragments]
    deviations = fragment_deviations(ordered, state)
    guide = deviations if planned_on is None else fragment_deviations(ordered, planned_on)
    shots = budget.shots(deviations, guide, [fragment.rotation for fragment in ordered])
    shares = shots / np.sum(shots)

    def cost_in(other: ReferenceState) -> float:
        return float(np.sum(fragment_deviations(ordered, other) ** 2 / shares))

    diagnostics = {
        "reference": float(np.sum(deviations**2 / shares)),
        "Hartree-Fock": cost_in(DeterminantState.hartree_fock(hamiltonian)),
    }
    for level in NOISE_LEVELS:
        diagnostics[f"reference with {100 * level:g} % noise"] = cost_in(state.with_noise(level))
    return Plan(
        fragments=tuple(ordered),
        constant=constant,
        shots=shots,
        deviations=deviations,
        electrons=hamiltonian.electrons,
        hamiltonian_digest=hamiltonian.digest,
        residual_norm=residual_norm,
        energy_bound=energy_bound,
        sector_exact=sector_exact,
        target_error=budget.target_error,
        reference=state.description,
        bound=PlanBound(state.variance(hamiltonian)),
        diagnostics=diagnostics,
        converged=converged,
        message=message,
        method=method,
        seconds=seconds,
    )
