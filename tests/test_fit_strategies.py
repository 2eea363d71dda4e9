"""Fragments by LowRank, Greedy and Joint: they sum to the Hamiltonian, as few as promised, and say how they ended."""

from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from molecules import FULL_CI, energy_of, molecule_hamiltonian

from fragkit.core import Fragment, Fragmentation, Hamiltonian, InputError, MismatchError, givens_count, one_norm
from fragkit.fit import Controls, Fit, Greedy, Joint, LowRank, Strategy, fragment

# Symmetric tensors of n orbitals have P(P+1)/2 numbers, P = n(n+1)/2, a fragment has n²: one more fragment than the
# ratio, at which Levenberg-Marquardt is known to converge from every start (computed apart from this package).
ONE_ABOVE_THE_BOUND = [("H2", 2), ("LiH", 8), ("BeH2", 10), ("H2O", 10)]


def tensor_of(fragments: Fragmentation) -> np.ndarray:
    """Σ_m Σ_ij λ_ij U_pi U_qi U_rj U_sj, written out."""
    total = np.zeros((fragments.orbitals,) * 4)
    for one in fragments:
        u = one.rotation
        total += np.einsum("ij,pi,qi,rj,sj->pqrs", one.opposite_spin, u, u, u, u, optimize=True)
    return total


def random_hamiltonian(n: int, seed: int, *, definite: bool = True) -> Hamiltonian:
    rng = np.random.default_rng(seed)
    factors = rng.normal(size=(n, n, n))
    signs = np.ones(n) if definite else np.where(np.arange(n) % 2 == 0, 1.0, -1.0)
    one_body = rng.normal(size=(n, n))
    return Hamiltonian(
        0.3, one_body + one_body.T, factors=factors + factors.transpose(0, 2, 1), factor_signs=signs, electrons=(1, 1)
    )


@pytest.mark.parametrize(("name", "count"), ONE_ABOVE_THE_BOUND)
@pytest.mark.parametrize("seed", [0, 1, 2])
def test_one_fragment_above_the_counting_bound_is_exact_for_every_seed(name: str, count: int, seed: int) -> None:
    hamiltonian = molecule_hamiltonian(name)
    fragments = fragment(hamiltonian, Joint(count=count), rng=seed)
    assert fragments.converged
    assert len(fragments) == count + 1
    assert np.linalg.norm(tensor_of(fragments) - hamiltonian.two_body) <= 1.001e-8
    assert fragments.residual_norm <= 1.001e-8


def test_ammonia_in_twelve_fragments() -> None:
    fragments = fragment(molecule_hamiltonian("NH3"), Joint(count=12))
    assert fragments.converged
    assert fragments.residual_norm <= 1.001e-8
    assert "Cholesky" in fragments.method


@pytest.mark.parametrize(("name", "count"), [("LiH", 7), ("H2O", 9)])
def test_several_starts_reach_the_counting_bound(name: str, count: int) -> None:
    fragments = fragment(molecule_hamiltonian(name), Joint(count=count, tol=1e-6, starts=30))
    assert fragments.converged
    assert np.linalg.norm(tensor_of(fragments) - molecule_hamiltonian(name).two_body) <= 1.001e-6


@pytest.mark.parametrize("one_body", ["separate", "absorbed"])
@pytest.mark.parametrize("strategy", [LowRank(), Joint(count=8), Greedy(tol=1e-8)], ids=lambda s: type(s).__name__)
def test_the_sum_of_exact_fragments_has_the_full_ci_energy(strategy: Strategy, one_body: str) -> None:
    """Lithium hydride, energies by pyscf."""
    fragments = fragment(molecule_hamiltonian("LiH"), strategy, one_body=one_body)
    assert sum(f.is_one_body for f in fragments) == (1 if one_body == "separate" else 0)
    assert energy_of(fragments.to_hamiltonian()) == pytest.approx(FULL_CI["LiH"], abs=1e-6)
    assert abs(energy_of(fragments.to_hamiltonian()) - energy_of(molecule_hamiltonian("LiH"))) < 1e-7


# What a plain greedy search needed for a relative residual of 1e-3, computed apart from this package.
@pytest.mark.parametrize(("name", "most"), [("LiH", 16), ("H2O", 22), ("NH3", 29)])
def test_greedy_needs_no_more_fragments_than_a_plain_greedy_search(name: str, most: int) -> None:
    hamiltonian = molecule_hamiltonian(name)
    fragments = fragment(hamiltonian, Greedy(tol=1e-3))
    assert fragments.converged
    assert len(fragments) - 1 <= most
    assert fragments.residual_norm <= 1.001e-3 * np.linalg.norm(hamiltonian.two_body)


