"""The Hamiltonian, its tensors and its checks."""

from typing import Any

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from molecules import FULL_CI, energy_of, full_ci, molecule_hamiltonian, molecule_integrals

from fragkit.core import (
    Hamiltonian,
    InputError,
    factorise_two_body,
    pack_pairs,
    pivoted_cholesky,
    rotate_one_body,
    rotate_two_body,
    symmetrise_two_body,
    symmetry_violation,
    unpack_pairs,
)


def random_integrals(n: int, seed: int) -> tuple[np.ndarray, np.ndarray]:
    """One-body and two-body integrals with all symmetries; the two-body part is indefinite."""
    rng = np.random.default_rng(seed)
    one_body = rng.normal(size=(n, n))
    return one_body + one_body.T, symmetrise_two_body(rng.normal(size=(n,) * 4))


def random_rotation(n: int, seed: int) -> np.ndarray:
    """Orthogonal, not symmetric, determinant of either sign."""
    return np.linalg.qr(np.random.default_rng(seed).normal(size=(n, n)))[0]


def test_textbook_minimal_basis_hydrogen() -> None:
    """H2, STO-3G, 1.4 bohr: Szabo & Ostlund, Modern Quantum Chemistry, Dover 1996, sections 3.5.2 and 4.1.

    Their table has h11, h22, J11, J12, J22, K12; RHF −1.1167 and full CI −1.1373 hartree.
    """
    from pyscf import gto, scf

    import fragkit

    mf = scf.RHF(gto.M(atom="H 0 0 0; H 0 0 1.4", unit="bohr", basis="sto-3g", verbose=0)).run()
    ham = fragkit.from_pyscf(mf)
    two = ham.two_body
    measured = [
        ham.one_body[0, 0],
        ham.one_body[1, 1],
        two[0, 0, 0, 0],
        two[0, 0, 1, 1],
        two[1, 1, 1, 1],
        two[0, 1, 0, 1],
    ]
    assert measured == pytest.approx([-1.2528, -0.4756, 0.6746, 0.6636, 0.6975, 0.1813], abs=6e-5)
    assert ham.determinant_energy() == pytest.approx(-1.1167, abs=6e-5)
    assert energy_of(ham) == pytest.approx(-1.1373, abs=6e-5)
    # The doubly excited determinant: 2 h22 + J22 + 1/R.
    assert ham.determinant_energy([1], [1]) == pytest.approx(2 * -0.4756 + 0.6975 + 1 / 1.4, abs=2e-4)


@pytest.mark.parametrize("by_factors", [False, True])
@pytest.mark.parametrize("electrons", [(2, 2), (3, 1), (0, 2), (4, 4), (0, 0)])
def test_determinant_energies_are_the_diagonal_of_pyscfs_matrix(electrons: tuple[int, int], by_factors: bool) -> None:
    from itertools import combinations

    from pyscf import fci

    n = 4
    one_body, two_body = random_integrals(n, 3)
    ham = Hamiltonian(0.3, one_body, two_body, electrons=electrons)
    if by_factors:
        ham = Hamiltonian(0.3, one_body, factors=ham.factors, factor_signs=ham.factor_signs, electrons=electrons)
    if electrons == (0, 0):
        assert ham.determinant_energy() == 0.3
        return
    diagonal = fci.direct_spin1.make_hdiag(one_body, two_body, n, electrons).ravel() + 0.3
    strings = [[[k for k in range(n) if s >> k & 1] for s in fci.cistring.make_strings(range(n), k)] for k in electrons]
    energies = [ham.determinant_energy(a, b) for a in strings[0] for b in strings[1]]
    assert energies == pytest.approx(diagonal, abs=1e-11)
    lowest = next(iter(combinations(range(n), electrons[0])))
    assert ham.determinant_energy() == pytest.approx(ham.determinant_energy(lowest, range(electrons[1])), abs=1e-12)


@given(n=st.integers(1, 4), seed=st.integers(0, 2**32))
def test_rotation_keeps_the_spectrum_and_undoes(n: int, seed: int) -> None:
    one_body, two_body = random_integrals(n, seed)
    ham = Hamiltonian(0.0, one_body, two_body, electrons=(1, 1))
    u = random_rotation(n, seed + 1)
    turned = ham.rotated(u)
    assert energy_of(turned) == pytest.approx(energy_of(ham), abs=1e-9)
    back = turned.rotated(u.T)
    assert np.max(np.abs(back.one_body - ham.one_body)) < 1e-12
    assert np.max(np.abs(back.two_body - ham.two_body)) < 1e-12


