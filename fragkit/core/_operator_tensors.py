"""From fragments to the tensors of the operator they sum to, and what a difference of tensors can do to an energy.

A spin-symmetric two-body operator is kept as three normal-ordered parts:

- one-body: Σ_pq h_pq E_pq;
- opposite spin: Σ_pqrs O_pqrs a†_pα a_qα a†_rβ a_sβ;
- same spin: ½ Σ_σ Σ_pqrs S_pqrs a†_pσ a†_rσ a_sσ a_qσ, of which only S_pqrs − S_psrq acts.

For a spin-free Hamiltonian O = S = (pq|rs).
"""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fragkit.core._fragment import Fragment

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class OperatorTensors:
    """One-body (n, n), opposite-spin and same-spin (n, n, n, n) parts of an operator, hartree."""

    one_body: Array
    opposite_spin: Array
    same_spin: Array

    @property
    def exchange_odd(self) -> Array:
        """The acting part of the same-spin tensor, S_pqrs − S_psrq."""
        return self.same_spin - self.same_spin.transpose(0, 3, 2, 1)

    def __sub__(self, other: "OperatorTensors") -> "OperatorTensors":
        return OperatorTensors(
            self.one_body - other.one_body,
            self.opposite_spin - other.opposite_spin,
            self.same_spin - other.same_spin,
        )


def fragment_tensors(fragments: Sequence[Fragment]) -> OperatorTensors:
    """Sum of the operators of some fragments (at least one)."""
    n = fragments[0].orbitals
    one_body = np.zeros((n, n))
    pairs = n * n
    opposite, same = np.zeros((pairs, pairs)), np.zeros((pairs, pairs))
    for fragment in fragments:
        u = fragment.rotation
        one_body += (u * fragment.linear) @ u.T
        if fragment.is_one_body:
            continue
        columns = np.einsum("pi,qi->pqi", u, u).reshape(pairs, n)
        opposite += columns @ fragment.opposite_spin @ columns.T
        same += columns @ fragment.same_spin @ columns.T
    return OperatorTensors(one_body, opposite.reshape((n,) * 4), same.reshape((n,) * 4))


def residual_norm(residual: OperatorTensors) -> float:
    """Size of a residual operator, zero exactly when the operator is zero, hartree.

    The largest of: the Frobenius norm of the opposite-spin tensor; half that of the antisymmetrised same-spin
    tensor; the Frobenius norm of the one-body part when the two-body part is written as products E_pq E_rs. For
    fragments of the plain form ½ Σ λ_ij n_i n_j it is the Frobenius norm of the two-electron tensor's residual.
    """
    contracted = residual.one_body - 0.5 * np.einsum("prrq->pq", residual.opposite_spin)
    return float(
        max(
            np.linalg.norm(residual.opposite_spin),
            0.5 * np.linalg.norm(residual.exchange_odd),
            np.linalg.norm(contracted),
        )
    )


def energy_bound(residual: OperatorTensors, electrons: tuple[int, int]) -> float:
    """Largest |⟨residual⟩| that any state of these electron numbers can have, an upper bound in hartree.

    Pair matrices: the reduced density matrix of unlike pairs is positive with trace N_α N_β, that of like pairs
    positive with trace N_σ(N_σ−1)/2, so each part is at most trace times largest |eigenvalue|; the one-body part is
    at most its sum of extreme eigenvalues (Coleman, Rev. Mod. Phys. 35, 668 (1963), for the density matrices).
    Where same-spin and opposite-spin residuals agree, ½ Σ_l ε_l O_l² with one-body operators O_l gives another
    bound; the smaller of the two is returned.
    """
    n = len(residual.one_body)
    alpha, beta = electrons
    rows, columns = np.triu_indices(n, 1)

    unlike = residual.opposite_spin.transpose(0, 2, 1, 3).reshape(n * n, n * n)
    acting = residual.exchange_odd
    like = acting.transpose(0, 2, 1, 3)[rows, columns][:, rows, columns]
    like_pairs = (alpha * (alpha - 1) + beta * (beta - 1)) / 2
    by_pairs = _one_body_bound(residual.one_body, electrons)
    by_pairs += alpha * beta * _largest_eigenvalue(unlike) + like_pairs * _largest_eigenvalue(like)

    opposite = residual.opposite_spin
    odd = opposite - opposite.transpose(0, 3, 2, 1)
    rest = (acting - odd).transpose(0, 2, 1, 3)[rows, columns][:, rows, columns]
    values, vectors = np.linalg.eigh(opposite.reshape(n * n, n * n))
    by_products = _one_body_bound(residual.one_body - 0.5 * np.einsum("prrq->pq", opposite), electrons)
    by_products += like_pairs * _largest_eigenvalue(rest)
    for value, vector in zip(values, vectors.T, strict=True):
        if value != 0.0:
            factor = vector.reshape(n, n)
            by_products += 0.5 * abs(value) * _one_body_bound(0.5 * (factor + factor.T), electrons) ** 2
    return float(min(by_pairs, by_products))


def _one_body_bound(matrix: Array, electrons: tuple[int, int]) -> float:
    """Largest |⟨Σ matrix_pq E_pq⟩| over states of these electron numbers: extreme eigenvalues filled."""
    values = np.linalg.eigvalsh(matrix)
    low = sum(float(np.sum(values[:count])) for count in electrons)
    high = sum(float(np.sum(values[len(values) - count :])) for count in electrons)
    return max(abs(low), abs(high))


def _largest_eigenvalue(matrix: Array) -> float:
    return float(np.max(np.abs(np.linalg.eigvalsh(matrix)), initial=0.0)) if matrix.size else 0.0
