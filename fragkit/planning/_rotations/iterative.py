"""Normal equations of rotations and coefficients for many orbitals, applied and never formed."""

from typing import Any

import numpy as np
from numpy.typing import NDArray

from fragkit.core import pair_indices
from fragkit.planning._operators.conjugate_gradients import Map, estimated_diagonal, inverse_of, solved
from fragkit.planning._operators.design_map import DesignMap
from fragkit.planning._operators.fragment_sum import FragmentSum

Array = NDArray[np.float64]

MOST_ITERATIONS = 400
"""Of conjugate gradients for one step; a step that is not exact yet is followed by another."""


class IterativeSystem:
    """N applied, never formed; its diagonal, estimated with random vectors, preconditions and is the metric.

    In single precision: a step that is not exact yet is followed by another, for the residual in double precision.
    """

    singular = False

    def __init__(
        self,
        design: DesignMap,
        rotations: Array,
        coefficients: Array,
        scale: NDArray[Any],
        lengths: Array,
        precondition: Map | None = None,
    ) -> None:
        self._design, self._lengths = design, lengths
        self._scale: NDArray[Any] = scale.astype(np.float32, copy=False)
        self._orbitals = rotations.shape[-1]
        self._fragments = FragmentSum(design.space, rotations, coefficients, single=True)
        if precondition is None:
            shapes = (len(scale), scale.shape[-1]), lengths.shape
            diagonal = estimated_diagonal(lambda rng: self._forward(*(rng.standard_normal(shape) for shape in shapes)))
            precondition = inverse_of(design, diagonal)
        self._precondition = precondition

    def near(self, rotations: Array, coefficients: Array) -> "IterativeSystem":
        """The system there, with the same preconditioner."""
        return IterativeSystem(self._design, rotations, coefficients, self._scale, self._lengths, self._precondition)

    def step(self, residual: Array, *, tolerance: float) -> tuple[Array, Array]:
        """See `System`."""
        return self._backward(self._solve(residual, tolerance))

    def multipliers(self, by_scaled: Array, by_turns: Array, *, start: Array | None) -> Array:
        """See `System`."""
        return self._solve(self._forward(by_scaled, by_turns), 1e-4, start)

    def turning_shares(self) -> Array:
        """The mean of the diagonal: rows over columns."""
        columns = self._lengths.size + len(self._scale) * self._scale.shape[-1]
        return np.full_like(self._lengths, min(1.0, self._design.rows / columns))

    def into_metric(self) -> Map:
        """The inverse of the diagonal of N."""
        return self._precondition

    def _solve(self, rows: Array, tolerance: float, start: Array | None = None) -> Array:
        return solved(
            lambda v: self._forward(*self._backward(v)),
            rows,
            self._precondition,
            tolerance=tolerance,
            iterations=MOST_ITERATIONS,
            start=start,
        )

    def _forward(self, scaled: Array, turns: Array) -> Array:
        p, q = pair_indices(self._orbitals, strict=True)
        generators = np.zeros((len(turns), self._orbitals, self._orbitals))
        generators[:, p, q] = turns * self._lengths
        generators -= generators.transpose(0, 2, 1)
        coefficients = np.matmul(self._scale, scaled.astype(np.float32)[:, :, None])[:, :, 0]
        return self._design.shifts.project(self._fragments.change(generators, coefficients))

    def _backward(self, rows: Array) -> tuple[Array, Array]:
        p, q = pair_indices(self._orbitals, strict=True)
        adjoint, gradient = self._fragments.transpose(rows)
        scaled = np.matmul(adjoint.astype(np.float32)[:, None, :], self._scale)[:, 0, :]
        return scaled.astype(np.float64), gradient[:, p, q] * self._lengths
