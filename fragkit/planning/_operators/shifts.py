"""Operators that vanish, up to a constant, at fixed electron numbers."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from fragkit.core import pair_indices
from fragkit.planning._operators.space import OperatorSpace

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Shifts:
    """Operators that equal a number on every state of given electron numbers.

    `basis` is (rows, s) with orthonormal columns; column k equals `values[k]` hartree in the sector. `spanning` are
    sparse columns (rows, t) with the same span, if known, and `gram_inverse` (t, t) the pseudo-inverse of their
    products: with these a projection takes a fraction of the memory traffic.
    """

    basis: Array
    values: Array
    spanning: sparse.csc_array | None = None
    gram_inverse: Array | None = None

    def split(self, rows: Array) -> tuple[Array, float]:
        """The part of `rows` outside the shifts, and the number that the part inside them equals."""
        inside = self.basis.T @ rows
        return rows - self.basis @ inside, float(self.values @ inside)

    def project(self, rows: Array) -> Array:
        """`rows` (any number of columns) without their part in the span of the shifts."""
        if self.spanning is not None and rows.ndim == 1:
            return rows - self.spanning @ (self.gram_inverse @ (self.spanning.T @ rows))
        return rows - self.basis @ (self.basis.T @ rows)


def no_shifts(space: OperatorSpace) -> Shifts:
    """The empty set: fragments must then equal the Hamiltonian as an operator."""
    return Shifts(np.zeros((space.size, 0)), np.zeros(0))


def sector_shifts(space: OperatorSpace, electrons: tuple[int, int]) -> Shifts:
    """All shifts that features with equal coefficients for both spins can represent.

    They are combinations of (N̂_σ − N_σ) X_τ with a one-body X, and of N̂_σ − N_σ. Linear features are spin-summed, so
    those count whose one-body part is the same for both spins. With X_σ = Σ_pq x_pq a†_pσ a_qσ, symmetric x:

    - N_α = N_β: (N̂_α − N_α) X_β + (N̂_β − N_β) X_α and Σ_σ (N̂_σ − N_σ) Y_σ, x and y independent;
    - N_α ≠ N_β: their one-body parts differ between the spins by (N_α − N_β)(x − y), so x = y, (N̂ − N) X; and the
      operator N̂_α N̂_β, which needs no one-body part;
    - always the total electron number N̂.

    Where no spin has two electrons every same-spin operator vanishes, and where one spin has none every opposite-spin
    operator; these are included. Sectors with one hole or none in a spin have more; they are left out, which costs
    shots but not exactness.
    """
    n, size = space.orbitals, space.pairs
    alpha, beta = electrons
    p, q = pair_indices(n)
    weights = np.where(p == q, 1.0, np.sqrt(2.0))
    trace = (p == q).astype(np.float64)
    zero_pairs, zero_one = np.zeros((size, size)), np.zeros((n, n))
    vectors: list[Array] = []
    values: list[float] = []

    def add(opposite: Array, same: Array, one_body: Array, value: float) -> None:
        vectors.append(space.pack(opposite, same, one_body))
        values.append(value)

    add(zero_pairs, zero_pairs, np.eye(n), float(alpha + beta))
    add(trace[:, None] * trace, zero_pairs, zero_one, float(alpha * beta))
    for k in range(size):
        x = np.zeros((n, n))
        x[p[k], q[k]] = x[q[k], p[k]] = 1.0
        packed = np.zeros(size)
        packed[k] = weights[k]
        product = trace[:, None] * packed + packed[:, None] * trace
        if alpha == beta:
            add(product, zero_pairs, -alpha * x, 0.0)
            add(zero_pairs, product, (1 - alpha) * x, 0.0)
        else:
            add(product, product, (1 - alpha - beta) * x, 0.0)
            if min(alpha, beta) == 0:
                # One spin is absent: its one-body part is not seen, and the other's alone must cancel.
                add(zero_pairs, product, (1 - max(alpha, beta)) * x, 0.0)
    free = []
    if max(alpha, beta) <= 1:
        free.append(space.same)
    if min(alpha, beta) == 0:
        free.append(space.opposite)
    for block in free:
        for row in range(block.start, block.stop):
            unit = np.zeros(space.size)
            unit[row] = 1.0
            vectors.append(unit)
            values.append(0.0)
    matrix = np.array(vectors).T
    basis, singular, right = np.linalg.svd(matrix, full_matrices=False)
    keep = singular > 1e-10 * singular[0]
    # The value is linear in the operator: value of column k of the basis = values · (right_k / singular_k).
    right = right[keep] / singular[keep, None]
    return Shifts(
        np.ascontiguousarray(basis[:, keep]), right @ np.array(values), sparse.csc_array(matrix), right.T @ right
    )
