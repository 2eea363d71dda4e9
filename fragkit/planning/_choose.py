"""Which rotations to measure in, for a given number of circuits."""

import os
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fragkit.core import Fragmentation, Hamiltonian, InputError, feature_count
from fragkit.fit import Joint, fragment
from fragkit.planning._budget import Budget
from fragkit.planning._counts import least_count
from fragkit.planning._exact.coefficients import EXACT, Weighting, exact_coefficients, given_coefficients
from fragkit.planning._memory import MEMORY
from fragkit.planning._operators.factor import is_factorised
from fragkit.planning._operators.space import OperatorSpace
from fragkit.planning._rotations.optimise import RIDGE, RotationDesign, optimise_rotations
from fragkit.states import ReferenceState

Array = NDArray[np.float64]

UNUSED = 1e-5
"""Circuits whose share of the shots is below this are left out when the others do as well without them."""

SPARE = 2
"""Circuits beyond the fewest that reproduce every Hamiltonian with generic rotations; more gain some per cent."""

SPARE_OF_MANY = 0.1
"""The same as a fraction, beyond 12 orbitals, where conjugate gradients converge the faster the more there are."""


@dataclass(frozen=True, eq=False)
class Settings:
    """How hard to look for rotations, and what is spent on them."""

    budget: Budget
    shifts: bool = True
    starts: int = 1
    surplus: float = 0.0
    rng: np.random.Generator | int | None = 0
    tolerance: float = 5e-3
    max_evaluations: int = 4000
    progress: bool = False
    checkpoint: str | os.PathLike[str] | None = None
    resume: bool = False
    ridge: float = 0.0
    memory: float = MEMORY


@dataclass(frozen=True, eq=False)
class Design:
    """Rotations (K, n, n) with their least-variance weighting, and how they were found.

    Where time is spent the covariances of the weighting are those of the features times `Budget.shot_weights`: its
    shares are then fractions of the time, and its cost compares times.
    """

    rotations: Array
    weighting: Weighting
    converged: bool
    message: str
    method: str
    interrupted: bool = False

    @property
    def rank(self) -> tuple[bool, float]:
        """Smaller is better: exact designs come first, then those of less cost."""
        return self.weighting.relative_residual > EXACT, self.weighting.cost


def default_count(orbitals: int, maximum: int | None = None) -> int:
    """Circuits of a plan when nothing is asked for.

    >>> default_count(7)
    20
    """
    least = least_count(orbitals)
    count = least + (SPARE if orbitals <= 12 else round(SPARE_OF_MANY * least))
    return count if maximum is None else min(count, maximum)


def weighted(
    hamiltonian: Hamiltonian,
    planned_on: ReferenceState,
    rotations: Array,
    settings: Settings,
    *,
    start: Array | None = None,
    tolerance: float = 1e-5,
    prune: bool = True,
) -> tuple[Array, Weighting]:
    """Coefficients of least cost for some rotations, less the circuits that are hardly used when `prune`."""
    if prune:
        kept = distinct(rotations, 1e-6)
        rotations, start = rotations[kept], None if start is None else start[kept]
    covariances = _covariances(planned_on, rotations, settings)
    found = exact_coefficients(
        hamiltonian,
        rotations,
        covariances,
        shifts=settings.shifts,
        start=start,
        tolerance=tolerance,
        memory=settings.memory,
    )
    used = found.shares > UNUSED
    if not prune or np.all(used) or not np.any(used):
        return rotations, found
    kept = np.flatnonzero(used)
    fewer = exact_coefficients(
        hamiltonian,
        rotations[kept],
        [covariances[k] for k in kept],
        shifts=settings.shifts,
        start=found.shares[kept],
        tolerance=tolerance,
        memory=settings.memory,
    )
    if fewer.converged >= found.converged and fewer.cost <= found.cost * (1.0 + 1e-4):
        return rotations[kept], fewer
    return rotations, found


def _covariances(planned_on: ReferenceState, rotations: Array, settings: Settings) -> list[Array]:
    """What coefficients are chosen for: covariances with the ridge, times what a shot of the circuit costs."""
    added = settings.ridge * np.eye(feature_count(planned_on.orbitals))
    weights = settings.budget.shot_weights(list(rotations))
    return [
        weight * (planned_on.moments(rotation)[1] + added) for weight, rotation in zip(weights, rotations, strict=True)
    ]


def distinct(rotations: Array, tolerance: float) -> NDArray[np.intp]:
    """Positions of the first of each set of rotations that differ only by order and signs of their columns."""
    kept: list[int] = []
    for k, rotation in enumerate(rotations):
        overlaps = (np.max(np.abs(rotation.T @ rotations[other]), axis=1) for other in kept)
        if all(np.min(overlap) < 1.0 - tolerance for overlap in overlaps):
            kept.append(k)
    return np.array(kept, dtype=np.intp)


