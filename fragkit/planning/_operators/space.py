"""Operators as vectors of rows: what fragments sum to, what the Hamiltonian is, and what vanishes in a sector.

A spin-symmetric two-body operator is kept as a vector of three blocks (see `fragkit.core.OperatorTensors`):

1. opposite spin: the tensor O_pqrs as a matrix over weighted orbital pairs p ≤ q (weight √2 for p < q), of which the
   upper triangle is kept, again with weight √2 off the diagonal; P(P+1)/2 rows, P = n(n+1)/2;
2. same spin: the antisymmetrised tensor S_{pr,qs} = T_pqrs − T_psrq over pairs p < r and q < s. It obeys
   S_{ab,cd} − S_{ac,bd} + S_{ad,bc} = 0, so n²(n²−1)/12 independent rows are kept: first S_{ab,ab} for a < b, then
   √2 S_{ab,ac} for every a and b < c, then two combinations for each a < b < c < d;
3. one-body: h_pq over weighted pairs; P rows.

The basis is orthonormal: the squared norm of a row vector is ‖O‖² + ‖S‖² + ‖h‖² (Frobenius, S over pairs p < r).
"""

from dataclasses import dataclass
from functools import cached_property, lru_cache
from itertools import combinations

import numpy as np
from numpy.typing import NDArray
from scipy import sparse

from fragkit.core import Hamiltonian, OperatorTensors, pair_indices, unpack_features

Array = NDArray[np.float64]


