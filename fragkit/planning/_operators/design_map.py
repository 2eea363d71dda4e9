"""From rotations and coefficients to what is left of the Hamiltonian, and back, without the symmetry shifts."""

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import solve_triangular

from fragkit.core import Hamiltonian, pair_indices, unpack_features
from fragkit.planning._operators.fragment_sum import FragmentSum
from fragkit.planning._operators.shifts import Shifts, sector_shifts
from fragkit.planning._operators.space import OperatorSpace
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
    constant in the sector, scaled to unit covariance in the maximally mixed state, whose covariance is `mixed`;
    `features_inverse` (F', F) is its pseudo-inverse, and `constants` a basis of the rest.
    `shifts` are the `sector_shifts` with the operators of the constants where these are more.
    """

    def __init__(self, hamiltonian: Hamiltonian) -> None:
        n = self.orbitals = hamiltonian.orbitals
        self.space = OperatorSpace(n)
        self.mixed = MaximallyMixedState(n, hamiltonian.electrons).moments(np.eye(n))[1]
        values, vectors = np.linalg.eigh(self.mixed)
        keep = values > 1e-10 * max(values[-1], 1e-300)
        self.features = vectors[:, keep] / np.sqrt(values[keep])
        self.features_inverse = np.sqrt(values[keep])[:, None] * vectors[:, keep].T
        self.constants = vectors[:, ~keep]
        self.sector_shifts = sector_shifts(self.space, hamiltonian.electrons)
        self.shifts = _completed(self.space, self.sector_shifts, self.constants)
        self.target = self.shifts.project(self.space.hamiltonian_rows(hamiltonian))

    @property
    def rows(self) -> int:
        """Independent rows, without the shifts."""
        return self.space.size - self.shifts.basis.shape[1]

    def whitening(self, covariance: Array) -> tuple[Array, Array]:
        """(F, F') combinations of features of unit variance for a covariance (F, F), and (F', F) the map back to them.

        Raises `numpy.linalg.LinAlgError` if it is singular apart from the constants.
        """
        lower = np.asarray(np.linalg.cholesky(self.features.T @ covariance @ self.features), dtype=np.float64)
        whitener = solve_triangular(lower, self.features.T, lower=True, check_finite=False).T
        return whitener, lower.T @ self.features_inverse

    def evaluate(self, rotations: Array, coefficients: Array, dual_of: Callable[[Array], Array]) -> MapResult:
        """The residual of rotations (K, n, n) with coefficients (K, F), and Aᵀ and gradient for a dual made from it."""
        fragments = FragmentSum(self.space, rotations, coefficients)
        residual = self.target - self.shifts.project(fragments.total())
        dual = dual_of(residual)
        return MapResult(residual, dual, *fragments.transpose(dual))

    def residual(self, rotations: Array, coefficients: Array) -> Array:
        """The Hamiltonian minus the fragments, without the shifts, as rows."""
        columns = self.space.pair_columns(rotations)
        return self.target - self.shifts.project(self.space.apply(columns, rotations, coefficients))

    def operators(self, rotation: Array, combinations: Array) -> Array:
        """Matrix (rows, …) of one rotation: operators of `combinations` (F, …) of features, without the shifts."""
        dense = self.space.dense(self.space.pair_columns(rotation), rotation)
        return self.shifts.project(dense @ combinations)

    def turning(self, rotation: Array, coefficients: Array) -> Array:
        """Matrix (rows, n(n−1)/2): change of a fragment's operator with each generator p < q, without the shifts.

        U → U exp(X) with X_pq = x = −X_qp changes the pair columns W_q and W_p by ±2x v, v the packed symmetric product
        of columns p and q, so that W Y Wᵀ changes by x (v gᵀ + g vᵀ), g = 2 (W Y)_q − 2 (W Y)_p.
        """
        space, n = self.space, self.orbitals
        i, j = pair_indices(n)
        a, b = pair_indices(n, strict=True)
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
    complete = False
    for _ in range(space.orbitals + 2):
        rotation = np.linalg.qr(rng.standard_normal((space.orbitals,) * 2))[0]
        missing = space.dense(space.pair_columns(rotation), rotation) @ constants
        for _ in range(2):
            missing -= basis @ (basis.T @ missing)
        complete = bool(np.max(np.abs(missing), initial=0.0) < 1e-9)
        if complete:
            break
        left, singular, _ = np.linalg.svd(missing, full_matrices=False)
        basis = np.hstack([basis, left[:, singular > 1e-9]])
    if basis is shifts.basis and complete:
        return shifts
    # Values of the additional operators are not needed here: they drop out of every residual.
    values = np.zeros(basis.shape[1])
    values[: len(shifts.values)] = shifts.values
    return Shifts(basis, values)
