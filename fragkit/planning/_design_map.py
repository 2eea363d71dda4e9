"""From rotations and coefficients to what is left of the Hamiltonian, and back: the maps A and Aᵀ with their gradient.

With W the weighted pair columns of a rotation (`OperatorSpace.pair_columns`) a fragment is W Y Wᵀ for unlike spins,
the antisymmetrised W Z Wᵀ for like spins, and U diag(l) Uᵀ. Written this way for all circuits at once, A and Aᵀ are
two products of (P, P) and (P, K n) matrices each, P = n(n+1)/2, and no matrix of rows × features is formed. For a
dual vector ν with pair matrices N_os, N_ss and N_1, Φ = Σ_m c_m · A_mᵀ ν has

    ∂Φ/∂W = 2 (N_os W Y + N_ss W Z),   ∂Φ/∂U = 2 [unpack(∂Φ/∂W / 2)_i u_i + N_1 u_i l_i]_i (columns i).
"""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fragkit.core import Hamiltonian, pair_indices, unpack_features
from fragkit.planning._operators import OperatorSpace
from fragkit.planning._shifts import Shifts, sector_shifts
from fragkit.states import MaximallyMixedState

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class MapResult:
    """What `DesignMap.evaluate` returns.

    Parameters
    ----------
    residual
        (rows,) the Hamiltonian minus the fragments, without the shifts.
    dual
        (rows,) what `dual_of(residual)` gave.
    adjoint
        (K, F) A_mᵀ dual.
    gradient
        (K, n, n) antisymmetric G with dΦ = Σ_{p<q} G_pq X_pq at fixed dual for U → U exp(X).
    """

    residual: Array
    dual: Array
    adjoint: Array
    gradient: Array