@pytest.mark.parametrize("refit", [True, False])
def test_greedy_residual_never_rises(refit: bool) -> None:
    hamiltonian = random_hamiltonian(4, 3, definite=False)
    norms = [np.linalg.norm(hamiltonian.two_body)]
    for count in range(1, 7):
        norms.append(fragment(hamiltonian, Greedy(count=count, tol=1e-12, refit=refit)).residual_norm)
    assert all(after <= before * (1 + 1e-12) for before, after in pairwise(norms))
    assert norms[-1] < norms[0]


def test_one_greedy_step_finds_a_tensor_that_is_one_fragment() -> None:
    rng = np.random.default_rng(2)
    u = np.linalg.qr(rng.normal(size=(5, 5)))[0]
    coefficients = rng.normal(size=(5, 5))
    coefficients = coefficients + coefficients.T
    tensor = np.einsum("ij,pi,qi,rj,sj->pqrs", coefficients, u, u, u, u, optimize=True)
    hamiltonian = Hamiltonian(0.0, np.zeros((5, 5)), tensor, electrons=(1, 1))
    fragments = fragment(hamiltonian, Greedy(tol=1e-4, refit=False))
    assert len(fragments) == 2
    assert fragments.converged


@given(n=st.integers(2, 5), seed=st.integers(0, 10**6), definite=st.booleans())
def test_low_rank_fragments_sum_to_any_tensor(n: int, seed: int, definite: bool) -> None:
    hamiltonian = random_hamiltonian(n, seed, definite=definite)
    fragments = fragment(hamiltonian)
    assert fragments.converged
    assert fragments.residual_norm < 1e-7
    assert np.allclose(tensor_of(fragments), hamiltonian.two_body, atol=1e-8)
    assert len(fragments) <= n + 1


@given(seed=st.integers(0, 10**6))
def test_rotating_the_orbitals_changes_no_residual_of_low_rank(seed: int) -> None:
    hamiltonian = random_hamiltonian(4, seed)
    rotation = np.linalg.qr(np.random.default_rng(seed).normal(size=(4, 4)))[0]
    ours = [fragment(h, LowRank(count=2)).residual_norm for h in (hamiltonian, hamiltonian.rotated(rotation))]
    assert ours[0] == pytest.approx(ours[1], rel=1e-9)


def test_truncated_low_rank_leaves_the_dropped_eigenvalues() -> None:
    hamiltonian = molecule_hamiltonian("H2O")
    values = np.sort(np.abs(np.linalg.eigvalsh(hamiltonian.two_body.reshape(49, 49))))[::-1]
    fragments = fragment(hamiltonian, LowRank(count=10))
    assert not fragments.converged
    assert "raise `count`" in fragments.message
    assert fragments.residual_norm == pytest.approx(np.linalg.norm(values[10:]), rel=1e-10)


@pytest.mark.parametrize("name", ["LiH", "H2O"])
def test_low_rank_orbitals_that_count_alike_are_turned_to_the_fewest_gates(name: str) -> None:
    # Eigenvectors by numpy alone: those of equal eigenvalue, most often zero, come in any orientation.
    hamiltonian = molecule_hamiltonian(name)
    n = hamiltonian.orbitals
    values, vectors = np.linalg.eigh(hamiltonian.two_body.reshape(n * n, n * n))
    kept = np.flatnonzero(np.abs(values) > 1e-7)[::-1]
    plain = [np.linalg.eigh(vectors[:, k].reshape(n, n) + vectors[:, k].reshape(n, n).T)[1] for k in kept]
    fragments = fragment(hamiltonian, LowRank(tol=5e-8))[:-1]
    assert len(fragments) == len(kept)
    gates = sum(givens_count(one.rotation, tolerance=1e-8) for one in fragments)
    assert gates < 0.7 * sum(givens_count(rotation, tolerance=1e-8) for rotation in plain)
    for one in fragments:
        spectrum = np.linalg.eigvalsh(one.opposite_spin)
        assert np.max(np.abs(spectrum[[0, -1]])) == pytest.approx(np.linalg.norm(spectrum), rel=1e-9)  # rank one


