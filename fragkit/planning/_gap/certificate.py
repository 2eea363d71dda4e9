"""How far a plan is from the best plan with any rotations, by the equivalence theorem of optimal design.

For a dual vector ν (orthogonal to the shifts) every design with orbital rotations, of any number, has in the given
state a cost of at least (hᵀν)²/max_U φ(U), φ(U) = aᵀC(U)⁻¹a, a = A(U)ᵀν; a design is optimal if and only if the dual of
its weights has φ ≤ 1 everywhere (Kiefer & Wolfowitz, Can. J. Math. 12, 363 (1960), for one response; Sagnol,
arXiv:0912.5467, for several). The dual of a few rotations is far from the best one, so rotations with φ > 1 are added
and the weights solved again until none is found (column generation).

Mirror images of a rotation under symmetries of Hamiltonian and state have the same φ once ν is symmetric, and averaging
ν over the images never raises max φ: so all of this is done with symmetric ν only, as if every rotation brought its
images along. That leaves a half to a fifth of the unknowns.
"""

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fragkit.core import Hamiltonian, InputError, as_count, as_positive
from fragkit.planning._choose import distinct
from fragkit.planning._cost import check_state, fragment_deviations
from fragkit.planning._gap.enlarged_design import Dual, EnlargedDesign
from fragkit.planning._gap.phi_search import PhiSearch
from fragkit.planning._gap.symmetries import invariant_rows, orbital_symmetries
from fragkit.planning._operators.factor import is_factorised
from fragkit.planning._operators.space import OperatorSpace
from fragkit.planning._plan import Plan, PlanBound, as_plan
from fragkit.planning._robust import robust_state
from fragkit.planning._rotations.start import random_rotations
from fragkit.planning._threads import sized_blas_threads
from fragkit.states import ReferenceState

Array = NDArray[np.float64]

NEAR = 3
"""Rotations of the design from which each search starts, over the number of other starting points."""

CHECKS, CHECK = 8, 4
"""A bound is believed after so many searches, each from so many times the other starting points of a round."""

SAME = 0.003
"""Distance of rotations (one minus the overlap of the least similar orbital) up to which they count as one."""

INEXACT = 1e-6
"""Largest relative residual of the plan."""


@dataclass(frozen=True, eq=False)
class OptimalityGap:
    """A plan's cost and what no plan with orbital rotations can go below, both in one state, hartree².

    Parameters
    ----------
    cost
        (Σσ)² of the plan in the state.
    lower_bound
        Of every plan in that state, as far as the search for the maximum of φ can tell.
    enlarged_cost, enlarged_circuits
        Cost with the rotations that the search added, all with their images under the symmetries that were found; and
        how many rotations that design uses, images not counted.
    quantum_limit
        Variance of the Hamiltonian in the state, the limit for any measurement.
    state
        Description of the state: the reference with the planning noise.
    converged, message
        Whether cost and bound of the enlarged design met to the tolerance, in words.
    """

    cost: float
    lower_bound: float
    enlarged_cost: float
    enlarged_circuits: int
    quantum_limit: float
    state: str
    converged: bool
    message: str

    @property
    def ratio(self) -> float:
        """Cost over lower bound: the plan is within this factor of the best."""
        return self.cost / self.lower_bound if self.lower_bound > 0 else np.inf

    def attached_to(self, plan: Plan) -> Plan:
        """The plan with the lower bound in its `bound`."""
        note = f"for {self.state}, where this plan costs {self.cost:.4g} Ha^2. {self.message}"
        own = plan.bound.quantum_limit if plan.bound is not None else self.quantum_limit
        return replace(plan, bound=PlanBound(own, self.lower_bound, note))


