"""Exact coefficients where rotations have to give way: fewer circuits than generic rotations need.

Below (n+1)(n+2)/4 circuits no coefficients reproduce the Hamiltonian at generic rotations. Rotations and coefficients
are then moved together by Gauss-Newton steps of least length, in the variables that the Lagrangian is scaled with:
with B the operators of the scaled coefficients and J those of the scaled generators, (z, x) += [B J]ᵀ N⁻¹ r,
N = B Bᵀ + J Jᵀ. N⁻¹ also is the metric of the penalty, and ν = N⁻¹ [B J] g the multipliers for a gradient g.
"""

import numpy as np
from numpy.typing import NDArray

from fragkit.core import InputError, pair_indices
from fragkit.planning._design_map import DesignMap
from fragkit.planning._lagrangian_covariances import Covariances, cayley, variance_curvature
from fragkit.planning._lagrangian_factor import Factor, working_precision
from fragkit.planning._lagrangian_refresh import Refresh, inverse_root

Array = NDArray[np.float64]

EXACT = 1e-11
"""Relative residual at which no further step is taken."""


def restore(
    design: DesignMap, covariances: Covariances, rotations: Array, coefficients: Array, *, iterations: int = 10
) -> Refresh:
    """Move rotations (K, n, n) and coefficients (K, F) towards exactness; `infeasibility` tells how far it came.

    Raises
    ------
    InputError
        If even rotations and coefficients together have too few degrees of freedom.
    """
    count, n = len(rotations), design.orbitals
    p, q = pair_indices(n, strict=True)
    reduced, norm = design.features.shape[1], float(np.linalg.norm(design.target))
    split = count * reduced
    kind = working_precision(design.space.size)
    matrix = np.empty((design.space.size, split + count * len(p)), dtype=kind, order="F")
    scale = np.empty((count, len(design.features), reduced))
    residual = design.residual(rotations, coefficients)
    left = float(np.linalg.norm(residual)) / norm
    for _ in range(iterations):
        used, lengths = _lengths(covariances, rotations, coefficients)
        for m, rotation in enumerate(rotations):
            half = np.sqrt(used[m]) * inverse_root(design, covariances, rotation).T
            scale[m] = design.features @ half
            matrix[:, m * reduced : (m + 1) * reduced] = design.operators(rotation, half)
            turns = slice(split + m * len(p), split + (m + 1) * len(p))
            matrix[:, turns] = design.turning(rotation, coefficients[m]) * lengths[m]
        factor = Factor(matrix, design.shifts.basis)
        if factor.singular:
            raise InputError(
                f"`count` must be larger for {n} orbitals (got {count}): rotations and coefficients together cannot "
                "reproduce the Hamiltonian"
            )
        # The factor is used again for as long as it brings the residual down fast.
        before, rate = left, 0.0
        while left > EXACT and rate < 0.2:
            step = (matrix.T @ factor.solve(residual).astype(kind)).astype(np.float64)
            by_coefficients = np.einsum("kfr,kr->kf", scale, step[:split].reshape(count, reduced))
            generators = np.zeros_like(rotations)
            generators[:, p, q] = step[split:].reshape(count, len(p)) * lengths
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
        if left <= EXACT or left > 0.9 * before:
            break
    variances, products, turning = covariances.evaluate(rotations, coefficients)
    deviations = np.sqrt(np.maximum(variances, 1e-300))
    total = float(deviations.sum())
    shares = deviations / total
    unscale: Array = np.asarray(np.linalg.pinv(scale), dtype=np.float64)
    by_scaled = 2.0 * np.einsum("kfr,kf->kr", scale, products) / used[:, None]
    by_turns = turning[:, p, q] / used[:, None] * lengths
    gradient = np.concatenate([by_scaled.ravel(), by_turns.ravel()]).astype(kind)
    dual = design.shifts.project(factor.solve((matrix @ gradient).astype(np.float64)))
    moved_lengths = factor.half_solve(matrix[:, split:]).astype(np.float64)
    share = np.einsum("rp,rp->p", moved_lengths, moved_lengths).reshape(count, len(p))
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
        steps=lengths / np.sqrt(1.0 + 2.0 * share),
        _inverse=factor.into_inverse(),
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
    blocks = np.hstack([design.operators(rotation, np.eye(reduced)) for rotation in rotations])
    gram = blocks.T @ blocks
    gram[np.diag_indices_from(gram)] += 1e-3 * np.mean(np.diag(gram))
    solution = np.linalg.solve(gram, blocks.T @ design.target).reshape(count, reduced)
    return solution @ design.features.T