def test_factors_and_tensor_give_the_same_low_rank_fragments() -> None:
    hamiltonian = molecule_hamiltonian("NH3")
    by_factors = Hamiltonian(
        hamiltonian.constant, hamiltonian.one_body, factors=hamiltonian.factors[:30], electrons=hamiltonian.electrons
    )
    by_tensor = Hamiltonian(
        hamiltonian.constant, hamiltonian.one_body, by_factors.two_body, electrons=hamiltonian.electrons
    )
    one, two = fragment(by_factors), fragment(by_tensor)
    assert len(one) == len(two) == 31
    for a, b in zip(one, two, strict=True):
        assert np.linalg.norm(a.opposite_spin) == pytest.approx(np.linalg.norm(b.opposite_spin), rel=1e-7)


def test_joint_without_a_count_finds_the_smallest() -> None:
    hamiltonian = molecule_hamiltonian("LiH")
    fragments = fragment(hamiltonian, Joint(tol=3e-2, starts=2))
    fewer = fragment(hamiltonian, Joint(count=len(fragments) - 2, tol=3e-2, starts=2))
    assert fragments.converged
    assert not fewer.converged
    assert fragments.residual_norm <= 3e-2 < fewer.residual_norm
    assert f"with {len(fragments) - 2} the best" in fragments.message


@pytest.mark.parametrize("start", ["low rank", "greedy", "given"])
def test_joint_starts_where_it_is_told_to(start: str) -> None:
    hamiltonian = molecule_hamiltonian("LiH")
    begin = fragment(hamiltonian, LowRank(count=7)) if start == "given" else start
    fragments = fragment(hamiltonian, Joint(count=8, start=begin))
    assert fragments.converged
    assert len(fragments) == 9


def test_joint_of_its_own_result_ends_at_once() -> None:
    hamiltonian = molecule_hamiltonian("LiH")
    first = fragment(hamiltonian, Joint(count=8))
    again = fragment(hamiltonian, Joint(count=8, start=first))
    assert again.iterations == 0
    assert again.residual_norm == pytest.approx(first.residual_norm, rel=1e-3)


@pytest.mark.parametrize("method", ["dense", "matrix-free"])
def test_both_methods_converge_and_are_named(method: str) -> None:
    hamiltonian = random_hamiltonian(4, 11)
    fragments = fragment(hamiltonian, Joint(count=5, method=method, tol=1e-6))
    assert fragments.converged
    assert fragments.residual_norm <= 1.001e-6
    assert ("Cholesky" in fragments.method) == (method == "dense")


def test_the_same_seed_gives_the_same_fragments_and_another_seed_others() -> None:
    hamiltonian = molecule_hamiltonian("LiH")
    one, two, other = (fragment(hamiltonian, Joint(count=8), rng=seed) for seed in (4, 4, 5))
    assert all(np.array_equal(a.coefficients, b.coefficients) for a, b in zip(one, two, strict=True))
    assert not np.allclose(one[0].coefficients, other[0].coefficients)


def test_a_penalty_makes_coefficients_smaller_and_a_weight_the_one_norm() -> None:
    hamiltonian = molecule_hamiltonian("H2O")
    plain, small, light = (
        fragment(hamiltonian, Joint(count=10, **options))
        for options in ({}, {"penalty": 1e-3}, {"one_norm_weight": 1e-3})
    )
    assert plain.converged
    assert small.converged
    assert light.converged
    squares = [sum(float(np.sum(f.opposite_spin**2)) for f in fragments) for fragments in (plain, small)]
    assert squares[1] < 0.9 * squares[0]
    assert light.one_norm < 0.95 * plain.one_norm


def test_too_few_fragments_are_reported_with_a_next_step() -> None:
    fragments = fragment(molecule_hamiltonian("LiH"), Joint(count=4, starts=1))
    assert not fragments.converged
    assert fragments.residual_norm > 1e-4
    assert "raise `count`" in fragments.message
    assert "an exact fit needs about 7" in fragments.message
    assert fragments.iterations > 0
    assert fragments.seconds > 0


def test_one_body_that_cannot_be_absorbed_stays_and_is_stated() -> None:
    """One fragment of the Hubbard dimer's interaction spans two of three one-body numbers: not the hopping."""
    on_site = np.zeros((2, 2, 2, 2))
    on_site[0, 0, 0, 0] = on_site[1, 1, 1, 1] = 4.0
    hamiltonian = Hamiltonian(0.0, np.array([[0.0, -1.0], [-1.0, 0.0]]), on_site, electrons=(1, 1))
    fragments = fragment(hamiltonian, Greedy(tol=1e-6), one_body="absorbed")
    assert len(fragments) == 2
    assert fragments[1].is_one_body
    assert "do not span" in fragments.message
    # Two sites, two electrons: U/2 − √(U²/4 + 4t²), textbook.
    assert energy_of(fragments.to_hamiltonian()) == pytest.approx(2 - np.sqrt(8), abs=1e-9)


