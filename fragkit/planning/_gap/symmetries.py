"""Rotations of the orbitals that change neither the Hamiltonian nor the reference, and the operators they leave alone.

Mirror images of a circuit are as good as the circuit, so the best dual of a symmetric problem is symmetric: only
invariant operator rows matter when all rotations are allowed, which are several times fewer than all rows.
"""

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import expm

from fragkit.core import Hamiltonian, pair_indices
from fragkit.planning._operators.shifts import Shifts
from fragkit.planning._operators.space import OperatorSpace
from fragkit.planning._rotations.start import random_rotations
from fragkit.states import ReferenceState

Array = NDArray[np.float64]

TOLERANCE = 1e-7
"""Relative size up to which a matrix element counts as zero by symmetry, and a spacing of eigenvalues as none."""


def orbital_symmetries(hamiltonian: Hamiltonian, state: ReferenceState) -> list[Array]:
    """Orthogonal matrices V (n, n): Hamiltonian and covariances of the state are the same in orbitals U and V U.

    Looks for continuous groups (an axis of a linear molecule), of which one generic element each is returned, and for
    sign changes of symmetry-adapted orbitals (mirrors, inversion, rotations by π). Other elements, such as rotations
    by 2π/3, are not found. Symmetries that generate the same group count once.
    """
    found = [np.asarray(expm(0.9 * generator), dtype=np.float64) for generator in _continuous(hamiltonian)]
    basis = _adapted_orbitals(hamiltonian)
    found += [(basis * signs) @ basis.T for signs in _sign_changes(hamiltonian.rotated(basis))]
    return [v for v in found if _leaves_covariances(state, v)]


def invariant_rows(space: OperatorSpace, shifts: Shifts, symmetries: list[Array]) -> Array:
    """Orthonormal basis (rows, d) of the operators outside the shifts that none of the symmetries changes."""
    complete, _ = np.linalg.qr(np.hstack([shifts.basis, np.eye(space.size)]))
    basis = complete[:, shifts.basis.shape[1] : space.size]
    for symmetry in symmetries:
        turned = basis.T @ _turned_rows(space, symmetry, basis)
        # |R x − x|² = xᵀ (2 − R − Rᵀ) x for an orthogonal R.
        values, vectors = np.linalg.eigh(2.0 * np.eye(len(turned)) - turned - turned.T)
        basis = basis @ vectors[:, values < 1e-8]
    return basis


def _turned_rows(space: OperatorSpace, symmetry: Array, rows: Array) -> Array:
    """Rows (rows, d) of the operators with every orbital index transformed by `symmetry`."""
    p, q = pair_indices(space.orbitals)
    weights = np.where(p == q, 1.0, np.sqrt(2.0))
    halves = np.where(p == q, np.sqrt(0.5), 1.0)
    pairs = symmetry[p][:, p] * symmetry[q][:, q] + symmetry[p][:, q] * symmetry[q][:, p]
    pairs *= halves[:, None] * halves
    result = np.empty_like(rows)
    for k, row in enumerate(rows.T):
        tensors = space.tensors(row)
        opposite, same = (
            pairs @ (tensor[p, q][:, p, q] * (weights[:, None] * weights)) @ pairs.T
            for tensor in (tensors.opposite_spin, tensors.same_spin)
        )
        result[:, k] = space.pack(opposite, same, symmetry @ tensors.one_body @ symmetry.T)
    return result


