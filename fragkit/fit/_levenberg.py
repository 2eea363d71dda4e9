"""Levenberg-Marquardt iteration on the residual tensor itself.

The unknowns are an antisymmetric X and a change of λ for each fragment, re-centred after every step, so nothing but
matrix products and one linear solve is needed. Small problems solve the normal equations by Cholesky factorisation,
in the smaller of the two dimensions; large ones by conjugate gradients without a matrix. A second-order correction
along the step (geodesic acceleration, Transtrum & Sethna, arXiv:1201.5885) halves the number of iterations.
"""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from fragkit.fit._penalty import Penalty
from fragkit.fit._point import Point, Tangent, adjoint, derivative, inner, moved

Array = NDArray[np.float64]


class LinearSolver(Protocol):
    """Solves (JᵀJ + w on λ + damping) v = Jᵀ tensor − (0, w λ) at one point, for as many right sides as asked."""

    def __call__(self, tensor: Array, damping: float, *, shrink: bool) -> Tangent | None:
        """The step; None if the factorisation failed. `shrink` says whether − w λ belongs to the right side."""
        ...


@dataclass(frozen=True, eq=False)
class Outcome:
    """Where an iteration ended and why: "tolerance", "stalled", "iterations" or "seconds"."""

    point: Point
    iterations: int
    reason: str


def levenberg_marquardt(
    target: Array,
    start: Point,
    solver_at: Callable[[Point, Array], LinearSolver],
    *,
    tol: float,
    max_iterations: int,
    penalty: Penalty,
    damping: float = 1e-2,
    patience: int = 30,
    update: Callable[[Point, int], None] | None = None,
    out_of_time: Callable[[], bool] = lambda: False,
) -> Outcome:
    """Minimise ‖target − Σ F‖² + penalty from `start`.

    Ends when the residual's norm is at most `tol`, when `patience` iterations together lowered it by less than a
    tenth (with a penalty: the objective by less than 1e-6 of itself), after `max_iterations`, or when
    `out_of_time`. The objective never rises.
    """
    point = start
    objective = point.squared + penalty.value(point.coefficients)
    history = [objective]
    for iteration in range(max_iterations):
        if point.norm <= tol and not penalty:
            return Outcome(point, iteration, "tolerance")
        if out_of_time():
            return Outcome(point, iteration, "seconds")
        if _stalled(history, patience, bool(penalty)):
            return Outcome(point, iteration, "stalled")
        solve = solver_at(point, penalty.curvature(point.coefficients))
        better = None
        for _ in range(16):
            better, gain_ratio = _try_step(target, point, objective, solve, penalty, damping)
            if better is not None:
                break
            damping = 4.0 * damping
        if better is None:
            return Outcome(point, iteration, "stalled")
        point = better
        objective = point.squared + penalty.value(point.coefficients)
        history.append(objective)
        if gain_ratio > 0.75:
            damping = max(0.2 * damping, 1e-14)
        elif gain_ratio < 0.25:
            damping = 2.0 * damping
        if update is not None:
            update(point, iteration + 1)
    return Outcome(point, max_iterations, "tolerance" if point.norm <= tol and not penalty else "iterations")


def _try_step(
    target: Array, point: Point, objective: float, solve: LinearSolver, penalty: Penalty, damping: float
) -> tuple[Point | None, float]:
    """A better point and the ratio of true to expected gain, or None when the step does not lower the objective."""
    step = solve(point.residual, damping, shrink=True)
    if step is None:
        return None, 0.0
    along = derivative(point, step)
    weights = penalty.curvature(point.coefficients)
    shrunk = point.coefficients + step[1]
    expected = point.squared - float(np.sum((point.residual - along) ** 2))
    expected += float(np.sum(weights * (point.coefficients**2 - shrunk**2)))
    if expected <= 0.0:
        return None, 0.0
    candidates = []
    # Second derivative of Σ F along the step, by a difference; the correction cancels it to leading order.
    ahead = 0.1
    bend = (moved(target, point, (ahead * step[0], ahead * step[1])).residual - point.residual + ahead * along) * (
        -2.0 / ahead**2
    )
    correction = solve(-0.5 * bend, damping, shrink=False)
    if correction is not None and inner(correction, correction) < 0.5 * inner(step, step):
        candidates.append((step[0] + correction[0], step[1] + correction[1]))
    candidates.append(step)
    for candidate in candidates:
        new = moved(target, point, candidate)
        gain = objective - new.squared - penalty.value(new.coefficients)
        if gain > 0.0:
            return new, gain / expected
    return None, 0.0


