"""Whether all circuits saw one state: their occupations must come from one density matrix per spin."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import stats

from fragkit.core import InputError, pair_indices
from fragkit.estimate._counts import Counts
from fragkit.estimate._sector import alternative_readings
from fragkit.planning import Plan

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class OccupationFit:
    """Occupations (circuits, 2n) with their covariances (circuits, 2n, 2n), and the rotations they belong to."""

    rotations: Array
    means: Array
    covariances: Array

    @classmethod
    def of(cls, plan: Plan, counts: Counts) -> "OccupationFit":
        """Occupations of the circuits that have been run."""
        run = np.flatnonzero(counts.shots)
        means, covariances = [], []
        for m in run:
            weights = counts.numbers[m] / counts.shots[m]
            bits = counts.bits[m].astype(np.float64)
            mean = weights @ bits
            covariance = (bits * weights[:, None]).T @ bits - np.outer(mean, mean)
            means.append(mean)
            # Bits that never changed are not certain: Laplace's rule, one shot of each outcome added.
            shots = counts.shots[m]
            chance = (mean * shots + 1.0) / (shots + 2.0)
            lacking = np.maximum(chance * (1.0 - chance) - np.diag(covariance), 0.0)
            covariances.append((covariance + np.diag(lacking)) / shots)
        rotations = np.array([plan.fragments[m].rotation for m in run])
        return cls(rotations, np.array(means), np.array(covariances))

    @property
    def _weights(self) -> Array:
        """Inverse deviations."""
        return 1.0 / np.sqrt(np.einsum("mii->mi", self.covariances))

    def misfit(self, columns: NDArray[np.intp] | None = None) -> tuple[float, float] | None:
        """Weighted residual of the best density matrices in units of its expectation, and its p-value.

        None when there are too few circuits to test anything. `columns` reads the bits in another order. The
        residual of the unweighted χ² form is a sum of scaled χ² variables; its first two moments are matched
        (Satterthwaite), because the occupations of one circuit are correlated.
        """
        n = self.means.shape[1] // 2
        order = np.arange(2 * n) if columns is None else columns
        total = trace = square = 0.0
        for spin in (slice(0, n), slice(n, 2 * n)):
            pick = order[spin]
            p, q = pair_indices(n)
            design = self.rotations[:, p, :] * self.rotations[:, q, :] * np.where(p == q, 1.0, 2.0)[:, None]
            weights = self._weights[:, pick]
            rows = (design.transpose(0, 2, 1) * weights[:, :, None]).reshape(-1, len(p))
            vectors, singular, _ = np.linalg.svd(rows, full_matrices=False)
            vectors = vectors[:, singular > 1e-9 * singular[0]]
            if vectors.shape[1] >= len(rows):
                return None
            values = (self.means[:, pick] * weights).ravel()
            total += float(np.sum((values - vectors @ (vectors.T @ values)) ** 2))
            # Residual = M y with M = 1 − QQᵀ and y of block-diagonal covariance S: moments from tr(MS), tr(MSMS).
            blocks = self.covariances[:, pick][:, :, pick] * (weights[:, :, None] * weights[:, None, :])
            acted = (blocks @ vectors.reshape(len(blocks), n, -1)).reshape(len(rows), -1)
            inner = vectors.T @ acted
            trace += float(np.einsum("mii->", blocks) - np.trace(inner))
            square += float(np.sum(blocks**2) - 2.0 * np.sum(acted**2) + np.sum(inner**2))
        if trace <= 1e-12 or square <= 0.0:
            return None
        return total / trace, float(stats.chi2.sf(total * trace / square, trace**2 / square))


def check_reading(fit: OccupationFit) -> float | None:
    """p-value of "one state explains the occupations of all circuits"; None if there is nothing to test.

    Raises
    ------
    InputError
        If the occupations fit one state far better when the bits are read in another order.
    """
    found = fit.misfit()
    if found is None:
        return None
    ratio, chance = found
    if chance < 1e-6:
        others = {}
        for name, columns in alternative_readings(fit.means.shape[1] // 2).items():
            other = fit.misfit(columns)
            if other is not None:
                others[name] = other[0]
        best = min(others, key=lambda name: others[name], default=None)
        if best is not None and others[best] < 0.25 * ratio:
            raise InputError(
                "the circuits' occupations must come from one state (got a misfit of "
                f"{ratio:.3g} times its expectation); read {best} it is {others[best]:.3g}, so the bit order or spin "
                "order is probably wrong"
            )
    return chance
