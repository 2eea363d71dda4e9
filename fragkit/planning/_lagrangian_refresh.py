"""Exact coefficients at fixed rotations, with the scaling and the metric that the Lagrangian is built from.

For weights w, M = Σ_m w_m A_m C_m⁻¹ A_mᵀ (without the shifts) gives ν = M⁻¹ h and the exact coefficients
c_m = w_m C_m⁻¹ A_mᵀ ν of standard deviation σ_m; their cost (Σ σ)² is at most hᵀν, and σ/Σσ are better weights.
M⁻¹ then serves as the metric of the penalty: in coefficients scaled by √w_m C_m^{-1/2} the penalty's curvature is
a multiple of a projector, so that it adds no condition number of its own.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import solve_triangular
from scipy.linalg.blas import dsymv, dsyrk, ssymv  # pyright: ignore[reportAttributeAccessIssue]
from scipy.linalg.lapack import dpotrf, dpotri, dpotrs, dtrtrs  # pyright: ignore[reportAttributeAccessIssue]

from fragkit.core import InputError
from fragkit.planning._design_map import DesignMap
from fragkit.planning._lagrangian_covariances import Covariances, variance_curvature

Array = NDArray[np.float64]

SINGLE_PRECISION_ROWS = 2000
"""From this many rows on the metric is kept in single precision: it is only a metric, and reading it costs time."""


@dataclass(frozen=True, eq=False)
class Refresh:
    """Exact coefficients at some rotations and everything the next stretch of the optimisation is scaled with.

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
        (rows,) multipliers of the constraint of the cost (Σσ)²: 2ν.
    scale, unscale
        (K, F, F') and (K, F', F): c_m = scale_m z_m, z_m = unscale_m c_m for coefficients without constant parts.
    scaled
        (K, F') the z_m of `coefficients`.
    steps
        (K, n(n−1)/2) unit of length of each rotation generator, one over the root of the cost's curvature along it.
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
    _inverse: NDArray[np.floating]

    def metric(self, rows: Array) -> Array:
        """M⁻¹ applied to rows without the shifts."""
        if self._inverse.dtype == np.float32:
            return ssymv(1.0, self._inverse, rows.astype(np.float32), lower=1).astype(np.float64)
        return dsymv(1.0, self._inverse, rows, lower=1)


def refresh(
    design: DesignMap, covariances: Covariances, rotations: Array, weights: Array, *, iterations: int
) -> Refresh:
    """Solve for exact coefficients with the given weights, improving the weights `iterations` − 1 times.

    Raises
    ------
    InputError
        If these rotations cannot reproduce the Hamiltonian.
    """
    count, size, reduced = len(rotations), design.space.size, design.features.shape[1]
    blocks = np.empty((size, count * reduced), order="F")
    halves = np.empty((count, reduced, reduced))
    for m, rotation in enumerate(rotations):
        lower = np.linalg.cholesky(design.features.T @ covariances.matrix(rotation) @ design.features)
        halves[m] = solve_triangular(lower, np.eye(reduced), lower=True, check_finite=False)
        blocks[:, m * reduced : (m + 1) * reduced] = design.operators(rotation) @ halves[m].T
    scaled = np.empty_like(blocks)
    for _ in range(iterations):
        used = np.maximum(weights, 1e-2 / count)
        used = used / used.sum()
        np.multiply(blocks, np.repeat(np.sqrt(used), reduced), out=scaled)
        matrix = dsyrk(1.0, scaled, lower=1)
        # M is completed on the shifts, which it does not see, so that it can be inverted.
        matrix = dsyrk(np.trace(matrix) / size, design.shifts.basis, beta=1.0, c=matrix, lower=1, overwrite_c=1)
        factor, failed = dpotrf(matrix, lower=1, overwrite_a=1, clean=0)
        if failed or np.min(np.diag(factor)) < 1e-7 * np.max(np.diag(factor)):
            raise InputError(
                f"`count` must be large enough for {design.orbitals} orbitals (got {count}): generic rotations "
                "reproduce the Hamiltonian only from about (n+1)(n+2)/4 on"
            )
        dual = design.shifts.project(dpotrs(factor, design.target, lower=1)[0])
        response = (scaled.T @ dual).reshape(count, reduced)
        deviations = np.sqrt(used) * np.linalg.norm(response, axis=1)
        total = float(deviations.sum())
        weights = deviations / total
    roots = np.sqrt(used)[:, None, None]
    scale = roots * (design.features @ halves.transpose(0, 2, 1))
    coefficients = np.einsum("kfr,kr->kf", scale, response)
    left = design.residual(rotations, coefficients)
    curvature = variance_curvature(covariances, rotations, coefficients) / weights[:, None]
    for m, rotation in enumerate(rotations):
        moved, _ = dtrtrs(factor, design.turning(rotation, coefficients[m]), lower=1)
        curvature[m] += 2.0 * np.einsum("rp,rp->p", moved, moved)
    curvature += 2.0 * np.maximum(weights, 1e-2 / count)[:, None] * total**2
    inverse, _ = dpotri(factor, lower=1, overwrite_c=1)
    return Refresh(
        rotations=rotations,
        coefficients=coefficients,
        shares=weights,
        cost=total**2,
        infeasibility=float(np.linalg.norm(left) / np.linalg.norm(design.target)),
        dual=np.asarray(2.0 * dual),
        scale=scale,
        unscale=np.linalg.pinv(scale),
        scaled=response,
        steps=1.0 / np.sqrt(curvature),
        _inverse=inverse.astype(np.float32) if size >= SINGLE_PRECISION_ROWS else inverse,
    )
