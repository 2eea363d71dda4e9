"""The verb `plan`, costs in other states, reweighted plans and the trade-off curve."""

from functools import cache
from math import comb
from typing import Any

import numpy as np
import pytest
from molecules import FULL_CI, full_ci, molecule_hamiltonian

from fragkit.core import Fragment, Fragmentation, Hamiltonian, InputError, MismatchError, TimeModel, fragment_tensors
from fragkit.estimate import AdaptiveRun
from fragkit.fit import LowRank, fragment
from fragkit.planning import CHEMICAL_ACCURACY, Plan, optimality_gap, plan, plan_cost, reweighted, trade_off
from fragkit.planning._robust import noise_of, robust_state
from fragkit.states import ReferenceState, reference_state

DEVICE = TimeModel(preparation_seconds=1e-4, layer_seconds=1e-5, readout_seconds=1e-5, switch_seconds=0.05)


@cache
def state_of(name: str, method: str = "cisd") -> ReferenceState:
    if method == "fci":
        return ReferenceState.from_ci_vector(molecule_hamiltonian(name), full_ci(name)[1])
    return reference_state(molecule_hamiltonian(name), method)


@cache
def optimised(name: str) -> Plan:
    return plan(molecule_hamiltonian(name), state_of(name))


@cache
def low_rank(name: str) -> Fragmentation:
    return fragment(molecule_hamiltonian(name), LowRank(tol=1e-8))


def random_state(hamiltonian: Hamiltonian, seed: int) -> ReferenceState:
    vector = np.random.default_rng(seed).normal(size=[comb(hamiltonian.orbitals, k) for k in hamiltonian.electrons])
    return ReferenceState.from_ci_vector(hamiltonian, vector / np.linalg.norm(vector))


def planned_energy(made: Plan, state: ReferenceState) -> float:
    return made.constant + sum(state.moments(f.rotation)[0] @ f.coefficients for f in made.fragments)


@pytest.mark.parametrize(
    ("name", "circuits", "cost"),
    # (Σ √Var)² in the full CI state of low-rank fragments, one circuit each and one for the one-body part: computed
    # with pyscf and numpy alone, outside of this package; number of fragments likewise.
    [
        ("H2", 4, 0.137),
        ("LiH", 22, 3.161),
        ("BeH2", 29, 1.864),
        ("H2O", 29, 58.5),
        ("NH3", 37, 58.1),
        ("N2", 54, 10.5),
        ("H4", None, 1.505),
        ("H6", None, 3.058),
    ],
)
def test_low_rank_costs(name: str, circuits: int | None, cost: float) -> None:
    made = plan(molecule_hamiltonian(name), state_of(name, "fci"), fragments=low_rank(name), reweight=False)
    assert made.cost == pytest.approx(cost, rel=0.01)
    assert circuits is None or len(made) == circuits
    assert made.predicted_error <= CHEMICAL_ACCURACY
    assert made.total_shots < 1.02 * made.cost / CHEMICAL_ACCURACY**2 + 11 * len(made)
    assert planned_energy(made, state_of(name, "fci")) == pytest.approx(FULL_CI[name], abs=1e-6)