def test_rotation_columns_are_the_new_orbitals() -> None:
    """By the definition, for a generic rotation, which tells U from its transpose."""
    n = 3
    one_body, two_body = random_integrals(n, 1)
    u = random_rotation(n, 2)
    turned = Hamiltonian(0.0, one_body, two_body, electrons=(1, 1)).rotated(u)
    assert turned.one_body[0, 2] == pytest.approx(u[:, 0] @ one_body @ u[:, 2])
    value = np.einsum("pqrs,p,q,r,s->", two_body, u[:, 0], u[:, 1], u[:, 2], u[:, 2])
    assert turned.two_body[0, 1, 2, 2] == pytest.approx(value)
    assert (
        np.max(np.abs(rotate_two_body(two_body, u) - np.einsum("pqrs,pi,qj,rk,sl->ijkl", two_body, u, u, u, u))) < 1e-12
    )
    assert np.allclose(rotate_one_body(one_body, u), u.T @ one_body @ u)


def test_rotation_of_factors_is_that_of_the_tensor() -> None:
    ham = molecule_hamiltonian("LiH")
    by_factors = Hamiltonian(ham.constant, ham.one_body, factors=ham.factors, electrons=ham.electrons)
    u = random_rotation(6, 4)
    assert by_factors.rotated(u).from_factors
    assert np.max(np.abs(by_factors.rotated(u).two_body - ham.rotated(u).two_body)) < 1e-9


@given(n=st.integers(1, 4), seed=st.integers(0, 2**32))
def test_factors_rebuild_indefinite_tensors(n: int, seed: int) -> None:
    ham = Hamiltonian(0.0, *random_integrals(n, seed), electrons=(1, 0))
    rebuilt = np.einsum("Q,Qpq,Qrs->pqrs", ham.factor_signs, ham.factors, ham.factors)
    assert np.max(np.abs(rebuilt - ham.two_body)) < 1e-10
    assert set(np.unique(ham.factor_signs)) <= {-1.0, 1.0}


@pytest.mark.parametrize("name", ["H2", "H2O", "N2"])
def test_coulomb_factors_are_positive_and_few(name: str) -> None:
    two_body = molecule_integrals(name)[2]
    factors, signs = factorise_two_body(two_body)
    assert np.all(signs == 1.0)
    n = len(two_body)
    assert len(factors) <= n * (n + 1) // 2
    assert np.max(np.abs(np.einsum("Qpq,Qrs->pqrs", factors, factors) - two_body)) < 1e-9


def test_cholesky_recognises_what_is_not_semidefinite() -> None:
    assert pivoted_cholesky(np.array([[1.0, 2.0], [2.0, 1.0]])) is None
    assert pivoted_cholesky(np.array([[0.0, 1.0], [1.0, 0.0]])) is None  # no positive pivot, yet not zero
    rows = pivoted_cholesky(np.array([[4.0, 2.0], [2.0, 1.0]]))
    assert rows is not None
    assert rows.shape == (1, 2)
    empty = pivoted_cholesky(np.zeros((3, 3)))
    assert empty is not None
    assert len(empty) == 0


def test_no_interaction_has_no_factors() -> None:
    ham = Hamiltonian(0.0, np.eye(2), np.zeros((2,) * 4), electrons=(1, 1))
    assert ham.factors.shape == (0, 2, 2)
    assert ham.determinant_energy() == 2.0


@given(n=st.integers(1, 4), seed=st.integers(0, 2**32))
def test_packed_pairs_hold_the_whole_tensor(n: int, seed: int) -> None:
    two_body = random_integrals(n, seed)[1]
    assert np.array_equal(unpack_pairs(pack_pairs(two_body), n), two_body)


def test_one_body_part_of_the_product_form() -> None:
    """h_pq − ½ Σ_r (pr|rq); energies of one electron do not see the two-body part, so products must cancel there."""
    ham = molecule_hamiltonian("H2O")
    expected = ham.one_body - 0.5 * np.einsum("prrq->pq", ham.two_body)
    assert np.allclose(ham.one_body_of_products, expected)
    by_factors = Hamiltonian(ham.constant, ham.one_body, factors=ham.factors, electrons=ham.electrons)
    assert np.allclose(by_factors.one_body_of_products, expected, atol=1e-9)


