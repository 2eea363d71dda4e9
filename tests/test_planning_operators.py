"""Rows of operators, and the operators that vanish at fixed electron numbers."""

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from molecules import molecule_hamiltonian

from fragkit.core import Fragment, Fragmentation, evaluate_features, fragment_tensors
from fragkit.fit import fragment
from fragkit.planning._operators.shifts import no_shifts, sector_shifts
from fragkit.planning._operators.space import OperatorSpace


def random_rotations(rng: np.random.Generator, count: int, n: int) -> np.ndarray:
    return np.stack([np.linalg.qr(rng.normal(size=(n, n)))[0] for _ in range(count)])


@given(n=st.integers(1, 5), count=st.integers(1, 3), seed=st.integers(0, 1000))
def test_maps_between_fragments_rows_and_tensors_agree(n: int, count: int, seed: int) -> None:
    rng = np.random.default_rng(seed)
    space = OperatorSpace(n)
    rotations = random_rotations(rng, count, n)
    columns = space.pair_columns(rotations)
    coefficients = rng.normal(size=(count, n * n + n))
    rows = space.apply(columns, rotations, coefficients)
    other = rng.normal(size=space.size)
    # transposes of each other
    assert np.sum(coefficients * space.adjoint(columns, rotations, other)) == pytest.approx(other @ rows, abs=1e-10)
    dense = [space.dense(c, u) for c, u in zip(columns, rotations, strict=True)]
    np.testing.assert_allclose(sum(a @ c for a, c in zip(dense, coefficients, strict=True)), rows, atol=1e-12)
    # the same operator as the tensors of core
    fragments = [Fragment.from_coefficients(u, c) for u, c in zip(rotations, coefficients, strict=True)]
    expected, got = fragment_tensors(fragments), space.tensors(rows)
    np.testing.assert_allclose(got.one_body, expected.one_body, atol=1e-12)
    np.testing.assert_allclose(got.opposite_spin, expected.opposite_spin, atol=1e-12)
    np.testing.assert_allclose(got.exchange_odd, expected.exchange_odd, atol=1e-12)
    # orthonormal: the norm is that of the tensors
    norm = np.linalg.norm(expected.one_body) ** 2 + np.linalg.norm(expected.opposite_spin) ** 2
    assert rows @ rows == pytest.approx(norm + np.linalg.norm(expected.exchange_odd) ** 2 / 4, rel=1e-10)


@pytest.mark.parametrize("name", ["H2", "LiH", "H2O"])
def test_exact_fragments_have_the_rows_of_the_hamiltonian(name: str) -> None:
    hamiltonian = molecule_hamiltonian(name)
    space = OperatorSpace(hamiltonian.orbitals)
    pieces = fragment(hamiltonian)
    assert isinstance(pieces, Fragmentation)
    rotations = np.stack([piece.rotation for piece in pieces])
    coefficients = np.stack([piece.coefficients for piece in pieces])
    rows = space.apply(space.pair_columns(rotations), rotations, coefficients)
    # LowRank drops eigenvectors below 1e-8 Ha
    np.testing.assert_allclose(rows, space.hamiltonian_rows(hamiltonian), atol=2e-8)


def sector_matrices(rotations: np.ndarray, electrons: tuple[int, int]) -> np.ndarray:
    """Every feature of every rotation as a matrix over the determinants of the sector, built with pyscf."""
    from pyscf.fci import addons, cistring

    n = rotations.shape[-1]
    shape = tuple(cistring.num_strings(n, k) for k in electrons)
    bits = [(cistring.make_strings(range(n), k)[:, None] >> np.arange(n)) & 1 for k in electrons]
    determinants = np.array([np.concatenate([a, b]) for a in bits[0] for b in bits[1]], dtype=np.uint8)
    features = evaluate_features(determinants)
    matrices = []
    for rotation in rotations:
        units = np.eye(len(features)).reshape(-1, *shape)
        turned = np.stack([addons.transform_ci(unit, electrons, rotation).ravel() for unit in units])
        matrices.append(np.einsum("df,ad,bd->fab", features, turned, turned).reshape(features.shape[1], -1))
    return np.concatenate(matrices)


@pytest.mark.parametrize("electrons", [(2, 2), (2, 1), (1, 1), (2, 0), (1, 0)])
def test_shifts_are_all_operators_that_are_numbers_in_the_sector(electrons: tuple[int, int]) -> None:
    rng = np.random.default_rng(3)
    n = 4
    space = OperatorSpace(n)
    rotations = random_rotations(rng, 11, n)
    columns = space.pair_columns(rotations)
    operators = np.concatenate([space.dense(c, u).T for c, u in zip(columns, rotations, strict=True)])
    assert np.linalg.matrix_rank(operators, tol=1e-8) == space.size
    matrices = sector_matrices(rotations, electrons)
    identity = np.eye(round(np.sqrt(matrices.shape[1]))).reshape(1, -1)
    shifts = sector_shifts(space, electrons)
    np.testing.assert_allclose(shifts.basis.T @ shifts.basis, np.eye(len(shifts.values)), atol=1e-12)
    # As many as the dimension lost by looking only at the sector ...
    rank = np.linalg.matrix_rank(np.concatenate([matrices, identity]), tol=1e-8)
    assert rank == space.size + 1 - len(shifts.values)
    # ... and each of them is the number it claims to be.
    weights = np.linalg.lstsq(operators.T, shifts.basis, rcond=None)[0]
    np.testing.assert_allclose(weights.T @ matrices, shifts.values[:, None] * identity, atol=1e-8)


def test_split_takes_out_the_shift_and_its_number() -> None:
    space = OperatorSpace(3)
    shifts = sector_shifts(space, (2, 1))
    number = space.pack(np.zeros((6, 6)), np.zeros((6, 6)), np.eye(3))  # the electron number
    rest, value = shifts.split(2.0 * number)
    assert value == pytest.approx(6.0)
    np.testing.assert_allclose(rest, 0.0, atol=1e-12)
    rest, value = no_shifts(space).split(number)
    assert value == 0.0
    np.testing.assert_allclose(rest, number)
