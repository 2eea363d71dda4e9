"""The verb `plan`: from a Hamiltonian and the expected state to circuits with shots."""

import time
from typing import Any

from fragkit.core import Fragmentation, Hamiltonian, InputError, TimeModel
from fragkit.fit import fragment
from fragkit.planning._assemble import assemble
from fragkit.planning._budget import Budget
from fragkit.planning._cost import check_state
from fragkit.planning._plan import Plan
from fragkit.states import ReferenceState


def plan(
    hamiltonian: Hamiltonian,
    state: ReferenceState,
    *,
    fragments: Fragmentation | None = None,
    target_error: float | None = None,
    total_shots: int | None = None,
    seconds: float | None = None,
    minimum_shots: int = 10,
    time_model: TimeModel | None = None,
    reweight: bool = False,
) -> Plan:
    """Choose shots for the fragments of a Hamiltonian, for the least error in the expected state."""
    began = time.perf_counter()
    if not isinstance(hamiltonian, Hamiltonian):
        raise InputError(
            f"`hamiltonian` must be a Hamiltonian (got {type(hamiltonian).__name__}); make one with "
            "fragkit.from_pyscf, fragkit.from_fcidump or fragkit.Hamiltonian"
        )
    check_state(state, hamiltonian.orbitals, hamiltonian.electrons)
    budget = Budget(target_error, total_shots, seconds, minimum_shots, time_model)
    given: Any = fragment(hamiltonian) if fragments is None else fragments
    if not isinstance(given, Fragmentation):
        raise InputError(
            f"`fragments` must be a Fragmentation (got {type(given).__name__}); make one with fragkit.fragment or "
            "Fragmentation.of"
        )
    given.check_belongs_to(hamiltonian)
    return assemble(
        hamiltonian,
        state,
        given.fragments,
        budget,
        constant=given.constant,
        residual_norm=given.residual_norm,
        energy_bound=given.energy_bound,
        sector_exact=False,
        converged=given.converged,
        message=given.message,
        method=given.method,
        seconds=time.perf_counter() - began,
    )
