"""Least-variance coefficients at fixed rotations of many orbitals, and constants put where they are measured.

The multiplicative iteration of optimal design, w_m ← w_m φ_m^γ with φ_m = |C_m^{-1/2} A_mᵀ ν|² and ν = M⁻¹ h (Silvey,
Titterington & Torsney, Commun. Stat. A 7, 1379 (1978)), with ν by conjugate gradients; (hᵀν)²/max φ is a lower bound
of the cost in every round.
"""

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import lstsq

from fragkit.core import InputError
from fragkit.planning._operators.conjugate_gradients import least_variance
from fragkit.planning._operators.design_map import DesignMap
from fragkit.planning._operators.shifts import Shifts

Array = NDArray[np.float64]

EXPONENT = 1.0
"""γ while the cost falls; 1/2, with which it always does, from the first time that it does not."""

ACCURACY = 1e-10
"""Relative residual to which conjugate gradients are taken; they end earlier where rounding does not allow it."""

MOST_ITERATIONS = 4000
LEAST_GAIN = 1e-4
"""Relative fall of the cost in a round below which no further round is taken."""


@dataclass(frozen=True, eq=False)
class IterativeWeights:
    """Coefficients (K, F) modulo constants, dual (R,), lower bound in Ha² and rounds taken."""

    coefficients: Array
    dual: Array
    lower_bound: float
    rounds: int


def multiplicative_weights(
    design: DesignMap,
    rotations: Array,
    covariances: Sequence[Array],
    *,
    start: Array | None,
    tolerance: float,
    rounds: int,
    report: Callable[[float], None] | None = None,
) -> IterativeWeights:
    """Coefficients of least (Σ σ)², to a relative `tolerance` or until the cost falls by less than `LEAST_GAIN`.

    Raises
    ------
    InputError
        If a covariance is singular apart from features that are constant in the sector.
    """
    count = len(rotations)
    whiteners = np.empty((count, *design.features.shape))
    for m, covariance in enumerate(covariances):
        try:
            whiteners[m] = design.whitening(covariance)[0]
        except np.linalg.LinAlgError:
            raise InputError(
                f"`covariances` must be positive definite for {design.orbitals} orbitals (got a singular one for "
                f"rotation {m}); mix noise into the state, with planning_noise or `with_noise`"
            ) from None
    weights = np.full(count, 1.0 / count) if start is None else np.maximum(start / np.sum(start), 1e-4 / count)
    best: IterativeWeights | None = None
    dual: Array | None = None
    cost = bound = np.inf
    exponent = EXPONENT
    for number in range(1, rounds + 1):
        scale = np.sqrt(weights)[:, None, None] * whiteners
        scaled, dual = least_variance(
            design, rotations, scale, tolerance=ACCURACY, iterations=MOST_ITERATIONS, start=dual
        )
        sizes = np.einsum("kr,kr->k", scaled, scaled) / weights
        now = float(weights @ np.sqrt(sizes)) ** 2
        bound = float(design.target @ dual) ** 2 / float(np.max(sizes))
        bound = bound if best is None else max(bound, best.lower_bound)
        if report is not None:
            report(now)
        fall = 1.0 - now / cost
        if fall < 0.0 and exponent > 0.5:
            exponent, fall = 0.5, np.inf
        if best is None or now < cost:
            cost = now
            best = IterativeWeights(np.einsum("kfr,kr->kf", scale, scaled), dual, bound, number)
        if cost - bound <= tolerance * cost or fall < LEAST_GAIN:
            break
        weights = np.maximum(weights * sizes**exponent, 1e-8)
        weights /= weights.sum()
    if best is None:
        raise AssertionError  # rounds is at least 1
    return IterativeWeights(best.coefficients, best.dual, bound, number)


def constants_for(design: DesignMap, rotations: Array, residual: Array, shifts: Shifts) -> Array:
    """Coefficients (K, F) of features that are constant in the sector, for the rows (R,) that `shifts` leave.

    Least squares; what is not in the span of such features stays.
    """
    space, count = design.space, len(rotations)
    wanted = design.shifts.basis.T @ shifts.project(residual)
    if np.linalg.norm(wanted) <= 1e-13 * np.linalg.norm(design.target):
        return np.zeros((count, design.constants.shape[0]))
    columns = space.pair_columns(rotations)
    kept = shifts.project(design.shifts.basis)
    matrix = np.stack([(space.adjoint(columns, rotations, row) @ design.constants).ravel() for row in kept.T])
    solution = np.asarray(lstsq(matrix, wanted, cond=1e-10, lapack_driver="gelsy")[0])  # pyright: ignore
    return solution.reshape(count, -1) @ design.constants.T