@dataclass(frozen=True)
class OperatorSpace:
    """The rows of n orbitals, and the maps between fragments and rows.

    `columns` below are the weighted pair columns of some rotations, from `pair_columns`; coefficients are packed
    features. `apply` and `adjoint` are exact transposes of each other.
    """

    orbitals: int

    @property
    def pairs(self) -> int:
        """Number of orbital pairs P = n(n+1)/2."""
        return self.orbitals * (self.orbitals + 1) // 2

    @property
    def opposite(self) -> slice:
        """Rows of the opposite-spin block."""
        return slice(0, self.pairs * (self.pairs + 1) // 2)

    @property
    def same(self) -> slice:
        """Rows of the same-spin block."""
        n, start = self.orbitals, self.opposite.stop
        return slice(start, start + n * n * (n * n - 1) // 12)

    @property
    def linear(self) -> slice:
        """Rows of the one-body block."""
        return slice(self.same.stop, self.same.stop + self.pairs)

    @property
    def size(self) -> int:
        """Number of rows."""
        return self.linear.stop

    def pair_columns(self, rotations: Array) -> Array:
        """Weighted products u_pi u_qi over pairs p ≤ q, shape (…, P, n), for rotations (…, n, n)."""
        p, q = pair_indices(self.orbitals)
        return rotations[..., p, :] * rotations[..., q, :] * np.where(p == q, 1.0, np.sqrt(2.0))[:, None]

    def pack(self, opposite: Array, same: Array, one_body: Array) -> Array:
        """Rows of pair matrices (P, P), (P, P), both symmetric, and a symmetric matrix (n, n).

        `same` is a pair matrix of T before antisymmetrisation.
        """
        x, y = self.triangle
        p, q = pair_indices(self.orbitals)
        return np.concatenate(
            [
                opposite[x, y] * self.triangle_weights,
                self.antisymmetriser @ same.ravel(),
                one_body[p, q] * np.where(p == q, 1.0, np.sqrt(2.0)),
            ]
        )

    def pack_adjoint(self, rows: Array) -> tuple[Array, Array, Array]:
        """Transpose of `pack`: symmetric (P, P), (P, P), (n, n) whose inner products with parts sum to rows · pack."""
        size, n = self.pairs, self.orbitals
        x, y = self.triangle
        opposite = np.zeros((size, size))
        opposite[x, y] = opposite[y, x] = rows[self.opposite] / self.triangle_weights
        same = (self.antisymmetriser.T @ rows[self.same]).reshape(size, size)
        p, q = pair_indices(n)
        one_body = np.zeros((n, n))
        one_body[p, q] = one_body[q, p] = rows[self.linear] * np.where(p == q, 1.0, np.sqrt(0.5))
        return opposite, 0.5 * (same + same.T), one_body

    def apply(self, columns: Array, rotations: Array, coefficients: Array) -> Array:
        """Rows of the sum of fragments with these coefficients (K, n² + n)."""
        opposite, same, linear = unpack_features(coefficients, self.orbitals)
        side = columns.transpose(1, 0, 2).reshape(self.pairs, -1)
        scaled = (columns @ opposite).transpose(1, 0, 2).reshape(self.pairs, -1)
        unlike = scaled @ side.T
        scaled = (columns @ same).transpose(1, 0, 2).reshape(self.pairs, -1)
        like = scaled @ side.T
        one_body = np.einsum("kpi,ki,kqi->pq", rotations, linear, rotations, optimize=True)
        return self.pack(0.5 * (unlike + unlike.T), 0.5 * (like + like.T), one_body)

    def adjoint(self, columns: Array, rotations: Array, rows: Array) -> Array:
        """Inner products (K, n² + n) of every feature's operator with `rows`."""
        unlike, like, one_body = self.pack_adjoint(rows)
        transposed = columns.transpose(0, 2, 1)
        opposite = transposed @ (unlike @ columns)
        same = transposed @ (like @ columns)
        linear = np.einsum("kpi,pq,kqi->ki", rotations, one_body, rotations, optimize=True)
        i, j = pair_indices(self.orbitals)
        a, b = pair_indices(self.orbitals, strict=True)
        return np.concatenate([opposite[:, i, j] * np.where(i == j, 1.0, 2.0), 2.0 * same[:, a, b], linear], axis=1)

    def dense(self, columns: Array, rotation: Array) -> Array:
        """Matrix (rows, n² + n) of one rotation: column f is the operator of feature f. `columns` is (P, n)."""
        n = self.orbitals
        i, j = pair_indices(n)
        a, b = pair_indices(n, strict=True)
        x, y = self.triangle
        p, q = pair_indices(n)
        result = np.zeros((self.size, n * n + n))
        products = columns[x][:, i] * columns[y][:, j]
        products += np.where(i == j, 0.0, 1.0) * (columns[x][:, j] * columns[y][:, i])
        result[self.opposite, : len(i)] = products * self.triangle_weights[:, None]
        mixed = columns[:, None, a] * columns[None, :, b]
        mixed = (mixed + mixed.transpose(1, 0, 2)).reshape(self.pairs**2, len(a))
        result[self.same, len(i) : len(i) + len(a)] = self.antisymmetriser @ mixed
        weights = np.where(p == q, 1.0, np.sqrt(2.0))
        result[self.linear, len(i) + len(a) :] = rotation[p] * rotation[q] * weights[:, None]
        return result

    def tensors(self, rows: Array) -> OperatorTensors:
        """The operator as tensors; the same-spin tensor is one of those with the right antisymmetric part."""
        n, size = self.orbitals, self.pairs
        x, y = self.triangle
        p, q = pair_indices(n)
        weights = np.where(p == q, 1.0, np.sqrt(2.0))
        opposite = np.zeros((size, size))
        opposite[x, y] = opposite[y, x] = rows[self.opposite] * np.where(x == y, 1.0, np.sqrt(0.5))
        opposite /= weights[:, None] * weights
        same = (_same_spin_maps(n)[1] @ rows[self.same]).reshape(size, size)
        one_body = np.zeros((n, n))
        one_body[p, q] = one_body[q, p] = rows[self.linear] / weights
        index = np.zeros((n, n), dtype=np.intp)
        index[p, q] = index[q, p] = np.arange(size)
        full = index[:, :, None, None], index[None, None, :, :]
        return OperatorTensors(one_body, opposite[full], (same + same.T)[full])

    def hamiltonian_rows(self, hamiltonian: Hamiltonian) -> Array:
        """Rows of the Hamiltonian without its constant."""
        p, q = pair_indices(self.orbitals)
        weights = np.where(p == q, 1.0, np.sqrt(2.0))
        matrix = hamiltonian.two_body[p, q][:, p, q] * (weights[:, None] * weights)
        return self.pack(matrix, matrix, hamiltonian.one_body)

    @cached_property
    def triangle(self) -> tuple[NDArray[np.intp], NDArray[np.intp]]:
        """Rows and columns of the upper triangle of a pair matrix."""
        return pair_indices(self.pairs)

    @cached_property
    def triangle_weights(self) -> Array:
        """√2 off the diagonal."""
        x, y = self.triangle
        return np.where(x == y, 1.0, np.sqrt(2.0))

    @property
    def antisymmetriser(self) -> sparse.csr_array:
        """Map from flattened pair matrices (P²) of T to same-spin rows."""
        return _same_spin_maps(self.orbitals)[0]


@lru_cache(maxsize=8)
def _same_spin_maps(n: int) -> tuple[sparse.csr_array, sparse.csr_array]:
    """Weighted pair matrix (flattened, P²) → same-spin rows, and rows → plain entries of one half of such a T.

    With the second map X, T = X + Xᵀ has the given rows and is zero where that is free to choose.
    """
    index = np.zeros((n, n), dtype=np.intp)
    p, q = pair_indices(n)
    index[p, q] = index[q, p] = np.arange(len(p))
    size = len(p)

    def at(a: int, b: int, c: int, d: int) -> int:
        return int(index[a, b] * size + index[c, d])

    # Entries of T (unweighted) that make each row, then the entry from which T is rebuilt. Each weighted entry is
    # T times √2 for every unequal pair in its index.
    half, third = np.sqrt(0.5), np.sqrt(1.0 / 3.0)
    forward: list[dict[int, float]] = []
    backward: list[dict[int, float]] = []
    for a, b in combinations(range(n), 2):
        forward.append({at(a, a, b, b): 1.0, at(a, b, a, b): -0.5})
        backward.append({at(a, a, b, b): 1.0})
    for a in range(n):
        for b, c in combinations([k for k in range(n) if k != a], 2):
            # √2 (T_aabc − T_abac)
            forward.append({at(a, a, b, c): 1.0, at(a, b, a, c): -half})
            backward.append({at(a, a, b, c): half})
    for a, b, c, d in combinations(range(n), 4):
        # With t = (T_abcd, T_acbd, T_adbc): √3 (t₁ − t₂) and t₁ + t₂ − 2 t₃; t₃ is set to zero on the way back.
        first, second, last = at(a, b, c, d), at(a, c, b, d), at(a, d, b, c)
        forward.append({first: 0.5 * np.sqrt(3.0), second: -0.5 * np.sqrt(3.0)})
        backward.append({first: 0.5 * third, second: -0.5 * third})
        forward.append({first: 0.5, second: 0.5, last: -1.0})
        backward.append({first: 0.5, second: 0.5})

    def matrix(entries: list[dict[int, float]]) -> sparse.csr_array:
        rows = np.repeat(np.arange(len(entries)), [len(entry) for entry in entries])
        columns = np.array([k for entry in entries for k in entry], dtype=np.intp)
        values = np.array([v for entry in entries for v in entry.values()], dtype=np.float64)
        return sparse.csr_array((values, (rows, columns)), shape=(len(entries), size * size))

    return matrix(forward), matrix(backward).T.tocsr()
