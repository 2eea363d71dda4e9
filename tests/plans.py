"""Plans that do not depend on the planner: low-rank fragments with Neyman's shots, for tests of what comes after."""

from functools import cache

import numpy as np
from molecules import full_ci, molecule_hamiltonian

from fragkit.fit import LowRank, fragment
from fragkit.planning import Plan
from fragkit.states import ReferenceState


@cache
def full_ci_state(name: str, noise: float = 0.0) -> ReferenceState:
    """The full CI state of a molecule, depolarised if `noise` is not zero."""
    return ReferenceState.from_ci_vector(molecule_hamiltonian(name), full_ci(name)[1], noise=noise)


@cache
def low_rank_plan(name: str, total_shots: int = 100_000) -> Plan:
    """Low-rank fragments with at least two shots each, shares by the deviations in the full CI state."""
    hamiltonian, state = molecule_hamiltonian(name), full_ci_state(name)
    fragments = fragment(hamiltonian, LowRank())
    variances, _, _ = state.variance_and_gradient(
        np.array([f.rotation for f in fragments]), np.array([f.coefficients for f in fragments])
    )
    deviations = np.sqrt(np.maximum(variances, 0.0))
    return Plan(
        fragments=fragments.fragments,
        constant=fragments.constant,
        shots=np.maximum(2, np.round(total_shots * deviations / np.sum(deviations))),
        deviations=deviations,
        electrons=hamiltonian.electrons,
        hamiltonian_digest=hamiltonian.digest,
        residual_norm=fragments.residual_norm,
        energy_bound=fragments.energy_bound,
        reference="full CI",
    )
