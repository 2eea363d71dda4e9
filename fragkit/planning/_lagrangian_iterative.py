"""Normal equations of many orbitals by conjugate gradients, without a matrix of operator rows.

Generic rotations are many random vectors to N = B Bᵀ + J Jᵀ and to M = B Bᵀ, whose eigenvalues then spread like those
of a random matrix with as many columns: for r rows and c columns between (1 ± √(r/c))² (Marchenko & Pastur, Math. USSR
Sbornik 1, 457 (1967)), at any size. So the number of iterations depends on the ratio of circuits to the fewest that
are exact, and hardly on the number of orbitals.
"""

from collections.abc import Callable
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.sparse.linalg import LinearOperator, cg

from fragkit.core import pair_indices
from fragkit.planning._design_map import DesignMap
from fragkit.planning._fragment_sum import FragmentSum

Array = NDArray[np.float64]
Map = Callable[[Array], Array]

PROBES = 32
"""Random vectors that estimate the diagonal of N, each entry to a quarter."""

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


def least_variance(
    design: DesignMap,
    rotations: Array,
    scale: Array,
    *,
    tolerance: float,
    iterations: int,
    held: float = 0.0,
    start: Array | None = None,
) -> tuple[Array, Array]:
    """Scaled coefficients z = Bᵀ ν (K, F') and ν = M⁻¹ h, M = B Bᵀ with B the operators of `scale` (K, F, F').

    For scale_m = √w_m C_m^{-1/2} these are the exact coefficients of least Σ σ_m²/w_m. They are exact to `tolerance`,
    or as near as so many iterations come. With `held` they are not exact but minimise ‖h − B z‖² + held · s ‖z‖², s the
    mean squared length of the columns of B.
    """
    space, project = design.space, design.shifts.project
    columns = space.pair_columns(rotations)
    shape = len(scale), scale.shape[-1]

    def forward(scaled: Array) -> Array:
        return project(space.apply(columns, rotations, np.matmul(scale, scaled[:, :, None])[:, :, 0]))

    def backward(rows: Array) -> Array:
        return np.matmul(space.adjoint(columns, rotations, rows)[:, None, :], scale)[:, 0, :]

    diagonal = estimated_diagonal(lambda rng: forward(rng.standard_normal(shape)))
    added = held * float(np.sum(diagonal)) / (shape[0] * shape[1])
    dual = solved(
        lambda v: forward(backward(v)) + added * v,
        design.target,
        inverse_of(design, diagonal + added),
        tolerance=tolerance,
        iterations=iterations,
        start=start,
    )
    return backward(dual), dual


def estimated_diagonal(probe: Callable[[np.random.Generator], Array]) -> Array:
    """The diagonal of F Fᵀ from F applied to random vectors: `probe(rng)` gives one F z."""
    rng = np.random.default_rng(0)
    return np.mean([probe(rng) ** 2 for _ in range(PROBES)], axis=0)


def inverse_of(design: DesignMap, diagonal: Array) -> Map:
    """Division by a diagonal, outside of the shifts and without its smallest entries."""
    inverse = 1.0 / np.maximum(diagonal, 1e-2 * np.mean(diagonal))
    return lambda rows: design.shifts.project(inverse * rows)


def solved(
    apply: Map, wanted: Array, precondition: Map, *, tolerance: float, iterations: int, start: Array | None = None
) -> Array:
    """x with M x near `wanted`, to `tolerance` relative or as near as so many conjugate-gradient iterations come."""
    shape = (len(wanted), len(wanted))
    matrix = LinearOperator(shape, matvec=apply, dtype=np.float64)  # pyright: ignore[reportCallIssue]
    inverse = LinearOperator(shape, matvec=precondition, dtype=np.float64)  # pyright: ignore[reportCallIssue]
    return cg(matrix, wanted, start, rtol=tolerance, maxiter=iterations, M=inverse)[0]
