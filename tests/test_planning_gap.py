"""The optimality gap: the search for maxima of φ, symmetries, the enlarged design, and bounds on every plan."""

from functools import cache
from typing import Any

import cvxpy as cp
import numpy as np
import pytest
from molecules import full_ci, molecule_hamiltonian

import fragkit.planning._gap.certificate as certificate
from fragkit import hubbard
from fragkit.core import Hamiltonian, InputError
from fragkit.fit import LowRank, fragment
from fragkit.planning import OperatorSpace, Plan, exact_coefficients, optimality_gap, plan, sector_shifts
from fragkit.planning._gap.certificate import OptimalityGap
from fragkit.planning._gap.enlarged_design import EnlargedDesign
from fragkit.planning._gap.phi_search import PhiSearch
from fragkit.planning._gap.symmetries import invariant_rows, orbital_symmetries
from fragkit.planning._rotations.start import random_rotations
from fragkit.states import ReferenceState, reference_state

NOISE = 1e-2


def true_state(name: str) -> ReferenceState:
    return ReferenceState.from_ci_vector(molecule_hamiltonian(name), full_ci(name)[1])


@cache
def h4() -> tuple[Hamiltonian, ReferenceState, Plan]:
    hamiltonian = molecule_hamiltonian("H4")
    state = true_state("H4").with_noise(NOISE)
    return hamiltonian, state, plan(hamiltonian, state)


@cache
def h4_gap() -> OptimalityGap:
    hamiltonian, state, made = h4()
    return optimality_gap(made, hamiltonian, state, starts=8)


def random_hamiltonian(orbitals: int, electrons: tuple[int, int]) -> Hamiltonian:
    rng = np.random.default_rng(7)
    one = rng.normal(size=(orbitals, orbitals))
    factors = rng.normal(size=(orbitals, orbitals, orbitals))
    factors = factors + factors.transpose(0, 2, 1)
    return Hamiltonian(0.0, one + one.T, np.einsum("kpq,krs->pqrs", factors, factors), electrons=electrons)


@pytest.mark.parametrize(
    ("name", "continuous", "mirrors"),
    # Generators of the point groups (textbook group theory, e.g. Cotton, Chemical Applications of Group Theory), as far
    # as the orbitals of STO-3G see them: H2 and H4 have σ orbitals only, so inversion alone is left of D∞h; C∞v: the
    # axis and two mirrors; D∞h: the axis and three mirrors; C2v: two mirrors.
    [("H2", 0, 1), ("H4", 0, 1), ("LiH", 1, 2), ("BeH2", 1, 3), ("H2O", 0, 2)],
)
@pytest.mark.parametrize("turned", [False, True])
def test_symmetries_are_those_of_the_molecule_in_any_orbitals(
    name: str, continuous: int, mirrors: int, turned: bool
) -> None:
    hamiltonian = molecule_hamiltonian(name)
    if turned:
        hamiltonian = hamiltonian.rotated(random_rotations(1, hamiltonian.orbitals, np.random.default_rng(3))[0])
    state = reference_state(hamiltonian, "fci")
    found = orbital_symmetries(hamiltonian, state)
    involutions = [v for v in found if np.allclose(v @ v, np.eye(len(v)), atol=1e-6)]
    assert (len(found) - len(involutions), len(involutions)) == (continuous, mirrors)
    for symmetry in found:
        same = hamiltonian.rotated(symmetry)
        np.testing.assert_allclose(same.one_body, hamiltonian.one_body, atol=1e-6)
        np.testing.assert_allclose(same.two_body, hamiltonian.two_body, atol=1e-6)
    search = PhiSearch(hamiltonian, state.with_noise(NOISE))
    space, shifts = search.map.space, search.map.shifts
    basis = invariant_rows(space, shifts, found)
    np.testing.assert_allclose(basis.T @ basis, np.eye(basis.shape[1]), atol=1e-10)
    np.testing.assert_allclose(basis.T @ shifts.basis, 0.0, atol=1e-10)
    assert basis.shape[1] < 0.7 * search.map.rows
    np.testing.assert_allclose(basis @ (basis.T @ search.map.target), search.map.target, atol=1e-7)
    # φ of an invariant dual is the same for every image of a rotation.
    rng = np.random.default_rng(4)
    dual = basis @ rng.normal(size=basis.shape[1])
    rotation = random_rotations(1, hamiltonian.orbitals, rng)
    images = np.stack([rotation[0], *(symmetry @ rotation[0] for symmetry in found)])
    sizes = search.value_and_gradient(images, dual)[0]
    np.testing.assert_allclose(sizes, sizes[0], rtol=1e-5)


def test_symmetries_need_hamiltonian_and_state_to_agree() -> None:
    hamiltonian = molecule_hamiltonian("H4")
    vector = np.random.default_rng(1).normal(size=full_ci("H4")[1].shape)
    assert not orbital_symmetries(
        hamiltonian, ReferenceState.from_ci_vector(hamiltonian, vector / np.linalg.norm(vector))
    )
    lawless = random_hamiltonian(4, (2, 2))
    assert not orbital_symmetries(lawless, reference_state(lawless, "fci"))


