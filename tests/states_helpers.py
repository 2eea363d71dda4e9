"""Shared by the tests of reference states: random input, and brute force over all determinants."""

import numpy as np

from fragkit.core import Hamiltonian, evaluate_features

# Orbitals and electrons: closed and open shells, one spin empty or full, below and above half filling.
SECTORS = [
    (1, (1, 0)),
    (2, (1, 1)),
    (3, (2, 1)),
    (4, (2, 2)),
    (4, (3, 1)),
    (5, (4, 0)),
    (5, (0, 5)),
    (5, (3, 2)),
    (6, (4, 3)),
]


def random_rotation(orbitals: int, rng: np.random.Generator) -> np.ndarray:
    """A generic orthogonal matrix, of determinant +1 or -1."""
    q, r = np.linalg.qr(rng.normal(size=(orbitals, orbitals)))
    return q * np.sign(np.diag(r))


def random_hamiltonian(orbitals: int, electrons: tuple[int, int], rng: np.random.Generator) -> Hamiltonian:
    """Random integrals with the right symmetries."""
    one_body = rng.normal(size=(orbitals, orbitals))
    factors = rng.normal(size=(3, orbitals, orbitals))
    return Hamiltonian(0.3, one_body + one_body.T, factors=factors + factors.transpose(0, 2, 1), electrons=electrons)


def strings_of(orbitals: int, electrons: int) -> np.ndarray:
    """Occupations of all strings in pyscf's order, from pyscf."""
    from pyscf.fci import cistring

    listed = cistring.make_strings(range(orbitals), electrons)
    return np.array([[(int(s) >> p) & 1 for p in range(orbitals)] for s in np.atleast_1d(listed)])


def determinants(orbitals: int, electrons: tuple[int, int]) -> np.ndarray:
    """Occupations (D, 2n) of all determinants, alpha strings outermost."""
    alpha, beta = (strings_of(orbitals, k) for k in electrons)
    return np.hstack([np.repeat(alpha, len(beta), axis=0), np.tile(beta, (len(alpha), 1))])


def rotate_by_pyscf(vector: np.ndarray, electrons: tuple[int, int], rotation: np.ndarray) -> np.ndarray:
    """The CI vector in the rotated orbitals, by pyscf."""
    from pyscf.fci import addons

    return addons.transform_ci(vector, electrons, rotation)


def brute_force_moments(weights: np.ndarray, orbitals: int, electrons: tuple[int, int]):
    """Mean and covariance of the features from the table determinants × features."""
    table = evaluate_features(determinants(orbitals, electrons))
    p = weights.ravel()
    mean = p @ table
    centred = table - mean
    return mean, centred.T @ (p[:, None] * centred)


def matrix_of(hamiltonian: Hamiltonian) -> np.ndarray:
    """The Hamiltonian's matrix over all determinants, constant included, by pyscf."""
    from pyscf.fci import direct_spin1

    n, electrons = hamiltonian.orbitals, hamiltonian.electrons
    one_body, two_body = np.array(hamiltonian.one_body), np.array(hamiltonian.two_body)
    absorbed = direct_spin1.absorb_h1e(one_body, two_body, n, electrons, 0.5)
    shape = tuple(len(strings_of(n, k)) for k in electrons)
    size = shape[0] * shape[1]
    columns = [direct_spin1.contract_2e(absorbed, row.reshape(shape), n, electrons).ravel() for row in np.eye(size)]
    return np.array(columns) + hamiltonian.constant * np.eye(size)
