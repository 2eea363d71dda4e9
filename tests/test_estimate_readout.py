"""Readout correction: exact on exact distributions, with the calibration's uncertainty, refused where it is wrong."""

import dataclasses
from functools import reduce
from itertools import product

import numpy as np
import pytest
from molecules import full_ci
from plans import full_ci_state, low_rank_plan

from fragkit.core import Fragment, InputError, MismatchError
from fragkit.estimate import ReadoutErrors, estimate, simulate
from fragkit.estimate._correction import Correction

STRINGS = np.array(list(product((0, 1), repeat=6)), dtype=np.uint8)


def some_fragment(seed: int) -> Fragment:
    rng = np.random.default_rng(seed)
    opposite, same = rng.normal(size=(2, 3, 3))
    same = same + same.T
    return Fragment(np.eye(3), opposite + opposite.T, same - np.diag(np.diag(same)), rng.normal(size=3))


def confusion(rng: np.random.Generator, size: int) -> np.ndarray:
    """A random one, correlated between the two qubits when `size` is 4."""
    matrix = rng.random((size, size)) * 0.1 + np.eye(size)
    return matrix / matrix.sum(axis=0)


def random_errors(seed: int, blocks: tuple[tuple[int, ...], ...]) -> ReadoutErrors:
    rng = np.random.default_rng(seed)
    matrices = tuple(confusion(rng, 2 ** len(block)) for block in blocks)
    return ReadoutErrors(blocks, matrices, tuple(np.zeros((len(m),) * 3) for m in matrices))


def misread(probabilities: np.ndarray, errors: ReadoutErrors) -> np.ndarray:
    """The distribution over all 64 strings after readout, from the full 2ⁿ × 2ⁿ matrix."""
    order = [q for block in errors.blocks for q in block]
    full = reduce(np.kron, errors.confusions)
    tensor = probabilities.reshape((2,) * 6).transpose(order).ravel()
    return (full @ tensor).reshape((2,) * 6).transpose(np.argsort(order)).ravel()


BLOCKS = [
    tuple((q,) for q in range(6)),
    ((0, 1), (2,), (3,), (4,), (5,)),
    ((5, 1), (0, 3), (4, 2)),
    ((3, 5), (0,), (4, 1), (2,)),
]


@pytest.mark.parametrize("blocks", BLOCKS)
def test_correction_is_exact_on_average_against_the_full_matrix(blocks: tuple[tuple[int, ...], ...]) -> None:
    """Any distribution over strings, misread by the tensor product of the blocks, gives the true mean to 1e-12."""
    rng = np.random.default_rng(3)
    for seed in range(5):
        fragment, errors = some_fragment(seed), random_errors(seed, blocks)
        truth = rng.dirichlet(np.full(64, 0.2))
        corrected = Correction.of(errors).values(fragment, STRINGS)
        assert misread(truth, errors) @ corrected == pytest.approx(truth @ fragment.values(STRINGS), abs=1e-12)


def test_one_qubit_follows_the_textbook_formula() -> None:
    """(bit − e₀)/(1 − e₀ − e₁), the inverse of a 2 × 2 stochastic matrix."""
    errors = ReadoutErrors.known(0.02, 0.05, orbitals=3)
    assert np.allclose(Correction.of(errors).occupations(STRINGS), (STRINGS - 0.02) / 0.93, atol=1e-14)


@pytest.mark.parametrize("blocks", BLOCKS)
def test_gradients_by_the_confusion_against_finite_differences(blocks: tuple[tuple[int, ...], ...]) -> None:
    rng = np.random.default_rng(3)
    fragment, errors = some_fragment(1), random_errors(2, blocks)
    numbers = rng.integers(1, 50, 64)
    gradients = Correction.of(errors).gradients(fragment, STRINGS, numbers)

    def mean(block: int, step: np.ndarray) -> float:
        matrices = list(errors.confusions)
        matrices[block] = matrices[block] + step
        moved = dataclasses.replace(errors, confusions=tuple(matrices))
        return float(numbers @ Correction.of(moved).values(fragment, STRINGS) / numbers.sum())

    for block, gradient in enumerate(gradients):
        for a, b in np.ndindex(gradient.shape):
            step = np.zeros_like(gradient)
            step[a, b] = 1e-5
            slope = (mean(block, step) - mean(block, -step)) / 2e-5
            assert gradient[a, b] == pytest.approx(slope, abs=1e-7)


