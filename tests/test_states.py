"""Moments, sampling, energies and variances of reference states, against pyscf, OpenFermion and brute force."""

import tracemalloc

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from molecules import FULL_CI, full_ci, mean_field, molecule_hamiltonian
from scipy.stats import chisquare
from states_helpers import (
    SECTORS,
    brute_force_moments,
    determinants,
    matrix_of,
    random_hamiltonian,
    random_rotation,
    rotate_by_pyscf,
    strings_of,
)

import fragkit
from fragkit.core import InputError, MismatchError, pair_indices
from fragkit.states import CIState, DeterminantState, GaussianState, ReferenceState, mixture, reference_state


def random_state(orbitals: int, electrons: tuple[int, int], seed: int) -> CIState:
    rng = np.random.default_rng(seed)
    shape = tuple(len(strings_of(orbitals, k)) for k in electrons)
    vector = rng.normal(size=shape)
    return CIState.from_ci_vector(random_hamiltonian(orbitals, electrons, rng), vector / np.linalg.norm(vector))


@pytest.mark.parametrize(("orbitals", "electrons"), SECTORS)
def test_rotated_vector_is_that_of_pyscf(orbitals, electrons):
    state = random_state(orbitals, electrons, 1)
    rotation = random_rotation(orbitals, np.random.default_rng(2))
    expected = rotate_by_pyscf(state.vector, electrons, rotation)
    np.testing.assert_allclose(state.rotated_vector(rotation), expected, atol=1e-12)


@pytest.mark.parametrize(("orbitals", "electrons"), SECTORS)
def test_moments_are_those_of_the_determinant_probabilities(orbitals, electrons):
    state = random_state(orbitals, electrons, 3)
    rotation = random_rotation(orbitals, np.random.default_rng(4))
    mean, covariance = state.moments(rotation)
    weights = rotate_by_pyscf(state.vector, electrons, rotation) ** 2
    expected = brute_force_moments(weights, orbitals, electrons)
    np.testing.assert_allclose(mean, expected[0], atol=1e-12)
    np.testing.assert_allclose(covariance, expected[1], atol=1e-12)


@pytest.mark.parametrize(("orbitals", "electrons"), [(3, (2, 1)), (3, (2, 2))])
def test_moments_are_expectation_values_of_openfermion_operators(orbitals, electrons):
    """No determinant basis of the rotated orbitals enters: operators Σ U_pi U_qi a†_p a_q, multiplied as matrices."""
    from openfermion import FermionOperator, get_sparse_operator

    n = orbitals
    state = random_state(n, electrons, 5)
    u = random_rotation(n, np.random.default_rng(6))
    number = [
        sum(
            (
                get_sparse_operator(FermionOperator(((n * spin + p, 1), (n * spin + q, 0)), u[p, i] * u[q, i]), 2 * n)
                for p in range(n)
                for q in range(n)
            ),
            start=get_sparse_operator(FermionOperator(), 2 * n),
        )
        for spin in (0, 1)
        for i in range(n)
    ]
    i, j = pair_indices(n)
    a, b = pair_indices(n, strict=True)
    features = [
        number[k] @ number[n + l] + (0 if k == l else 1) * number[l] @ number[n + k] for k, l in zip(i, j, strict=True)
    ]
    features += [number[k] @ number[l] + number[n + k] @ number[n + l] for k, l in zip(a, b, strict=True)]
    features += [number[k] + number[n + k] for k in range(n)]
    # OpenFermion: qubit 0 is the most significant bit; modes here are blocked like ours.
    psi = np.zeros(2 ** (2 * n))
    powers = 2 ** np.arange(2 * n)[::-1]
    psi[determinants(n, electrons) @ powers] = state.vector.ravel()
    images = np.array([(feature @ psi).real for feature in features])
    mean = images @ psi
    covariance = images @ images.T - np.outer(mean, mean)
    got = state.moments(u)
    np.testing.assert_allclose(got[0], mean, atol=1e-12)
    np.testing.assert_allclose(got[1], covariance, atol=1e-12)


