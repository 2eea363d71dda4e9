"""Variances of fragments on a reference state, regularised, and their curvature along rotations."""

import math

import numpy as np
from numpy.typing import NDArray

from fragkit.core import pair_indices
from fragkit.planning._operators.design_map import DesignMap
from fragkit.states import ReferenceState

Array = NDArray[np.float64]

FLOOR = 1e-9
"""Covariance of the maximally mixed state that is always added, so that states without fluctuations are usable."""

SINGLE_PRECISION_DETERMINANTS = 50_000
"""From this many determinants on CI vectors are evaluated in single precision, six digits in half the time."""

DIFFERENCE = 1e-3  # radian, of the differences that give curvatures


class Covariances:
    """Variances of fragments on a state, regularised: C + ridge · 1 + floor · C_mixed."""

    def __init__(self, state: ReferenceState, design: DesignMap, ridge: float) -> None:
        self.state = state
        self.ridge = ridge
        determinants = math.prod(math.comb(state.orbitals, k) for k in state.electrons)
        self._precision = "single" if determinants > SINGLE_PRECISION_DETERMINANTS else "double"
        self._added = FLOOR * design.mixed + ridge * np.eye(len(design.mixed))

    def matrix(self, rotation: Array) -> Array:
        """(F, F) covariance of all features in one rotated basis."""
        return self.state.moments(rotation)[1] + self._added

    def evaluate(self, rotations: Array, coefficients: Array) -> tuple[Array, Array, Array]:
        """As `ReferenceState.variance_and_gradient`."""
        variances, products, gradient = self.state.variance_and_gradient(
            rotations, coefficients, precision=self._precision
        )
        added = coefficients @ self._added
        return variances + np.einsum("kf,kf->k", added, coefficients), products + added, gradient


def variance_curvature(covariances: Covariances, rotations: Array, coefficients: Array) -> Array:
    """Second derivatives of each variance by its generators p < q at fixed coefficients, negative ones as zero.

    Differences of gradients, for disjoint pairs of orbitals together (the rounds of a tournament).
    """
    orbitals = rotations.shape[-1]
    p, q = pair_indices(orbitals, strict=True)
    place = np.zeros((orbitals, orbitals), dtype=np.intp)
    place[p, q] = np.arange(len(p))
    result = np.zeros((len(rotations), len(p)))
    before = covariances.evaluate(rotations, coefficients)[2]
    for left, right in tournament(orbitals):
        generator = np.zeros((orbitals, orbitals))
        generator[left, right] = DIFFERENCE
        generator[right, left] = -DIFFERENCE
        after = covariances.evaluate(cayley(rotations, generator), coefficients)[2]
        result[:, place[left, right]] = (after - before)[:, left, right] / DIFFERENCE
    return np.maximum(result, 0.0)


def tournament(players: int) -> list[tuple[NDArray[np.intp], NDArray[np.intp]]]:
    """Every pair i < j once, in rounds of disjoint pairs (the circle method).

    >>> [list(zip(i.tolist(), j.tolist())) for i, j in tournament(3)]
    [[(0, 1)], [(1, 2)], [(0, 2)]]
    """
    seats = players + players % 2
    rounds = []
    for shift in range(seats - 1):
        order = [seats - 1, *((k + shift) % (seats - 1) for k in range(seats - 1))]
        pairs = [(order[k], order[seats - 1 - k]) for k in range(seats // 2)]
        met = sorted((min(pair), max(pair)) for pair in pairs if max(pair) < players)
        if met:
            rounds.append((np.array([i for i, _ in met]), np.array([j for _, j in met])))
    return rounds


def cayley(rotations: Array, generators: Array) -> Array:
    """U (1 − X/2)⁻¹ (1 + X/2), equal to U exp(X) to second order; orthogonal for antisymmetric X."""
    unit = np.eye(rotations.shape[-1])
    return rotations @ np.linalg.solve(unit - 0.5 * generators, unit + 0.5 * generators)