@pytest.mark.parametrize("name", sorted(FULL_CI))
def test_reference_full_ci_energies(name: str) -> None:
    """pyscf 2.14 alone; also the check of the molecules that all other tests use."""
    assert full_ci(name)[0] == pytest.approx(FULL_CI[name], abs=1e-6)
    assert energy_of(molecule_hamiltonian(name)) == pytest.approx(FULL_CI[name], abs=1e-6)


def test_digest_tells_hamiltonians_apart() -> None:
    one_body, two_body = random_integrals(3, 7)
    ham = Hamiltonian(1.0, one_body, two_body, electrons=(2, 1))
    assert Hamiltonian(1.0, one_body.copy(), two_body.copy(), electrons=[2, 1]).digest == ham.digest
    changed = two_body.copy()
    changed[0, 0, 0, 0] += 1e-8
    others = [
        Hamiltonian(1.0 + 1e-8, one_body, two_body, electrons=(2, 1)),
        Hamiltonian(1.0, one_body + 1e-8 * np.eye(3), two_body, electrons=(2, 1)),
        Hamiltonian(1.0, one_body, changed, electrons=(2, 1)),
        Hamiltonian(1.0, one_body, two_body, electrons=(1, 2)),
        ham.rotated(np.diag([1.0, -1.0, 1.0])),
    ]
    assert len({ham.digest, *(other.digest for other in others)}) == 6


def test_digest_does_not_see_the_sign_of_zero() -> None:
    one_body = np.array([[0.0, -0.0], [-0.0, 1.0]])
    ham = Hamiltonian(0.0, one_body, np.zeros((2,) * 4), electrons=(1, 1))
    assert ham.digest == Hamiltonian(-0.0, one_body + 0.0, -np.zeros((2,) * 4), electrons=(1, 1)).digest


def test_immutable() -> None:
    ham = molecule_hamiltonian("H2")
    with pytest.raises(AttributeError, match="immutable"):
        ham.constant = 0.0
    for array in (ham.one_body, ham.two_body, ham.factors, ham.factor_signs, ham.one_body_of_products):
        with pytest.raises(ValueError, match="read-only"):
            array[...] = 0.0


def test_input_arrays_are_neither_changed_nor_kept() -> None:
    one_body, two_body = random_integrals(2, 0)
    before = one_body.copy(), two_body.copy()
    ham = Hamiltonian(0.0, one_body, two_body, electrons=(1, 1))
    assert np.array_equal(one_body, before[0])
    one_body[:] = 9.0
    two_body[:] = 9.0
    assert np.max(np.abs(ham.one_body - before[0])) < 1e-15
    assert np.max(np.abs(ham.two_body - before[1])) < 1e-15


def test_rounding_noise_is_averaged_away() -> None:
    one_body, two_body = random_integrals(3, 5)
    noise = 1e-10 * np.random.default_rng(1).normal(size=(3,) * 4)
    ham = Hamiltonian(0.0, one_body + noise[0, 0], two_body + noise, electrons=(1, 1))
    assert symmetry_violation(np.array(ham.two_body))[1] == 0.0
    assert np.array_equal(ham.one_body, ham.one_body.T)
    assert np.max(np.abs(ham.two_body - two_body)) < 1e-9


def _bad(**changes: Any) -> dict[str, Any]:
    one_body, two_body = random_integrals(2, 0)
    return {"constant": 0.0, "one_body": one_body, "two_body": two_body, "electrons": (1, 1), **changes}


def _broken(index: tuple[int, ...]) -> np.ndarray:
    two_body = random_integrals(2, 0)[1]
    two_body[index] += 0.01
    return two_body


def _physicists() -> np.ndarray:
    return np.array(molecule_hamiltonian("LiH").two_body.transpose(0, 2, 1, 3))