def test_calibration_counts_give_the_probabilities_and_their_errors() -> None:
    """By hand: 3 of 100 zeros and 8 of 200 ones misread on qubit 0; binomial variances p(1 − p)/N."""
    errors = ReadoutErrors.from_calibration(
        {"0000": {"0000": 97, "1000": 3}, "1111": {"1111": 192, "0111": 8}},
        orbitals=2,
        bit_order="first-qubit-left",
        spin_order="blocked",
    )
    assert np.allclose(errors.confusions[0], [[0.97, 0.04], [0.03, 0.96]])
    assert np.allclose(errors.confusions[3], np.eye(2))
    assert errors.covariances[0][1, 0, 0] == pytest.approx(0.04 * 0.96 / 200, rel=0.1)
    # A flip that was never seen is uncertain all the same.
    assert 0 < errors.covariances[3][0, 0, 0] < 1e-4
    assert errors.calibration_shots == 100


def test_calibration_follows_bit_and_spin_order() -> None:
    """Only beta of orbital 0 misreads zero as one; the device lists (0a 0b 1a 1b) with qubit 0 on the right."""
    errors = ReadoutErrors.from_calibration(
        {"0000": {"0000": 90, "0010": 10}, "1111": {"1111": 100}},
        orbitals=2,
        bit_order="first-qubit-right",
        spin_order="interleaved",
    )
    assert [round(float(m[1, 0]), 12) for m in errors.confusions] == [0.0, 0.0, 0.1, 0.0]


def flipped_calibration(flips: tuple[float, float], qubits: int, shots: int, rng: np.random.Generator) -> ReadoutErrors:
    tables = {}
    for bit in (0, 1):
        rows = np.full((shots, qubits), bit, dtype=np.uint8)
        tables[str(bit) * qubits] = rows ^ (rng.random(rows.shape) < flips[bit])
    return ReadoutErrors.from_calibration(
        tables, orbitals=qubits // 2, bit_order="first-qubit-left", spin_order="blocked"
    )


@pytest.mark.parametrize("flips", [(0.02, 0.04), (0.05, 0.1)])
@pytest.mark.parametrize("calibrated", [False, True])
def test_corrected_energies_are_unbiased(flips: tuple[float, float], calibrated: bool) -> None:
    """250 experiments on H2, a new calibration of 200 shots for each where it is estimated; errors cover it."""
    plan, state, exact = low_rank_plan("H2", 2000), full_ci_state("H2"), full_ci("H2")[0]
    rng = np.random.default_rng(23)
    known = ReadoutErrors.known(*flips, orbitals=2)
    deviations = []
    for _ in range(250):
        errors = flipped_calibration(flips, 4, 200, rng) if calibrated else known
        result = estimate(plan, simulate(plan, state, flips=flips, rng=rng), readout=errors)
        deviations.append((result.energy - exact, result.standard_error, result.calibration_error))
    off, bars, parts = np.array(deviations).T
    assert abs(off.mean()) < 3 * off.std() / np.sqrt(250)
    # The spread of the energies is what the error bars say; its own relative error is 4.5 %.
    assert off.std() == pytest.approx(np.sqrt(np.mean(bars**2)), rel=0.15)
    assert (parts.mean() > 0.15 * bars.mean()) == calibrated


def test_second_order_bias_of_a_poor_calibration_is_removed() -> None:
    """A binomial calibration of 60 shots per state, summed over all its outcomes, against the true occupation."""
    from scipy.stats import binom

    flips, shots = (0.1, 0.15), 60
    plain = corrected = 0.0
    truth = 0.7
    read = truth * (1 - flips[1]) + (1 - truth) * flips[0]
    for k, j in np.ndindex(shots + 1, shots + 1):
        weight = binom.pmf(k, shots, flips[0]) * binom.pmf(j, shots, flips[1])
        if weight < 1e-9:
            continue
        e0, e1 = k / shots, j / shots
        pattern = np.array([[1.0, -1.0], [-1.0, 1.0]]) / shots
        errors = ReadoutErrors(
            ((0,), (1,)),
            (np.array([[1 - e0, e1], [e0, 1 - e1]]), np.eye(2)),
            (np.array([e0 * (1 - e0) * pattern, e1 * (1 - e1) * pattern]), np.zeros((2, 2, 2))),
        )
        table = Correction.of(errors).tables[0][:, 0]
        corrected += weight * ((1 - read) * table[0] + read * table[1])
        plain += weight * (read - e0) / (1 - e0 - e1)
    assert abs(plain - truth) > 1e-3
    assert abs(corrected - truth) < 0.15 * abs(plain - truth)


