"""Whole numbers of shots."""

import itertools

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from fragkit.core import InputError, TimeModel
from fragkit.planning._allocation import shots_for_error, shots_for_seconds, shots_for_total
from fragkit.planning._budget import Budget, circuit_layers

deviations_strategy = st.lists(st.floats(0.0, 10.0), min_size=1, max_size=12).map(np.array)


def error(deviations: np.ndarray, shots: np.ndarray) -> float:
    return float(np.sqrt(np.sum(deviations**2 / shots)))


@given(deviations=deviations_strategy, exponent=st.floats(-3, 0), minimum=st.integers(1, 20))
def test_target_is_met_with_hardly_more_than_neymans_number(deviations: np.ndarray, exponent: float, minimum: int):
    target = 10**exponent
    shots = shots_for_error(deviations, target, minimum=minimum)
    assert np.all(shots >= minimum)
    assert error(deviations, shots) <= target
    # Neyman (1934): (Σ σ)²/ε² is the least; rounding costs at most one shot, the minimum at most itself, per circuit.
    assert np.sum(shots) <= (np.sum(deviations) / target) ** 2 + len(deviations) * (minimum + 1)


@pytest.mark.parametrize("minimum", [1, 3])
def test_no_smaller_number_of_shots_meets_the_target(minimum: int) -> None:
    deviations, target = np.array([0.9, 0.5, 0.1]), 0.45
    shots = shots_for_error(deviations, target, minimum=minimum)
    fewest = min(
        sum(trial)
        for trial in itertools.product(range(minimum, 25), repeat=3)
        if error(deviations, np.array(trial)) <= target
    )
    assert np.sum(shots) == fewest


@given(deviations=deviations_strategy, extra=st.integers(0, 1000), minimum=st.integers(1, 9))
def test_every_shot_is_spent(deviations: np.ndarray, extra: int, minimum: int) -> None:
    total = len(deviations) * minimum + extra
    shots = shots_for_total(deviations, total, minimum=minimum)
    assert np.sum(shots) == total
    assert np.all(shots >= minimum)


def test_best_split_of_a_small_number_of_shots() -> None:
    deviations = np.array([2.0, 1.0, 0.4])
    shots = shots_for_total(deviations, 20)
    best = min(error(deviations, np.array([a, b, 20 - a - b])) for a in range(1, 19) for b in range(1, 20 - a))
    assert error(deviations, shots) == pytest.approx(best, rel=1e-12)


@given(deviations=deviations_strategy, seed=st.integers(0, 99), factor=st.floats(1.0, 300.0))
def test_time_is_used_up_and_not_exceeded(deviations: np.ndarray, seed: int, factor: float) -> None:
    prices = np.random.default_rng(seed).uniform(0.1, 2.0, len(deviations))
    seconds = 2 * factor * float(np.sum(prices))
    shots = shots_for_seconds(deviations, seconds, prices, minimum=2)
    assert np.all(shots >= 2)
    assert shots @ prices <= seconds * (1 + 1e-8)
    assert shots @ prices + np.min(prices) > seconds * (1 - 1e-8)


def test_dear_circuits_get_fewer_shots_by_the_root_of_their_price() -> None:
    # Least Σ t s at fixed Σ σ²/s: s ∝ σ/√t (Cochran, Sampling Techniques, 3rd ed., eq. 5.22, costs by stratum)
    shots = shots_for_seconds(np.array([1.0, 1.0]), 1e6, np.array([1.0, 9.0]))
    assert shots[0] / shots[1] == pytest.approx(3.0, rel=1e-4)


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({"target_error": 0.0}, "`target_error` must be a finite number above zero"),
        ({"target_error": 1e-3, "total_shots": 5}, "only one of `target_error`, `total_shots` and `seconds`"),
        ({"total_shots": 2.5}, "`total_shots` must be a whole number"),
        ({"seconds": 3.0}, "`time_model` must be given with `seconds`"),
        ({"minimum_shots": 0}, "`minimum_shots` must be at least 1"),
    ],
)
def test_impossible_budgets_are_named(arguments: dict, message: str) -> None:
    with pytest.raises(InputError, match=message):
        Budget(**arguments)


def test_budget_below_the_minimum_is_refused_with_the_number_that_is_needed() -> None:
    model = TimeModel(preparation_seconds=1.0, layer_seconds=0.0, readout_seconds=0.0, switch_seconds=5.0)
    rotations = [np.eye(2)] * 3
    sigma = np.ones(3)
    with pytest.raises(InputError, match="`total_shots` must be at least 30"):
        Budget(total_shots=29).shots(sigma, sigma, rotations)
    with pytest.raises(InputError, match="`seconds` must be at least 45"):
        Budget(seconds=44.0, time_model=model).shots(sigma, sigma, rotations)
    assert np.sum(Budget(seconds=45.0, time_model=model).shots(sigma, sigma, rotations)) == 30


def test_layers_of_a_rotation_circuit() -> None:
    rng = np.random.default_rng(0)
    generic = np.linalg.qr(rng.normal(size=(5, 5)))[0]
    assert circuit_layers(generic) == 5  # rectangular order: n layers (Clements et al., Optica 3, 1460 (2016))
    assert circuit_layers(np.eye(5)) == 0