class DesignMap:
    """Operators, as rows without the shifts, that rotations and coefficients make.

    `target` are the Hamiltonian's rows. `features` (F, F') is a basis of the combinations of features that are not
    constant in the sector, scaled to unit covariance in the maximally mixed state, whose covariance is `mixed`.
    """

    def __init__(self, hamiltonian: Hamiltonian) -> None:
        n = self.orbitals = hamiltonian.orbitals
        self.space = OperatorSpace(n)
        self.mixed = MaximallyMixedState(n, hamiltonian.electrons).moments(np.eye(n))[1]
        values, vectors = np.linalg.eigh(self.mixed)
        keep = values > 1e-10 * max(values[-1], 1e-300)
        self.features = vectors[:, keep] / np.sqrt(values[keep])
        self.shifts = _completed(self.space, sector_shifts(self.space, hamiltonian.electrons), vectors[:, ~keep])
        self.target = self.shifts.project(self.space.hamiltonian_rows(hamiltonian))
        i, j = self._pairs = pair_indices(n)
        self._strict = pair_indices(n, strict=True)
        self._position = np.zeros((n, n), dtype=np.intp)
        self._position[i, j] = self._position[j, i] = np.arange(len(i))
        self._unpack_weights = np.where(i == j, 2.0, np.sqrt(2.0))[:, None]
        self._double = np.where(i == j, 1.0, 2.0)

    @property
    def rows(self) -> int:
        """Independent rows, without the shifts."""
        return self.space.size - self.shifts.basis.shape[1]

    def evaluate(self, rotations: Array, coefficients: Array, dual_of: Callable[[Array], Array]) -> MapResult:
        """The residual of rotations (K, n, n) with coefficients (K, F), and Aᵀ and gradient for a dual made from it."""
        count, n, pairs = len(rotations), self.orbitals, self.space.pairs
        i, j = self._pairs
        a, b = self._strict
        columns = self.space.pair_columns(rotations)
        opposite, same = np.zeros((2, count, n, n))
        opposite[:, i, j] = opposite[:, j, i] = coefficients[:, : len(i)]
        same[:, a, b] = same[:, b, a] = coefficients[:, len(i) : len(i) + len(a)]
        linear = coefficients[:, None, len(i) + len(a) :]
        side = np.ascontiguousarray(columns.transpose(1, 0, 2)).reshape(pairs, count * n)
        unlike = (columns @ opposite).transpose(1, 0, 2).reshape(pairs, count * n) @ side.T
        like = (columns @ same).transpose(1, 0, 2).reshape(pairs, count * n) @ side.T
        one_body = np.matmul(rotations * linear, rotations.transpose(0, 2, 1)).sum(axis=0)
        residual = self.target - self.shifts.project(self.space.pack(unlike, like, one_body))

        dual = dual_of(residual)
        unlike, like, one_body = self.space.pack_adjoint(dual)
        unlike = (unlike @ side).reshape(pairs, count, n).transpose(1, 0, 2)
        like = (like @ side).reshape(pairs, count, n).transpose(1, 0, 2)
        rotated = one_body @ rotations
        transposed = columns.transpose(0, 2, 1)
        adjoint = np.concatenate(
            [
                (transposed @ unlike)[:, i, j] * self._double,
                2.0 * (transposed @ like)[:, a, b],
                (rotations * rotated).sum(axis=1),
            ],
            axis=1,
        )
        slope = (unlike @ opposite + like @ same) * self._unpack_weights
        by_rotation = np.einsum("kpqi,kqi->kpi", slope[:, self._position], rotations) + rotated * linear
        turned = rotations.transpose(0, 2, 1) @ by_rotation
        return MapResult(residual, dual, adjoint, 2.0 * (turned - turned.transpose(0, 2, 1)))

    def residual(self, rotations: Array, coefficients: Array) -> Array:
        """The Hamiltonian minus the fragments, without the shifts, as rows."""
        columns = self.space.pair_columns(rotations)
        return self.target - self.shifts.project(self.space.apply(columns, rotations, coefficients))

    def operators(self, rotation: Array, combinations: Array) -> Array:
        """Matrix (rows, …) of one rotation: operators of `combinations` (F', …) of `features`, without the shifts."""
        dense = self.space.dense(self.space.pair_columns(rotation), rotation)
        return self.shifts.project(dense @ (self.features @ combinations))

    def turning(self, rotation: Array, coefficients: Array) -> Array:
        """Matrix (rows, n(n−1)/2): change of a fragment's operator with each generator p < q, without the shifts.

        U → U exp(X) with X_pq = x = −X_qp changes the pair columns W_q and W_p by ±2x v, v the packed symmetric product
        of columns p and q, so that W Y Wᵀ changes by x (v gᵀ + g vᵀ), g = 2 (W Y)_q − 2 (W Y)_p.
        """
        space, n = self.space, self.orbitals
        i, j = self._pairs
        a, b = self._strict
        x, y = space.triangle
        opposite, same, linear = unpack_features(coefficients, n)
        columns = space.pair_columns(rotation)
        weights = np.where(i == j, 1.0, np.sqrt(2.0))[:, None]
        mixed = 0.5 * weights * (rotation[i][:, a] * rotation[j][:, b] + rotation[i][:, b] * rotation[j][:, a])
        result = np.zeros((space.size, len(a)))
        change = 2.0 * columns @ (opposite[:, b] - opposite[:, a])
        result[space.opposite] = (mixed[x] * change[y] + mixed[y] * change[x]) * space.triangle_weights[:, None]
        change = 2.0 * columns @ (same[:, b] - same[:, a])
        outer = mixed[:, None] * change
        outer = (outer + outer.transpose(1, 0, 2)).reshape(space.pairs**2, len(a))
        result[space.same] = space.antisymmetriser @ outer
        result[space.linear] = 2.0 * mixed * (linear[b] - linear[a])
        return self.shifts.project(result)


def _completed(space: OperatorSpace, shifts: Shifts, constants: Array) -> Shifts:
    """Shifts with the operators of every combination of features that is constant in the sector.

    Nearly always they are there already; sectors with one electron or one hole in a spin have more.
    """
    rng = np.random.default_rng(0)
    basis = shifts.basis
    for _ in range(space.orbitals + 2):
        rotation = np.linalg.qr(rng.standard_normal((space.orbitals,) * 2))[0]
        missing = space.dense(space.pair_columns(rotation), rotation) @ constants
        for _ in range(2):
            missing -= basis @ (basis.T @ missing)
        if np.max(np.abs(missing), initial=0.0) < 1e-9:
            break
        left, singular, _ = np.linalg.svd(missing, full_matrices=False)
        basis = np.hstack([basis, left[:, singular > 1e-9]])
    # Values of the additional operators are not needed here: they drop out of every residual.
    values = np.zeros(basis.shape[1])
    values[: len(shifts.values)] = shifts.values
    return Shifts(basis, values)
