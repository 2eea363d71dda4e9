"""The verb `plan`: from a Hamiltonian and the expected state to circuits with shots."""

import os
import time
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from fragkit.core import Fragmentation, Hamiltonian, InputError, TimeModel
from fragkit.fit import fragment
from fragkit.planning._assemble import assemble, weighting_fragments, weighting_promises
from fragkit.planning._budget import Budget
from fragkit.planning._cost import check_state
from fragkit.planning._exact import Weighting, exact_coefficients
from fragkit.planning._plan import Plan
from fragkit.planning._robust import PLANNING_NOISE, robust_state
from fragkit.states import ReferenceState

Array = NDArray[np.float64]

UNUSED = 1e-5
"""Circuits whose share of the shots is below this are left out when the others do as well without them."""


def plan(
    hamiltonian: Hamiltonian,
    state: ReferenceState,
    *,
    fragments: Fragmentation | None = None,
    circuits: int | Literal["auto", "minimal"] | None = None,
    target_error: float | None = None,
    total_shots: int | None = None,
    seconds: float | None = None,
    minimum_shots: int = 10,
    time_model: TimeModel | None = None,
    reweight: bool = True,
    shifts: bool = True,
    planning_noise: float = PLANNING_NOISE,
    starts: int = 1,
    rng: np.random.Generator | int | None = 0,
    tolerance: float = 1e-6,
    progress: bool = False,
    checkpoint: str | os.PathLike[str] | None = None,
) -> Plan:
    """Choose circuits, coefficients and shots for the energy of a Hamiltonian in the expected state."""
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
    planned_on = robust_state(state, planning_noise)
    if not reweight:
        return assemble(
            hamiltonian,
            state,
            given.fragments,
            budget,
            planned_on=planned_on,
            constant=given.constant,
            residual_norm=given.residual_norm,
            energy_bound=given.energy_bound,
            converged=given.converged,
            message=given.message,
            method=f"{given.method}, coefficients as given",
            seconds=time.perf_counter() - began,
        )
    rotations = np.stack([piece.rotation for piece in given.fragments])
    rotations, weighting = least_variance(hamiltonian, planned_on, rotations, shifts=shifts, tolerance=tolerance)
    return assemble(
        hamiltonian,
        state,
        weighting_fragments(rotations, weighting),
        budget,
        planned_on=planned_on,
        **weighting_promises(weighting),
        converged=weighting.converged,
        message=weighting.message,
        method=f"{given.method}, least-variance coefficients",
        seconds=time.perf_counter() - began,
    )


def least_variance(
    hamiltonian: Hamiltonian,
    planned_on: ReferenceState,
    rotations: Array,
    *,
    shifts: bool,
    tolerance: float,
    weighting: Weighting | None = None,
) -> tuple[Array, Weighting]:
    """Least-variance coefficients for some rotations, less the circuits that they hardly use."""
    if weighting is None:
        covariances = [planned_on.moments(rotation)[1] for rotation in rotations]
        weighting = exact_coefficients(hamiltonian, rotations, covariances, shifts=shifts, tolerance=tolerance)
    used = weighting.shares > UNUSED
    if np.all(used) or not np.any(used):
        return rotations, weighting
    kept = rotations[used]
    covariances = [planned_on.moments(rotation)[1] for rotation in kept]
    fewer = exact_coefficients(
        hamiltonian, kept, covariances, shifts=shifts, start=weighting.shares[used], tolerance=tolerance
    )
    if fewer.converged >= weighting.converged and fewer.cost <= weighting.cost * (1.0 + 1e-4):
        return kept, fewer
    return rotations, weighting
