"""The point a stretch of the optimisation starts from, and exact coefficients at fixed rotations."""

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fragkit.core import InputError
from fragkit.planning._operators.design_map import DesignMap
from fragkit.planning._operators.factor import Factor, working_precision
from fragkit.planning._rotations.covariances import Covariances

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Refresh:
    """Rotations with exact coefficients, and everything the next stretch of the optimisation is scaled with.

    Parameters
    ----------
    rotations, coefficients
        (K, n, n) and (K, F).
    shares
        (K,) σ/Σσ.
    cost
        (Σ σ)² in hartree².
    infeasibility
        Norm of what is left of the Hamiltonian's rows over their norm.
    dual
        (rows,) multipliers of the constraint for the cost (Σσ)².
    scale, unscale
        (K, F, F') and (K, F', F): c_m = scale_m z_m, z_m = unscale_m c_m for coefficients without constant parts.
    scaled
        (K, F') the z_m of `coefficients`.
    steps
        (K, n(n−1)/2) unit of length of each rotation generator, one over the root of the cost's curvature along it.
    metric
        The penalty's metric, N⁻¹ or near it, applied to rows without the shifts.
    """

    rotations: Array
    coefficients: Array
    shares: Array
    cost: float
    infeasibility: float
    dual: Array
    scale: Array
    unscale: Array
    scaled: Array
    steps: Array
    metric: Callable[[Array], Array]


@dataclass(frozen=True, eq=False)
class Settled:
    """Exact coefficients (K, F) at fixed rotations, shares (K,), cost in hartree² and relative residual."""

    coefficients: Array
    shares: Array
    cost: float
    infeasibility: float


def settle(
    design: DesignMap, covariances: Covariances, rotations: Array, weights: Array, *, iterations: int
) -> Settled:
    """Exact coefficients at fixed rotations, with weights improved by some multiplicative updates.

    For weights w, M = Σ_m w_m A_m C_m⁻¹ A_mᵀ (without the shifts) gives ν = M⁻¹ h and the exact coefficients
    c_m = w_m C_m⁻¹ A_mᵀ ν of standard deviation σ_m; their cost (Σ σ)² is at most hᵀν, and σ/Σσ are better weights.

    Raises
    ------
    InputError
        If these rotations cannot reproduce the Hamiltonian.
    """
    count, size, reduced = len(rotations), design.space.size, design.features.shape[1]
    whiteners = np.stack([design.whitening(covariances.matrix(rotation))[0] for rotation in rotations])
    kind = working_precision(size)
    blocks = np.empty((size, count * reduced), dtype=kind, order="F")
    for m, rotation in enumerate(rotations):
        blocks[:, m * reduced : (m + 1) * reduced] = design.operators(rotation, whiteners[m])
    used = np.ones(count)
    for _ in range(iterations):
        wanted = np.maximum(weights, 1e-2 / count)
        wanted = wanted / wanted.sum()
        blocks *= np.repeat(np.sqrt(wanted / used), reduced).astype(kind)
        used = wanted
        information = Factor(blocks, design.shifts.basis)
        if information.singular:
            raise InputError(
                f"`count` must be larger for {design.orbitals} orbitals (got {count}): these rotations cannot "
                "reproduce the Hamiltonian"
            )
        dual = design.shifts.project(information.solve(design.target))
        response = (blocks.T @ dual.astype(kind)).astype(np.float64).reshape(count, reduced)
        deviations = np.sqrt(used) * np.linalg.norm(response, axis=1)
        weights = deviations / deviations.sum()
    scale = np.sqrt(used)[:, None, None] * whiteners
    coefficients, left = _refined(design, rotations, scale, response, blocks, information)
    deviations = np.sqrt(np.maximum(covariances.evaluate(rotations, coefficients)[0], 0.0))
    total = float(deviations.sum())
    return Settled(coefficients, deviations / total, total**2, left)


def _refined(
    design: DesignMap, rotations: Array, scale: Array, response: Array, blocks: NDArray[Any], information: "Factor"
) -> tuple[Array, float]:
    """Coefficients corrected until what is left of the Hamiltonian is rounding noise; and its relative norm."""
    coefficients = np.einsum("kfr,kr->kf", scale, response)
    norm = float(np.linalg.norm(design.target))
    residual = design.residual(rotations, coefficients)
    left = float(np.linalg.norm(residual)) / norm
    for _ in range(5):
        if left < 1e-13:
            break
        step = (blocks.T @ information.solve(residual).astype(blocks.dtype)).astype(np.float64)
        better = coefficients + np.einsum("kfr,kr->kf", scale, step.reshape(response.shape))
        residual = design.residual(rotations, better)
        now = float(np.linalg.norm(residual)) / norm
        if now > 0.5 * left:
            break
        coefficients, left = better, now
    return coefficients, left
