"""Least-variance exact coefficients at fixed rotations."""

from functools import cache

import numpy as np
import pytest
from molecules import full_ci, molecule_hamiltonian

from fragkit.core import Fragment, Hamiltonian, InputError, fragment_tensors
from fragkit.fit import fragment
from fragkit.planning import exact_coefficients
from fragkit.planning._operators.shifts import sector_shifts
from fragkit.planning._operators.space import OperatorSpace
from fragkit.states import ReferenceState, reference_state


@cache
def low_rank_rotations(name: str) -> np.ndarray:
    """Rotations of the low-rank fragments, and the orbitals of the Hamiltonian."""
    hamiltonian = molecule_hamiltonian(name)
    return np.stack([f.rotation for f in fragment(hamiltonian)] + [np.eye(hamiltonian.orbitals)])


def random_rotations(count: int, n: int, seed: int = 0) -> np.ndarray:
    rng = np.random.default_rng(seed)
    return np.stack([np.linalg.qr(rng.normal(size=(n, n)))[0] for _ in range(count)])


def random_state(hamiltonian: Hamiltonian, seed: int) -> ReferenceState:
    from math import comb

    vector = np.random.default_rng(seed).normal(size=[comb(hamiltonian.orbitals, k) for k in hamiltonian.electrons])
    return ReferenceState.from_ci_vector(hamiltonian, vector / np.linalg.norm(vector))


def covariances(state: ReferenceState, rotations: np.ndarray) -> list[np.ndarray]:
    return [state.moments(u)[1] for u in rotations]


def bias(hamiltonian: Hamiltonian, state: ReferenceState, rotations: np.ndarray, weighting) -> float:
    values = [state.moments(u)[0] @ c for u, c in zip(rotations, weighting.coefficients, strict=True)]
    return weighting.constant + sum(values) - state.energy(hamiltonian)


@pytest.mark.parametrize(("method", "noise"), [("hf", 0.0), ("cisd", 0.0), ("cisd", 1e-3)])
@pytest.mark.parametrize("shifts", [True, False])
def test_cost_is_that_of_the_cone_programme_by_cvxpy(method: str, noise: float, shifts: bool) -> None:
    # Independent reference: the problem as it stands, modelled with cvxpy (least Σ ‖C^½ c‖ under equality).
    import cvxpy as cp

    hamiltonian = molecule_hamiltonian("H4")
    rotations = random_rotations(11, 4)
    matrices = covariances(reference_state(hamiltonian, method, noise=noise), rotations)
    space = OperatorSpace(4)
    columns = space.pair_columns(rotations)
    variables = [cp.Variable(20) for _ in rotations]
    left = sum(space.dense(c, u) @ x for c, u, x in zip(columns, rotations, variables, strict=True))
    wanted = space.hamiltonian_rows(hamiltonian)
    if shifts:
        basis = sector_shifts(space, hamiltonian.electrons).basis
        left = left + basis @ cp.Variable(basis.shape[1])
    roots = []
    for matrix in matrices:
        values, axes = np.linalg.eigh(matrix)
        roots.append((axes * np.sqrt(np.maximum(values, 0.0))).T)
    objective = cp.Minimize(sum(cp.norm(r @ x) for r, x in zip(roots, variables, strict=True)))
    problem = cp.Problem(objective, [left == wanted])
    problem.solve(solver=cp.CLARABEL)
    found = exact_coefficients(hamiltonian, rotations, matrices, shifts=shifts, tolerance=1e-8)
    assert found.converged, found.message
    assert found.cost == pytest.approx(problem.value**2, rel=1e-5)


