"""The weighted basis of orbital pairs, in which a symmetric two-electron tensor is a symmetric matrix.

A symmetric matrix A is the vector with A_pp and, for p < q, √2 A_pq, in the order of `numpy.triu_indices(n)`; the
tensor (pq|rs) is the matrix of P × P entries, P = n(n+1)/2, weighted on both sides. Lengths are kept: the
Frobenius norm of the matrix is the Frobenius norm of the full (n, n, n, n) tensor.
"""

from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from fragkit.core import Hamiltonian, pair_indices

Array = NDArray[np.float64]


@lru_cache(maxsize=64)
def pair_weights(orbitals: int) -> Array:
    """1 for the pairs (p, p) and √2 for the pairs p < q, shape (P,), read-only."""
    rows, columns = pair_indices(orbitals)
    weights = np.where(rows == columns, 1.0, np.sqrt(2.0))
    weights.setflags(write=False)
    return weights


@lru_cache(maxsize=64)
def pair_positions(orbitals: int) -> NDArray[np.intp]:
    """Where the pair of orbitals p and q is in the packed order, (n, n) symmetric, read-only."""
    positions = np.zeros((orbitals, orbitals), dtype=np.intp)
    rows, columns = pair_indices(orbitals)
    positions[rows, columns] = positions[columns, rows] = np.arange(len(rows))
    positions.setflags(write=False)
    return positions


def pack_symmetric(matrices: Array) -> Array:
    """Vectors (…, P) of symmetric matrices (…, n, n); lengths are kept."""
    n = matrices.shape[-1]
    rows, columns = pair_indices(n)
    return matrices[..., rows, columns] * pair_weights(n)


def unpack_symmetric(vectors: Array, orbitals: int) -> Array:
    """Inverse of `pack_symmetric`: symmetric matrices (…, n, n)."""
    rows, columns = pair_indices(orbitals)
    matrices = np.empty((*vectors.shape[:-1], orbitals, orbitals))
    matrices[..., rows, columns] = matrices[..., columns, rows] = vectors / pair_weights(orbitals)
    return matrices


def pair_matrix(hamiltonian: Hamiltonian) -> Array:
    """The two-electron tensor as a matrix (P, P) over weighted pairs, hartree; never builds n⁴ numbers from factors."""
    n = hamiltonian.orbitals
    if hamiltonian.from_factors:
        rows = pack_symmetric(hamiltonian.factors)
        matrix = (rows.T * hamiltonian.factor_signs) @ rows
        return 0.5 * (matrix + matrix.T)
    i, j = pair_indices(n)
    weights = pair_weights(n)
    return hamiltonian.two_body[i, j][:, i, j] * weights[:, None] * weights


def occupation_pairs(rotations: Array) -> Array:
    """Weighted pair vectors of the occupation operators, W[m, pq, i] = w_pq U_pi U_qi, shape (M, P, n).

    In it the tensor of the fragment ½ Σ λ_ij n_i n_j is W λ Wᵀ.
    """
    n = rotations.shape[-1]
    rows, columns = pair_indices(n)
    return rotations[:, rows, :] * rotations[:, columns, :] * pair_weights(n)[:, None]


def tensor_of_fragments(rotations: Array, coefficients: Array) -> Array:
    """Σ_m W_m λ_m W_mᵀ as a matrix (P, P), for rotations and coefficients (M, n, n)."""
    pairs = occupation_pairs(rotations)
    count, size, n = pairs.shape
    right = np.matmul(pairs, coefficients)
    matrix = right.transpose(1, 0, 2).reshape(size, count * n) @ pairs.transpose(1, 0, 2).reshape(size, count * n).T
    return 0.5 * (matrix + matrix.T)


def residual_norm(target: Array, rotations: Array, coefficients: Array) -> float:
    """Frobenius norm of the tensor `target` (P, P) minus the fragments; no subtraction of large squares."""
    return float(np.linalg.norm(target - tensor_of_fragments(rotations, coefficients)))
