"""The planner without a matrix of operator rows, as beyond 12 orbitals, against the one with such matrices."""

from math import comb

import numpy as np
import pytest
from molecules import molecule_hamiltonian

from fragkit import hubbard
from fragkit.core import Hamiltonian, InputError, fragment_tensors
from fragkit.fit import fragment
from fragkit.planning import exact_coefficients, optimality_gap, plan, plan_cost
from fragkit.planning._operators import factor as factor_module
from fragkit.planning._operators.conjugate_gradients import least_variance
from fragkit.planning._operators.design_map import DesignMap
from fragkit.planning._operators.fragment_sum import FragmentSum
from fragkit.planning._rotations.covariances import Covariances, cayley
from fragkit.planning._rotations.iterative import IterativeSystem
from fragkit.planning._rotations.restore import restore
from fragkit.planning._rotations.start import random_rotations
from fragkit.planning._rotations.system import FactorisedSystem
from fragkit.states import ReferenceState, reference_state


@pytest.fixture
def many(monkeypatch: pytest.MonkeyPatch) -> None:
    """Small Hamiltonians are planned as if they were large."""
    monkeypatch.setattr(factor_module, "LARGEST_FACTORISED", 0)


def noisy(hamiltonian: Hamiltonian, noise: float = 1e-2) -> ReferenceState:
    return reference_state(hamiltonian, "cisd", noise=noise)


def random_state(hamiltonian: Hamiltonian, seed: int) -> ReferenceState:
    vector = np.random.default_rng(seed).normal(size=[comb(hamiltonian.orbitals, k) for k in hamiltonian.electrons])
    return ReferenceState.from_ci_vector(hamiltonian, vector / np.linalg.norm(vector))


