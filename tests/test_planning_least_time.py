"""Coefficients and shots for the least time on a device whose circuits take different times."""

from dataclasses import replace
from functools import cache
from itertools import combinations

import numpy as np
import pytest
from molecules import full_ci, molecule_hamiltonian

from fragkit.circuits import circuit_costs
from fragkit.core import Fragment, Fragmentation, TimeModel, evaluate_features
from fragkit.fit import LowRank, fragment
from fragkit.planning import CHEMICAL_ACCURACY, Plan, plan, reweighted, trade_off
from fragkit.planning._budget import Budget
from fragkit.planning._rotations.start import random_rotations
from fragkit.states import ReferenceState

# Invented: layers that are slow against preparation, readout and reset.
SLOW_LAYERS = TimeModel(preparation_seconds=2e-3, layer_seconds=5e-4, readout_seconds=3e-4, reset_seconds=1e-3)
SAME_TIMES = TimeModel(preparation_seconds=2e-3, layer_seconds=0.0, readout_seconds=3e-4)
NOISE = 1e-2


@cache
def state_of(name: str) -> ReferenceState:
    """Full CI with noise, so much that planning and shares use the same state."""
    return ReferenceState.from_ci_vector(molecule_hamiltonian(name), full_ci(name)[1]).with_noise(NOISE)


@cache
def with_own_orbitals(name: str) -> Fragmentation:
    """Low-rank fragments, and a circuit without gates: the Hamiltonian's own orbitals."""
    hamiltonian = molecule_hamiltonian(name)
    found = fragment(hamiltonian, LowRank(tol=1e-8))
    own = Fragment.one_body(np.eye(hamiltonian.orbitals), np.zeros(hamiltonian.orbitals))
    return Fragmentation.of(hamiltonian, [*found, own], converged=True, message="", method="low rank, own orbitals")


@cache
def planned(name: str, model: TimeModel | None) -> Plan:
    return plan(molecule_hamiltonian(name), state_of(name), fragments=with_own_orbitals(name), time_model=model)


def shot_seconds(made: Plan) -> np.ndarray:
    """(K,) seconds of a shot, from the compiled circuits."""
    found = circuit_costs(made.circuits(), time_model=SLOW_LAYERS).shot_seconds
    assert found is not None
    return found


def least_time(made: Plan) -> float:
    """Least seconds × error² of a plan's coefficients, Ha² s (Cochran, Sampling Techniques, 3rd ed., section 5.5)."""
    return float(made.deviations @ np.sqrt(shot_seconds(made))) ** 2


def test_least_time_is_that_of_the_cone_programme_by_cvxpy() -> None:
    # Independent reference: dense matrices in the sector of H4 (Hamiltonian by pyscf, rotations by minors), and the
    # problem as it stands, least Σ √t ‖C^½ c‖ with the operators summing to H, modelled with cvxpy.
    import cvxpy as cp
    from pyscf.fci.direct_spin1 import absorb_h1e, contract_2e

    hamiltonian, made = molecule_hamiltonian("H4"), planned("H4", SLOW_LAYERS)
    strings = sorted(combinations(range(4), 2), key=lambda s: sum(1 << k for k in s))
    bits = np.array([[k in s for k in range(4)] for s in strings], dtype=np.uint8)
    occupations = np.array([[*a, *b] for a in bits for b in bits], dtype=np.uint8)
    features = evaluate_features(occupations)
    vector = full_ci("H4")[1].ravel()
    two_body = 0.5 * absorb_h1e(hamiltonian.one_body, hamiltonian.two_body, 4, (2, 2))
    columns = [contract_2e(two_body, e.reshape(6, 6), 4, (2, 2)).ravel() for e in np.eye(36)]
    upper = np.triu_indices(36)
    wanted = np.array(columns)[upper]
    seconds = shot_seconds(made)
    operators, variables, spent = [np.eye(36)[upper][:, None]], [cp.Variable(1)], []
    for piece, t in zip(made.fragments, seconds, strict=True):
        minors = np.array([[np.linalg.det(piece.rotation[np.ix_(old, new)]) for new in strings] for old in strings])
        turn = np.kron(minors, minors)  # columns: determinants of the new orbitals
        chances = (1 - NOISE) * (turn.T @ vector) ** 2 + NOISE / 36
        centred = np.sqrt(chances)[:, None] * (features - chances @ features)
        operators.append(np.einsum("id,df,jd->ijf", turn, features, turn)[upper])
        variables.append(cp.Variable(20))
        spent.append(np.sqrt(t) * cp.norm(np.linalg.qr(centred)[1] @ variables[-1]))
    everything = np.concatenate(operators, axis=1)
    # The solver wants equations without repetitions: those along the left singular vectors.
    axes, sizes, _ = np.linalg.svd(everything, full_matrices=False)
    axes = axes[:, sizes > 1e-9 * sizes[0]]
    assert np.linalg.norm(wanted - axes @ (axes.T @ wanted)) < 1e-8
    problem = cp.Problem(cp.Minimize(sum(spent)), [(axes.T @ everything) @ cp.hstack(variables) == axes.T @ wanted])
    problem.solve(solver=cp.CLARABEL)
    assert problem.status == "optimal"
    assert least_time(made) == pytest.approx(sum(float(term.value) for term in spent) ** 2, rel=2e-5)
    assert least_time(planned("H4", None)) > 1.002 * least_time(made)


