"""Energy, error bar, post-selection and the errors that stop a wrong number."""

import numpy as np
import pytest
from molecules import FULL_CI, full_ci
from plans import full_ci_state, low_rank_plan

from fragkit.core import Fragment, InputError
from fragkit.estimate import Counts, Estimate, estimate, simulate
from fragkit.estimate._combine import Part, combine
from fragkit.estimate._missing import value_range
from fragkit.estimate._rare import missed_variance
from fragkit.estimate._statistics import PLAN_WEIGHT, Sample, error_bar
from fragkit.planning import Plan


def reread(plan: Plan, counts: Counts, **orders: str) -> Counts:
    """The same data as if read with other orders than they were written with."""
    return Counts.from_strings(plan, {m: counts.strings(m) for m in range(len(plan))}, **orders)  # type: ignore[arg-type]


def without(counts: Counts, circuit: int) -> Counts:
    found = {m: (counts.bits[m], counts.numbers[m]) for m in range(len(counts)) if m != circuit}
    bits, numbers = zip(
        *(found.get(m, (np.zeros_like(counts.bits[m][:0]), counts.numbers[m][:0])) for m in range(len(counts))),
        strict=True,
    )
    return Counts(bits, numbers, counts.plan_digest, counts.batches)


def flipped(plan: Plan, name: str, flips: tuple[float, float], rng: int, shots: int | None = None) -> Counts:
    return simulate(plan, full_ci_state(name), flips=flips, shots=shots, rng=rng)


def test_water_with_100000_shots_is_within_4_standard_errors() -> None:
    plan = low_rank_plan("H2O")
    result = plan.estimate(simulate(plan, full_ci_state("H2O"), rng=7))
    assert abs(result.energy - FULL_CI["H2O"]) < 4 * result.standard_error
    assert result.standard_error == pytest.approx(plan.predicted_error, rel=0.03)
    assert result.agrees, result.message
    assert result.discarded == 0.0
    assert result.without_post_selection is None
    low, high = result.interval
    assert low < result.energy < high
    assert high - low == pytest.approx(2 * 1.96 * result.standard_error, rel=0.01)


def test_spread_of_300_repetitions_matches_the_predicted_error() -> None:
    """Relative error of a deviation from 300 values is 4 %; 10 % is 2.5 of these."""
    plan = low_rank_plan("H2O", 20_000)
    rng = np.random.default_rng(11)
    energies = [estimate(plan, simulate(plan, full_ci_state("H2O"), rng=rng)).energy for _ in range(300)]
    assert np.std(energies, ddof=1) == pytest.approx(plan.predicted_error, rel=0.1)
    assert abs(np.mean(energies) - full_ci("H2O")[0]) < 3 * plan.predicted_error / np.sqrt(300)


def test_estimate_is_the_plain_weighted_mean() -> None:
    """By hand: values 1·n_0 + 2·n_1 for 3, 1 and 6 shots, and s²/N of these ten numbers by numpy."""
    plan = Plan((Fragment.one_body(np.eye(2), [1.0, 2.0]),), 5.0, [10], [0.8], (1, 1), "made up", 0.0, 0.0)
    counts = Counts.from_strings(
        plan, {0: {"1010": 3, "0101": 1, "1001": 6}}, bit_order="first-qubit-left", spin_order="blocked"
    )
    values = np.array([2.0] * 3 + [4.0] + [3.0] * 6)
    result = estimate(plan, counts, least_kept=0.1)
    assert result.energy == pytest.approx(5.0 + values.mean(), abs=1e-12)
    assert result.deviations[0] == pytest.approx(values.std(ddof=1), abs=1e-12)
    assert result.standard_error >= values.std(ddof=1) / np.sqrt(10)


