"""The operator that fragments sum to, its derivative by rotations and coefficients, and the transpose of that.

With W the weighted pair columns of a rotation (`OperatorSpace.pair_columns`) a fragment is W Y Wᵀ for unlike spins,
the antisymmetrised W Z Wᵀ for like spins, and U diag(l) Uᵀ. Written this way for all circuits at once, sum, derivative
and transpose are two products of (P, P) and (P, K n) matrices each, P = n(n+1)/2, and no matrix of rows × features is
formed. For a dual vector ν with pair matrices N_os, N_ss and N_1, Φ = Σ_m c_m · A_mᵀ ν has

    ∂Φ/∂W = 2 (N_os W Y + N_ss W Z),   ∂Φ/∂U = 2 [unpack(∂Φ/∂W / 2)_i u_i + N_1 u_i l_i]_i (columns i).
"""

from typing import Any

import numpy as np
from numpy.typing import NDArray

from fragkit.core import pair_indices
from fragkit.planning._operators.space import OperatorSpace

Array = NDArray[np.float64]


class FragmentSum:
    """Fragments with rotations (K, n, n) and coefficients (K, F), as rows of an `OperatorSpace`.

    In single precision everything but the rows is: six digits in half the time, for iterations that are corrected.
    """

    def __init__(self, space: OperatorSpace, rotations: Array, coefficients: Array, *, single: bool = False) -> None:
        self._space = space
        self._kind: Any = np.float32 if single else np.float64
        self._rotations = rotations = rotations.astype(self._kind)
        p, q = self._pairs = pair_indices(space.orbitals)
        self._weights = np.where(p == q, 1.0, np.sqrt(2.0)).astype(self._kind)[:, None]
        self._position = np.zeros((space.orbitals,) * 2, dtype=np.intp)
        self._position[p, q] = self._position[q, p] = np.arange(len(p))
        self._columns = rotations[:, p] * rotations[:, q] * self._weights
        self._side = self._flat(self._columns)
        self._opposite, self._same, self._linear = self._unpacked(coefficients)

    def total(self) -> Array:
        """Rows (R,) of the sum."""
        rotations = self._rotations
        unlike = self._flat(self._columns @ self._opposite) @ self._side.T
        like = self._flat(self._columns @ self._same) @ self._side.T
        one_body = np.matmul(rotations * self._linear, rotations.transpose(0, 2, 1)).sum(axis=0)
        return self._space.pack(unlike, like, one_body)

    def change(self, generators: Array, coefficients: Array) -> Array:
        """Derivative (R,) of the sum: U → U exp(t X) with antisymmetric X (K, n, n), c → c + t · `coefficients`."""
        p, q = self._pairs
        rotations, columns = self._rotations, self._columns
        opposite, same, linear = self._unpacked(coefficients)
        turned = rotations @ generators.astype(self._kind)
        # Twice the change of the pair columns; every product below is symmetrised by `_symmetric`.
        moved = 2.0 * self._weights * (turned[:, p] * rotations[:, q] + rotations[:, p] * turned[:, q])
        unlike = self._flat(moved @ self._opposite + columns @ opposite) @ self._side.T
        like = self._flat(moved @ self._same + columns @ same) @ self._side.T
        half = 2.0 * turned * self._linear + rotations * linear
        one_body = np.matmul(half, rotations.transpose(0, 2, 1)).sum(axis=0)
        return self._space.pack(_symmetric(unlike), _symmetric(like), _symmetric(one_body))

    def transpose(self, rows: Array) -> tuple[Array, Array]:
        """For a dual ν (R,): A_mᵀ ν (K, F), and antisymmetric G (K, n, n) with dΦ = Σ_{p<q} G_pq X_pq."""
        space, rotations, columns = self._space, self._rotations, self._columns
        count, n = rotations.shape[:2]
        i, j = self._pairs
        a, b = pair_indices(n, strict=True)
        unlike, like, one_body = (part.astype(self._kind) for part in space.pack_adjoint(rows))
        unlike = (unlike @ self._side).reshape(space.pairs, count, n).transpose(1, 0, 2)
        like = (like @ self._side).reshape(space.pairs, count, n).transpose(1, 0, 2)
        rotated = one_body @ rotations
        transposed = columns.transpose(0, 2, 1)
        adjoint = np.concatenate(
            [
                (transposed @ unlike)[:, i, j] * np.where(i == j, 1.0, 2.0),
                2.0 * (transposed @ like)[:, a, b],
                (rotations * rotated).sum(axis=1),
            ],
            axis=1,
        )
        slope = (unlike @ self._opposite + like @ self._same) * np.where(i == j, 2.0, np.sqrt(2.0))[:, None]
        slope = slope.astype(self._kind)[:, self._position]
        by_rotation = np.einsum("kpqi,kqi->kpi", slope, rotations) + rotated * self._linear
        turned = rotations.transpose(0, 2, 1) @ by_rotation
        gradient = 2.0 * (turned - turned.transpose(0, 2, 1))
        return adjoint.astype(np.float64), gradient.astype(np.float64)

    def _flat(self, columns: Array) -> Array:
        """(K, P, n) as (P, K n)."""
        return np.ascontiguousarray(columns.transpose(1, 0, 2)).reshape(self._space.pairs, -1)

    def _unpacked(self, coefficients: Array) -> tuple[Array, Array, Array]:
        """Matrices Y and Z (K, n, n), and l as (K, 1, n)."""
        count, n = len(coefficients), self._space.orbitals
        i, j = self._pairs
        a, b = pair_indices(n, strict=True)
        opposite, same = np.zeros((2, count, n, n), dtype=self._kind)
        opposite[:, i, j] = opposite[:, j, i] = coefficients[:, : len(i)]
        same[:, a, b] = same[:, b, a] = coefficients[:, len(i) : len(i) + len(a)]
        return opposite, same, coefficients[:, None, len(i) + len(a) :].astype(self._kind)


def _symmetric(matrix: Array) -> Array:
    return 0.5 * (matrix + matrix.T)