@pytest.mark.parametrize("name", ["H4", "LiH"])
def test_default_plan_is_exact_and_far_below_low_rank(name: str) -> None:
    hamiltonian, made = molecule_hamiltonian(name), optimised(name)
    assert made.converged, made.message
    assert made.sector_exact
    n = hamiltonian.orbitals
    assert len(made) <= -(-(n + 1) * (n + 2) // 4) + 2
    for state in (state_of(name, "fci"), random_state(hamiltonian, 0), random_state(hamiltonian, 1)):
        assert abs(planned_energy(made, state) - state.energy(hamiltonian)) < 1e-8
    assert made.residual_norm < 1e-9
    assert made.energy_bound < 1e-8
    given = plan(hamiltonian, state_of(name), fragments=low_rank(name), reweight=False)
    assert plan_cost(made, state_of(name, "fci")) < 0.03 * plan_cost(given, state_of(name, "fci"))


def test_figures_on_the_exact_state() -> None:
    # Best published kinds of measurement for LiH on the full CI state, computed outside of this package: overlapping
    # Pauli groups 0.231, low rank with its one-body part divided among the fragments 0.128 Ha².
    made = optimised("LiH")
    assert len(made) <= 18
    assert plan_cost(made, state_of("LiH", "fci")) < 0.004
    assert made.diagnostics["Hartree-Fock"] < 0.128


def test_quantum_limit_is_below_every_cost() -> None:
    for name in ("H4", "LiH"):
        hamiltonian, made = molecule_hamiltonian(name), optimised(name)
        assert made.bound is not None
        assert made.bound.quantum_limit == pytest.approx(state_of(name).variance(hamiltonian), rel=1e-9)
        for noise in (0.0, 0.01, 0.05):
            noisy = state_of(name).with_noise(noise)
            assert plan_cost(made, noisy) >= noisy.variance(hamiltonian) * (1 - 1e-9)


def test_plan_for_a_noisy_state_is_near_the_quantum_limit() -> None:
    hamiltonian = molecule_hamiltonian("LiH")
    noisy = state_of("LiH").with_noise(0.01)
    made = plan(hamiltonian, noisy, circuits=18)
    true = state_of("LiH", "fci").with_noise(0.01)
    assert plan_cost(made, true) < 1.10 * true.variance(hamiltonian)


def test_simulated_shots_have_the_predicted_mean_and_spread() -> None:
    hamiltonian, state = molecule_hamiltonian("H4"), state_of("H4", "fci")
    made = plan(hamiltonian, state, total_shots=4000)
    rng = np.random.default_rng(11)
    energies = np.zeros(300)
    for fragment_, shots in zip(made.fragments, made.shots, strict=True):
        values = fragment_.values(state.sample(fragment_.rotation, 300 * int(shots), rng))
        energies += values.reshape(300, -1).mean(axis=1)
    energies += made.constant
    assert abs(np.mean(energies) - FULL_CI["H4"]) < 4 * made.predicted_error / np.sqrt(300)
    # The standard deviation of 300 draws is known to 4 %.
    assert np.std(energies) == pytest.approx(made.predicted_error, rel=0.15)


def test_diagnostics_are_costs_at_the_plans_own_shares() -> None:
    made = optimised("H4")
    assert set(made.diagnostics) == {
        "reference",
        "Hartree-Fock",
        "reference with 1 % noise",
        "reference with 5 % noise",
    }
    assert made.diagnostics["reference"] == pytest.approx(plan_cost(made, state_of("H4")))
    assert made.diagnostics["reference"] == pytest.approx(made.predicted_error**2 * made.total_shots)
    assert made.diagnostics["Hartree-Fock"] == pytest.approx(plan_cost(made, state_of("H4", "hf")))
    assert made.diagnostics["reference with 5 % noise"] == pytest.approx(
        plan_cost(made, state_of("H4").with_noise(0.05))
    )


def test_determinant_reference_is_usable_by_default() -> None:
    hamiltonian = molecule_hamiltonian("LiH")
    rotations = low_rank("LiH")
    from_determinant = plan(hamiltonian, state_of("LiH", "hf"), fragments=rotations)
    from_exact = plan(hamiltonian, state_of("LiH", "fci"), fragments=rotations)
    exact = state_of("LiH", "fci")
    assert plan_cost(from_determinant, exact) < 3.0 * plan_cost(from_exact, exact)
    with pytest.raises(InputError, match="`planning_noise` must be above 0 for a single determinant"):
        plan(hamiltonian, state_of("LiH", "hf"), planning_noise=0.0)


def test_planning_noise_counts_the_noise_that_is_there() -> None:
    state = state_of("H4")
    assert noise_of(state) == 0.0
    assert noise_of(robust_state(state, 1e-3)) == pytest.approx(1e-3)
    assert noise_of(robust_state(state)) == pytest.approx(1e-3)
    assert noise_of(robust_state(state_of("H4", "hf"))) == pytest.approx(2e-2)
    assert noise_of(robust_state(state_of("H4", "hf").with_noise(1e-3))) == pytest.approx(2e-2)
    assert noise_of(robust_state(state.with_noise(0.01), 1e-3)) == pytest.approx(0.01)
    assert noise_of(robust_state(state.with_noise(0.01), 0.05)) == pytest.approx(0.05)


def test_exact_as_an_operator_without_shifts() -> None:
    hamiltonian = molecule_hamiltonian("H4")
    made = plan(hamiltonian, state_of("H4"), circuits=9, shifts=False, max_evaluations=300)
    assert not made.sector_exact
    tensors = fragment_tensors(made.fragments)
    np.testing.assert_allclose(tensors.one_body, hamiltonian.one_body, atol=1e-9)
    np.testing.assert_allclose(tensors.opposite_spin, hamiltonian.two_body, atol=1e-9)
    assert made.constant == hamiltonian.constant
    assert made.diagnostics["reference"] >= 0.99 * made.diagnostics["reference, with symmetry shifts"]


@pytest.mark.parametrize(("name", "fewest"), [("H2", 2), ("H4", 4), ("LiH", 8)])
def test_fewest_circuits_stay_exact(name: str, fewest: int) -> None:
    # P(P+1)/(2n²) fragments, P = n(n+1)/2, is what counting unknowns gives: 2, 4 and 7.
    hamiltonian = molecule_hamiltonian(name)
    made = plan(hamiltonian, state_of(name), circuits="minimal")
    assert made.converged, made.message
    assert len(made) <= fewest
    state = random_state(hamiltonian, 4)
    assert abs(planned_energy(made, state) - state.energy(hamiltonian)) < 1e-8


def test_fewer_circuits_than_generic_rotations_allow_stay_exact_and_cheap() -> None:
    hamiltonian = molecule_hamiltonian("LiH")
    made = plan(hamiltonian, state_of("LiH"), circuits=10, max_evaluations=400)
    assert len(made) == 10
    state = random_state(hamiltonian, 4)
    assert abs(planned_energy(made, state) - state.energy(hamiltonian)) < 1e-8
    assert plan_cost(made, state_of("LiH", "fci")) < 0.05
    with pytest.raises(InputError, match="`circuits` must be larger for 6 orbitals"):
        plan(hamiltonian, state_of("LiH"), circuits=4)


def test_automatic_number_weighs_circuits_against_shots() -> None:
    hamiltonian, state = molecule_hamiltonian("H4"), state_of("H4")
    options = {"circuits": "auto", "max_evaluations": 300, "tolerance": 0.05}
    dear = plan(hamiltonian, state, circuit_overhead=1e6, **options)
    cheap = plan(hamiltonian, state, circuit_overhead=0.0, maximum_circuits=12, **options)
    assert len(dear) <= 8 < len(cheap) <= 12  # 8: the fewest that generic rotations allow, (n+1)(n+2)/4 rounded up
    assert cheap.cost < dear.cost
    assert dear.residual_norm < 1e-9


def test_budgets() -> None:
    hamiltonian, state = molecule_hamiltonian("H4"), state_of("H4")
    options = {"fragments": low_rank("H4")}
    by_error = plan(hamiltonian, state, target_error=5e-3, **options)
    assert by_error.predicted_error <= 5e-3
    assert by_error.target_error == 5e-3
    by_shots = plan(hamiltonian, state, total_shots=12345, minimum_shots=50, **options)
    assert by_shots.total_shots == 12345
    assert np.min(by_shots.shots) >= 50
    by_time = plan(hamiltonian, state, seconds=20.0, time_model=DEVICE, **options)
    layers = [len(f.rotation) for f in by_time.fragments]  # never more than n layers
    assert sum(DEVICE.shot_seconds(k) * s for k, s in zip(layers, by_time.shots, strict=True)) < 25.0
    assert (
        by_time.predicted_error < plan(hamiltonian, state, seconds=10.0, time_model=DEVICE, **options).predicted_error
    )


def test_same_seed_same_plan() -> None:
    hamiltonian, state = molecule_hamiltonian("H2"), state_of("H2")
    first, second = (plan(hamiltonian, state, rng=5) for _ in range(2))
    assert first.digest == second.digest


def test_interrupt_returns_the_best_exact_plan_so_far(monkeypatch: pytest.MonkeyPatch) -> None:
    from fragkit.planning._rotations.run import Run

    original, calls = Run.cycle, []

    def interrupted(self, *arguments):
        calls.append(1)
        if len(calls) > 2:
            raise KeyboardInterrupt
        return original(self, *arguments)

    monkeypatch.setattr(Run, "cycle", interrupted)
    hamiltonian = molecule_hamiltonian("H4")
    made = plan(hamiltonian, state_of("H4"))
    assert not made.converged
    assert "nterrupted" in made.message
    state = random_state(hamiltonian, 2)
    assert abs(planned_energy(made, state) - state.energy(hamiltonian)) < 1e-8


def test_checkpoint_goes_on_where_it_stopped(tmp_path) -> None:
    hamiltonian, state = molecule_hamiltonian("H4"), state_of("H4")
    path = tmp_path / "rotations.npz"
    first = plan(hamiltonian, state, max_evaluations=150, checkpoint=path)
    second = plan(hamiltonian, state, max_evaluations=400, checkpoint=path, resume=True)
    assert second.cost < first.cost * 1.001
    with pytest.raises(InputError, match="`checkpoint` must not exist yet"):
        plan(hamiltonian, state, checkpoint=path)


@pytest.mark.parametrize(
    ("options", "error", "message"),
    [
        ({"circuits": "few"}, InputError, "`circuits` must be a whole number, 'auto', 'minimal' or None"),
        ({"circuits": 0}, InputError, "`circuits` must be at least 1"),
        ({"circuits": 5, "reweight": False}, InputError, "`circuits` must be left out when `reweight` is False"),
        ({"planning_noise": 2.0}, InputError, "`planning_noise` must be a number from 0 to 1"),
        (
            {"circuits": "auto", "circuit_overhead": -1.0},
            InputError,
            "`circuit_overhead` must be a number of at least 0",
        ),
        ({"fragments": 3}, InputError, "`fragments` must be a Fragmentation"),
        ({"fragments": "other"}, MismatchError, "`fragments` must be fitted to the Hamiltonian"),
        ({"total_shots": 3, "circuits": 8, "max_evaluations": 10}, InputError, "`total_shots` must be at least"),
    ],
)
def test_impossible_options_are_named(options: dict, error: type, message: str) -> None:
    if options.get("fragments") == "other":
        options = options | {"fragments": low_rank("H2")}
    with pytest.raises(error, match=message):
        plan(molecule_hamiltonian("H4"), state_of("H4"), **options)


def test_rotations_that_cannot_reproduce_the_hamiltonian_say_so() -> None:
    hamiltonian = molecule_hamiltonian("LiH")
    made = plan(hamiltonian, state_of("LiH"), fragments=fragment(hamiltonian, LowRank(count=6)))
    assert not made.converged
    assert "cannot reproduce the Hamiltonian" in made.message
    assert made.residual_norm > 1e-3
    state = random_state(hamiltonian, 0)
    assert abs(planned_energy(made, state) - state.energy(hamiltonian)) <= made.energy_bound


def test_low_rank_rotations_are_in_the_orientation_that_serves_other_coefficients() -> None:
    # The same fragments with orbitals of equal eigenvalue turned at random: the same operators, a dearer plan.
    hamiltonian, state, rng = molecule_hamiltonian("H2O"), state_of("H2O"), np.random.default_rng(0)
    turned = []
    for one in low_rank("H2O")[:-1]:
        rotation = one.rotation.copy()
        zero = np.flatnonzero(np.diag(one.opposite_spin) < 1e-14)
        rotation[:, zero] = rotation[:, zero] @ np.linalg.qr(rng.normal(size=(len(zero),) * 2))[0]
        turned.append(Fragment.plain(rotation, one.opposite_spin))
    other = Fragmentation.of(hamiltonian, [*turned, low_rank("H2O")[-1]])
    assert other.residual_norm < 1e-7
    ours = plan(hamiltonian, state, fragments=low_rank("H2O"))
    assert ours.cost < 0.6 * plan(hamiltonian, state, fragments=other).cost


def test_fragments_can_start_the_optimisation() -> None:
    hamiltonian, state = molecule_hamiltonian("H4"), state_of("H4")
    made = plan(hamiltonian, state, fragments=low_rank("H4"), circuits=9, max_evaluations=200)
    assert len(made) <= 9
    assert made.residual_norm < 1e-9
    assert made.cost < plan(hamiltonian, state, fragments=low_rank("H4")).cost


def test_what_is_no_hamiltonian_or_no_plan_is_named() -> None:
    hamiltonian, state = molecule_hamiltonian("H2"), state_of("H2")
    made = plan(hamiltonian, state, fragments=low_rank("H2"))
    wrong: Any = "H2"
    for call in (
        lambda: plan(wrong, state),
        lambda: trade_off(wrong, state),
        lambda: reweighted(made, wrong, state),
        lambda: AdaptiveRun.start(made, wrong, total_shots=1000),
    ):
        with pytest.raises(InputError, match=r"`hamiltonian` must be a Hamiltonian \(got str\)"):
            call()
    for call in (
        lambda: plan_cost(wrong, state),
        lambda: reweighted(wrong, hamiltonian, state),
        lambda: optimality_gap(wrong, hamiltonian, state),
        lambda: AdaptiveRun.start(wrong, hamiltonian, total_shots=1000),
    ):
        with pytest.raises(InputError, match=r"`plan` must be a Plan \(got str\)"):
            call()


def test_states_of_other_sectors_are_refused() -> None:
    with pytest.raises(MismatchError, match="`state` must have 4 orbitals"):
        plan(molecule_hamiltonian("H4"), state_of("H2"))
    with pytest.raises(InputError, match="`state` must be a ReferenceState"):
        plan(molecule_hamiltonian("H4"), "fci")  # pyright: ignore[reportArgumentType]
    with pytest.raises(MismatchError, match="`state` must have 4 orbitals"):
        plan_cost(optimised("H4"), state_of("LiH"))


def test_reweighting_for_a_better_reference_keeps_the_circuits() -> None:
    hamiltonian, exact = molecule_hamiltonian("LiH"), state_of("LiH", "fci")
    first = plan(hamiltonian, state_of("LiH", "hf"), max_evaluations=600)
    better = reweighted(first, hamiltonian, exact)
    assert len(better) == len(first)
    for old, new in zip(first.fragments, better.fragments, strict=True):
        np.testing.assert_array_equal(old.rotation, new.rotation)
    assert plan_cost(better, exact) < plan_cost(first, exact)
    assert better.target_error == first.target_error
    state = random_state(hamiltonian, 0)
    assert abs(planned_energy(better, state) - state.energy(hamiltonian)) < 1e-8
    # The same covariances given as arrays give the same coefficients.
    noisy = exact.with_noise(1e-3)
    covariances = np.stack([noisy.moments(f.rotation)[1] for f in first.fragments])
    by_arrays = reweighted(first, hamiltonian, covariances, total_shots=5000)
    assert by_arrays.total_shots == 5000
    assert plan_cost(by_arrays, noisy) == pytest.approx(plan_cost(better, noisy), rel=0.05)
    with pytest.raises(MismatchError, match="`hamiltonian` must be the one that was planned for"):
        reweighted(first, molecule_hamiltonian("H4"), state_of("H4"))


def test_trade_off_falls_and_levels_off() -> None:
    curve = trade_off(
        molecule_hamiltonian("H4"), state_of("H4"), [8, 10, 14], time_model=DEVICE, max_evaluations=300, tolerance=0.05
    )
    assert curve.circuits.tolist() == [8, 10, 14]
    assert np.all(np.diff(curve.cost) < 0)
    assert curve.seconds is not None
    assert len(curve.best()) in (8, 10, 14)
    lines = curve.table().splitlines()
    assert len(lines) == 5  # titles, a rule, and one line for each number of circuits
    assert "circuits" in lines[0]
    assert all(made.residual_norm < 1e-9 for made in curve.plans)


def test_trade_off_plot_draws_on_the_given_axes() -> None:
    import matplotlib as mpl

    mpl.use("Agg")
    import matplotlib.pyplot as plt

    curve = trade_off(molecule_hamiltonian("H2"), state_of("H2"), [3, 4], max_evaluations=60)
    axes = plt.subplots()[1]
    assert curve.plot(axes, label="H2") is axes
    assert axes.get_xlabel() == "circuits"
    plt.close("all")