def test_gradient_and_blocks_of_phi() -> None:
    hamiltonian = molecule_hamiltonian("H4")
    search = PhiSearch(hamiltonian, true_state("H4").with_noise(NOISE))
    rng = np.random.default_rng(1)
    rotations = random_rotations(3, 4, rng)
    dual = search.projected(rng.normal(size=search.rows))
    values, slopes = search.value_and_gradient(rotations, dual)
    step = rng.normal(size=slopes.shape)
    ahead, behind = (search.value_and_gradient(search.turned(rotations, h * step), dual)[0] for h in (1e-4, -1e-4))
    np.testing.assert_allclose((ahead - behind) / 2e-4, np.sum(slopes * step, axis=1), rtol=1e-4)
    blocks = [search.block(rotation) for rotation in rotations]
    np.testing.assert_allclose([np.sum((dual @ block) ** 2) for block in blocks], values, rtol=1e-9)


def test_search_finds_the_maximum_of_a_scan() -> None:
    """Two orbitals have one angle, so that a scan finds the largest φ for certain."""
    hamiltonian = hubbard(2, repulsion=4.0, electrons=(1, 1), periodic=False)
    search = PhiSearch(hamiltonian, reference_state(hamiltonian, "fci", noise=NOISE))
    rng = np.random.default_rng(2)
    angles = np.linspace(0.0, np.pi, 2000)
    scan = np.stack([[[np.cos(t), -np.sin(t)], [np.sin(t), np.cos(t)]] for t in angles])
    for _ in range(5):
        dual = search.projected(rng.normal(size=search.rows))
        highest = np.max(search.value_and_gradient(scan, dual)[0])
        rotations, sizes = search.maxima(random_rotations(12, 2, rng), dual)
        assert np.max(sizes) == pytest.approx(highest, rel=1e-3)
        np.testing.assert_allclose(search.value_and_gradient(rotations, dual)[0], sizes, rtol=1e-9)


def test_enlarged_design_is_the_design_with_all_images() -> None:
    hamiltonian, state, made = h4()
    search = PhiSearch(hamiltonian, state)
    symmetries = orbital_symmetries(hamiltonian, state)
    assert len(symmetries) == 1
    basis = invariant_rows(search.map.space, search.map.shifts, symmetries)
    rotations = np.stack([piece.rotation for piece in made.fragments])
    design = EnlargedDesign(search, basis, rotations)
    dual = design.solve()
    assert dual is not None
    images = np.concatenate([rotations, symmetries[0] @ rotations])
    explicit = exact_coefficients(hamiltonian, images, [state.moments(u)[1] for u in images])
    assert design.cost == pytest.approx(explicit.cost, rel=3e-4)
    assert dual.bound <= explicit.cost * (1 + 1e-9)
    assert design.cost < made.cost * (1 + 1e-4)


def scanned_cost(hamiltonian: Hamiltonian, state: ReferenceState, angles: int) -> float:
    """Least cost (Σσ)² of two orbitals with one circuit at each of many angles, by cvxpy."""
    space = OperatorSpace(2)
    shifts = sector_shifts(space, hamiltonian.electrons).basis
    outside = np.linalg.svd(shifts)[0][:, shifts.shape[1] :].T
    operators, deviations = [], []
    for t in np.linspace(0.0, np.pi / 2, angles, endpoint=False):
        rotation = np.array([[np.cos(t), -np.sin(t)], [np.sin(t), np.cos(t)]])
        values, vectors = np.linalg.eigh(state.moments(rotation)[1])
        kept = values > 1e-9
        scaled = cp.Variable(int(np.count_nonzero(kept)))
        unit = vectors[:, kept] / np.sqrt(values[kept])
        operators.append(outside @ space.dense(space.pair_columns(rotation), rotation) @ unit @ scaled)
        deviations.append(cp.norm(scaled))
    exact: Any = sum(operators) == outside @ space.hamiltonian_rows(hamiltonian)
    total: Any = cp.Problem(cp.Minimize(cp.sum(cp.hstack(deviations))), [exact]).solve(solver=cp.CLARABEL)
    return float(total) ** 2


@pytest.mark.parametrize("repulsion", [1.0, 4.0])
def test_cost_and_bound_meet_at_the_best_of_all_angles(repulsion: float) -> None:
    hamiltonian = hubbard(2, repulsion=repulsion, electrons=(1, 1), periodic=False)
    state = reference_state(hamiltonian, "fci", noise=NOISE)
    gap = optimality_gap(plan(hamiltonian, state), hamiltonian, state, tolerance=2e-3, starts=12)
    best = scanned_cost(hamiltonian, state, 360)
    assert gap.converged, gap.message
    assert gap.lower_bound <= best * (1 + 1e-6)
    assert gap.enlarged_cost == pytest.approx(best, rel=2e-3)


