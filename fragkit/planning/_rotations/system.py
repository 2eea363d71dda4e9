"""Normal equations of rotations and coefficients: how the fragments' sum answers to both together.

With B the operators of the scaled coefficients z and J those of the scaled generators x, N = B Bᵀ + J Jᵀ gives the
step of least length with a wanted change r of the sum, (z, x) = [B J]ᵀ N⁻¹ r, and the multipliers N⁻¹ [B J] g for a
gradient g by (z, x).
"""

from collections.abc import Callable
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from fragkit.planning._operators.design_map import DesignMap
from fragkit.planning._operators.factor import Factor, is_factorised, symmetric_product, working_precision
from fragkit.planning._rotations.iterative import IterativeSystem

Array = NDArray[np.float64]
Metric = Callable[[Array], Array]


class System(Protocol):
    """Normal equations at one point."""

    @property
    def singular(self) -> bool:
        """Whether some changes of the sum cannot be made."""
        ...

    def near(self, rotations: Array, coefficients: Array) -> "System":
        """The system at a point nearby, in the same scaling, or this one where that is good enough for steps."""
        ...

    def step(self, residual: Array, *, tolerance: float) -> tuple[Array, Array]:
        """Shortest (z, x), shapes (K, F') and (K, n(n−1)/2), that change the sum by `residual`, to `tolerance`."""
        ...

    def multipliers(self, by_scaled: Array, by_turns: Array, *, start: Array | None) -> Array:
        """N⁻¹ [B J] g (R,); `start` is a first guess."""
        ...

    def turning_shares(self) -> Array:
        """(K, n(n−1)/2) diagonal of Jᵀ N⁻¹ J: how much of each generator exactness takes."""
        ...

    def into_metric(self) -> Metric:
        """N⁻¹, or something like it, as a function of rows; the system is gone afterwards."""
        ...


def system_at(design: DesignMap, rotations: Array, coefficients: Array, scale: Array, lengths: Array) -> System:
    """The system for c_m = scale_m z_m, scale (K, F, F'), and generators X = lengths · x, lengths (K, n(n−1)/2)."""
    kind = FactorisedSystem if is_factorised(design.space.size) else IterativeSystem
    return kind(design, rotations, coefficients, scale, lengths)


class FactorisedSystem:
    """N formed and factorised, in double precision where single does not do."""

    def __init__(self, design: DesignMap, rotations: Array, coefficients: Array, scale: Array, lengths: Array) -> None:
        count, reduced, turns = len(rotations), scale.shape[-1], lengths.shape[1]
        self._shape = count, reduced, turns
        self._split = split = count * reduced
        kinds = dict.fromkeys((working_precision(design.space.size), np.float64))
        for self._kind in kinds:
            self._matrix = np.empty((design.space.size, split + count * turns), dtype=self._kind, order="F")
            for m, rotation in enumerate(rotations):
                self._matrix[:, m * reduced : (m + 1) * reduced] = design.operators(rotation, scale[m])
                columns = slice(split + m * turns, split + (m + 1) * turns)
                self._matrix[:, columns] = design.turning(rotation, coefficients[m]) * lengths[m]
            self._factor = Factor(self._matrix, design.shifts.basis)
            self.singular = self._factor.singular
            if not self.singular:
                break

    def near(self, rotations: Array, coefficients: Array) -> "FactorisedSystem":
        """This one."""
        return self

    def step(self, residual: Array, *, tolerance: float) -> tuple[Array, Array]:
        """See `System`; exact to the precision of the factor."""
        count, reduced, turns = self._shape
        both = (self._matrix.T @ self._factor.solve(residual).astype(self._kind)).astype(np.float64)
        return both[: self._split].reshape(count, reduced), both[self._split :].reshape(count, turns)

    def multipliers(self, by_scaled: Array, by_turns: Array, *, start: Array | None) -> Array:
        """See `System`."""
        gradient = np.concatenate([by_scaled.ravel(), by_turns.ravel()]).astype(self._kind)
        return self._factor.solve((self._matrix @ gradient).astype(np.float64))

    def turning_shares(self) -> Array:
        """See `System`."""
        moved = self._factor.half_solve(self._matrix[:, self._split :]).astype(np.float64)
        count, _, turns = self._shape
        return np.einsum("rp,rp->p", moved, moved).reshape(count, turns)

    def into_metric(self) -> Metric:
        """See `System`."""
        inverse = self._factor.into_inverse()
        return lambda rows: symmetric_product(inverse, rows)
