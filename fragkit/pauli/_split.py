"""The cheapest way to divide the coefficients of Pauli strings among overlapping groups."""

from dataclasses import dataclass

import numpy as np
from scipy.linalg import cho_factor, cho_solve

from fragkit.core import as_count
from fragkit.pauli._groups import Indices
from fragkit.pauli._terms import Array, PauliTerms

_STEP = 1.5  # 1 is Neyman's rule; above 2 the alternation may cycle


@dataclass(frozen=True, eq=False, repr=False)
class Split:
    """Coefficients of each group, adding up to the Hamiltonian's, and how close the cost is to the least possible.

    Parameters
    ----------
    coefficients
        One array per group, in the order of its terms, hartree.
    deviations
        (groups,) standard deviation of each group, hartree.
    cost
        (Σ deviations)² in hartree².
    lower_bound
        No division of the coefficients among these groups costs less with the regularised covariances, hartree²
        (from the dual problem).
    iterations, converged, message
        How the iteration ended.
    """

    coefficients: tuple[Array, ...]
    deviations: Array
    cost: float
    lower_bound: float
    iterations: int
    converged: bool
    message: str


def least_cost_split(
    terms: PauliTerms,
    groups: list[Indices],
    covariances: list[Array],
    *,
    tolerance: float = 3e-3,
    iterations: int = 300,
    regularisation: float = 1e-7,
) -> Split:
    """Minimise (Σ_g σ_g)² over coefficients c_g of each group with Σ_g c_g = c.

    The problem is convex. At shot shares w the best division is c_g = w_g C_g⁻¹ ν_g with
    (Σ_g w_g C_g⁻¹) ν = c, matrices placed at the terms of each group (generalised least squares: Aitken 1936); at
    given coefficients the best shares are w_g ∝ σ_g (Neyman 1934). The two alternate, shares going half as far again
    as that, which was measured to halve the iterations; the best division is kept. Every ν bounds the least cost from
    below by (cᵀν)² / max_g ν_gᵀ C_g⁻¹ ν_g (Cauchy-Schwarz).

    Parameters
    ----------
    covariances
        C_g of each group. `regularisation` is added to their diagonals while solving, since strings that are
        certain in the state make them singular; the cost is evaluated without it.
    tolerance
        Relative gap between cost and lower bound at which the iteration ends. It also ends when twenty iterations
        lowered the cost by less than a hundredth of this.
    """
    wanted = terms.coefficients
    inverses = [_inverse(matrix, regularisation) for matrix in covariances]
    shares = np.full(len(groups), 1.0 / len(groups))
    lower, least, before = 0.0, np.inf, np.inf
    best: tuple[list[Array], Array] = ([], np.zeros(0))
    for step in range(1, as_count(iterations, "iterations", minimum=1) + 1):
        coefficients, bound = _divide(wanted, groups, inverses, shares)
        lower = max(lower, bound)
        variances = np.array([c @ matrix @ c for c, matrix in zip(coefficients, covariances, strict=True)])
        deviations = np.sqrt(np.maximum(variances, 0.0))
        regularised = np.sqrt(deviations**2 + [regularisation * float(c @ c) for c in coefficients])
        cost = float(np.sum(regularised)) ** 2
        if cost < least:
            least, best = cost, (coefficients, deviations)
        converged = least <= lower * (1.0 + tolerance)
        if step % 20 == 0:
            converged |= before - least < 0.01 * tolerance * least
            before = least
        if converged or step == iterations:
            break
        # The floor keeps the normal matrix regular when a group loses all its work to others.
        shares = np.maximum(shares * (regularised / shares) ** _STEP, 1e-12 * np.sum(regularised))
        shares /= np.sum(shares)
    how = "converged" if converged else "NOT converged (raise `iterations`)"
    message = f"{how} after {step} iterations, {least / lower - 1.0:.2g} above the lower bound"
    total = float(np.sum(best[1])) ** 2
    return Split(tuple(best[0]), best[1], total, lower, step, converged, message)


def _divide(wanted: Array, groups: list[Indices], inverses: list[Array], shares: Array) -> tuple[list[Array], float]:
    """Best coefficients at given shares, and the lower bound that the prices ν give."""
    normal = np.zeros((len(wanted), len(wanted)))
    for group, inverse, share in zip(groups, inverses, shares, strict=True):
        normal[np.ix_(group, group)] += share * inverse
    price = cho_solve(cho_factor(normal, lower=True, overwrite_a=True, check_finite=False), wanted)
    images = [inverse @ price[group] for group, inverse in zip(groups, inverses, strict=True)]
    worth = max(float(price[group] @ image) for group, image in zip(groups, images, strict=True))
    return [share * image for share, image in zip(shares, images, strict=True)], float(wanted @ price) ** 2 / worth


def _inverse(matrix: Array, regularisation: float) -> Array:
    values, vectors = np.linalg.eigh(matrix)
    return (vectors / (np.maximum(values, 0.0) + regularisation)) @ vectors.T