WRONG = {
    "one_body shape": (_bad(one_body=np.zeros((2, 3))), "`one_body` must be a square matrix"),
    "one_body empty": (_bad(one_body=np.zeros((0, 0))), "at least one orbital"),
    "one_body vector": (_bad(one_body=np.zeros(4)), r"`one_body` must have shape \(any, any\) .got \(4,\)"),
    "one_body not symmetric": (_bad(one_body=np.array([[0.0, 1.0], [0.5, 0.0]])), "`one_body` must be symmetric .*0.5"),
    "one_body complex": (_bad(one_body=np.array([[0.0, 1j], [-1j, 0.0]])), "`one_body` must be real .*choose real"),
    "one_body text": (_bad(one_body="abc"), "`one_body` must be an array of real numbers"),
    "one_body not finite": (
        _bad(one_body=np.array([[np.nan, 0], [0, 1]])),
        r"finite .got nan at index \(0, 0\), 1 such",
    ),
    "constant not finite": (_bad(constant=float("inf")), "`constant` must be finite .got inf"),
    "constant array": (_bad(constant=[1.0, 2.0]), "`constant` must have shape"),
    "two_body shape": (_bad(two_body=np.zeros((3,) * 4)), r"`two_body` must have shape \(2, 2, 2, 2\)"),
    "both": (_bad(factors=np.zeros((1, 2, 2))), "exactly one of .*got both"),
    "neither": (_bad(two_body=None), "exactly one of .*got neither"),
    "signs without factors": (_bad(factor_signs=[1.0]), "`factor_signs` must be left out"),
    "bra broken": (_bad(two_body=_broken((0, 1, 0, 0))), r"violation of \(pq\|rs\) = .* by 0.01"),
    "physicists' order": (
        {"constant": 0.0, "one_body": np.eye(6), "two_body": _physicists(), "electrons": (2, 2)},
        r"violation of \(pq\|rs\) = \((qp\|rs|pq\|sr)\).*physicists' .* transposed",
    ),
    "factor not symmetric": (_bad(two_body=None, factors=[[[0.0, 1.0], [0.0, 0.0]]]), "`factors` must be symmetric"),
    "factor shape": (_bad(two_body=None, factors=np.zeros((1, 3, 3))), "`factors` must have shape"),
    "factor sign": (_bad(two_body=None, factors=np.zeros((1, 2, 2)), factor_signs=[0.5]), "must be .1 or -1"),
    "signs length": (_bad(two_body=None, factors=np.zeros((1, 2, 2)), factor_signs=[1, 1]), r"shape \(1,\)"),
    "electrons one number": (_bad(electrons=2), r"`electrons` must be a pair .*electrons=\(5, 5\)"),
    "electrons three": (_bad(electrons=(1, 1, 1)), "pair .*got 3 numbers"),
    "electrons fraction": (_bad(electrons=(1.5, 1)), r"`electrons\[0\]` must be a whole number"),
    "electrons truth": (_bad(electrons=(True, 1)), r"`electrons\[0\]` must be a whole number"),
    "electrons negative": (_bad(electrons=(1, -1)), r"`electrons\[1\]` must be at least 0"),
    "electrons too many": (_bad(electrons=(3, 1)), r"at most 2 electrons per spin.*got \(3, 1\)"),
}


@pytest.mark.parametrize("name", sorted(WRONG))
def test_what_is_refused(name: str) -> None:
    arguments, message = WRONG[name]
    with pytest.raises(InputError, match=message):
        Hamiltonian(**arguments)


@pytest.mark.parametrize(
    ("rotation", "message"),
    [
        (np.eye(3), r"`rotation` must have shape \(2, 2\)"),
        (np.array([[1.0, 0.1], [0.0, 1.0]]), "`rotation` must be orthogonal"),
        (np.array([[1.0, 0.0], [0.0, np.nan]]), "`rotation` must be finite"),
    ],
)
def test_rotations_that_are_refused(rotation: np.ndarray, message: str) -> None:
    with pytest.raises(InputError, match=message):
        molecule_hamiltonian("H2").rotated(rotation)


@pytest.mark.parametrize("listed", [[0, 0], [2], [-1]])
def test_determinants_that_are_refused(listed: list[int]) -> None:
    with pytest.raises(InputError, match=r"`alpha` must list different orbitals in 0 … 1"):
        molecule_hamiltonian("H2").determinant_energy(listed, [0])


def test_repr_is_short_and_complete() -> None:
    text = repr(molecule_hamiltonian("H2"))
    assert text == "Hamiltonian(orbitals=2, electrons=(1, 1), constant=0.529177, full tensor)"