def test_means_are_those_of_pyscf_density_matrices():
    from pyscf.fci import direct_spin1

    hamiltonian = molecule_hamiltonian("LiH")
    vector = full_ci("LiH")[1]
    n = hamiltonian.orbitals
    u = random_rotation(n, np.random.default_rng(7))
    (da, db), (aa, ab, bb) = direct_spin1.make_rdm12s(vector, n, hamiltonian.electrons)
    mean, _ = ReferenceState.from_ci_vector(hamiltonian, vector).moments(u)
    i, j = pair_indices(n)
    a, b = pair_indices(n, strict=True)
    opposite = np.einsum("pqrs,pi,qi,rj,sj->ij", ab, u, u, u, u, optimize=True)
    same = np.einsum("pqrs,pi,qi,rj,sj->ij", aa + bb, u, u, u, u, optimize=True)
    linear = np.einsum("pq,pi,qi->i", da + db, u, u)
    expected = np.concatenate([np.where(i == j, 0.5, 1.0) * (opposite[i, j] + opposite[j, i]), same[a, b], linear])
    np.testing.assert_allclose(mean, expected, atol=1e-10)


@pytest.mark.parametrize(("orbitals", "electrons"), SECTORS)
def test_determinant_moments_by_wick_equal_those_of_its_ci_vector(orbitals, electrons):
    rng = np.random.default_rng(8)
    occupied = [random_rotation(orbitals, rng)[:, :k] for k in electrons]
    state = DeterminantState(*occupied)
    strings = [strings_of(orbitals, k) for k in electrons]
    amplitudes = [
        np.array([np.linalg.det(c[np.flatnonzero(s)]) if c.shape[1] else 1.0 for s in listed])
        for c, listed in zip(occupied, strings, strict=True)
    ]
    hamiltonian = random_hamiltonian(orbitals, electrons, rng)
    vector = CIState.from_ci_vector(hamiltonian, np.outer(*amplitudes))
    rotation = random_rotation(orbitals, rng)
    for got, expected in zip(state.moments(rotation), vector.moments(rotation), strict=True):
        np.testing.assert_allclose(got, expected, atol=1e-12)
    assert state.energy(hamiltonian) == pytest.approx(vector.energy(hamiltonian), abs=1e-10)
    assert state.variance(hamiltonian) == pytest.approx(vector.variance(hamiltonian), rel=1e-10, abs=1e-10)


