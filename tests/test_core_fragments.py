"""Fragments, their sums, conversions and the bound on what a residual can do, against matrices in Fock space.

The reference operators are built from OpenFermion's sparse ladder operators by the definitions, without fragkit's
tensors: rotated number operators first, then polynomials of them.
"""

from functools import cache
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from molecules import FULL_CI, energy_of, molecule_hamiltonian

from fragkit.core import (
    Fragment,
    Fragmentation,
    Hamiltonian,
    InputError,
    MismatchError,
    energy_bound,
    evaluate_features,
    evaluate_polynomial,
    feature_count,
    pack_features,
    pair_indices,
    residual_norm,
    symmetrise_two_body,
    unpack_features,
)
from fragkit.core._operator_tensors import OperatorTensors


@cache
def ladder(n: int) -> list[list[np.ndarray]]:
    """Dense a†_pσ on 4ⁿ states, [spin][orbital]; OpenFermion's interleaved order of spin-orbitals."""
    from openfermion import FermionOperator, get_sparse_operator

    return [
        [get_sparse_operator(FermionOperator(f"{2 * p + s}^"), n_qubits=2 * n).toarray().real for p in range(n)]
        for s in (0, 1)
    ]


def rotated_numbers(n: int, u: np.ndarray) -> list[list[np.ndarray]]:
    """n_iσ in the orbitals that are the columns of u: ã†_i = Σ_p U_pi a†_p."""
    created = [[sum(u[p, i] * ladder(n)[s][p] for p in range(n)) for i in range(n)] for s in (0, 1)]
    return [[a @ a.T for a in row] for row in created]


def operator_of(fragment: Fragment) -> np.ndarray:
    """The fragment by its definition."""
    n = fragment.orbitals
    alpha, beta = rotated_numbers(n, fragment.rotation)
    total = np.zeros_like(alpha[0])
    for i in range(n):
        total += fragment.linear[i] * (alpha[i] + beta[i])
        total += fragment.opposite_spin[i, i] * alpha[i] @ beta[i]
        for j in range(i + 1, n):
            total += fragment.opposite_spin[i, j] * (alpha[i] @ beta[j] + alpha[j] @ beta[i])
            total += fragment.same_spin[i, j] * (alpha[i] @ alpha[j] + beta[i] @ beta[j])
    return total


def hamiltonian_operator(ham: Hamiltonian) -> np.ndarray:
    """H by its definition: constant + Σ h E + ½ Σ (pq|rs)(E_pq E_rs − δ_qr E_ps)."""
    n = ham.orbitals
    created = ladder(n)
    excite = [[sum(created[s][p] @ created[s][q].T for s in (0, 1)) for q in range(n)] for p in range(n)]
    total = ham.constant * np.eye(4**n)
    for p in range(n):
        for q in range(n):
            total = total + ham.one_body[p, q] * excite[p][q]
            for r in range(n):
                for s in range(n):
                    product = excite[p][q] @ excite[r][s] - (excite[p][s] if q == r else 0.0)
                    total = total + 0.5 * ham.two_body[p, q, r, s] * product
    return total


def matrix_of(operator: Any, n: int) -> np.ndarray:
    from openfermion import get_sparse_operator

    return get_sparse_operator(operator, n_qubits=2 * n).toarray()


@cache
def sector(n: int, electrons: tuple[int, int]) -> np.ndarray:
    """Indices of the states with these electron numbers; spin-orbital 0 is the most significant bit."""
    states = np.arange(4**n)
    bits = states[:, None] >> np.arange(2 * n)[::-1] & 1
    return np.flatnonzero((bits[:, 0::2].sum(axis=1) == electrons[0]) & (bits[:, 1::2].sum(axis=1) == electrons[1]))


def random_fragment(n: int, rng: np.random.Generator) -> Fragment:
    rotation = np.linalg.qr(rng.normal(size=(n, n)))[0]
    return Fragment.from_coefficients(rotation, rng.normal(size=feature_count(n)))


def random_hamiltonian(n: int, rng: np.random.Generator, electrons: tuple[int, int]) -> Hamiltonian:
    one_body = rng.normal(size=(n, n))
    return Hamiltonian(
        rng.normal(), one_body + one_body.T, symmetrise_two_body(rng.normal(size=(n,) * 4)), electrons=electrons
    )


sizes = st.integers(1, 3)
seeds = st.integers(0, 2**32)


@given(n=sizes, seed=seeds)
@settings(max_examples=10)
def test_sum_of_fragments_is_the_sum_of_their_operators(n: int, seed: int) -> None:
    rng = np.random.default_rng(seed)
    ham = random_hamiltonian(n, rng, (1, 1))
    fragments = [random_fragment(n, rng), Fragment.one_body(np.eye(n), rng.normal(size=n)), random_fragment(n, rng)]
    total = ham.constant * np.eye(4**n) + sum(operator_of(fragment) for fragment in fragments)
    exported = Fragmentation.of(ham, fragments).to_openfermion()
    assert np.max(np.abs(matrix_of(exported, n) - total)) < 1e-10


