"""How far a plan is from the best plan with any rotations, by the equivalence theorem of optimal design.

For a dual vector ν (orthogonal to the shifts) every design with orbital rotations, of any number, has in the given
state a cost of at least (hᵀν)²/max_U φ(U), φ(U) = aᵀC(U)⁻¹a, a = A(U)ᵀν; a design is optimal if and only if the dual of
its weights has φ ≤ 1 everywhere (Kiefer & Wolfowitz, Can. J. Math. 12, 363 (1960), for one response; Sagnol,
arXiv:0912.5467, for several). The dual of a few rotations is far from the best one, so rotations with φ > 1 are added
and the weights solved again until none is found (column generation).
"""

from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fragkit.core import Hamiltonian, InputError, as_count, as_positive
from fragkit.planning._choose import distinct
from fragkit.planning._cost import check_state, fragment_deviations
from fragkit.planning._design_map import DesignMap
from fragkit.planning._exact import exact_coefficients
from fragkit.planning._plan import Plan, PlanBound
from fragkit.planning._robust import robust_state
from fragkit.planning._rotations_start import random_rotations
from fragkit.planning._threads import sized_blas_threads
from fragkit.planning._whitened import NULL_VARIANCE
from fragkit.states import ReferenceState

Array = NDArray[np.float64]


ACTIVE = 0.9
"""Value of φ from which on a rotation stays in the enlarged design."""


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
        Cost with the rotations that the search added, and their number with the plan's own.
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
    rounds: int = 30,
    starts: int = 16,
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
        Starting points of each search for the maximum of φ.
    tolerance
        Relative distance between the enlarged design's cost and the bound at which the search ends.
    rng
        Seed or generator of the starting points.
    progress
        Show a bar with cost and bound.

    Raises
    ------
    InputError
        If an argument is not what it must be.
    MismatchError
        If plan, Hamiltonian and state do not belong together.

    Notes
    -----
    The inner maximum is found by local searches from many starting points, so the bound is not proved: a maximum that
    was missed would lower it. More `starts` make that less likely.

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
    if not isinstance(plan, Plan):
        raise InputError(f"`plan` must be a Plan (got {type(plan).__name__}); make one with fragkit.plan")
    plan.check_belongs_to(hamiltonian)
    check_state(state, plan.orbitals, plan.electrons)
    rounds, starts = as_count(rounds, "rounds", minimum=1), as_count(starts, "starts", minimum=1)
    tolerance = as_positive(tolerance, "tolerance")
    generator = np.random.default_rng(rng)
    planned_on = robust_state(state, planning_noise)
    search = PhiSearch(hamiltonian, planned_on)
    rotations = np.stack([fragment.rotation for fragment in plan.fragments])
    cost = float(np.sum(fragment_deviations(plan.fragments, planned_on)) ** 2)
    covariances = [planned_on.moments(u)[1] for u in rotations]
    shares: Array | None = None
    bound = enlarged = 0.0
    done = False
    bar: Any = None
    if progress:
        from tqdm.auto import tqdm

        bar = tqdm(total=rounds, unit="round", desc="optimality gap")
    played = 0
    try:
        for played in range(1, rounds + 1):
            found = exact_coefficients(hamiltonian, rotations, covariances, start=shares, tolerance=1e-4)
            if found.relative_residual > 1e-6:
                raise InputError(
                    "`plan` must have rotations that reproduce its Hamiltonian (got a relative residual of "
                    f"{found.relative_residual:.2g}); make one with more circuits"
                )
            enlarged = found.cost
            if enlarged == 0.0:
                done = True
                break
            maxima, sizes = search.maxima(_starting_points(rotations, starts, generator), found.dual)
            # On the rotations of the design itself φ ≤ 1, but for the tolerance that `lower_bound` has taken in.
            bound = max(bound, found.lower_bound / max(1.0, float(np.max(sizes))))
            if bar is not None:
                bar.set_postfix_str(f"cost {enlarged:.4g}, bound {bound:.4g} Ha^2", refresh=False)
                bar.update(1)
            done = bool(enlarged - bound <= tolerance * enlarged)
            if done or played == rounds:
                break
            fresh = maxima[np.argsort(-sizes)]
            fresh = fresh[distinct(fresh, 0.01)]
            # A rotation with hardly any shots still holds the dual back where its constraint is active.
            kept = (found.shares > 1e-4) | (search.values(rotations, found.dual, covariances) > ACTIVE)
            rotations = np.concatenate([rotations[kept], fresh])
            covariances = [c for c, keep in zip(covariances, kept, strict=True) if keep]
            covariances += [planned_on.moments(u)[1] for u in fresh]
            small = np.full(len(fresh), 0.3 / len(rotations))
            shares = np.concatenate([found.shares[kept], small])
    finally:
        if bar is not None:
            bar.close()
    searched = f"maximum of phi searched from {starts} starting points in each of {played} rounds, not proved"
    if done:
        message = f"Cost and bound of the enlarged design meet to {tolerance:g}; {searched}."
    else:
        message = (
            f"Cost {enlarged:.4g} and bound {bound:.4g} Ha^2 of the enlarged design have not met; {searched}. "
            "The true limit is between them; raise `rounds`."
        )
    return OptimalityGap(
        cost=cost,
        lower_bound=float(bound),
        enlarged_cost=float(enlarged),
        enlarged_circuits=len(rotations),
        quantum_limit=planned_on.variance(hamiltonian),
        state=planned_on.description,
        converged=done,
        message=message,
    )


