"""Exact coefficients where rotations have to give way: fewer circuits than generic rotations need.

Below (n+1)(n+2)/4 circuits no coefficients reproduce the Hamiltonian at generic rotations. Rotations and coefficients
are then moved together by Gauss-Newton steps of least length, in the variables that the Lagrangian is scaled with:
with B the operators of the scaled coefficients and J those of the scaled generators, (z, x) += [B J]ᵀ N⁻¹ r,
N = B Bᵀ + J Jᵀ. N⁻¹ also is the metric of the penalty, and ν = N⁻¹ [B J] g the multipliers for a gradient g.
"""

import numpy as np
from numpy.typing import NDArray

from fragkit.core import InputError, pair_indices
from fragkit.planning._operators.conjugate_gradients import least_variance
from fragkit.planning._operators.design_map import DesignMap
from fragkit.planning._operators.factor import is_factorised
from fragkit.planning._rotations.covariances import Covariances, cayley, variance_curvature
from fragkit.planning._rotations.refresh import Refresh
from fragkit.planning._rotations.system import system_at

Array = NDArray[np.float64]

HELD = 1e-3  # weight of the first coefficients' own size, so that few circuits do not start from large ones
EXACT = 1e-11
"""Relative residual of coefficients that need no further step."""


def restore(
    design: DesignMap,
    covariances: Covariances,
    rotations: Array,
    coefficients: Array,
    *,
    exact: float = EXACT,
    dual: Array | None = None,
    iterations: int = 10,
) -> Refresh:
    """Move rotations (K, n, n) and coefficients (K, F) towards exactness; `infeasibility` tells how far it came.

    No further step is taken at a relative residual of `exact`; `dual` is a first guess of the multipliers.

    Raises
    ------
    InputError
        If even rotations and coefficients together have too few degrees of freedom.
    """
    count, n = len(rotations), design.orbitals
    p, q = pair_indices(n, strict=True)
    reduced, norm = design.features.shape[1], float(np.linalg.norm(design.target))
    scale = np.empty((count, len(design.features), reduced))
    unscale = np.empty((count, reduced, len(design.features)))
    residual = design.residual(rotations, coefficients)
    left = float(np.linalg.norm(residual)) / norm
    for _ in range(iterations):
        used, lengths = _lengths(covariances, rotations, coefficients)
        for m, rotation in enumerate(rotations):
            whitener, back = design.whitening(covariances.matrix(rotation))
            scale[m], unscale[m] = np.sqrt(used[m]) * whitener, back / np.sqrt(used[m])
        system = system_at(design, rotations, coefficients, scale, lengths)
        if system.singular:
            raise InputError(
                f"`count` must be larger for {n} orbitals (got {count}): rotations and coefficients together cannot "
                "reproduce the Hamiltonian"
            )
        # A system is used again for as long as it brings the residual down fast.
        before, rate = left, 0.0
        while left > exact and rate < 0.2:
            # As accurate as the step is linear, or as the end needs.
            by_scaled, turns = system.step(residual, tolerance=max(min(0.03, left), 0.3 * exact / left))
            by_coefficients = np.einsum("kfr,kr->kf", scale, by_scaled)
            generators = np.zeros_like(rotations)
            generators[:, p, q] = turns * lengths
            generators -= generators.transpose(0, 2, 1)
            now, length = np.inf, 2.0
            while now > (1.0 - 0.3 * length) * left and length > 0.1:
                length *= 0.5
                moved = cayley(rotations, length * generators), coefficients + length * by_coefficients
                moved_residual = design.residual(*moved)
                now = float(np.linalg.norm(moved_residual)) / norm
            if now > (1.0 - 0.3 * length) * left:
                break
            (rotations, coefficients), residual, left, rate = moved, moved_residual, now, now / left
            system = system.near(rotations, coefficients)
        if left <= exact or left > 0.9 * before:
            break
    variances, products, turning = covariances.evaluate(rotations, coefficients)
    deviations = np.sqrt(np.maximum(variances, 1e-300))
    total = float(deviations.sum())
    shares = deviations / total
    by_scaled = 2.0 * np.einsum("kfr,kf->kr", scale, products) / used[:, None]
    by_turns = turning[:, p, q] / used[:, None] * lengths
    dual = design.shifts.project(system.multipliers(by_scaled, by_turns, start=dual))
    return Refresh(
        rotations=rotations,
        coefficients=coefficients,
        shares=shares,
        cost=total**2,
        infeasibility=left,
        dual=dual,
        scale=scale,
        unscale=unscale,
        scaled=np.einsum("krf,kf->kr", unscale, coefficients),
        steps=lengths / np.sqrt(1.0 + 2.0 * system.turning_shares()),
        metric=system.into_metric(),
    )


def _lengths(covariances: Covariances, rotations: Array, coefficients: Array) -> tuple[Array, Array]:
    """Floored shares (K,), and units of length of the generators: one over the root of the cost's curvature."""
    count = len(rotations)
    variances = covariances.evaluate(rotations, coefficients)[0]
    deviations = np.sqrt(np.maximum(variances, 1e-300))
    used = np.maximum(deviations / deviations.sum(), 1e-2 / count)
    curvature = variance_curvature(covariances, rotations, coefficients) / used[:, None]
    return used, 1.0 / np.sqrt(curvature + 2.0 * used[:, None] * deviations.sum() ** 2)


def first_coefficients(design: DesignMap, rotations: Array) -> Array:
    """Coefficients (K, F) that come nearest to the Hamiltonian at these rotations, weakly held down."""
    count, reduced = len(rotations), design.features.shape[1]
    if is_factorised(design.space.size):
        blocks = np.hstack([design.operators(rotation, design.features) for rotation in rotations])
        gram = blocks.T @ blocks
        gram[np.diag_indices_from(gram)] += HELD * np.mean(np.diag(gram))
        scaled = np.linalg.solve(gram, blocks.T @ design.target).reshape(count, reduced)
    else:
        scale = np.repeat(design.features[None], count, axis=0)
        scaled, _ = least_variance(design, rotations, scale, tolerance=1e-4, iterations=200, held=HELD)
    return scaled @ design.features.T