def _continuous(hamiltonian: Hamiltonian) -> list[Array]:
    """Antisymmetric X (n, n), largest |eigenvalue| 1, with exp(tX) a symmetry of the Hamiltonian for every t."""
    n = hamiltonian.orbitals
    one_body, two_body = hamiltonian.one_body, hamiltonian.two_body
    p, q = pair_indices(n, strict=True)
    if not len(p):
        return []
    changes = []
    for a, b in zip(p, q, strict=True):
        # d/dt of all indices turned by exp(tX), X_ab = 1 = −X_ba.
        one = np.zeros((n, n))
        one[a], one[b] = one_body[b], -one_body[a]
        two = np.zeros((n, n, n, n))
        two[a], two[b] = two_body[b], -two_body[a]
        two = two + two.transpose(1, 0, 2, 3)
        changes.append(np.concatenate([(one + one.T).ravel(), (two + two.transpose(2, 3, 0, 1)).ravel()]))
    derivative = np.array(changes)
    values, vectors = np.linalg.eigh(derivative @ derivative.T)
    size = np.linalg.norm(one_body) ** 2 + np.linalg.norm(two_body) ** 2
    found = []
    for vector in vectors[:, values < TOLERANCE**2 * size].T:
        generator = np.zeros((n, n))
        generator[p, q] = vector
        generator -= generator.T
        found.append(generator / np.linalg.norm(generator, 2))
    return found


def _adapted_orbitals(hamiltonian: Hamiltonian) -> Array:
    """Orbitals (n, n) that the symmetries of an Abelian subgroup at least map to ± themselves.

    Eigenvectors of invariant one-body matrices are, where they are not degenerate. Degenerate ones are aligned by the
    Coulomb matrix of one of them, which breaks the symmetry in the same way for all of them.
    """
    n = hamiltonian.orbitals
    two_body = hamiltonian.two_body
    matrix = hamiltonian.one_body + 0.37 * np.einsum("pqrr->pq", two_body) - 0.19 * np.einsum("prrq->pq", two_body)
    orbitals = np.eye(n)
    for _ in range(n):
        values, orbitals = np.linalg.eigh(matrix)
        close = np.flatnonzero(np.diff(values) < TOLERANCE * max(1.0, float(np.max(np.abs(values)))))
        if not len(close):
            break
        # Of the degenerate orbitals, what is most like one of those given: they may be adapted already.
        end = int(close[0])
        while end in close:
            end += 1
        shell = orbitals[:, close[0] : end + 1]
        weights = np.linalg.norm(shell, axis=1)
        chosen = shell @ (shell[int(np.argmax(weights))] / np.max(weights))
        matrix = matrix + 0.23 * np.einsum("pqrs,r,s->pq", two_body, chosen, chosen, optimize=True)
    return orbitals


def _sign_changes(hamiltonian: Hamiltonian) -> list[Array]:
    """Generators (n,) of ±1 of the orbitals that leave all integrals alone, without −1 for all.

    An element (pq|rs) that is not zero needs an even number of changes among its indices: linear equations over the
    field of two elements, one bit for each orbital.
    """
    n = hamiltonian.orbitals
    sets: set[int] = set()
    for tensor in (hamiltonian.one_body, hamiltonian.two_body):
        for index in np.argwhere(np.abs(tensor) > TOLERANCE * max(1.0, float(np.max(np.abs(tensor))))):
            odd = 0
            for orbital in index:
                odd ^= 1 << int(orbital)
            sets.add(odd)
    reduced: dict[int, int] = {}  # equations by their leading bit
    for equation in sets:
        left = equation
        while left and left.bit_length() in reduced:
            left ^= reduced[left.bit_length()]
        if left:
            reduced[left.bit_length()] = left
    free = [bit for bit in range(1, n + 1) if bit not in reduced]
    found = []
    # All free bits but the last, which the product with −1 for all can clear.
    for chosen in free[:-1]:
        solution = 1 << (chosen - 1)
        for leading in sorted(reduced):
            if (solution & reduced[leading]).bit_count() % 2:
                solution |= 1 << (leading - 1)
        found.append(np.array([-1.0 if solution >> k & 1 else 1.0 for k in range(n)]))
    return found


def _leaves_covariances(state: ReferenceState, symmetry: Array) -> bool:
    rotation = random_rotations(1, len(symmetry), np.random.default_rng(0))[0]
    before, after = state.moments(rotation)[1], state.moments(symmetry @ rotation)[1]
    return bool(np.max(np.abs(after - before)) < 1e-6)