class PhiSearch:
    """Local maxima of φ(U) = aᵀC(U)⁻¹a over rotations, a = A(U)ᵀν."""

    def __init__(self, hamiltonian: Hamiltonian, state: ReferenceState) -> None:
        self._map = DesignMap(hamiltonian)
        self._state = state
        self._strict = np.triu_indices(hamiltonian.orbitals, 1)

    @property
    def rows(self) -> int:
        """Number of operator rows."""
        return self._map.space.size

    def projected(self, rows: Array) -> Array:
        """Operator rows without the shifts, as every dual has to be."""
        return self._map.shifts.project(rows)

    def values(self, rotations: Array, dual: Array, covariances: list[Array]) -> Array:
        """φ (K,) of rotations whose covariances are known."""
        space = self._map.space
        responses = space.adjoint(space.pair_columns(rotations), rotations, dual)
        return np.array([r @ _solved(c, r) for c, r in zip(covariances, responses, strict=True)])

    def value_and_gradient(self, rotations: Array, dual: Array) -> tuple[Array, Array]:
        """φ (K,) and its gradient (K, n(n−1)/2) by X_pq, p < q, for U → U exp(X).

        With y = C⁻¹a: dφ = 2 y·da − yᵀ dC y.
        """
        space = self._map.space
        responses = space.adjoint(space.pair_columns(rotations), rotations, dual)
        solved = np.stack([_solved(self._state.moments(u)[1], r) for u, r in zip(rotations, responses, strict=True)])
        turning = self._map.evaluate(rotations, solved, lambda _: dual).gradient
        spread = self._state.variance_and_gradient(rotations, solved)[2]
        p, q = self._strict
        return np.einsum("kf,kf->k", solved, responses), (2.0 * turning - spread)[:, p, q]

    def maxima(self, rotations: Array, dual: Array, *, iterations: int = 60) -> tuple[Array, Array]:
        """Rotations (K, n, n) to which quasi-Newton ascent leads from each of the given ones, and φ there.

        BFGS in the frame of the current rotation, all starting points side by side; a step that does not raise φ is
        halved.
        """
        count, size = len(rotations), len(self._strict[0])
        values, slopes = self.value_and_gradient(rotations, dual)
        inverse = np.repeat(np.eye(size)[None], count, axis=0)
        # First steps of about 0.1 rad.
        inverse *= (0.1 / np.maximum(np.linalg.norm(slopes, axis=1), 1e-12))[:, None, None]
        length = np.ones(count)
        for _ in range(iterations):
            step = np.einsum("kab,kb->ka", inverse, slopes) * length[:, None]
            norm = np.linalg.norm(step, axis=1)
            step *= np.minimum(1.0, 0.6 / np.maximum(norm, 1e-300))[:, None]
            tried = self.turned(rotations, step)
            new_values, new_slopes = self.value_and_gradient(tried, dual)
            better = new_values > values
            difference = slopes - new_slopes
            curvature = np.einsum("ka,ka->k", step, difference)
            for k in range(count):
                if better[k] and curvature[k] > 1e-12 * norm[k] ** 2:
                    inverse[k] = _bfgs(inverse[k], step[k], difference[k], curvature[k])
            gained = np.where(better, (new_values - values) / np.maximum(np.abs(values), 1e-300), 0.0)
            rotations = np.where(better[:, None, None], tried, rotations)
            slopes = np.where(better[:, None], new_slopes, slopes)
            values = np.where(better, new_values, values)
            length = np.where(better, 1.0, 0.3 * length)
            if np.all((better & (gained < 1e-4)) | (length < 1e-3)):
                break
        return rotations, values

    def turned(self, rotations: Array, steps: Array) -> Array:
        """U exp(X) to second order, exactly orthogonal (Cayley)."""
        n = rotations.shape[-1]
        p, q = self._strict
        half = np.zeros((len(steps), n, n))
        half[:, p, q] = 0.5 * steps
        half -= half.transpose(0, 2, 1)
        return rotations @ np.linalg.solve(np.eye(n) - half, np.eye(n) + half)


def _solved(covariance: Array, response: Array) -> Array:
    """C⁻¹a outside of the directions without variance."""
    values, vectors = np.linalg.eigh(covariance)
    keep = values > NULL_VARIANCE * max(values[-1], 1.0)
    return vectors[:, keep] @ ((vectors[:, keep].T @ response) / values[keep])


def _bfgs(inverse: Array, step: Array, difference: Array, curvature: float) -> Array:
    """Inverse of the negative Hessian after one more pair (step, fall of the gradient)."""
    applied = inverse @ difference
    scale = (curvature + difference @ applied) / curvature**2
    crossed = np.outer(applied, step) / curvature
    return inverse + scale * np.outer(step, step) - crossed - crossed.T


def _starting_points(rotations: Array, starts: int, rng: np.random.Generator) -> Array:
    """Half random rotations, half those of the design turned by about 0.3 rad per pair."""
    n = rotations.shape[-1]
    near = rotations[rng.integers(len(rotations), size=starts // 2)]
    noise = 0.3 * rng.standard_normal(near.shape)
    turned = np.linalg.qr(near + 0.5 * near @ (noise - noise.transpose(0, 2, 1)))[0] if len(near) else near
    return np.concatenate([random_rotations(starts - len(near), n, rng), turned])
