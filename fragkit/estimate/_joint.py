"""Shots shared between several observables."""

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from fragkit.core import Fragment, Hamiltonian, InputError, as_count, as_positive
from fragkit.estimate._least_variance import FixedShots
from fragkit.estimate._measure import check_spanned
from fragkit.estimate._moments import MODEL_NOISE
from fragkit.estimate._observable import Observable
from fragkit.estimate._shares import whole_shots
from fragkit.planning import OperatorSpace, Plan
from fragkit.states import ReferenceState

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class JointPlan:
    """A plan whose shots serve several observables.

    Parameters
    ----------
    plan
        The circuits with the shots to take, and the energy's coefficients.
    predicted_errors
        Standard error of each observable by name, in the reference state; the energy goes by "energy".
    converged, message
        Whether the shares settled, and a sentence that says so.
    """

    plan: Plan
    predicted_errors: dict[str, float]
    converged: bool
    message: str


def joint_plan(
    plan: Plan,
    hamiltonian: Hamiltonian,
    reference: ReferenceState,
    observables: Sequence[tuple[Observable, float]],
    *,
    total_shots: int,
    energy_weight: float = 1.0,
    minimum_shots: int = 10,
    tolerance: float = 0.02,
    iterations: int = 300,
) -> JointPlan:
    """Share shots over a plan's circuits so that the weighted sum of the squared errors is least.

    Minimises Σ_i weight_i Var_i over the shares, where each observable has its own least-variance coefficients; the
    energy is one of them. The multiplicative update w_m ← w_m √(Σ_i weight_i φ_im), φ_im = ν_iᵀ A_m C_m⁻¹ A_mᵀ ν_i,
    decreases it (Silvey, Titterington & Torsney 1978; Pukelsheim, Optimal Design of Experiments), and at the optimum
    no φ is above the weighted variance.

    Parameters
    ----------
    plan, hamiltonian
        Circuits, and the Hamiltonian they were planned for.
    reference
        State whose variances count.
    observables
        Pairs (observable, weight); a weight is in 1/unit² of its observable.
    total_shots
        Shots to share.
    energy_weight
        Weight of the energy, 1/hartree².
    minimum_shots
        Least shots of a circuit.
    tolerance
        Largest relative distance from the optimum.
    iterations
        Most updates.

    Raises
    ------
    InputError
        If an observable is outside the span of the circuits, or the budget is too small.
    """
    plan.check_belongs_to(hamiltonian)
    least = minimum_shots * len(plan)
    if as_count(total_shots, "total_shots") < least:
        raise InputError(f"`total_shots` must be at least {least} for {len(plan)} circuits (got {total_shots})")
    wanted = [(Observable.of(hamiltonian), as_positive(energy_weight, "energy_weight"))]
    wanted += [(o, as_positive(w, f"weight of {o.name!r}")) for o, w in observables]
    names = [observable.name for observable, _ in wanted]
    if len(set(names)) != len(names):
        raise InputError(f"`observables` must have different names, none of them 'energy' (got {names[1:]})")
    space = OperatorSpace(plan.orbitals)
    rotations = np.stack([fragment.rotation for fragment in plan.fragments])
    state = reference.with_noise(MODEL_NOISE)
    covariances = np.stack([state.moments(u)[1] for u in rotations])
    rows = [observable.rows(space) for observable, _ in wanted]
    weights = np.array([weight for _, weight in wanted])

    shares = 0.5 * plan.shares + 0.5 / len(plan)
    ready = FixedShots(rotations, covariances, shares, plan.electrons, shifts=plan.sector_exact)
    for (observable, _), target in zip(wanted, rows, strict=True):
        check_spanned(observable, ready.combination(target), space, plan.sector_exact)
    converged, gap = False, np.inf
    for _ in range(iterations):
        slopes = weights @ np.stack([ready.slopes(target) for target in rows])
        gap = float(np.max(slopes) / (slopes @ shares)) - 1.0
        if gap <= tolerance:
            converged = True
            break
        shares = shares * np.sqrt(slopes)
        shares = np.maximum(shares / np.sum(shares), 1e-7 / len(plan))
        shares = shares / np.sum(shares)
        ready = ready.with_shots(shares)
    shots = whole_shots(shares, total_shots, minimum_shots)
    ready = ready.with_shots(shots)
    found = [ready.combination(target) for target in rows]
    exact = np.stack([reference.moments(u)[1] for u in rotations])
    deviations = np.sqrt(
        np.maximum(
            [np.einsum("kf,kfg,kg->k", c.coefficients, exact, c.coefficients, optimize=True) for c in found], 0.0
        )
    )
    energy = found[0]
    message = f"Shared between {', '.join(names)}; within {max(gap, 0.0):.2g} (relative) of the least weighted variance"
    changed = replace(
        plan,
        fragments=tuple(Fragment.from_coefficients(u, c) for u, c in zip(rotations, energy.coefficients, strict=True)),
        constant=hamiltonian.constant + energy.constant,
        shots=shots,
        deviations=deviations[0],
        target_error=None,
        bound=None,
        diagnostics={},
        reference=reference.description,
        converged=plan.converged and converged,
        message=message + ("." if converged else ", not converged; raise `iterations`."),
        method="shares for several observables",
    )
    errors = np.sqrt(np.sum(deviations**2 / shots, axis=1))
    return JointPlan(changed, dict(zip(names, errors.tolist(), strict=True)), converged, changed.message)