def test_post_selection_discards_and_says_so() -> None:
    plan = low_rank_plan("H2O", 20_000)
    counts = flipped(plan, "H2O", (0.01, 0.01), 3)
    every = estimate(plan, counts)
    selected = estimate(plan, counts, post_select=True)
    # 14 qubits: even numbers of flips that cancel are rare, so about 1 − 0.99^14 = 13 % of shots are impossible.
    assert selected.discarded == pytest.approx(0.13, abs=0.01)
    assert every.discarded == selected.discarded
    assert not every.post_selected
    assert selected.post_selected
    assert selected.total_shots == round((1 - selected.discarded) * counts.total_shots)
    assert selected.without_post_selection == (every.energy, every.standard_error)
    assert np.average(selected.discarded_by_circuit, weights=counts.shots) == pytest.approx(selected.discarded)
    assert not every.agrees
    assert "noisier than the reference" in every.message
    assert "Ha" in selected.table()


def test_post_selection_is_the_default_for_plans_exact_in_the_sector_only() -> None:
    plain = low_rank_plan("H2", 1000)
    fields = {name: getattr(plain, name) for name in ("fragments", "constant", "shots", "deviations", "electrons")}
    plan = Plan(**fields, hamiltonian_digest="made up", residual_norm=0.0, energy_bound=0.0, sector_exact=True)
    counts = flipped(plan, "H2", (0.02, 0.02), 3)
    assert estimate(plan, counts).post_selected
    assert not estimate(plan, counts, post_select=False).post_selected


@pytest.mark.parametrize("name", ["H2O", "H6"])
def test_reversed_bits_are_an_error_although_electron_numbers_are_right(name: str) -> None:
    plan = low_rank_plan(name, 5000)
    counts = simulate(plan, full_ci_state(name), rng=1)
    with pytest.raises(InputError, match="in reverse bit order"):
        estimate(plan, reread(plan, counts, bit_order="first-qubit-right", spin_order="blocked"))


@pytest.mark.parametrize("name", ["H2", "H2O", "H6", "LiH"])
@pytest.mark.parametrize("bit_order", ["first-qubit-left", "first-qubit-right"])
def test_wrong_spin_order_is_an_error(name: str, bit_order: str) -> None:
    plan = low_rank_plan(name, 5000)
    counts = simulate(plan, full_ci_state(name), rng=1)
    with pytest.raises(InputError, match="bit order or spin order is probably wrong"):
        estimate(plan, reread(plan, counts, bit_order=bit_order, spin_order="interleaved"))


def test_impossible_shots_without_a_better_reading_point_to_the_state() -> None:
    plan = low_rank_plan("H2", 1000)
    rng = np.random.default_rng(1)
    counts = Counts.from_arrays(plan, {m: rng.integers(0, 2, (100, 4)) for m in range(len(plan))}, spin_order="blocked")
    with pytest.raises(InputError, match="state preparation"):
        estimate(plan, counts)


def test_missing_circuit_is_named_with_its_effect() -> None:
    plan = low_rank_plan("H2", 1000)
    counts = simulate(plan, full_ci_state("H2"), rng=1)
    low, high = value_range(plan.fragments[2], plan.electrons)
    with pytest.raises(InputError, match=r"circuit 2 contributes between") as caught:
        estimate(plan, without(counts, 2))
    assert f"{low:.4f} and {high:.4f} Ha" in str(caught.value)


def test_bounds_on_a_missing_fragment_hold_without_listing_determinants() -> None:
    """The bound term by term, used for many orbitals, contains the exact range."""
    rng = np.random.default_rng(4)
    for _ in range(5):
        fragment = Fragment.plain(np.eye(4), np.diag(rng.normal(size=4)) + 0.3)
        exact = value_range(fragment, (2, 1))
        coefficients = fragment.coefficients
        assert 2 * np.minimum(coefficients, 0).sum() <= exact[0]
        assert exact[1] <= 2 * np.maximum(coefficients, 0).sum()
    wide = Fragment.one_body(np.eye(24), np.linspace(-1, 1, 24))
    low, high = value_range(wide, (12, 12))
    assert low <= -2 * np.linspace(-1, 1, 24)[12:].sum()
    assert high >= 2 * np.linspace(-1, 1, 24)[12:].sum()