def fock_space_weights(density: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Probabilities of all 2ⁿ occupations of one spin of a Gaussian state, by inclusion and exclusion."""
    n = len(density)
    bits = (np.arange(2**n)[:, None] >> np.arange(n)) & 1
    # Hough et al., Probability Surveys 3, 206 (2006): P(occupied set exactly A) = |det(P − 1_{A complement})|.
    return np.array([abs(np.linalg.det(density - np.diag(1.0 - row))) for row in bits]), bits


def gaussian_density(rng: np.random.Generator, occupations) -> np.ndarray:
    u = random_rotation(len(occupations), rng)
    return u @ np.diag(occupations) @ u.T


def test_gaussian_state_moments_and_samples_follow_its_distribution():
    rng = np.random.default_rng(9)
    densities = [gaussian_density(rng, x) for x in ([0.9, 0.7, 0.4], [0.6, 0.3, 0.1])]
    state = GaussianState(*densities)
    assert state.electrons == (2, 1)
    u = random_rotation(3, rng)
    (pa, bits), (pb, _) = (fock_space_weights(u.T @ d @ u) for d in densities)
    weights = np.outer(pa, pb).ravel()
    assert weights.sum() == pytest.approx(1.0, abs=1e-12)
    table = np.hstack([np.repeat(bits, 8, axis=0), np.tile(bits, (8, 1))])
    features = fragkit.core.evaluate_features(table)
    mean = weights @ features
    covariance = (features - mean).T @ (weights[:, None] * (features - mean))
    got = state.moments(u)
    np.testing.assert_allclose(got[0], mean, atol=1e-12)
    np.testing.assert_allclose(got[1], covariance, atol=1e-12)
    drawn = state.sample(u, 20_000, 10)
    counts = np.bincount(drawn @ (1 << np.arange(6)), minlength=64)
    expected = np.bincount(table @ (1 << np.arange(6)), weights=weights, minlength=64)
    assert chisquare(counts, 20_000 * expected).pvalue > 1e-3


@pytest.mark.parametrize("kind", ["ci", "determinant", "noisy"])
def test_samples_follow_the_rotated_distribution(kind):
    n, electrons = 4, (2, 1)
    rng = np.random.default_rng(11)
    u = random_rotation(n, rng)
    state: ReferenceState = random_state(n, electrons, 12)
    probability = rotate_by_pyscf(state.vector, electrons, u).ravel() ** 2
    if kind == "determinant":
        state = DeterminantState.lowest(n, electrons)
        vector = np.zeros((6, 4))
        vector[0, 0] = 1.0
        probability = rotate_by_pyscf(vector, electrons, u).ravel() ** 2
    elif kind == "noisy":
        state = state.with_noise(0.3)
        probability = 0.7 * probability + 0.3 / len(probability)
    shots = 40_000
    drawn = state.sample(u, shots, 13)
    assert drawn.dtype == np.uint8
    assert drawn.shape == (shots, 2 * n)
    powers = 1 << np.arange(2 * n)
    order = {int(code): k for k, code in enumerate(determinants(n, electrons) @ powers)}
    counts = np.bincount([order[int(code)] for code in drawn @ powers], minlength=len(probability))
    assert chisquare(counts, shots * probability).pvalue > 1e-3
    # Shots are in random order: the first half looks like the second.
    half = [np.mean(part, axis=0) for part in (drawn[: shots // 2], drawn[shots // 2 :])]
    assert np.max(np.abs(half[0] - half[1])) < 5 * np.sqrt(0.5 / shots)


def test_samples_repeat_with_the_seed_and_share_a_generator():
    state = random_state(3, (2, 1), 14)
    u = np.eye(3)
    assert np.array_equal(state.sample(u, 50, 1), state.sample(u, 50, np.random.default_rng(1)))
    generator = np.random.default_rng(1)
    assert not np.array_equal(state.sample(u, 50, generator), state.sample(u, 50, generator))
    assert state.sample(u, 0, 1).shape == (0, 6)


@pytest.mark.parametrize("name", ["H2", "LiH", "BeH2", "H2O", "NH3", "H6"])
def test_full_ci_energies(name):
    state = reference_state(molecule_hamiltonian(name), "fci")
    assert isinstance(state, CIState)
    assert state.converged, state.message
    # FULL_CI: pyscf 2.14 alone, six decimals.
    assert state.energy(molecule_hamiltonian(name)) == pytest.approx(FULL_CI[name], abs=6e-7)
    assert state.variance(molecule_hamiltonian(name)) < 1e-12


def test_cisd_is_that_of_pyscf():
    from pyscf import ci

    hamiltonian = molecule_hamiltonian("H2O")
    solver = ci.CISD(mean_field("H2O"))
    solver.conv_tol = 1e-12
    correlation, amplitudes = solver.kernel()
    state = reference_state(hamiltonian, "cisd")
    assert state.energy(hamiltonian) == pytest.approx(mean_field("H2O").e_tot + correlation, abs=1e-9)
    expected = ci.cisd.to_fcivec(amplitudes, hamiltonian.orbitals, sum(hamiltonian.electrons))
    overlap = abs(np.vdot(expected, state.vector)) / np.linalg.norm(expected)
    assert overlap == pytest.approx(1.0, abs=1e-9)


@pytest.mark.parametrize(("orbitals", "electrons"), [(4, (2, 1)), (5, (3, 1)), (4, (3, 0)), (6, (3, 3)), (3, (3, 2))])
def test_open_shell_cisd_and_full_ci_are_lowest_eigenvectors(orbitals, electrons):
    hamiltonian = random_hamiltonian(orbitals, electrons, np.random.default_rng(15))
    matrix = matrix_of(hamiltonian)
    table = determinants(orbitals, electrons)
    reference = np.concatenate([np.arange(orbitals) < k for k in electrons])
    allowed = np.flatnonzero((table[:, ~reference]).sum(axis=1) <= 2)
    lowest, vectors = np.linalg.eigh(matrix[np.ix_(allowed, allowed)])
    cisd = reference_state(hamiltonian, "cisd")
    assert cisd.energy(hamiltonian) == pytest.approx(lowest[0], abs=1e-9)
    assert abs(cisd.vector.ravel()[allowed] @ vectors[:, 0]) == pytest.approx(1.0, abs=1e-9)
    full = reference_state(hamiltonian, "fci")
    assert full.energy(hamiltonian) == pytest.approx(np.linalg.eigvalsh(matrix)[0], abs=1e-9)


def test_iterative_and_dense_solutions_agree(monkeypatch):
    from fragkit.states import _solve

    hamiltonian = molecule_hamiltonian("LiH")
    dense = reference_state(hamiltonian, "fci")
    monkeypatch.setattr(_solve, "_DENSE", 0)
    iterative = reference_state(hamiltonian, "fci")
    assert abs(np.vdot(dense.vector, iterative.vector)) == pytest.approx(1.0, abs=1e-12)


def test_missed_convergence_is_reported(monkeypatch):
    from fragkit.states import _solve

    monkeypatch.setattr(_solve, "_RESIDUAL", 1e-30)
    state = reference_state(molecule_hamiltonian("LiH"), "fci")
    assert not state.converged
    assert "did not converge" in state.message
    assert "not converged" in state.description


def test_hartree_fock_energy_and_quantum_limit():
    hamiltonian = molecule_hamiltonian("H2O")
    state = reference_state(hamiltonian, "hf")
    assert state.energy(hamiltonian) == pytest.approx(mean_field("H2O").e_tot, abs=1e-9)
    vector = np.zeros((21, 21))
    vector[0, 0] = 1.0
    same = ReferenceState.from_ci_vector(hamiltonian, vector)
    assert state.variance(hamiltonian) == pytest.approx(same.variance(hamiltonian), rel=1e-10)


@given(
    seed=st.integers(0, 2**31),
    order=st.permutations(range(4)),
    signs=st.lists(st.sampled_from([-1, 1]), min_size=4, max_size=4),
)
def test_orbital_signs_do_not_matter_and_order_only_permutes(seed, order, signs):
    state = random_state(4, (2, 1), 16)
    u = random_rotation(4, np.random.default_rng(seed))
    mean, covariance = state.moments(u)
    flipped = state.moments(u * np.array(signs, dtype=float))
    np.testing.assert_allclose(flipped[0], mean, atol=1e-12)
    np.testing.assert_allclose(flipped[1], covariance, atol=1e-12)
    rng = np.random.default_rng(seed)
    fragment = fragkit.Fragment.from_coefficients(u, rng.normal(size=20))
    moved = fragment.reordered(order, signs)
    variances = [f.coefficients @ state.moments(f.rotation)[1] @ f.coefficients for f in (fragment, moved)]
    assert variances[0] == pytest.approx(variances[1], rel=1e-10, abs=1e-12)


@given(seed=st.integers(0, 2**31))
def test_basis_change_of_state_and_rotation_together_changes_nothing(seed):
    """The moments in basis U of |ψ⟩ are those in basis VᵀU of the same state written in the orbitals V."""
    rng = np.random.default_rng(seed)
    state = random_state(4, (2, 2), 17)
    u, v = random_rotation(4, rng), random_rotation(4, rng)
    moved = CIState(state.rotated_vector(v), 4, (2, 2))
    for one, other in zip(state.moments(u), moved.moments(v.T @ u), strict=True):
        np.testing.assert_allclose(one, other, atol=1e-11)


def test_ten_orbitals_ten_electrons_without_a_feature_table():
    """63,504 determinants; a table of determinants × features would take 56 MB."""
    rng = np.random.default_rng(18)
    vector = rng.normal(size=(252, 252))
    state = CIState(vector / np.linalg.norm(vector), 10, (5, 5))
    u = random_rotation(10, rng)
    state.moments(u)
    tracemalloc.start()
    state.moments(u)
    _, peak = tracemalloc.get_traced_memory()
    tracemalloc.stop()
    assert peak < 25e6
    mean, _ = state.moments(u)
    assert mean[-10:].sum() == pytest.approx(10.0, abs=1e-10)


def test_large_determinant_needs_no_ci_vector():
    state = DeterminantState.lowest(24, (12, 11))
    u = random_rotation(24, np.random.default_rng(19))
    mean, covariance = state.moments(u)
    assert mean[-24:].sum() == pytest.approx(23.0, abs=1e-10)
    # The total number of electrons does not fluctuate.
    assert covariance[-24:, -24:].sum() == pytest.approx(0.0, abs=1e-10)
    drawn = state.sample(u, 2000, 20)
    assert np.all(drawn[:, :24].sum(axis=1) == 12)
    assert np.all(drawn[:, 24:].sum(axis=1) == 11)
    spread = np.sqrt(np.diag(covariance)[-24:] / 2000)
    assert np.all(np.abs((drawn[:, :24] + drawn[:, 24:]).mean(axis=0) - mean[-24:]) < 5 * spread)


def test_digests_tell_states_apart():
    hamiltonian = molecule_hamiltonian("H2")
    states = [reference_state(hamiltonian, m, noise=p) for m in ("hf", "fci") for p in (0.0, 0.01, 0.02)]
    assert len({s.digest for s in states}) == 6
    assert reference_state(hamiltonian, "fci").digest == states[3].digest
    assert states[3].hamiltonian_digest == hamiltonian.digest == states[4].hamiltonian_digest
    assert "0.01 × maximally mixed" in states[4].description


@pytest.mark.parametrize(
    ("call", "words"),
    [
        (lambda h: reference_state(h, "ccsd"), '`method` must be "hf", "cisd" or "fci"'),
        (lambda h: reference_state("h2"), "`hamiltonian` must be a Hamiltonian"),
        (lambda h: reference_state(h, "hf", noise=1.5), "`noise` must be from 0 to 1"),
        (lambda h: reference_state(h, "hf", noise="much"), "`noise` must be a number from 0 to 1"),
        (lambda h: reference_state(h, "hf", noise=float("nan")), "`noise` must be from 0 to 1"),
        (lambda h: reference_state(h, "fci", memory=1e4), "225 determinants"),
        (lambda h: reference_state(h, "fci", memory="all"), "`memory` must be a number above zero"),
        (lambda h: ReferenceState.from_ci_vector("h2", np.eye(3)), "`hamiltonian` must be a Hamiltonian"),
        (lambda h: mixture([3]), "`parts` must be a list of pairs"),
        (lambda h: ReferenceState.from_ci_vector(h, np.eye(3)), "`vector` must have shape"),
        (lambda h: ReferenceState.from_ci_vector(h, np.full((15, 15), np.nan)), "`vector` must be finite"),
        (lambda h: ReferenceState.from_ci_vector(h, np.eye(15)), "`vector` must be normalised"),
        (lambda h: reference_state(h, "hf").moments(np.ones((6, 6))), "`rotation` must be orthogonal"),
        (lambda h: reference_state(h, "hf").moments(np.eye(5)), "`rotation` must have shape"),
        (lambda h: reference_state(h, "hf").sample(np.eye(6), -1), "`shots` must be at least 0"),
        (lambda h: reference_state(h, "hf").sample(np.eye(6), 1, rng="seed"), "`rng` must be"),
        (lambda h: reference_state(h, "hf").variance_and_gradient(np.eye(6), np.zeros(42)), "`rotations` must have"),
        (
            lambda h: reference_state(h, "hf").variance_and_gradient(np.eye(6)[None], np.zeros((2, 42))),
            "`coefficients` must have",
        ),
        (
            lambda h: reference_state(h, "hf").variance_and_gradient(2 * np.eye(6)[None], np.zeros((1, 42))),
            "`rotations` must be orthogonal",
        ),
        (
            lambda h: reference_state(h, "hf").variance_and_gradient(np.eye(6)[None], np.zeros((1, 42)), precision="x"),
            "`precision` must be",
        ),
        (lambda h: DeterminantState(np.ones((3, 1)), np.ones((3, 1))), "`alpha_orbitals` must have orthonormal"),
        (lambda h: GaussianState(2 * np.eye(3)), "`density_alpha` must have eigenvalues in 0 … 1"),
        (lambda h: GaussianState(0.5 * np.eye(3)), "a whole number of electrons"),
        (lambda h: GaussianState(np.array([[0.5, 0.1], [0.2, 0.5]])), "`density_alpha` must be symmetric"),
    ],
)
def test_wrong_input_is_named(call, words):
    with pytest.raises(InputError) as caught:
        call(molecule_hamiltonian("LiH"))
    assert words in str(caught.value)


def test_states_refuse_other_hamiltonians():
    state = reference_state(molecule_hamiltonian("H2"), "hf")
    with pytest.raises(MismatchError, match="like the state"):
        state.energy(molecule_hamiltonian("LiH"))
