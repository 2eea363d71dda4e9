"""The function whose maximum over rotations bounds every plan, its gradient, and a multi-start search for maxima."""

import numpy as np
from numpy.typing import NDArray

from fragkit.core import Hamiltonian
from fragkit.planning._operators.design_map import DesignMap
from fragkit.planning._operators.fragment_sum import FragmentSum
from fragkit.planning._rotations.covariances import cayley
from fragkit.states import ReferenceState

Array = NDArray[np.float64]

LEAST_VARIANCE = 1e-12
"""Added to every variance, over that in the maximally mixed state: what does not fluctuate still is not free."""


class PhiSearch:
    """Local maxima of φ(U) = aᵀC(U)⁻¹a over rotations, a = A(U)ᵀν.

    Features enter without the combinations that are constant in the sector, scaled to unit covariance in the maximally
    mixed state.
    """

    def __init__(self, hamiltonian: Hamiltonian, state: ReferenceState) -> None:
        self.map = DesignMap(hamiltonian)
        self._state = state
        self._strict = np.triu_indices(hamiltonian.orbitals, 1)

    @property
    def rows(self) -> int:
        """Number of operator rows."""
        return self.map.space.size

    def projected(self, rows: Array) -> Array:
        """Operator rows without the shifts, as every dual has to be."""
        return self.map.shifts.project(rows)

    def block(self, rotation: Array) -> Array:
        """Operators B (rows, F') of unit variance per shot that a rotation measures: φ = |Bᵀν|²."""
        root = np.linalg.cholesky(self._covariances(rotation[None])[0])
        return self.map.operators(rotation, self.map.features @ np.linalg.inv(root).T)

    def value_and_gradient(self, rotations: Array, dual: Array) -> tuple[Array, Array]:
        """φ (K,) and its gradient (K, n(n−1)/2) by X_pq, p < q, for U → U exp(X).

        With y = C⁻¹a: dφ = 2 y·da − yᵀ dC y.
        """
        space, features = self.map.space, self.map.features
        responses = space.adjoint(space.pair_columns(rotations), rotations, dual) @ features
        solved = np.linalg.solve(self._covariances(rotations), responses[:, :, None])[:, :, 0]
        coefficients = solved @ features.T
        turning = FragmentSum(space, rotations, coefficients).transpose(dual)[1]
        spread = self._state.variance_and_gradient(rotations, coefficients)[2]
        p, q = self._strict
        return np.vecdot(solved, responses), (2.0 * turning - spread)[:, p, q]

    def maxima(self, rotations: Array, dual: Array, *, iterations: int = 60) -> tuple[Array, Array]:
        """Rotations (K, n, n) to which quasi-Newton ascent leads from each of the given ones, and φ there.

        BFGS in the frame of the current rotation, all starting points side by side; a step that does not raise φ is
        shortened. A point rests when φ rises by less than 1e-4 in a step, or steps are very short.
        """
        count, size = len(rotations), len(self._strict[0])
        rotations = np.array(rotations)
        values, slopes = self.value_and_gradient(rotations, dual)
        inverse = np.repeat(np.eye(size)[None], count, axis=0)
        # First steps of about 0.1 rad.
        inverse *= (0.1 / np.maximum(np.linalg.norm(slopes, axis=1), 1e-12))[:, None, None]
        length = np.ones(count)
        moving = np.arange(count)
        for _ in range(iterations):
            step = np.einsum("kab,kb->ka", inverse[moving], slopes[moving]) * length[moving, None]
            norm = np.linalg.norm(step, axis=1)
            step *= np.minimum(1.0, 0.6 / np.maximum(norm, 1e-300))[:, None]
            tried = self.turned(rotations[moving], step)
            new_values, new_slopes = self.value_and_gradient(tried, dual)
            rise = new_values - values[moving]
            better = rise > 0.0
            difference = slopes[moving] - new_slopes
            curvature = np.vecdot(step, difference)
            for k in np.flatnonzero(better & (curvature > 1e-12 * norm**2)):
                inverse[moving[k]] = _bfgs(inverse[moving[k]], step[k], difference[k], curvature[k])
            resting = better & (rise < 1e-4 * np.abs(new_values))
            risen = moving[better]
            rotations[risen], slopes[risen], values[risen] = tried[better], new_slopes[better], new_values[better]
            length[moving] = np.where(better, 1.0, 0.3 * length[moving])
            moving = moving[~resting & (length[moving] > 1e-3)]
            if not len(moving):
                break
        return rotations, values

    def turned(self, rotations: Array, steps: Array) -> Array:
        """U exp(X) to second order, exactly orthogonal (Cayley)."""
        n = rotations.shape[-1]
        p, q = self._strict
        generators = np.zeros((len(steps), n, n))
        generators[:, p, q] = steps
        return cayley(rotations, generators - generators.transpose(0, 2, 1))

    def _covariances(self, rotations: Array) -> Array:
        features = self.map.features
        own = np.stack([self._state.moments(rotation)[1] for rotation in rotations])
        return features.T @ own @ features + LEAST_VARIANCE * np.eye(features.shape[1])


def _bfgs(inverse: Array, step: Array, difference: Array, curvature: float) -> Array:
    """Inverse of the negative Hessian after one more pair (step, fall of the gradient)."""
    applied = inverse @ difference
    scale = (curvature + difference @ applied) / curvature**2
    crossed = np.outer(applied, step) / curvature
    return inverse + scale * np.outer(step, step) - crossed - crossed.T
