"""Mixtures and depolarisation: moments, energies and quantum limits, against density matrices."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from molecules import molecule_hamiltonian
from states_helpers import (
    SECTORS,
    brute_force_moments,
    matrix_of,
    random_hamiltonian,
    random_rotation,
    rotate_by_pyscf,
    strings_of,
)

from fragkit.core import InputError
from fragkit.states import CIState, MaximallyMixedState, MixedState, mixture, reference_state

# Var(H) at 1 % depolarisation of the full-CI state, hartree²; computed with pyscf and OpenFermion alone
# (N2 by a stochastic trace, hence its two decimals).
FLOORS = {"H2": 0.005, "LiH": 0.202, "BeH2": 0.701, "H2O": 3.657, "NH3": 3.337}


def random_vectors(orbitals, electrons, count, seed):
    rng = np.random.default_rng(seed)
    shape = tuple(len(strings_of(orbitals, k)) for k in electrons)
    vectors = rng.normal(size=(count, *shape))
    return vectors / np.linalg.norm(vectors, axis=(1, 2), keepdims=True)


@pytest.mark.parametrize(("orbitals", "electrons"), SECTORS)
def test_maximally_mixed_moments_count_determinants(orbitals, electrons):
    state = MaximallyMixedState(orbitals, electrons)
    rotation = random_rotation(orbitals, np.random.default_rng(1))
    size = np.prod([len(strings_of(orbitals, k)) for k in electrons])
    expected = brute_force_moments(np.full(size, 1.0 / size), orbitals, electrons)
    for got, want in zip(state.moments(rotation), expected, strict=True):
        np.testing.assert_allclose(got, want, atol=1e-12)


@pytest.mark.parametrize(("orbitals", "electrons"), [*SECTORS, (2, (2, 1)), (3, (3, 0)), (4, (2, 0))])
def test_maximally_mixed_energy_and_variance_are_those_of_the_spectrum(orbitals, electrons):
    hamiltonian = random_hamiltonian(orbitals, electrons, np.random.default_rng(2))
    levels = np.linalg.eigvalsh(matrix_of(hamiltonian))
    state = MaximallyMixedState(orbitals, electrons)
    assert state.energy(hamiltonian) == pytest.approx(levels.mean(), abs=1e-10)
    assert state.variance(hamiltonian) == pytest.approx(levels.var(), rel=1e-10, abs=1e-10)


@pytest.mark.parametrize(("orbitals", "electrons"), [(3, (2, 1)), (4, (2, 2)), (5, (4, 0))])
def test_mixture_is_that_of_the_density_matrix(orbitals, electrons):
    one, two = random_vectors(orbitals, electrons, 2, 3)
    hamiltonian = random_hamiltonian(orbitals, electrons, np.random.default_rng(4))
    states = [CIState.from_ci_vector(hamiltonian, v) for v in (one, two)]
    state = mixture([(0.6, states[0]), (0.3, states[1]), (0.1, MaximallyMixedState(orbitals, electrons))])
    rotation = random_rotation(orbitals, np.random.default_rng(5))
    weights = 0.6 * rotate_by_pyscf(one, electrons, rotation) ** 2
    weights = weights + 0.3 * rotate_by_pyscf(two, electrons, rotation) ** 2 + 0.1 / one.size
    expected = brute_force_moments(weights, orbitals, electrons)
    for got, want in zip(state.moments(rotation), expected, strict=True):
        np.testing.assert_allclose(got, want, atol=1e-12)
    rho = 0.6 * np.outer(one, one) + 0.3 * np.outer(two, two) + 0.1 * np.eye(one.size) / one.size
    matrix = matrix_of(hamiltonian)
    energy = np.trace(rho @ matrix)
    assert state.energy(hamiltonian) == pytest.approx(energy, abs=1e-10)
    assert state.variance(hamiltonian) == pytest.approx(np.trace(rho @ matrix @ matrix) - energy**2, rel=1e-10)


@given(noise=st.floats(0.0, 1.0), seed=st.integers(0, 2**31))
def test_noise_interpolates_between_the_state_and_the_maximally_mixed_one(noise, seed):
    n, electrons = 4, (3, 1)
    state = CIState(random_vectors(n, electrons, 1, 6)[0], n, electrons)
    u = random_rotation(n, np.random.default_rng(seed))
    mean, covariance = state.with_noise(noise).moments(u)
    (m1, c1), (m0, c0) = state.moments(u), MaximallyMixedState(n, electrons).moments(u)
    np.testing.assert_allclose(mean, (1 - noise) * m1 + noise * m0, atol=1e-12)
    between = noise * (1 - noise) * np.outer(m1 - m0, m1 - m0)
    np.testing.assert_allclose(covariance, (1 - noise) * c1 + noise * c0 + between, atol=1e-12)


@pytest.mark.parametrize("name", list(FLOORS))
def test_floor_of_one_per_cent_noise(name):
    hamiltonian = molecule_hamiltonian(name)
    assert reference_state(hamiltonian, "fci", noise=0.01).variance(hamiltonian) == pytest.approx(
        FLOORS[name], abs=6e-4
    )


def test_floor_of_nitrogen():
    hamiltonian = molecule_hamiltonian("N2")
    assert reference_state(hamiltonian, "fci", noise=0.01).variance(hamiltonian) == pytest.approx(6.57, abs=6e-3)


def test_mixtures_are_flattened_and_equal_parts_merged():
    a, b = (CIState(v, 3, (2, 1)) for v in random_vectors(3, (2, 1), 2, 7))
    nested = mixture([(0.5, mixture([(0.5, a), (0.5, b)])), (0.5, a)])
    assert isinstance(nested, MixedState)
    assert sorted(nested.weights) == [0.25, 0.75]
    assert mixture([(0.5, a), (0.5, a)]) is a
    assert mixture([(1.0, a), (0.0, b)]) is a
    assert a.with_noise(0.0) is a
    twice = a.with_noise(0.1).with_noise(0.1)
    assert isinstance(twice, MixedState)
    assert dict(zip([s.digest for s in twice.states], twice.weights, strict=True))[a.digest] == pytest.approx(0.81)


@pytest.mark.parametrize(
    ("parts", "words"),
    [
        ([], "add up to 1"),
        ([(0.5, "a")], "add up to 1"),
        ([(0.5, "a"), (0.6, "a")], "add up to 1"),
        ([(-0.5, "a"), (1.5, "a")], "`weight` must be from 0 to 1"),
        ([(0.5, "a"), (0.5, "other electrons")], "the same orbitals and electron numbers"),
        ([(0.5, "a"), (0.5, "not a state")], "pairs (weight, state)"),
        ([(0.5, "h2"), (0.5, "stretched")], "belong to one Hamiltonian"),
    ],
)
def test_wrong_mixtures_are_named(parts, words):
    rng = np.random.default_rng(8)
    known = {
        "a": MaximallyMixedState(3, (2, 1)),
        "other electrons": MaximallyMixedState(3, (1, 1)),
        "not a state": 3.0,
        "h2": reference_state(random_hamiltonian(2, (1, 1), rng), "hf"),
        "stretched": reference_state(random_hamiltonian(2, (1, 1), rng), "fci"),
    }
    with pytest.raises(InputError) as caught:
        mixture([(weight, known[name]) for weight, name in parts])
    assert words in str(caught.value)