def test_circuits_run_in_another_order_are_noticed() -> None:
    plan = low_rank_plan("H2O", 20_000)
    counts = simulate(plan, full_ci_state("H2O"), rng=1)
    order = [1, 0, *range(2, len(plan))]
    swapped = Counts(
        tuple(counts.bits[m] for m in order),
        tuple(counts.numbers[m] for m in order),
        counts.plan_digest,
        counts.batches,
    )
    result = estimate(plan, swapped)
    assert not result.agrees
    assert "do not fit one state" in result.message


def test_a_noisier_state_than_predicted_is_noticed() -> None:
    plan = low_rank_plan("H2O", 20_000)
    result = estimate(plan, simulate(plan, full_ci_state("H2O", noise=0.05), rng=1))
    assert not result.agrees
    assert "noisier than the reference" in result.message


def test_wrong_arguments_are_refused() -> None:
    plan = low_rank_plan("H2", 1000)
    counts = simulate(plan, full_ci_state("H2"), rng=1)
    with pytest.raises(InputError, match="must be Counts"):
        estimate(plan, {0: {"1010": 1}})  # type: ignore[arg-type]
    with pytest.raises(InputError, match="between 0 and 1"):
        estimate(plan, counts, confidence=95)
    with pytest.raises(InputError, match="flips"):
        simulate(plan, full_ci_state("H2"), flips=(0.1, 1.2))
    with pytest.raises(InputError, match="shots"):
        simulate(plan, full_ci_state("H2"), shots=[1, 2])
    with pytest.raises(InputError, match="orbitals"):
        simulate(plan, full_ci_state("H2O"))


def test_error_bar_without_observed_spread_is_the_prediction() -> None:
    """Five equal values say little: the bar is the plan's, with the plan's degrees of freedom."""
    sample = Sample.of(np.array([1.0]), np.array([5]))
    bar = error_bar([sample], np.array([0.3]))
    assert bar.variance == pytest.approx(0.3**2 / 5)
    assert bar.degrees_of_freedom == PLAN_WEIGHT
    single = error_bar([Sample.of(np.array([1.0]), np.array([1]))], np.array([0.3]))
    assert single.variance == pytest.approx(0.3**2)


def test_error_bar_is_never_below_the_observation() -> None:
    rng = np.random.default_rng(3)
    for _ in range(20):
        samples = [Sample.of(rng.normal(size=12), np.ones(12, dtype=np.int64)) for _ in range(3)]
        bar = error_bar(samples, rng.random(3))
        assert bar.variance >= sum(s.variance / s.shots for s in samples) * (1 - 1e-12)


def test_degrees_of_freedom_of_normal_values_are_those_of_welch_and_satterthwaite() -> None:
    """Welch (1947): ν = (Σ s²/N)² / Σ (s²/N)²/(N − 1), on top of what the plan brings."""
    rng = np.random.default_rng(3)
    sizes, deviations = [4000, 9000], [1.0, 2.0]
    samples = [
        Sample.of(rng.normal(scale=d, size=n), np.ones(n, dtype=np.int64))
        for n, d in zip(sizes, deviations, strict=True)
    ]
    parts = [s.variance / s.shots for s in samples]
    welch = sum(parts) ** 2 / sum(v**2 / (n - 1) for v, n in zip(parts, sizes, strict=True))
    bar = error_bar(samples, np.array(deviations))
    assert bar.degrees_of_freedom - PLAN_WEIGHT == pytest.approx(welch, rel=0.1)


@pytest.mark.parametrize("name", ["H2", "H6"])
@pytest.mark.parametrize("shots", [20, 200])
def test_interval_covers_the_energy(name: str, shots: int) -> None:
    """250 experiments: 95 % has a standard error of 1.4 %; more experiments are in benchmarks/estimate.py."""
    plan, state = low_rank_plan(name, 1000), full_ci_state(name)
    exact = full_ci(name)[0]
    rng = np.random.default_rng(17)
    results = [estimate(plan, simulate(plan, state, shots=shots, rng=rng)) for _ in range(250)]
    hits = np.mean([r.interval[0] <= exact <= r.interval[1] for r in results])
    assert hits > 0.91