@sized_blas_threads
def optimality_gap(
    plan: Plan,
    hamiltonian: Hamiltonian,
    state: ReferenceState,
    *,
    planning_noise: float | None = None,
    rounds: int = 40,
    starts: int = 32,
    tolerance: float = 0.02,
    rng: np.random.Generator | int | None = 0,
    progress: bool = False,
) -> OptimalityGap:
    """Bound the cost of every plan with orbital rotations from below, and compare.

    Parameters
    ----------
    plan
        An exact plan; its rotations start the search.
    hamiltonian, state
        Those it was made for.
    planning_noise
        As in `fragkit.plan`; the gap is that in the state with this noise. Without any, covariances are nearly
        singular and the bound is loose.
    rounds
        Most rounds of adding rotations.
    starts
        Starting points of each search for the maximum of φ that are drawn at random; three times as many are the
        rotations of the enlarged design with the largest φ. The bound that is returned is checked with 32 times as many
        random ones.
    tolerance
        Relative distance between the enlarged design's cost and the bound at which the search ends.
    rng
        Seed or generator of the starting points.
    progress
        Show a bar with cost and bound.

    Raises
    ------
    InputError
        If an argument is not what it must be, or the plan has more than 12 orbitals.
    MismatchError
        If plan, Hamiltonian and state do not belong together.

    Notes
    -----
    The inner maximum is found by local searches from many starting points, so the bound is not proved: a maximum that
    was missed would lower it. More `starts` make that less likely. It is never above the cost of the given plan, nor
    above that of the enlarged design, whatever was missed.

    Symmetries of Hamiltonian and state (axes of linear molecules, mirrors, inversion) are looked for and used. The
    enlarged design is there to judge the bound; it has hundreds of circuits.

    Examples
    --------
    >>> import fragkit
    >>> from fragkit.planning import plan
    >>> from fragkit.states import reference_state
    >>> ham = fragkit.hubbard(2, repulsion=4.0, electrons=(1, 1), periodic=False)
    >>> state = reference_state(ham, "fci", noise=0.01)
    >>> gap = optimality_gap(plan(ham, state, max_evaluations=60), ham, state, rounds=2, starts=4)
    >>> 0 < gap.quantum_limit <= gap.lower_bound <= gap.cost
    True
    """
    as_plan(plan).check_belongs_to(hamiltonian)
    check_state(state, plan.orbitals, plan.electrons)
    if not is_factorised(OperatorSpace(plan.orbitals).size):
        raise InputError(
            f"`plan` must be of at most 12 orbitals (got {plan.orbitals}): the search for the bound forms matrices of "
            "n^4/5 rows; compare the plan with its quantum limit, `plan.bound`, instead"
        )
    rounds, starts = as_count(rounds, "rounds", minimum=1), as_count(starts, "starts", minimum=1)
    tolerance = as_positive(tolerance, "tolerance")
    generator = np.random.default_rng(rng)
    planned_on = robust_state(state, planning_noise)
    search = PhiSearch(hamiltonian, planned_on)
    rotations = np.stack([fragment.rotation for fragment in plan.fragments])
    _check_exact(search, hamiltonian, rotations, np.stack([fragment.coefficients for fragment in plan.fragments]))
    symmetries = orbital_symmetries(hamiltonian, planned_on)
    basis = invariant_rows(search.map.space, search.map.shifts, symmetries)
    design = EnlargedDesign(search, basis, rotations)
    bar: Any = None
    if progress:
        from tqdm.auto import tqdm

        bar = tqdm(total=rounds, unit="round", desc="optimality gap")
    bound, done, played = 0.0, False, 0
    try:
        while not done and played < rounds:
            played += 1
            dual = design.solve()
            if dual is None:
                done = True
                break
            first = _starting_points(design, dual, NEAR * starts, starts, generator)
            design.add(_violators(search, dual, first))
            best = design.best
            close = design.cost - best.bound <= tolerance * design.cost
            if (close or played == rounds) and not best.checked:
                # A maximum that was missed makes a bound too high, so it is believed only after a closer look.
                for number in range(CHECKS):
                    first = _starting_points(design, best, 0 if number else NEAR * starts, CHECK * starts, generator)
                    design.add(_violators(search, best, first, iterations=200))
                    close = design.cost - best.bound <= tolerance * design.cost
                    if not close and played < rounds:
                        break
                else:
                    best.checked = True
            bound = design.checked_bound
            done = bool(design.cost - bound <= tolerance * design.cost)
            if bar is not None:
                bar.set_postfix_str(f"cost {design.cost:.4g}, bound {design.best.bound:.4g} Ha^2", refresh=False)
                bar.update(1)
    finally:
        if bar is not None:
            bar.close()
    searched = (
        f"maximum of phi searched from {(NEAR + 1) * starts} starting points in each of {played} rounds and from "
        f"{(NEAR + CHECKS * CHECK) * starts} for the bound, not proved"
    )
    if done:
        message = f"Cost and bound of the enlarged design meet to {tolerance:g}; {searched}."
    else:
        message = (
            f"Cost {design.cost:.4g} and bound {bound:.4g} Ha^2 of the enlarged design have not met; {searched}. "
            "The true limit is between them; raise `rounds` to go on."
        )
    return OptimalityGap(
        cost=float(np.sum(fragment_deviations(plan.fragments, planned_on)) ** 2),
        lower_bound=bound,
        enlarged_cost=design.cost,
        enlarged_circuits=design.used,
        quantum_limit=planned_on.variance(hamiltonian),
        state=planned_on.description,
        converged=done,
        message=message,
    )


