"""What may be added to the squared residual: a price on coefficients."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]

_ROUND = 1e-4  # hartree; below it |λ| is rounded off to a parabola


@dataclass(frozen=True)
class Penalty:
    """quadratic · Σ λ² + one_norm · Σ c_ij |λ_ij|, with the weights c of `fragkit.core.one_norm`.

    c_ij is ½ for i ≠ j and ¼ for i = j: the weight of the reflections in ½ Σ λ_ij n_i n_j. The absolute value is
    √(λ² + 1e-8 Ha²), and each step uses the parabola that touches it from above, so no step can raise the true sum.
    """

    quadratic: float = 0.0
    one_norm: float = 0.0

    def __bool__(self) -> bool:
        return self.quadratic > 0.0 or self.one_norm > 0.0

    def value(self, coefficients: Array) -> float:
        """The penalty, hartree²."""
        smooth = np.sqrt(coefficients**2 + _ROUND**2)
        return float(self.quadratic * np.sum(coefficients**2) + self.one_norm * np.sum(_shares(coefficients) * smooth))

    def curvature(self, coefficients: Array) -> Array:
        """Weights w with penalty ≤ Σ w λ² + constant, equal at `coefficients`."""
        smooth = np.sqrt(coefficients**2 + _ROUND**2)
        return self.quadratic + 0.5 * self.one_norm * _shares(coefficients) / smooth


def _shares(coefficients: Array) -> Array:
    n = coefficients.shape[-1]
    return np.where(np.eye(n, dtype=bool), 0.25, 0.5)