@pytest.mark.parametrize(("name", "method", "noise"), [("H4", "cisd", 0.0), ("LiH", "cisd", 1e-3), ("LiH", "hf", 0.0)])
def test_newton_steps_and_cone_programme_agree(name: str, method: str, noise: float) -> None:
    hamiltonian = molecule_hamiltonian(name)
    rotations = low_rank_rotations(name)
    matrices = covariances(reference_state(hamiltonian, method, noise=noise), rotations)
    newton = exact_coefficients(hamiltonian, rotations, matrices)
    # The general solver's last digits depend on its version and on the degenerate orbitals of LiH.
    cone = exact_coefficients(hamiltonian, rotations, matrices, method="cone")
    assert newton.converged, newton.message
    assert cone.lower_bound > (1 - 1e-5) * cone.cost, cone.message
    assert newton.cost == pytest.approx(cone.cost, rel=1e-5)
    np.testing.assert_allclose(newton.shares, cone.shares, atol=2e-3)


@pytest.mark.parametrize("method", ["cisd", "hf"])
def test_bad_first_guess_leads_to_the_same_place(method: str) -> None:
    hamiltonian = molecule_hamiltonian("H4")
    rotations = low_rank_rotations("H4")
    matrices = covariances(reference_state(hamiltonian, method), rotations)
    best = exact_coefficients(hamiltonian, rotations, matrices)
    guess = np.random.default_rng(0).uniform(size=len(rotations)) ** 8
    found = exact_coefficients(hamiltonian, rotations, matrices, start=guess)
    assert found.converged, found.message
    assert found.cost == pytest.approx(best.cost, rel=2e-6)


@pytest.mark.parametrize("shifts", [True, False])
@pytest.mark.parametrize(("name", "count"), [("LiH", 17), ("H2O", 20), ("LiH", None), ("H2O", None)])
def test_energy_is_right_in_every_state_of_the_sector(name: str, count: int | None, shifts: bool) -> None:
    hamiltonian = molecule_hamiltonian(name)
    n = hamiltonian.orbitals
    rotations = low_rank_rotations(name) if count is None else random_rotations(count, n)
    matrices = covariances(reference_state(hamiltonian, "cisd", noise=1e-3), rotations)
    found = exact_coefficients(hamiltonian, rotations, matrices, shifts=shifts)
    assert found.converged, found.message
    assert found.relative_residual < 1e-11
    assert found.energy_bound < 1e-8
    exact = ReferenceState.from_ci_vector(hamiltonian, full_ci(name)[1])
    for state in (exact, *(random_state(hamiltonian, seed) for seed in range(3))):
        assert abs(bias(hamiltonian, state, rotations, found)) < 1e-8


def test_open_shells_have_fewer_shifts_and_stay_exact() -> None:
    closed = molecule_hamiltonian("H4")
    hamiltonian = Hamiltonian(closed.constant, closed.one_body, closed.two_body, electrons=(3, 1))
    rotations = random_rotations(10, 4)
    matrices = covariances(reference_state(hamiltonian, "fci", noise=1e-3), rotations)
    found = exact_coefficients(hamiltonian, rotations, matrices)
    assert found.converged, found.message
    for seed in range(4):
        assert abs(bias(hamiltonian, random_state(hamiltonian, seed), rotations, found)) < 1e-9


def test_without_shifts_the_fragments_are_the_hamiltonian_as_an_operator() -> None:
    hamiltonian = molecule_hamiltonian("H4")
    rotations = random_rotations(10, 4)
    matrices = covariances(reference_state(hamiltonian, "cisd", noise=1e-3), rotations)
    found = exact_coefficients(hamiltonian, rotations, matrices, shifts=False)
    tensors = fragment_tensors(
        [Fragment.from_coefficients(u, c) for u, c in zip(rotations, found.coefficients, strict=True)]
    )
    g = hamiltonian.two_body
    np.testing.assert_allclose(tensors.one_body, hamiltonian.one_body, atol=1e-10)
    np.testing.assert_allclose(tensors.opposite_spin, g, atol=1e-10)
    np.testing.assert_allclose(tensors.exchange_odd, g - g.transpose(0, 3, 2, 1), atol=1e-10)
    assert found.constant == hamiltonian.constant
    with_shifts = exact_coefficients(hamiltonian, rotations, matrices)
    assert not found.sector_exact
    assert with_shifts.sector_exact
    # Every shift that is diagonal in one of the bases has no variance there, so leaving shifts out costs nothing.
    assert found.cost == pytest.approx(with_shifts.cost, rel=1e-5)