def _check_exact(search: PhiSearch, hamiltonian: Hamiltonian, rotations: Array, coefficients: Array) -> None:
    size = float(np.linalg.norm(search.map.space.hamiltonian_rows(hamiltonian)))
    left = float(np.linalg.norm(search.map.residual(rotations, coefficients)))
    if left > INEXACT * size:
        raise InputError(
            f"`plan` must reproduce its Hamiltonian (got a relative residual of {left / size:.2g}); make one with more "
            "circuits"
        )


def _violators(search: PhiSearch, dual: Dual, first: Array, *, iterations: int = 60) -> Array:
    """Distinct rotations with φ > 1 to which the search leads from the given ones, largest φ first."""
    maxima, sizes = search.maxima(first, dual.rows, iterations=iterations)
    order = np.argsort(-sizes)
    found = maxima[order[sizes[order] > 1.0]]
    return found[distinct(found, SAME)]


def _starting_points(design: EnlargedDesign, dual: Dual, near: int, scattered: int, rng: np.random.Generator) -> Array:
    """The `near` rotations of the design with the largest φ, and others.

    Of the others a third are random, a third the orbitals with one to three pairs of them turned, since narrow maxima
    are often near those, and a third rotations of the design turned by about 0.3 rad per pair.
    """
    n = design.rotations.shape[-1]
    third = -(-scattered // 3)
    pairwise = np.stack([_turned_pairs(n, rng) for _ in range(third)])
    own = design.rotations[rng.integers(len(design.rotations), size=third)]
    noise = 0.3 * rng.standard_normal(own.shape)
    turned = np.linalg.qr(own + 0.5 * own @ (noise - noise.transpose(0, 2, 1)))[0]
    return np.concatenate([design.largest(dual, near), random_rotations(third, n, rng), pairwise, turned])


def _turned_pairs(n: int, rng: np.random.Generator) -> Array:
    noise = 0.05 * rng.standard_normal((n, n))
    rotation = np.linalg.qr(np.eye(n) + noise - noise.T)[0]
    for _ in range(rng.integers(1, 4)):
        pair = rng.choice(n, 2, replace=False)
        angle = rng.uniform(0.0, np.pi)
        cosine, sine = np.cos(angle), np.sin(angle)
        rotation[pair] = np.array([[cosine, -sine], [sine, cosine]]) @ rotation[pair]
    return rotation