@given(n=sizes, seed=seeds)
@settings(max_examples=10)
def test_exported_hamiltonian_is_its_definition(n: int, seed: int) -> None:
    ham = random_hamiltonian(n, np.random.default_rng(seed), (1, 0))
    assert np.max(np.abs(matrix_of(ham.to_openfermion(), n) - hamiltonian_operator(ham))) < 1e-10


@given(n=sizes, seed=seeds)
@settings(max_examples=10)
def test_plain_fragment_is_half_the_sum_over_pairs(n: int, seed: int) -> None:
    rng = np.random.default_rng(seed)
    u = np.linalg.qr(rng.normal(size=(n, n)))[0]
    coefficients = rng.normal(size=(n, n))
    coefficients = coefficients + coefficients.T
    alpha, beta = rotated_numbers(n, u)
    number = [a + b for a, b in zip(alpha, beta, strict=True)]
    expected = sum(0.5 * coefficients[i, j] * number[i] @ number[j] for i in range(n) for j in range(n))
    assert np.max(np.abs(operator_of(Fragment.plain(u, coefficients)) - expected)) < 1e-11


@given(n=sizes, seed=seeds, count=st.integers(1, 3), electrons=st.tuples(st.integers(0, 3), st.integers(0, 3)))
@settings(max_examples=60)
def test_bound_holds_for_every_state_of_the_sector(n: int, seed: int, count: int, electrons: tuple[int, int]) -> None:
    """The largest |eigenvalue| of Hamiltonian minus fragments in the sector never exceeds the bound."""
    electrons = min(electrons[0], n), min(electrons[1], n)
    rng = np.random.default_rng(seed)
    ham = random_hamiltonian(n, rng, electrons)
    fragments = [random_fragment(n, rng) for _ in range(count)]
    made = Fragmentation.of(ham, fragments)
    residual = hamiltonian_operator(ham) - ham.constant * np.eye(4**n) - sum(map(operator_of, fragments))
    inside = sector(n, electrons)
    worst = np.max(np.abs(np.linalg.eigvalsh(residual[np.ix_(inside, inside)])))
    assert worst <= made.energy_bound * (1 + 1e-10) + 1e-10


@given(n=sizes, seed=seeds, electrons=st.tuples(st.integers(0, 3), st.integers(0, 3)))
@settings(max_examples=40)
def test_bound_holds_for_plain_fragments_of_part_of_a_hamiltonian(
    n: int, seed: int, electrons: tuple[int, int]
) -> None:
    """The usual case: the low-rank form cut short, where the bound by squares of one-body operators is the smaller."""
    electrons = min(electrons[0], n), min(electrons[1], n)
    rng = np.random.default_rng(seed)
    ham = random_hamiltonian(n, rng, electrons)
    fragments, missing = low_rank_fragments(ham, keep=2)
    made = Fragmentation.of(ham, fragments)
    residual = hamiltonian_operator(ham) - ham.constant * np.eye(4**n) - sum(map(operator_of, fragments))
    inside = sector(n, electrons)
    worst = np.max(np.abs(np.linalg.eigvalsh(residual[np.ix_(inside, inside)])))
    assert worst <= made.energy_bound * (1 + 1e-10) + 1e-10
    # With the one-body part of the product form split off exactly, only the two-electron tensor is left over.
    assert made.residual_norm == pytest.approx(missing, rel=1e-9, abs=1e-9)


def low_rank_fragments(ham: Hamiltonian, keep: int | None = None) -> tuple[list[Fragment], float]:
    """½ Σ ± (L^Q)² by eigenvectors of the pair matrix, largest first, with the Frobenius norm of what is left."""
    n = ham.orbitals
    values, vectors = np.linalg.eigh(ham.two_body.reshape(n * n, n * n))
    order = np.argsort(-np.abs(values))
    order = order[np.abs(values[order]) > 1e-12]
    kept = order if keep is None else order[:keep]
    levels, u = np.linalg.eigh(ham.one_body_of_products)
    fragments = [Fragment.one_body(u, levels)]
    for k in kept:
        factor = vectors[:, k].reshape(n, n)
        diagonal, u = np.linalg.eigh(0.5 * (factor + factor.T))
        fragments.append(Fragment.plain(u, values[k] * np.outer(diagonal, diagonal)))
    return fragments, float(np.sqrt(np.sum(values[order[len(kept) :]] ** 2)))