def test_a_fold_without_possible_shots_is_an_error_not_a_number() -> None:
    plan = low_rank_plan("H2", 1000)
    counts = Counts.from_strings(
        plan, {m: {"1010": 5, "1100": 5} for m in range(4)}, bit_order="first-qubit-left", spin_order="blocked"
    )
    impossible = Counts.from_strings(
        plan, {m: {"1100": 5} for m in range(4)}, bit_order="first-qubit-left", spin_order="blocked"
    )
    assert np.isfinite(combine([Part.of(plan, counts)], (1, 1), select=True).value)
    with pytest.raises(InputError, match="at least one shot"):
        combine([Part.of(plan, impossible)], (1, 1), select=True)


def test_repr_is_short_and_html_is_escaped() -> None:
    plan = low_rank_plan("H2", 1000)
    result = estimate(plan, simulate(plan, full_ci_state("H2"), rng=1))
    assert isinstance(result, Estimate)
    assert len(repr(result)) < 200
    assert result._repr_html_().startswith("<table>")


def rare_outcome(shots: int, predicted: float) -> float | None:
    """Variance added when all shots had both electrons in orbital 0; values of the determinants are 0, 1, 1, 2."""
    fragment = Fragment.one_body(np.eye(2), [0.0, 1.0])
    bits, numbers = np.array([[1, 0, 1, 0]], dtype=np.uint8), np.array([shots])
    return missed_variance(fragment, bits, Sample.of(fragment.values(bits), numbers), predicted, (1, 1))


@pytest.mark.parametrize(
    ("shots", "deviation", "share"),
    [
        # σ² = 0.02: an outcome of value 1 has probability 0.02 and is expected once in 50 shots: all is added.
        (50, np.sqrt(0.02), 1.0),
        # σ² = 0.01: it is expected half a time, and half is added.
        (50, 0.1, 0.5),
        # The same in 5,000 shots would be seen 50 times (12 with value 2): the prediction was wrong, nothing is added.
        (5000, 0.1, 0.0),
        # σ² = 1e-6 from an outcome expected 5e-5 times in 50 shots: it hardly matters whether it is missed.
        (50, 1e-3, 5e-5),
    ],
)
def test_rare_outcomes_that_few_shots_can_miss_are_in_the_error_bar(shots: int, deviation: float, share: float) -> None:
    assert rare_outcome(shots, deviation) == pytest.approx(share * deviation**2, rel=1e-6)
    assert rare_outcome(shots, 0.0) is None


def test_interval_with_rare_outcomes_is_wide_rather_than_wrong() -> None:
    """n_1 of a state with occupation 0.02: 40 % of runs of 45 shots see no electron there, and still cover 0.04."""
    fragment = Fragment.one_body(np.eye(2), [0.0, 1.0])
    plan = Plan((fragment,), 0.0, [45], [0.2], (1, 1), "made up", 0.0, 0.0)
    rng = np.random.default_rng(1)
    hits = []
    for _ in range(400):
        both = rng.random(45) < 0.01
        one = rng.random(45) < 0.02
        rows = np.tile(np.array([1, 0, 1, 0], dtype=np.uint8), (45, 1))
        rows[both] = [0, 1, 0, 1]
        rows[one & ~both] = [0, 1, 1, 0]
        low, high = estimate(plan, Counts.from_arrays(plan, {0: rows}, spin_order="blocked")).interval
        hits.append(low <= 0.02 + 0.02 * 0.99 <= high)
    assert np.mean(hits) > 0.93


def test_seven_values_of_an_error_bar_scale_with_the_observable() -> None:
    sample = Sample.of(np.arange(7.0), np.ones(7, dtype=np.int64))
    double = sample.scaled(2.0)
    assert double.mean == 2 * sample.mean
    assert error_bar([double], np.array([2.0])).variance == pytest.approx(4 * error_bar([sample], np.ones(1)).variance)