def _stalled(history: list[float], patience: int, penalised: bool) -> bool:
    if len(history) <= patience:
        return False
    before, now = history[-1 - patience], history[-1]
    # The history holds squares: 0.81 is a tenth of the residual itself.
    return now > (1.0 - 1e-6 if penalised else 0.81) * before


class MatrixFreeSolver:
    """Preconditioned conjugate gradients on the normal equations, for one run of iterations.

    Within one fragment JᵀJ is diagonal in its own orbitals, 1 for λ_ij and 4 Σ_k (λ_ak − λ_bk)² for X_ab, since
    occupation pairs and mixed pairs are orthogonal; that diagonal is the preconditioner. A solve that is cut short,
    also by the time, still gives a step that lowers the model. Rough solves go furthest at first; when an iteration
    gains less than a tenth of the squared residual, the next solves may take twice as many products.
    """

    def __init__(
        self, *, out_of_time: Callable[[], bool], first_steps: int = 30, most_steps: int = 1000, accuracy: float = 0.1
    ) -> None:
        self._out_of_time = out_of_time
        self._steps = first_steps
        self._first_steps, self._most_steps = first_steps, most_steps
        self._accuracy = accuracy
        self._before = np.inf

    def __call__(self, point: Point, weights: Array) -> LinearSolver:
        """Solver at one point."""
        slow = point.squared > 0.9 * self._before
        self._before = point.squared
        self._steps = min(2 * self._steps, self._most_steps) if slow else max(self._steps // 2, self._first_steps)
        accuracy = self._accuracy if self._steps == self._first_steps else 0.1 * self._accuracy
        gaps = point.coefficients[:, :, :, None] - point.coefficients[:, :, None, :]
        diagonal_turn = 4.0 * np.sum(gaps**2, axis=1)

        def solve(tensor: Array, damping: float, *, shrink: bool) -> Tangent:
            turn, change = adjoint(point, tensor)
            if shrink:
                change = change - weights * point.coefficients
            scale = (diagonal_turn + damping, 1.0 + weights + damping)

            def apply(v: Tangent) -> Tangent:
                a, b = adjoint(point, derivative(point, v))
                return a + damping * v[0], b + (damping + weights) * v[1]

            return _conjugate_gradients(
                apply, (turn, change), scale, max_steps=self._steps, accuracy=accuracy, out_of_time=self._out_of_time
            )

        return solve


def _conjugate_gradients(
    apply: Callable[[Tangent], Tangent],
    right: Tangent,
    scale: Tangent,
    *,
    max_steps: int,
    accuracy: float,
    out_of_time: Callable[[], bool],
) -> Tangent:
    solution = (np.zeros_like(right[0]), np.zeros_like(right[1]))
    left = right
    direction = scaled = (left[0] / scale[0], left[1] / scale[1])
    size = first = inner(left, scaled)
    for _ in range(max_steps):
        if size <= accuracy**2 * first or size == 0.0 or out_of_time():
            break
        image = apply(direction)
        length = size / inner(direction, image)
        solution = (solution[0] + length * direction[0], solution[1] + length * direction[1])
        left = (left[0] - length * image[0], left[1] - length * image[1])
        scaled = (left[0] / scale[0], left[1] / scale[1])
        size, previous = inner(left, scaled), size
        direction = (scaled[0] + size / previous * direction[0], scaled[1] + size / previous * direction[1])
    return solution