def design_for(
    hamiltonian: Hamiltonian, planned_on: ReferenceState, count: int, settings: Settings, *, start: Any = None
) -> Design:
    """The best rotations found for a number of circuits.

    With fewer than `least_count` circuits generic rotations cannot reproduce the Hamiltonian; the optimisation then
    keeps them where they can, which takes longer. Near the smallest possible number that fails, and the rotations of
    a fit are taken.

    Raises
    ------
    InputError
        If not even a fit reproduces the Hamiltonian with so few circuits.
    """
    if is_one_determinant(hamiltonian):
        return nothing_to_measure(hamiltonian)
    if isinstance(start, np.ndarray) and count >= least_count(hamiltonian.orbitals):
        start = start[distinct(start, 1e-3)]  # equal bases would leave too few different ones
    try:
        found = _optimised(hamiltonian, planned_on, count, settings, start)
    except InputError as error:
        if count >= least_count(hamiltonian.orbitals):
            raise
        return _fitted(hamiltonian, planned_on, count, settings, error)
    if not is_factorised(OperatorSpace(hamiltonian.orbitals).size):
        # The optimisation's coefficients are of least variance to its tolerance; a convex step would gain little more.
        rotations = found.rotations
        covariances = _covariances(planned_on, rotations, settings)
        weighting = given_coefficients(hamiltonian, rotations, found.coefficients, covariances, shifts=settings.shifts)
    else:
        # Close to the solution the cost converges twice as fast as its lower bound; large factorisations are saved.
        gap = 1e-5 if hamiltonian.orbitals <= 10 else 1e-3
        rotations, weighting = weighted(
            hamiltonian, planned_on, found.rotations, settings, start=found.shares, tolerance=gap
        )
    if weighting.relative_residual > EXACT and count < least_count(hamiltonian.orbitals):
        problem = InputError(f"the optimisation ended with a relative residual of {weighting.relative_residual:.2g}")
        return _fitted(hamiltonian, planned_on, count, settings, problem)
    return Design(
        rotations,
        weighting,
        found.converged and weighting.converged,
        found.message if weighting.converged else f"{found.message} {weighting.message}",
        "optimised rotations, least-variance coefficients",
        interrupted=found.message.startswith("Interrupted"),
    )


def _optimised(
    hamiltonian: Hamiltonian, planned_on: ReferenceState, count: int, settings: Settings, start: Any
) -> RotationDesign:
    return optimise_rotations(
        hamiltonian,
        planned_on,
        count,
        start=start,
        starts=settings.starts,
        surplus=settings.surplus,
        rng=settings.rng,
        tolerance=settings.tolerance,
        max_evaluations=settings.max_evaluations,
        ridge=max(settings.ridge, RIDGE),
        progress=settings.progress,
        checkpoint=settings.checkpoint,
        resume=settings.resume,
        on_interrupt="return",
        memory=settings.memory,
    )


def _fitted(
    hamiltonian: Hamiltonian, planned_on: ReferenceState, count: int, settings: Settings, reason: InputError
) -> Design:
    """Rotations of a fit, for so few circuits that the optimisation cannot keep them exact."""
    fitted = fragment(
        hamiltonian,
        Joint(count=count, tol=1e-9, starts=max(4, settings.starts)),
        one_body="absorbed",
        rng=settings.rng,
        progress=settings.progress,
        on_interrupt="return",
    )
    if not fitted.converged:
        raise InputError(
            f"`circuits` must be larger for {hamiltonian.orbitals} orbitals (got {count}): {fitted.message} "
            "circuits='minimal' finds the fewest that can be exact"
        ) from reason
    design = from_fragments(hamiltonian, planned_on, fitted, settings)
    note = "So few circuits leave no room to optimise: the rotations are those of a fit to the integrals."
    return replace(design, message=f"{design.message} {note}")


def is_one_determinant(hamiltonian: Hamiltonian) -> bool:
    """Whether the sector has one state only, so that the energy is known without measuring."""
    return all(count in (0, hamiltonian.orbitals) for count in hamiltonian.electrons)


def nothing_to_measure(hamiltonian: Hamiltonian) -> Design:
    """One circuit without coefficients: the energy is that of the only determinant."""
    n = hamiltonian.orbitals
    weighting = Weighting(
        coefficients=np.zeros((1, feature_count(n))),
        shares=np.ones(1),
        constant=hamiltonian.determinant_energy(),
        deviations=np.zeros(1),
        residual_norm=0.0,
        energy_bound=0.0,
        relative_residual=0.0,
        lower_bound=0.0,
        dual=np.zeros(OperatorSpace(n).size),
        sector_exact=True,
        converged=True,
        message="",
    )
    message = "The electron numbers leave one state only; its energy is known without measuring."
    return Design(np.eye(n)[None], weighting, True, message, "single determinant")


def from_fragments(
    hamiltonian: Hamiltonian, planned_on: ReferenceState, fragments: Fragmentation, settings: Settings
) -> Design:
    """The rotations of a fragmentation with least-variance coefficients."""
    rotations = np.stack([piece.rotation for piece in fragments])
    rotations, weighting = weighted(hamiltonian, planned_on, rotations, settings, tolerance=1e-6)
    message = weighting.message if fragments.converged else f"{fragments.message} {weighting.message}"
    return Design(
        rotations,
        weighting,
        weighting.converged,
        message,
        f"{fragments.method}, least-variance coefficients",
    )


def fewest_circuits(hamiltonian: Hamiltonian, planned_on: ReferenceState, settings: Settings) -> Design:
    """A plan of the fewest circuits with which a fit reproduces the Hamiltonian exactly."""
    if is_one_determinant(hamiltonian):
        return nothing_to_measure(hamiltonian)
    fitted = fragment(
        hamiltonian,
        Joint(tol=1e-9, starts=max(4, settings.starts)),
        one_body="absorbed",
        rng=settings.rng,
        progress=settings.progress,
        on_interrupt="return",
    )
    rotations = np.stack([piece.rotation for piece in fitted])
    return design_for(hamiltonian, planned_on, len(rotations), settings, start=rotations)