@pytest.mark.parametrize("name", ["H4", "LiH"])
def test_less_time_than_the_coefficients_of_the_fewest_shots_at_the_same_error(name: str) -> None:
    hamiltonian, state = molecule_hamiltonian(name), state_of(name)
    fewest, least = planned(name, None), planned(name, SLOW_LAYERS)
    assert least.converged
    assert "least time" in least.method
    assert "fewest shots" in fewest.method
    assert least.residual_norm < 1e-9
    assert least.predicted_error <= CHEMICAL_ACCURACY
    # The times differ, and those that decide are those of the compiled circuits.
    seconds = shot_seconds(least)
    assert np.min(seconds) == SLOW_LAYERS.shot_seconds(0) < np.max(seconds)
    budget = Budget(time_model=SLOW_LAYERS)
    np.testing.assert_allclose(budget.prices([f.rotation for f in least.fragments]), seconds, rtol=1e-12)
    # The old coefficients with shots for the least time, which is the best that can be done with them.
    shots = budget.shots(fewest.deviations, fewest.deviations, [f.rotation for f in fewest.fragments])
    assert least.shots @ seconds < shots @ shot_seconds(fewest)
    assert least.total_shots > fewest.total_shots
    other = ReferenceState.from_ci_vector(hamiltonian, _random_vector(full_ci(name)[1].shape))
    means = sum(other.moments(f.rotation)[0] @ f.coefficients for f in least.fragments)
    assert least.constant + means == pytest.approx(other.energy(hamiltonian), abs=1e-9)
    by_time = plan(
        hamiltonian,
        state,
        fragments=with_own_orbitals(name),
        seconds=float(least.shots @ seconds),
        time_model=SLOW_LAYERS,
    )
    assert by_time.digest == least.digest
    assert by_time.predicted_error == pytest.approx(least.predicted_error, rel=1e-3)


def _random_vector(shape: tuple[int, ...]) -> np.ndarray:
    vector = np.random.default_rng(3).normal(size=shape)
    return vector / np.linalg.norm(vector)


def test_same_coefficients_when_all_circuits_take_the_same_time_or_shots_are_counted() -> None:
    hamiltonian, state, pieces = molecule_hamiltonian("H4"), state_of("H4"), with_own_orbitals("H4")
    assert planned("H4", SAME_TIMES).digest == planned("H4", None).digest
    assert np.array_equal(planned("H4", SAME_TIMES).shots, planned("H4", None).shots)
    counted = [
        plan(hamiltonian, state, fragments=pieces, total_shots=10**5, time_model=model) for model in (None, SLOW_LAYERS)
    ]
    assert counted[0].digest == counted[1].digest
    assert np.array_equal(counted[0].shots, counted[1].shots)
    # Generic rotations all take n layers.
    optimised = [
        plan(hamiltonian, state, circuits=9, max_evaluations=300, tolerance=0.05, time_model=model)
        for model in (None, SLOW_LAYERS)
    ]
    assert optimised[0].digest == optimised[1].digest
    curves = [
        trade_off(hamiltonian, state, [9], max_evaluations=300, tolerance=0.05, time_model=model)
        for model in (None, SLOW_LAYERS)
    ]
    assert curves[0].plans[0].digest == curves[1].plans[0].digest


def test_a_shot_counts_by_its_seconds_only_where_time_is_spent() -> None:
    rotations = [np.eye(5), random_rotations(1, 5, np.random.default_rng(1))[0], np.eye(5)[:, ::-1]]
    short = SLOW_LAYERS.shot_seconds(0) / SLOW_LAYERS.shot_seconds(5)
    by_time = Budget(time_model=SLOW_LAYERS)
    assert by_time.shot_weights(rotations).tolist() == [short, 1.0, short]
    assert by_time.shot_weights(rotations, reorder=False).tolist() == [short, 1.0, 1.0]
    assert Budget(total_shots=9, time_model=SLOW_LAYERS).shot_weights(rotations).tolist() == [1.0, 1.0, 1.0]
    assert Budget().shot_weights(rotations).tolist() == [1.0, 1.0, 1.0]


def test_reweighting_for_time_is_planning_for_time() -> None:
    hamiltonian, state = molecule_hamiltonian("H4"), state_of("H4")
    wanted = planned("H4", SLOW_LAYERS)
    first = reweighted(wanted, hamiltonian, state)
    assert least_time(first) > 1.002 * least_time(wanted)
    by_state = reweighted(first, hamiltonian, state, time_model=SLOW_LAYERS)
    covariances = np.stack([state.moments(f.rotation)[1] for f in first.fragments])
    by_arrays = reweighted(first, hamiltonian, covariances, time_model=SLOW_LAYERS)
    for made in (by_state, by_arrays):
        assert made.residual_norm < 1e-9
        assert made.predicted_error <= CHEMICAL_ACCURACY
        assert least_time(made) == pytest.approx(least_time(wanted), rel=1e-5)
        assert made.total_shots == pytest.approx(wanted.total_shots, rel=1e-3)


def test_slow_changes_of_circuit_make_plans_of_few_circuits() -> None:
    hamiltonian, state = molecule_hamiltonian("H4"), state_of("H4")
    slow, quick = (replace(SLOW_LAYERS, switch_seconds=seconds) for seconds in (1e5, 0.0))
    options = {"circuits": "auto", "maximum_circuits": 10, "max_evaluations": 300, "tolerance": 0.05}
    few = plan(hamiltonian, state, time_model=slow, **options)
    many = plan(hamiltonian, state, time_model=quick, **options)
    assert len(few) <= 8 < len(many) <= 10  # 8: the fewest that generic rotations allow
    assert few.residual_norm < 1e-9