@pytest.mark.parametrize("name", ["LiH", "H2O", "NH3"])
def test_bound_of_a_molecule_is_above_the_energy_error_of_full_ci(name: str) -> None:
    ham = molecule_hamiltonian(name)
    # The largest fragments only; the one-body part of the product form is exact.
    fragments, missing = low_rank_fragments(ham, keep=12)
    made = Fragmentation.of(ham, fragments)
    assert made.residual_norm == pytest.approx(missing, rel=1e-8)
    error = abs(energy_of(made.to_hamiltonian()) - FULL_CI[name])
    assert 1e-5 < error < made.energy_bound


@pytest.mark.parametrize("name", ["H2", "LiH", "H2O", "N2"])
def test_complete_fragments_are_the_hamiltonian(name: str) -> None:
    ham = molecule_hamiltonian(name)
    made = Fragmentation.of(ham, low_rank_fragments(ham)[0])
    assert made.residual_norm < 1e-11
    assert made.energy_bound < 1e-9
    back = made.to_hamiltonian()
    assert np.max(np.abs(back.two_body - ham.two_body)) < 1e-11
    assert energy_of(back) == pytest.approx(FULL_CI[name], abs=1e-6)
    assert energy_of(back) == pytest.approx(energy_of(ham), abs=1e-9)


@given(n=sizes, seed=seeds)
@settings(max_examples=20)
def test_residual_is_zero_exactly_for_equal_operators(n: int, seed: int) -> None:
    """Same-spin tensors that differ in their symmetric part are the same operator; any other change is seen."""
    rng = np.random.default_rng(seed)
    spin_free = symmetrise_two_body(rng.normal(size=(n,) * 4))
    shift = rng.normal(size=(n,) * 4)
    shift = shift + shift.transpose(0, 3, 2, 1)
    zero = np.zeros((n, n))
    same_operator = OperatorTensors(zero, np.zeros((n,) * 4), shift)
    assert residual_norm(same_operator) < 1e-12
    assert energy_bound(same_operator, (n, n)) < 1e-10
    assert residual_norm(OperatorTensors(zero + np.eye(n), 0 * shift, 0 * shift)) > 0.5
    assert residual_norm(OperatorTensors(zero, spin_free, spin_free)) > 1e-3


def test_bound_is_sharp_for_a_one_body_residual() -> None:
    levels = np.array([-3.0, 1.0, 2.0])
    zero = np.zeros((3,) * 4)
    residual = OperatorTensors(np.diag(levels), zero, zero)
    # Filled from below or above by each spin: max(|−3 − 3 + 1|, |2 + 2 + 1|).
    assert energy_bound(residual, (2, 1)) == pytest.approx(5.0)
    assert energy_bound(residual, (0, 0)) == 0.0
    assert energy_bound(residual, (3, 3)) == pytest.approx(0.0, abs=1e-12)


def test_bound_counts_the_one_body_part_of_the_product_form() -> None:
    """½(n₁ − n₂)² normal-ordered, without its one-body part, is −½(n₁ + n₂) + ½(n₁ − n₂)²: −2 − 0 in a full shell."""
    level = np.array([1.0, -1.0])
    squared = np.einsum("p,r,pq,rs->pqrs", level, level, np.eye(2), np.eye(2))
    assert energy_bound(OperatorTensors(np.zeros((2, 2)), squared, squared), (2, 2)) >= 2.0
    # Twice that one-body part is taken away: −4.
    assert energy_bound(OperatorTensors(-0.5 * np.eye(2), squared, squared), (2, 2)) >= 4.0


def test_fragments_of_a_plan_need_not_be_integrals() -> None:
    ham = molecule_hamiltonian("H2")
    odd = Fragment(np.eye(2), np.zeros((2, 2)), np.array([[0.0, 1.0], [1.0, 0.0]]), np.zeros(2))
    made = Fragmentation.of(ham, [odd])
    with pytest.raises(InputError, match=r"same-spin parts .*to_openfermion\(\)"):
        made.to_hamiltonian()
    assert np.max(np.abs(matrix_of(made.to_openfermion(), 2) - operator_of(odd) - ham.constant * np.eye(16))) < 1e-12


@given(n=st.integers(1, 5), seed=seeds)
def test_features_are_packed_in_the_stated_order(n: int, seed: int) -> None:
    rng = np.random.default_rng(seed)
    bits = rng.integers(0, 2, size=(7, 2 * n)).astype(np.uint8)
    values = evaluate_features(bits)
    assert values.shape == (7, feature_count(n))
    for row, features in zip(bits.astype(int), values, strict=True):
        a, b = row[:n], row[n:]
        expected = [a[i] * b[i] if i == j else a[i] * b[j] + a[j] * b[i] for i in range(n) for j in range(i, n)]
        expected += [a[i] * a[j] + b[i] * b[j] for i in range(n) for j in range(i + 1, n)]
        expected += [a[i] + b[i] for i in range(n)]
        assert features.tolist() == expected