def test_no_plan_of_h2_is_below_the_bound() -> None:
    hamiltonian, state = molecule_hamiltonian("H2"), reference_state(molecule_hamiltonian("H2"), "cisd")
    first = plan(hamiltonian, state)
    gap = optimality_gap(first, hamiltonian, state, planning_noise=NOISE)
    assert gap.converged, gap.message
    assert gap.quantum_limit <= gap.lower_bound <= gap.enlarged_cost * (1 + 1e-6)
    assert gap.lower_bound <= gap.cost
    noisy = state.with_noise(NOISE)
    for count in (3, 6):
        assert plan(hamiltonian, noisy, circuits=count).cost >= gap.lower_bound * (1 - 1e-6)
    attached = gap.attached_to(first)
    assert attached.bound is not None
    assert attached.bound.design_limit == gap.lower_bound
    assert attached.bound.quantum_limit == pytest.approx(state.variance(hamiltonian))


def test_cost_and_bound_of_h4_meet_and_more_circuits_approach_them() -> None:
    hamiltonian, state, made = h4()
    gap = h4_gap()
    assert gap.converged, gap.message
    assert gap.quantum_limit < gap.lower_bound <= gap.enlarged_cost <= 1.02 * gap.lower_bound * (1 + 1e-3)
    assert gap.cost == pytest.approx(made.cost, rel=1e-6)
    assert "not proved" in gap.message
    costs = [gap.cost]
    for count, seed in ((14, 1), (26, 2)):
        other = plan(hamiltonian, state, circuits=count, rng=seed, max_evaluations=1000)
        costs.append(other.cost)
    low_rank = plan(hamiltonian, state, fragments=fragment(hamiltonian, LowRank(tol=1e-9)))
    assert min(*costs, low_rank.cost) >= gap.lower_bound
    assert costs[-1] < 0.97 * gap.cost


def test_bound_does_not_depend_on_where_the_search_starts() -> None:
    hamiltonian, state, _ = h4()
    other = plan(hamiltonian, state, fragments=fragment(hamiltonian, LowRank(tol=1e-9)))
    gap = optimality_gap(other, hamiltonian, state, starts=6, tolerance=0.03, rng=5)
    assert gap.converged, gap.message
    assert max(gap.lower_bound, h4_gap().lower_bound) <= min(gap.enlarged_cost, h4_gap().enlarged_cost)


def test_without_symmetries_the_bound_is_the_same(monkeypatch: pytest.MonkeyPatch) -> None:
    hamiltonian = hubbard(3, repulsion=4.0, electrons=(2, 1), periodic=False)
    state = reference_state(hamiltonian, "fci", noise=NOISE)
    made = plan(hamiltonian, state)
    symmetric = optimality_gap(made, hamiltonian, state, starts=5)
    monkeypatch.setattr(certificate, "orbital_symmetries", lambda *_: [])
    plain = optimality_gap(made, hamiltonian, state, starts=5)
    for gap in (symmetric, plain):
        assert gap.converged, gap.message
    assert max(symmetric.lower_bound, plain.lower_bound) <= min(symmetric.enlarged_cost, plain.enlarged_cost)


def test_a_poor_search_never_bounds_above_the_cost() -> None:
    """Weak duality holds for the plan's own rotations and those found, however few are searched for."""
    hamiltonian, state, made = h4()
    for seed in range(3):
        gap = optimality_gap(made, hamiltonian, state, rounds=2, starts=1, rng=seed)
        assert 0 < gap.lower_bound <= gap.enlarged_cost
        assert gap.lower_bound <= gap.cost


def test_gap_that_has_not_closed_says_so() -> None:
    hamiltonian, state, made = h4()
    gap = optimality_gap(made, hamiltonian, state, rounds=1, starts=2)
    assert not gap.converged
    assert "have not met" in gap.message
    assert 0 < gap.lower_bound < gap.enlarged_cost <= gap.cost * (1 + 1e-4)


def test_one_determinant_needs_no_shots() -> None:
    hamiltonian = hubbard(2, repulsion=4.0, electrons=(2, 2), periodic=False)
    state = reference_state(hamiltonian, "hf")
    gap = optimality_gap(plan(hamiltonian, state), hamiltonian, state, planning_noise=0.1)
    assert gap.converged
    assert gap.cost == gap.enlarged_cost == gap.lower_bound == 0.0


def test_inexact_plans_are_refused() -> None:
    hamiltonian, state, _ = h4()
    rough = plan(hamiltonian, state, fragments=fragment(hamiltonian, LowRank(tol=0.2)), reweight=False)
    with pytest.raises(InputError, match="`plan` must reproduce its Hamiltonian"):
        optimality_gap(rough, hamiltonian, state)
