"""Variances of many fragments and their derivatives, against covariance matrices and finite differences."""

import pickle

import numpy as np
import pytest
from molecules import molecule_hamiltonian
from scipy.linalg import expm
from states_helpers import SECTORS, random_rotation, strings_of

from fragkit.core import feature_count
from fragkit.states import (
    CIState,
    DeterminantState,
    GaussianState,
    MaximallyMixedState,
    ReferenceState,
    _ci_expectations,
    _factored,
    mixture,
    reference_state,
)


def density(orbitals: int, electrons: int, rng: np.random.Generator) -> np.ndarray:
    """A density matrix with the right trace and occupations strictly between 0 and 1 where that is possible."""
    filling = electrons / orbitals
    shift = rng.uniform(-1.0, 1.0, size=orbitals)
    shift -= shift.mean()
    occupations = filling + 0.9 * min(filling, 1.0 - filling) * shift / max(1e-9, np.max(np.abs(shift)))
    u = random_rotation(orbitals, rng)
    return u @ np.diag(occupations) @ u.T


def make_state(kind: str, orbitals: int, electrons: tuple[int, int]) -> ReferenceState:
    rng = np.random.default_rng(1)
    vector = rng.normal(size=tuple(len(strings_of(orbitals, k)) for k in electrons))
    if kind == "symmetric":
        vector = vector + vector.T
    if kind == "low rank":
        vector = np.outer(vector[:, 0], vector[0]) + np.outer(vector[:, 1], vector[1])
    pure = CIState(vector / np.linalg.norm(vector), orbitals, electrons)
    determinant = DeterminantState(*[random_rotation(orbitals, rng)[:, :k] for k in electrons])
    states = {
        "determinant": determinant,
        "gaussian": GaussianState(*[density(orbitals, k, rng) for k in electrons]),
        "uniform": MaximallyMixedState(orbitals, electrons),
        "mixture": mixture([(0.7, pure), (0.2, determinant), (0.1, MaximallyMixedState(orbitals, electrons))]),
    }
    return states.get(kind, pure)


CASES = [(kind, n, e) for n, e in SECTORS for kind in ("vector", "determinant", "gaussian", "uniform", "mixture")]
CASES += [("symmetric", 4, (2, 2)), ("symmetric", 5, (4, 4)), ("symmetric", 6, (3, 3)), ("symmetric", 7, (4, 4))]
CASES += [("low rank", 6, (3, 2)), ("low rank", 7, (5, 3))]


def check_gradient(state: ReferenceState, seed: int, *, fragments: int = 3) -> None:
    n = state.orbitals
    rng = np.random.default_rng(seed)
    rotations = np.array([random_rotation(n, rng) for _ in range(fragments)])
    coefficients = rng.normal(size=(fragments, feature_count(n)))
    variances, products, gradient = state.variance_and_gradient(rotations, coefficients)
    for m in range(fragments):
        _, covariance = state.moments(rotations[m])
        product = covariance @ coefficients[m]
        np.testing.assert_allclose(products[m], product, atol=1e-10 * (1.0 + np.max(np.abs(product))))
        assert variances[m] == pytest.approx(coefficients[m] @ product, rel=1e-10, abs=1e-10)
    np.testing.assert_array_equal(gradient, -gradient.transpose(0, 2, 1))
    step = 1e-5
    generators = rng.normal(size=(fragments, n, n))
    generators = generators - generators.transpose(0, 2, 1)
    forward, backward = (
        state.variance_and_gradient(
            np.array([u @ expm(s * step * x) for u, x in zip(rotations, generators, strict=True)]), coefficients
        )[0]
        for s in (1, -1)
    )
    upper = np.triu_indices(n, 1)
    predicted = (gradient[:, *upper] * generators[:, *upper]).sum(axis=1)
    np.testing.assert_allclose(
        (forward - backward) / (2 * step), predicted, rtol=1e-6, atol=1e-6 * float(1 + variances.max())
    )


@pytest.mark.parametrize(("kind", "orbitals", "electrons"), CASES)
def test_variance_product_and_gradient(kind, orbitals, electrons):
    check_gradient(make_state(kind, orbitals, electrons), 2)


@pytest.mark.parametrize("kind", ["vector", "symmetric"])
def test_blocks_of_strings_change_nothing(kind, monkeypatch):
    monkeypatch.setattr(_ci_expectations, "_BLOCK", 70)
    monkeypatch.setattr(CIState, "_batch", lambda self: 1)
    check_gradient(make_state(kind, 6, (3, 3)), 3)