def point(hamiltonian: Hamiltonian, count: int, seed: int = 0):
    """Design, rotations, coefficients and a scaling."""
    rng = np.random.default_rng(seed)
    n = hamiltonian.orbitals
    design = DesignMap(hamiltonian)
    rotations = random_rotations(count, n, rng)
    coefficients = 0.1 * rng.standard_normal((count, n * n + n))
    covariances = Covariances(noisy(hamiltonian), design, 0.0)
    whiteners = np.stack([design.whitening(covariances.matrix(u))[0] for u in rotations])
    scale = whiteners * rng.uniform(0.3, 1, (count, 1, 1))
    return design, rotations, coefficients, scale, rng.uniform(0.3, 1.0, (count, n * (n - 1) // 2))


def test_change_of_a_sum_of_fragments() -> None:
    """By differences; and `transpose` is its transpose."""
    design, rotations, coefficients, _, _ = point(molecule_hamiltonian("H4"), 5)
    rng = np.random.default_rng(1)
    generators = rng.standard_normal((5, 4, 4))
    generators = generators - generators.transpose(0, 2, 1)
    added = rng.standard_normal(coefficients.shape)
    fragments = FragmentSum(design.space, rotations, coefficients)
    step = 1e-5
    ends = [
        FragmentSum(design.space, cayley(rotations, s * generators), coefficients + s * added).total()
        for s in (step, -step)
    ]
    change = fragments.change(generators, added)
    np.testing.assert_allclose((ends[0] - ends[1]) / (2 * step), change, atol=1e-8)
    rows = rng.standard_normal(design.space.size)
    adjoint, gradient = fragments.transpose(rows)
    assert rows @ change == pytest.approx(np.vdot(adjoint, added) + 0.5 * np.vdot(gradient, generators), rel=1e-12)


def test_conjugate_gradients_take_the_same_step_as_a_factor() -> None:
    arguments = point(molecule_hamiltonian("H4"), 11)
    design = arguments[0]
    direct, iterative = FactorisedSystem(*arguments), IterativeSystem(*arguments)
    residual = design.residual(arguments[1], arguments[2])
    expected, found = direct.step(residual, tolerance=1e-12), iterative.step(residual, tolerance=1e-6)
    for a, b in zip(expected, found, strict=True):
        np.testing.assert_allclose(b, a, atol=1e-4 * np.max(np.abs(a)))
    exact, near = (design.shifts.project(one.multipliers(*expected, start=None)) for one in (direct, iterative))
    np.testing.assert_allclose(near, exact, atol=1e-3 * np.max(np.abs(exact)))
    # The mean over generators of how much of each exactness takes is exact; the two differ by the scale's part.
    assert 0.0 < np.mean(iterative.turning_shares()) < 1.0


def test_least_variance_coefficients_are_those_of_the_normal_equations() -> None:
    design, rotations, _, scale, _ = point(molecule_hamiltonian("H4"), 11)
    blocks = np.hstack([design.operators(u, s) for u, s in zip(rotations, scale, strict=True)])
    expected = np.linalg.lstsq(blocks, design.target, rcond=1e-12)[0].reshape(11, -1)  # of least norm
    found, dual = least_variance(design, rotations, scale, tolerance=1e-12, iterations=1000)
    np.testing.assert_allclose(found, expected, atol=1e-8 * np.max(np.abs(expected)))
    np.testing.assert_allclose(blocks.T @ dual, found.ravel(), atol=1e-10)


@pytest.mark.usefixtures("many")
def test_restored_point_is_exact() -> None:
    hamiltonian = molecule_hamiltonian("H4")
    design, rotations, coefficients, _, _ = point(hamiltonian, 8)
    found = restore(design, Covariances(noisy(hamiltonian), design, 0.0), rotations, coefficients)
    assert found.infeasibility < 1e-11
    assert np.linalg.norm(design.residual(found.rotations, found.coefficients)) < 1e-10


@pytest.mark.parametrize("shifts", [True, False])
@pytest.mark.parametrize(("name", "count"), [("H4", 11), ("LiH", 20)])
def test_exact_coefficients_cost_as_little(name: str, count: int, shifts: bool, monkeypatch) -> None:
    """As Newton steps with factorised matrices find, and they are right in every state of the sector."""
    hamiltonian = molecule_hamiltonian(name)
    rotations = random_rotations(count, hamiltonian.orbitals, np.random.default_rng(3))
    state = noisy(hamiltonian)
    matrices = [state.moments(u)[1] for u in rotations]
    expected = exact_coefficients(hamiltonian, rotations, matrices, shifts=shifts)
    monkeypatch.setattr(factor_module, "LARGEST_FACTORISED", 0)
    found = exact_coefficients(hamiltonian, rotations, matrices, shifts=shifts)
    assert found.converged
    assert found.sector_exact == shifts
    assert expected.cost * (1 - 1e-6) < found.cost < 1.01 * expected.cost
    assert 0.97 * expected.cost < found.lower_bound < expected.cost * (1 + 1e-6)
    for seed in range(3):
        other = random_state(hamiltonian, seed)
        energy = found.constant + sum(
            float(other.moments(u)[0] @ c) for u, c in zip(rotations, found.coefficients, strict=True)
        )
        assert energy == pytest.approx(other.energy(hamiltonian), abs=1e-8)


@pytest.mark.usefixtures("many")
@pytest.mark.parametrize(("name", "shifts", "ratio"), [("LiH", True, 1.25), ("H4", False, 1.75)])
def test_plan_is_exact_and_nearly_as_cheap(name: str, shifts: bool, ratio: float) -> None:
    hamiltonian = molecule_hamiltonian(name)
    state = noisy(hamiltonian, 0.05)
    made = plan(hamiltonian, state, circuits=18 if name == "LiH" else 10, shifts=shifts, max_evaluations=800)
    assert made.residual_norm < 1e-9
    # With factorised matrices 1.17 and 1.69.
    assert plan_cost(made, state) < ratio * state.variance(hamiltonian)
    for seed in range(3):
        other = random_state(hamiltonian, seed)
        energy = made.constant + sum(float(other.moments(f.rotation)[0] @ f.coefficients) for f in made.fragments)
        assert energy == pytest.approx(other.energy(hamiltonian), abs=1e-8)
    if not shifts:
        tensors = fragment_tensors(made.fragments)
        np.testing.assert_allclose(tensors.one_body, hamiltonian.one_body, atol=1e-8)
        np.testing.assert_allclose(tensors.opposite_spin, hamiltonian.two_body, atol=1e-8)


@pytest.mark.usefixtures("many")
def test_singular_covariances_are_refused_with_the_remedy() -> None:
    hamiltonian = molecule_hamiltonian("H4")
    rotations = np.concatenate([np.eye(4)[None], random_rotations(10, 4, np.random.default_rng(0))])
    bare = reference_state(hamiltonian, "hf")
    with pytest.raises(InputError, match=r"`covariances` must be positive definite .* mix noise into the state"):
        exact_coefficients(hamiltonian, rotations, [bare.moments(u)[1] for u in rotations])


def test_thirteen_sites_from_a_determinant() -> None:
    """No CI vector, no matrix of rows: exact when it is stopped after a few evaluations, and says that it was."""
    hamiltonian = hubbard(13, hopping=1.0, repulsion=4.0, electrons=(6, 6), periodic=True)
    state = reference_state(hamiltonian, "hf")
    made = plan(hamiltonian, state, max_evaluations=20)
    assert made.residual_norm < 1e-9
    assert not made.converged
    assert "still falling" in made.message
    assert state.variance(hamiltonian) < plan_cost(made, state)
    with pytest.raises(InputError, match=r"`plan` must be of at most 12 orbitals \(got 13\).*quantum limit"):
        optimality_gap(made, hamiltonian, state)


def test_too_little_memory_is_said_before_the_work_begins() -> None:
    hamiltonian = hubbard(13, hopping=1.0, repulsion=4.0, electrons=(6, 6), periodic=True)
    state = reference_state(hamiltonian, "hf")
    for work in (
        lambda: plan(hamiltonian, state, memory=1e8),
        lambda: plan(hamiltonian, state, fragments=fragment(hamiltonian), memory=1e7),
        lambda: exact_coefficients(hamiltonian, np.stack([np.eye(13)] * 9), [np.eye(182)] * 9, memory=1e7),
    ):
        with pytest.raises(InputError, match=r"`memory` must be larger for \d+ circuits of 13 orbitals .*smaller"):
            work()
