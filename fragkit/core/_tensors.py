"""Tensor operations shared by all rooms: rotation, symmetry, factorisation. Chemists' notation throughout."""

import numpy as np
from numpy.typing import NDArray

from fragkit.core._features import pair_indices

Array = NDArray[np.float64]

PERMUTATIONS = {
    "(pq|rs) = (qp|rs)": (1, 0, 2, 3),
    "(pq|rs) = (pq|sr)": (0, 1, 3, 2),
    "(pq|rs) = (rs|pq)": (2, 3, 0, 1),
}


def rotate_one_body(one_body: Array, rotation: Array) -> Array:
    """Matrix in the orbitals that are the columns of `rotation`, Uᵀ h U."""
    return rotation.T @ one_body @ rotation


def rotate_two_body(two_body: Array, rotation: Array) -> Array:
    """Tensor (n, n, n, n) in the orbitals that are the columns of `rotation`."""
    for _ in range(4):
        # Each pass rotates the first axis and moves it to the end.
        two_body = np.tensordot(two_body, rotation, axes=(0, 0))
    return two_body


def symmetry_violation(two_body: Array) -> tuple[str, float]:
    """The permutation of the 8-fold symmetry that is violated most, and by how much."""
    sizes = {
        name: float(np.max(np.abs(two_body - two_body.transpose(axes)), initial=0.0))
        for name, axes in PERMUTATIONS.items()
    }
    worst = max(sizes, key=lambda name: sizes[name])
    return worst, sizes[worst]


def symmetrise_two_body(two_body: Array) -> Array:
    """Average over the eight permutations, so that rounding noise is gone exactly."""
    for axes in PERMUTATIONS.values():
        two_body = 0.5 * (two_body + two_body.transpose(axes))
    return two_body


def pack_pairs(two_body: Array) -> Array:
    """Matrix over orbital pairs p ≤ q and r ≤ s, plain entries (P, P), P = n(n+1)/2."""
    i, j = pair_indices(two_body.shape[0])
    return two_body[i, j][:, i, j]


def unpack_pairs(matrix: Array, orbitals: int) -> Array:
    """Inverse of `pack_pairs`: the full tensor (n, n, n, n) with 8-fold symmetry."""
    index = np.zeros((orbitals, orbitals), dtype=np.intp)
    i, j = pair_indices(orbitals)
    index[i, j] = index[j, i] = np.arange(len(i))
    return matrix[index[:, :, None, None], index[None, None, :, :]]


def pivoted_cholesky(matrix: Array, *, tol: float = 1e-12) -> Array | None:
    """Rows L_Q (R, N) with Σ_Q L_Q L_Qᵀ equal to a positive semidefinite matrix to `tol`, or None if it is not one.

    The largest remaining diagonal is taken as pivot (Beebe & Linderberg, Int. J. Quantum Chem. 12, 683 (1977)), and
    the iteration ends when it is below `tol` times the largest entry.
    """
    diagonal = np.diag(matrix).copy()
    floor = tol * max(1.0, float(np.max(np.abs(matrix), initial=0.0)))
    rows = np.zeros((len(matrix), len(matrix)))
    rank = 0
    while rank < len(matrix):
        pivot = int(np.argmax(diagonal))
        if diagonal[pivot] <= floor:
            break
        rows[rank] = (matrix[pivot] - rows[:rank, pivot] @ rows[:rank]) / np.sqrt(diagonal[pivot])
        diagonal -= rows[rank] ** 2
        rank += 1
    rows = rows[:rank]
    # A zero diagonal with a non-zero row is the mark of an indefinite matrix; only the remainder tells.
    remainder = float(np.max(np.abs(matrix - rows.T @ rows), initial=0.0))
    return rows if remainder <= 100 * floor else None


def factorise_two_body(two_body: Array) -> tuple[Array, Array]:
    """Factors (R, n, n) and signs (R,) with (pq|rs) = Σ_Q sign_Q L^Q_pq L^Q_rs.

    Pivoted Cholesky where the tensor is positive semidefinite, as Coulomb integrals are; the eigenvectors
    of the pair matrix otherwise (an attractive lattice model, for example).
    """
    n = two_body.shape[0]
    matrix = pack_pairs(two_body)
    rows = pivoted_cholesky(matrix)
    if rows is None:
        values, vectors = np.linalg.eigh(matrix)
        keep = np.abs(values) > 1e-14 * np.max(np.abs(values))
        rows = (vectors[:, keep] * np.sqrt(np.abs(values[keep]))).T
        signs = np.sign(values[keep])
    else:
        signs = np.ones(len(rows))
    i, j = pair_indices(n)
    factors = np.zeros((len(rows), n, n))
    factors[:, i, j] = factors[:, j, i] = rows
    return factors, signs