@given(n=st.integers(1, 5), seed=seeds)
def test_values_are_features_times_coefficients(n: int, seed: int) -> None:
    rng = np.random.default_rng(seed)
    fragment = random_fragment(n, rng)
    bits = rng.integers(0, 2, size=(9, 2 * n)).astype(np.uint8)
    by_features = evaluate_features(bits) @ fragment.coefficients
    assert np.allclose(fragment.values(bits), by_features, atol=1e-12)
    parts = fragment.opposite_spin, fragment.same_spin, fragment.linear
    assert np.allclose(evaluate_polynomial(bits, *parts), by_features, atol=1e-12)


@given(n=st.integers(1, 5), seed=seeds)
def test_packing_there_and_back(n: int, seed: int) -> None:
    vectors = np.random.default_rng(seed).normal(size=(2, 3, feature_count(n)))
    assert np.array_equal(pack_features(*unpack_features(vectors, n)), vectors)


def test_pair_indices_cannot_be_changed() -> None:
    with pytest.raises(ValueError, match="read-only"):
        pair_indices(3)[0][0] = 5


@given(n=sizes, seed=seeds)
@settings(max_examples=10)
def test_reordered_orbitals_are_the_same_operator(n: int, seed: int) -> None:
    rng = np.random.default_rng(seed)
    fragment = random_fragment(n, rng)
    other = fragment.reordered(rng.permutation(n), rng.choice([-1.0, 1.0], size=n))
    assert np.max(np.abs(operator_of(other) - operator_of(fragment))) < 1e-11


def _parts(**changes: Any) -> dict[str, Any]:
    square = np.zeros((2, 2))
    return {"rotation": np.eye(2), "opposite_spin": square, "same_spin": square, "linear": np.zeros(2), **changes}


@pytest.mark.parametrize(
    ("changes", "message"),
    [
        ({"rotation": np.ones((2, 2))}, "`rotation` must be orthogonal"),
        ({"rotation": np.eye(3)}, r"`opposite_spin` must have shape \(3, 3\)"),
        ({"opposite_spin": np.array([[0.0, 1.0], [0.0, 0.0]])}, "`opposite_spin` must be symmetric"),
        ({"same_spin": np.eye(2)}, "`same_spin` must have a zero diagonal.*`linear`"),
        ({"same_spin": np.array([[0.0, np.inf], [np.inf, 0.0]])}, "`same_spin` must be finite"),
        ({"linear": np.zeros(3)}, r"`linear` must have shape \(2,\)"),
    ],
)
def test_fragments_that_are_refused(changes: dict[str, Any], message: str) -> None:
    with pytest.raises(InputError, match=message):
        Fragment(**_parts(**changes))


def test_fragmentations_that_are_refused() -> None:
    ham = molecule_hamiltonian("H2")
    with pytest.raises(InputError, match="at least one fragment"):
        Fragmentation.of(ham, [])
    with pytest.raises(InputError, match=r"`fragments\[1\]` must have 2 orbitals .*got 3"):
        Fragmentation.of(ham, [Fragment.one_body(np.eye(2), [0, 0]), Fragment.one_body(np.eye(3), [0, 0, 0])])
    with pytest.raises(InputError, match="`order` must be a permutation"):
        Fragment.one_body(np.eye(2), [0, 0]).reordered([0, 0])


def test_fragments_of_another_hamiltonian_are_recognised() -> None:
    ham = molecule_hamiltonian("LiH")
    made = Fragmentation.of(ham, [Fragment.one_body(np.eye(6), np.zeros(6))])
    made.check_belongs_to(ham)
    with pytest.raises(MismatchError, match="save the integrals with the fragments"):
        made.check_belongs_to(ham.rotated(np.diag([1.0, -1.0, 1.0, 1.0, 1.0, 1.0])))


def test_fragments_cannot_be_changed() -> None:
    fragment = Fragment.one_body(np.eye(2), [0, 0])
    for array in (fragment.rotation, fragment.opposite_spin, fragment.same_spin, fragment.linear):
        with pytest.raises(ValueError, match="read-only"):
            array[0] = 1.0
    with pytest.raises(AttributeError):
        fragment.linear = np.ones(2)


def test_fragmentation_is_a_sequence_with_a_telling_repr() -> None:
    ham = molecule_hamiltonian("H2")
    made = Fragmentation.of(ham, [Fragment.one_body(np.eye(2), [0, 0])], converged=False, method="by hand")
    assert len(made) == 1
    assert list(made) == [made[0]]
    assert "1 fragments" in repr(made)
    assert "NOT converged" in repr(made)
    assert "one-body" in repr(made[0])
