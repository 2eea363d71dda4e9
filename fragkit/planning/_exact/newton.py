"""Globally least-variance coefficients and shot shares at fixed rotations.

With variance per shot V(w) = hᵀ M(w)⁻¹ h, M(w) = Σ_m w_m B_m B_mᵀ, the problem min V(w) + Σ w over w ≥ 0 is convex, and
its solution has w_m = σ_m, the standard deviation of circuit m; Σ w is then the root of the cost (Σ σ)². A primal-dual
interior-point iteration on the K weights solves it: with φ_m = |B_mᵀ ν|², ν = M⁻¹h,

    ∂V/∂w_m = −φ_m,   ∂²V/∂w_m∂w_l = 2 g_mᵀ M⁻¹ g_l,   g_m = B_m B_mᵀ ν.

This is c-optimal design with several responses (Elfving 1952; Sagnol, arXiv:0912.5467). The dual, max hᵀν with
|B_mᵀ ν| ≤ 1, gives a lower bound for these rotations in every iteration: (hᵀν)²/max_m φ_m.
"""

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import solve

from fragkit.planning._exact.unit_design import Information, UnitDesign

Array = NDArray[np.float64]

FAR = 0.6
"""Lower bound over cost below which multiplicative updates are taken instead of Newton steps."""

MOST_MULTIPLICATIVE = 12


@dataclass(frozen=True, eq=False)
class Weights:
    """Weights of least variance: the σ_m, the dual ν in the design's working basis, cost and lower bound in Ha².

    `information` is that of weights near these, for corrections; None when nothing needs to be measured.
    """

    weights: Array
    dual: Array
    cost: float
    lower_bound: float
    converged: bool
    iterations: int
    information: Information | None


def newton_weights(
    design: UnitDesign,
    *,
    start: Array | None = None,
    tolerance: float = 1e-6,
    iterations: int = 60,
    report: Any = None,
) -> Weights:
    """Interior-point weights with (cost − lower bound) ≤ tolerance × cost.

    `start` is a first guess of the shares, `report(cost)` is called in every iteration.
    """
    count = design.count
    if design.matrix.size == 0:
        return Weights(np.zeros(count), np.zeros(design.matrix.shape[0]), 0.0, 0.0, True, 0, None)
    # A circuit that reads nothing but what is known (or free) needs no shots and would spoil the barrier.
    active = np.array([bool(np.any(design.matrix[:, block])) for block in design.blocks])
    weights = np.full(count, 1.0 / count) if start is None else np.maximum(start / np.sum(start), 1e-4 / count)
    weights = np.where(active, weights, 0.0)
    slack: Array | None = None
    best: Weights | None = None
    cold, multiplied = start is None, 0
    for iteration in range(iterations + 1):
        information = design.information(weights)
        dual = information.inverse(design.wanted)
        variance = float(design.wanted @ dual)
        if variance <= 0.0:
            # Everything that is wanted costs nothing.
            zero = np.zeros(count)
            return Weights(zero, np.zeros_like(dual), 0.0, 0.0, True, iteration, None)
        # Along a ray V/s + s Σw is least at s = √(V/Σw); this also sets the scale of the first guess.
        scale = np.sqrt(variance / np.sum(weights))
        weights, dual, variance = weights * scale, dual / scale, variance / scale
        response = design.matrix.T @ dual
        sizes = np.array([response[block] @ response[block] for block in design.blocks])
        cost = float(weights @ np.sqrt(sizes)) ** 2
        bound = variance**2 / float(np.max(sizes))
        if best is None or cost < best.cost:
            best = Weights(weights, dual, cost, bound, False, iteration, information)
        lower = max(best.lower_bound, bound)
        done = best.cost - lower <= tolerance * best.cost
        best = Weights(best.weights, best.dual, best.cost, lower, done, iteration, best.information)
        if report is not None:
            report(best.cost)
        if done or iteration == iterations:
            return best
        if (cold and iteration < 2) or (bound < FAR * cost and multiplied < MOST_MULTIPLICATIVE):
            # Far from the solution the multiplicative update is the better step: it never raises V.
            weights = weights * np.maximum(np.sqrt(sizes), 1e-2)
            multiplied += 1
            slack = None
            continue
        if slack is None:
            slack = np.maximum(1.0 - sizes[active], 0.01 if multiplied == 0 else 0.1)
        blocks = [block for block, keep in zip(design.blocks, active, strict=True) if keep]
        stepped, slack = _step(design, blocks, information, scale, weights[active], slack, sizes[active], response)
        weights = np.zeros(count)
        weights[active] = stepped
    raise AssertionError  # the loop always returns


def _step(
    design: UnitDesign,
    blocks: list[slice],
    information: Information,
    scale: float,
    weights: Array,
    slack: Array,
    sizes: Array,
    response: Array,
) -> tuple[Array, Array]:
    """One primal-dual step with Mehrotra's choice of the barrier; M⁻¹ of `information` is `scale` too large."""
    gradients = np.stack([design.matrix[:, block] @ response[block] for block in blocks], axis=1)
    halves = information.half_inverse(gradients)
    hessian = 2.0 / scale * (halves.T @ halves)
    system = hessian + np.diag(slack / weights)

    def direction(barrier: Array) -> tuple[Array, Array]:
        change = solve(system, sizes - 1.0 + barrier / weights, assume_a="pos", check_finite=False)
        return change, (barrier - slack * change) / weights - slack

    gap = float(weights @ slack) / len(weights)
    change, slack_change = direction(np.zeros_like(weights))
    length, slack_length = _longest(weights, change), _longest(slack, slack_change)
    predicted = float((weights + length * change) @ (slack + slack_length * slack_change)) / len(weights)
    centring = (max(predicted, 0.0) / gap) ** 3
    change, slack_change = direction(np.full_like(weights, max(centring, 1e-6) * gap))
    length = min(1.0, 0.98 * _longest(weights, change))
    slack_length = min(1.0, 0.98 * _longest(slack, slack_change))
    # V behaves like 1/w: a weight that should rise by more than a few times is better followed in several steps.
    rise = float(np.max(change / weights))
    length = min(length, 4.0 / rise) if rise > 4.0 else length
    return weights + length * change, slack + slack_length * slack_change


def _longest(values: Array, change: Array) -> float:
    """Longest step that keeps positive values positive, at most 1 / 0.98."""
    falling = change < 0
    return float(min(1.0 / 0.98, np.min(-values[falling] / change[falling], initial=np.inf)))