def test_one_norm_equals_the_sum_of_pauli_coefficients_of_a_diagonal_hamiltonian() -> None:
    """In one basis the reflections are Pauli Z strings; OpenFermion's Jordan-Wigner transform counts them."""
    from openfermion import get_fermion_operator, jordan_wigner

    rng = np.random.default_rng(8)
    coefficients = rng.normal(size=(3, 3))
    fragments = Fragmentation.of(
        Hamiltonian(0.0, np.zeros((3, 3)), np.zeros((3,) * 4), electrons=(1, 1)),
        [
            Fragment.plain(np.eye(3), coefficients + coefficients.T),
            Fragment.one_body(np.eye(3), rng.normal(size=3)),
        ],
    )
    terms = jordan_wigner(get_fermion_operator(fragments.to_openfermion())).terms
    expected = sum(abs(value) for term, value in terms.items() if term)
    assert one_norm(fragments.fragments) == pytest.approx(expected, rel=1e-10)
    assert fragments.one_norm == pytest.approx(expected, rel=1e-10)


class OneOrbitalBasis:
    """A strategy of a user's own: whatever is diagonal in the given orbitals."""

    def fit(self, hamiltonian: Hamiltonian, controls: Controls) -> Fit:
        n = hamiltonian.orbitals
        diagonal = np.einsum("iijj->ij", hamiltonian.two_body)[None]
        rotations = np.eye(n)[None]
        rest = hamiltonian.two_body.copy()
        rest[np.arange(n)[:, None], np.arange(n)[:, None], np.arange(n), np.arange(n)] = 0.0
        residual = float(np.linalg.norm(rest))
        controls.update(rotations, diagonal, residual, 1)
        return Fit(rotations, diagonal, residual, False, "Only the diagonal; use Joint.", "diagonal", 1)


def test_a_new_strategy_needs_no_registration() -> None:
    hamiltonian = molecule_hamiltonian("H2")
    fragments = fragment(hamiltonian, OneOrbitalBasis())
    assert fragments.method == "diagonal"
    assert not fragments.converged
    # Of a symmetry-adapted minimal basis the four entries (12|12), (12|21), (21|12), (21|21) are left, all equal.
    assert fragments.residual_norm == pytest.approx(2 * hamiltonian.two_body[0, 1, 0, 1], rel=1e-10)


def test_a_tensor_that_is_zero_needs_only_the_one_body_fragment() -> None:
    hamiltonian = Hamiltonian(1.0, np.diag([-1.0, 0.5]), np.zeros((2,) * 4), electrons=(1, 0))
    for strategy in (LowRank(), Greedy()):
        fragments = fragment(hamiltonian, strategy)
        assert len(fragments) == 1
        assert fragments.converged


@pytest.mark.parametrize(
    ("make", "words"),
    [
        (lambda: LowRank(tol=0.0), "`tol`"),
        (lambda: LowRank(count=0), "`count`"),
        (lambda: Greedy(starts=0), "`starts`"),
        (lambda: Greedy(tol=float("nan")), "`tol`"),
        (lambda: Joint(count=1.5), "`count`"),
        (lambda: Joint(penalty=-1.0), "`penalty`"),
        (lambda: Joint(method="fast"), "`method`"),
        (lambda: Joint(start="somewhere"), "`start`"),
        (lambda: Joint(seconds=-3.0), "`seconds`"),
        (lambda: fragment("water.fcidump"), "`hamiltonian`"),
        (lambda: fragment(molecule_hamiltonian("H2"), Joint), "`strategy`"),
        (lambda: fragment(molecule_hamiltonian("H2"), "joint"), "`strategy`"),
        (lambda: fragment(molecule_hamiltonian("H2"), one_body="gone"), "`one_body`"),
        (lambda: fragment(molecule_hamiltonian("H2"), on_interrupt="ignore"), "`on_interrupt`"),
        (lambda: fragment(molecule_hamiltonian("H2"), resume=True), "`checkpoint`"),
        (lambda: fragment(molecule_hamiltonian("H2"), checkpoint="fit.json"), "`checkpoint`"),
    ],
)
def test_bad_arguments_are_named(make, words: str) -> None:
    with pytest.raises(InputError, match=words):
        make()


def test_fragments_of_another_hamiltonian_are_refused_as_start() -> None:
    other = fragment(molecule_hamiltonian("BeH2"), LowRank(count=5))
    with pytest.raises(MismatchError, match="digest"):
        fragment(molecule_hamiltonian("H2O"), Joint(count=10, start=other))