def test_compound_matrices_are_used_where_the_spread_table_is_too_large(monkeypatch):
    monkeypatch.setattr(_factored, "_TABLE_BYTES", 0.0)
    check_gradient(make_state("vector", 6, (3, 4)), 4)


@pytest.mark.parametrize("rank", [3, 20])
def test_large_vectors_are_factored_by_a_random_probe(rank, monkeypatch):
    monkeypatch.setattr(_factored, "SMALL", 0)
    monkeypatch.setattr(_factored, "_PROBES", 6)
    rng = np.random.default_rng(5)
    vector = rng.normal(size=(20, rank)) @ rng.normal(size=(rank, 15))
    state = CIState(vector / np.linalg.norm(vector), 6, (3, 2))
    assert len(state._factored.scale) == (3 if rank == 3 else 15)
    check_gradient(state, 6)


def test_single_precision_and_threads_agree_with_the_plain_evaluation(monkeypatch):
    hamiltonian = molecule_hamiltonian("NH3")
    state = reference_state(hamiltonian, "cisd", noise=0.01)
    rng = np.random.default_rng(7)
    rotations = np.array([random_rotation(8, rng) for _ in range(6)])
    coefficients = rng.normal(size=(6, 72))
    # A large constant part must not cost digits: values are kept relative to their mean.
    coefficients[:, -8:] += 100.0
    exact = state.variance_and_gradient(rotations, coefficients, threads=1)
    monkeypatch.setattr(CIState, "_batch", lambda self: 2)
    for got, want in zip(state.variance_and_gradient(rotations, coefficients, threads=3), exact, strict=True):
        np.testing.assert_allclose(got, want, atol=1e-10 * np.max(np.abs(want)))
    single = state.variance_and_gradient(rotations, coefficients, precision="single")
    for got, want in zip(single, exact, strict=True):
        assert got.dtype == np.float64
        np.testing.assert_allclose(got, want, atol=2e-4 * np.max(np.abs(want)))


def test_errors_in_threads_reach_the_caller(monkeypatch):
    state = make_state("vector", 4, (2, 2))
    assert isinstance(state, CIState)
    monkeypatch.setattr(CIState, "_batch", lambda self: 1)

    def broken(self, rotations, coefficients):
        raise ArithmeticError("broken on purpose")

    monkeypatch.setattr(CIState, "_expectations", broken)
    with pytest.raises(ArithmeticError, match="on purpose"):
        state.variance_and_gradient(np.array([np.eye(4)] * 3), np.zeros((3, 20)), threads=2)


def test_no_fragments_give_empty_arrays():
    variances, products, gradient = make_state("vector", 3, (2, 1)).variance_and_gradient(
        np.zeros((0, 3, 3)), np.zeros((0, 12))
    )
    assert (variances.shape, products.shape, gradient.shape) == ((0,), (0, 12), (0, 3, 3))


def test_cisd_vectors_have_the_rank_of_their_single_excitations():
    """One reference column, one column per occupied-virtual pair at most, and one more: what makes rotations cheap."""
    state = reference_state(molecule_hamiltonian("NH3"), "cisd")
    assert isinstance(state, CIState)
    assert state._factored.symmetric
    assert len(state._factored.scale) <= 5 * 3 + 2


def test_large_determinant_gradient():
    check_gradient(DeterminantState.lowest(14, (7, 6)).with_noise(0.01), 8, fragments=2)


def test_compressed_state_loses_no_more_than_asked_and_keeps_its_moments():
    hamiltonian = molecule_hamiltonian("NH3")
    state = reference_state(hamiltonian, "fci")
    assert isinstance(state, CIState)
    small = state.compressed(1e-6)
    assert np.vdot(small.vector, state.vector) ** 2 >= 1 - 1e-6
    assert len(small._factored.scale) < 0.6 * len(state._factored.scale)
    assert small._factored.symmetric
    assert "rank" in small.description
    u = random_rotation(8, np.random.default_rng(9))
    np.testing.assert_allclose(small.moments(u)[0], state.moments(u)[0], atol=5e-3)
    np.testing.assert_allclose(state.compressed(0.0).vector, state.vector, atol=1e-12)
    assert len(state.compressed(1.0)._factored.scale) == 1


def test_states_can_be_sent_to_other_processes():
    state = make_state("mixture", 4, (2, 1))
    rotations, coefficients = np.array([random_rotation(4, np.random.default_rng(10))]), np.ones((1, 20))
    here = state.variance_and_gradient(rotations, coefficients)
    there = pickle.loads(pickle.dumps(state)).variance_and_gradient(rotations, coefficients)
    for one, other in zip(here, there, strict=True):
        np.testing.assert_array_equal(one, other)