def test_dual_certifies_the_cost() -> None:
    hamiltonian = molecule_hamiltonian("LiH")
    rotations = random_rotations(17, 6)
    matrices = covariances(reference_state(hamiltonian, "cisd", noise=1e-2), rotations)
    found = exact_coefficients(hamiltonian, rotations, matrices)
    space = OperatorSpace(6)
    assert space.hamiltonian_rows(hamiltonian) @ found.dual == pytest.approx(np.sqrt(found.cost), rel=1e-5)
    response = space.adjoint(space.pair_columns(rotations), rotations, found.dual)
    sizes = [r @ np.linalg.pinv(c, rcond=1e-11, hermitian=True) @ r for r, c in zip(response, matrices, strict=True)]
    assert np.max(sizes) <= 1.0 + 1e-5
    # Unused circuits aside, every constraint is active: the equivalence theorem.
    assert np.min(np.array(sizes)[found.shares > 1e-3]) > 1.0 - 1e-3
    assert found.lower_bound <= found.cost <= found.lower_bound * (1 + 1e-5)


def test_best_coefficients_are_never_worse_than_those_given() -> None:
    hamiltonian = molecule_hamiltonian("LiH")
    state = reference_state(hamiltonian, "fci")
    pieces = fragment(hamiltonian)
    rotations = np.stack([f.rotation for f in pieces])
    matrices = covariances(state, rotations)
    given = sum(np.sqrt(f.coefficients @ c @ f.coefficients) for f, c in zip(pieces, matrices, strict=True)) ** 2
    found = exact_coefficients(hamiltonian, rotations, matrices)
    assert found.cost < 0.1 * given  # 3.16 Ha² as given


def test_what_is_known_for_certain_needs_no_shots() -> None:
    # In the orbitals of a determinant nothing fluctuates, and a diagonal Hamiltonian is measured there.
    hamiltonian = Hamiltonian(0.3, np.diag([-1.0, 0.5, 2.0]), np.zeros((3,) * 4), electrons=(1, 1))
    state = reference_state(hamiltonian, "hf")
    rotations = np.stack([np.eye(3), *random_rotations(4, 3)])
    found = exact_coefficients(hamiltonian, rotations, covariances(state, rotations))
    assert found.converged
    assert found.cost < 1e-25
    assert abs(bias(hamiltonian, random_state(hamiltonian, 1), rotations, found)) < 1e-12


def test_too_few_circuits_say_so() -> None:
    hamiltonian = molecule_hamiltonian("LiH")
    rotations = random_rotations(5, 6)
    matrices = covariances(reference_state(hamiltonian, "cisd", noise=1e-3), rotations)
    found = exact_coefficients(hamiltonian, rotations, matrices)
    assert not found.converged
    assert "cannot reproduce the Hamiltonian" in found.message
    assert found.residual_norm > 1e-3
    error = bias(hamiltonian, random_state(hamiltonian, 1), rotations, found)
    assert abs(error) <= found.energy_bound


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"covariances": [np.eye(6)]}, "`covariances` must be 2, one for each rotation"),
        ({"covariances": [np.eye(5)] * 2}, r"`covariances\[0\]` must have shape \(6, 6\)"),
        ({"method": "guess"}, "`method` must be 'newton' or 'cone'"),
    ],
)
def test_impossible_arguments_are_named(change: dict, message: str) -> None:
    hamiltonian = molecule_hamiltonian("H2")
    arguments = {"rotations": random_rotations(2, 2), "covariances": [np.eye(6)] * 2} | change
    with pytest.raises(InputError, match=message):
        exact_coefficients(hamiltonian, **arguments)