def test_correction_of_flips_on_water_removes_the_bias() -> None:
    """1 % flips move the energy by 0.5 Ha; corrected, it is the exact one within its error."""
    plan, exact = low_rank_plan("H2O"), full_ci("H2O")[0]
    counts = simulate(plan, full_ci_state("H2O"), flips=(0.01, 0.01), rng=5)
    raw = estimate(plan, counts)
    corrected = estimate(plan, counts, readout=ReadoutErrors.known(0.01, 0.01, orbitals=7))
    assert raw.energy - exact > 10 * raw.standard_error
    assert abs(corrected.energy - exact) < 3 * corrected.standard_error
    assert corrected.calibration_error == 0.0
    assert corrected.agrees, corrected.message
    assert corrected.sector_leak is not None
    assert abs(corrected.sector_leak[0]) < 4 * corrected.sector_leak[1]


def test_a_wrong_calibration_is_noticed_by_the_electron_number() -> None:
    plan = low_rank_plan("H2O", 20_000)
    counts = simulate(plan, full_ci_state("H2O"), flips=(0.02, 0.02), rng=5)
    too_little = estimate(plan, counts, readout=ReadoutErrors.known(0.005, 0.005, orbitals=7))
    assert not too_little.agrees
    assert "(N - 10)^2" in too_little.message
    too_much = estimate(plan, counts, readout=ReadoutErrors.known(0.05, 0.05, orbitals=7))
    assert not too_much.agrees
    assert "no state has" in too_much.message


def test_given_deviations_of_the_probabilities_enter_the_error() -> None:
    plan = low_rank_plan("H2", 2000)
    counts = simulate(plan, full_ci_state("H2"), flips=(0.02, 0.02), rng=5)
    sure = estimate(plan, counts, readout=ReadoutErrors.known(0.02, 0.02, orbitals=2))
    unsure = estimate(plan, counts, readout=ReadoutErrors.known(0.02, 0.02, orbitals=2, deviations=(0.01, 0.01)))
    assert unsure.energy == pytest.approx(sure.energy, abs=5e-3)
    assert unsure.standard_error**2 == pytest.approx(
        sure.standard_error**2 + (unsure.calibration_error or 0) ** 2, rel=0.1
    )
    assert (unsure.calibration_error or 0) > 1e-3


def test_wrong_use_is_refused() -> None:
    plan = low_rank_plan("H2", 2000)
    counts = simulate(plan, full_ci_state("H2"), rng=5)
    errors = ReadoutErrors.known(0.02, 0.02, orbitals=2)
    with pytest.raises(InputError, match="no longer independent"):
        estimate(plan, counts, readout=errors, post_select=True)
    with pytest.raises(InputError, match="must be ReadoutErrors"):
        estimate(plan, counts, readout=(0.02, 0.02))  # type: ignore[arg-type]
    with pytest.raises(MismatchError, match="4 qubits"):
        estimate(plan, counts, readout=ReadoutErrors.known(0.02, 0.02, orbitals=3))


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({"read_one": 1.2, "read_zero": 0.1}, "between 0 and 1"),
        ({"read_one": [0.1, 0.1], "read_zero": 0.1}, "shape"),
        ({"read_one": 0.5, "read_zero": 0.48}, "distinguishable"),
        ({"read_one": 0.1, "read_zero": 0.1, "deviations": 0.1}, "pair"),
    ],
)
def test_impossible_probabilities_are_refused(arguments: dict, message: str) -> None:
    with pytest.raises(InputError, match=message):
        ReadoutErrors.known(**arguments, orbitals=2)


@pytest.mark.parametrize(
    ("tables", "pairs", "message"),
    [
        ({}, (), "prepared bit string"),
        ({"00": {"00": 5}}, (), "in 0 and 1"),
        ({"00": {"00": 5}, "11": {"11": 5}}, [(0, 1)], "all four states"),
        ({"00": {"00": 5}, "11": {"11": 5}}, [(0, 0)], "pairs of different qubits"),
        ({"00": {"00": 5}, "11": {"11": 5}}, [(0, 2)], "pairs of different qubits"),
        ({"00": {"00": 0}, "11": {"11": 5}}, (), "in 0 and 1"),
        ({"00": {"000": 1}, "11": {"11": 5}}, (), "2 bits"),
        ({"00": {"00": -1}, "11": {"11": 5}}, (), "at least 0"),
    ],
)
def test_incomplete_calibrations_are_refused(tables: dict, pairs: list, message: str) -> None:
    with pytest.raises(InputError, match=message):
        ReadoutErrors.from_calibration(
            tables, orbitals=1, bit_order="first-qubit-left", spin_order="blocked", pairs=pairs
        )
