"""Normal equations of fragments by conjugate gradients, without a matrix of operator rows.

Generic rotations are many random vectors to M = B Bᵀ, B the operators that they measure, whose eigenvalues then spread
like those of a random matrix with as many columns: for r rows and c columns between (1 ± √(r/c))² (Marchenko & Pastur,
Math. USSR Sbornik 1, 457 (1967)), at any size. So the number of iterations depends on the ratio of circuits to the
fewest that are exact, and hardly on the number of orbitals.
"""

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray
from scipy.sparse.linalg import LinearOperator, cg

from fragkit.planning._operators.design_map import DesignMap

Array = NDArray[np.float64]
Map = Callable[[Array], Array]

PROBES = 32
"""Random vectors that estimate a diagonal, each entry to a quarter."""


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
