"""Means of circuits joined into one number with an error bar that holds with few shots."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy import stats

Array = NDArray[np.float64]

PLAN_WEIGHT = 8.0
"""Degrees of freedom given to the plan's predicted variance: trusted to within a factor of about two."""


@dataclass(frozen=True)
class Sample:
    """Moments of one circuit's values: mean, unbiased variance, central fourth moment, number of shots."""

    mean: float
    variance: float
    fourth: float
    shots: int

    @classmethod
    def of(cls, values: Array, numbers: NDArray[np.int64]) -> "Sample":
        """Moments of `values`, each of which occurred `numbers` times."""
        shots = int(np.sum(numbers))
        weights = numbers / shots
        mean = float(weights @ values)
        squares = (values - mean) ** 2
        second = float(weights @ squares)
        variance = second * shots / (shots - 1) if shots > 1 else 0.0
        return cls(mean, variance, float(weights @ squares**2), shots)

    def scaled(self, factor: float) -> "Sample":
        """Moments of the values times `factor`."""
        return Sample(self.mean * factor, self.variance * factor**2, self.fourth * factor**4, self.shots)

    @property
    def error_of_variance(self) -> float:
        """Standard error of `variance`, from the fourth moment."""
        return float(np.sqrt(max(self.fourth - self.variance**2, 0.0) / self.shots))


@dataclass(frozen=True)
class ErrorBar:
    """Variance of a sum of circuit means, and the degrees of freedom that the variance is known with."""

    variance: float
    degrees_of_freedom: float

    @property
    def standard_error(self) -> float:
        """Square root of the variance."""
        return float(np.sqrt(self.variance))

    def half_width(self, confidence: float) -> float:
        """Half of the central interval of this confidence, by Student's t distribution."""
        if self.variance == 0.0:
            return 0.0
        return float(stats.t.ppf(0.5 + 0.5 * confidence, self.degrees_of_freedom)) * self.standard_error


def error_bar(
    samples: Sequence[Sample],
    predicted: Array,
    *,
    missed: Sequence[float] | None = None,
    extra: Sequence[tuple[float, float]] = (),
) -> ErrorBar:
    """Error bar of the sum of the samples' means.

    The observed variance V = Σ s²/N is known with ν = 2V²/Var(V) degrees of freedom, where Var(V) comes from the
    fourth moments (Welch and Satterthwaite's rule is the case of normal values). Where that is little, as with few
    shots and rare outcomes, V is averaged with the variance that the plan predicted, which counts as `PLAN_WEIGHT`
    degrees of freedom; but the result is never below what was observed. `missed` is variance of one shot that was not
    seen (see `missed_variance`) and counts as a prediction. `extra` are other independent contributions (variance,
    degrees of freedom).
    """
    observed = expected = uncertainty = 0.0
    lacked = []
    unseen = [0.0] * len(samples) if missed is None else missed
    for sample, deviation, lacking in zip(samples, predicted, unseen, strict=True):
        expectation = deviation**2 / sample.shots
        # One shot shows no deviation; then the plan's is all there is.
        variance = sample.variance / sample.shots if sample.shots > 1 else expectation
        spread = sample.error_of_variance / sample.shots if sample.shots > 1 else np.sqrt(2.0) * expectation
        observed, expected, uncertainty = observed + variance, expected + expectation, uncertainty + spread**2
        lacked.append(lacking / sample.shots)
    if any(lacked):
        # Σ s²/N is right on average, misses included, and over many circuits that is enough: what n circuits lack in
        # equal parts counts as 1/n of it.
        added = sum(x**2 for x in lacked) / sum(lacked)
        observed, uncertainty = observed + added, uncertainty + 2.0 / PLAN_WEIGHT * added**2
    # At most as many degrees of freedom as a double can tell from infinity here.
    freedom = min(2.0 * observed**2 / uncertainty, 1e9) if uncertainty > 0.0 else (1e9 if observed > 0.0 else 0.0)
    joined = (freedom * observed + PLAN_WEIGHT * expected) / (freedom + PLAN_WEIGHT)
    parts = [(max(observed, joined), freedom + PLAN_WEIGHT), *extra]
    total = sum(variance for variance, _ in parts)
    if total == 0.0:
        return ErrorBar(0.0, freedom + PLAN_WEIGHT)
    return ErrorBar(total, total**2 / sum(variance**2 / nu for variance, nu in parts))
