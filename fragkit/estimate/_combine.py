"""From counts and coefficients to a number: the sum that energies, observables and adaptive runs share."""

from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from fragkit.core import Fragment, InputError
from fragkit.estimate._correction import Correction
from fragkit.estimate._counts import Counts
from fragkit.estimate._rare import missed_variance
from fragkit.estimate._sector import in_sector
from fragkit.estimate._statistics import ErrorBar, Sample, error_bar
from fragkit.planning import Plan

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Part:
    """A share of the data with coefficients that do not depend on it; parts are averaged with their weights."""

    fragments: tuple[Fragment, ...]
    constant: float
    deviations: Array
    counts: Counts
    weight: float = 1.0

    @classmethod
    def of(cls, plan: Plan, counts: Counts) -> "Part":
        """All the data of a plan with the plan's own coefficients."""
        return cls(plan.fragments, plan.constant, plan.deviations, counts)


@dataclass(frozen=True, eq=False)
class Combined:
    """A number with its error bar, the samples behind it (parts × circuits) and what the calibration adds."""

    value: float
    bar: ErrorBar
    samples: tuple[tuple[Sample, ...], ...]
    predicted: tuple[Array, ...]
    calibration_variance: float | None

    @property
    def shots(self) -> NDArray[np.int64]:
        """(circuits,) shots of all parts."""
        return np.array([[s.shots for s in part] for part in self.samples], dtype=np.int64).sum(axis=0)

    @property
    def means(self) -> Array:
        """(circuits,) weighted mean of each fragment."""
        return np.array([[s.mean for s in part] for part in self.samples]).sum(axis=0)

    @property
    def deviations(self) -> Array:
        """(circuits,) deviation that one shot of a single part would have for the same error."""
        variances = np.array([[s.variance / s.shots for s in part] for part in self.samples]).sum(axis=0)
        return np.sqrt(variances * self.shots)

    @property
    def predicted_deviations(self) -> Array:
        """(circuits,) the same as predicted."""
        variances = np.array(
            [d**2 / [s.shots for s in part] for part, d in zip(self.samples, self.predicted, strict=True)]
        ).sum(axis=0)
        return np.sqrt(variances * self.shots)


def combine(
    parts: Sequence[Part], electrons: tuple[int, int], *, select: bool = False, correction: Correction | None = None
) -> Combined:
    """Weighted sum of the parts' values; with `select`, of the shots with these electron numbers only."""
    samples, predicted = [], []
    value, extra, believed, missed, calibration = 0.0, [], [], [], None
    for part in parts:
        drawn = []
        for m, fragment in enumerate(part.fragments):
            bits, numbers = part.counts.bits[m], part.counts.numbers[m]
            if select:
                keep = in_sector(bits, electrons)
                if not np.all(keep):
                    bits, numbers = bits[keep], numbers[keep]
            if not len(bits):
                raise InputError(
                    f"every part of the data must have at least one shot with {electrons} electrons of each circuit "
                    f"(got none of circuit {m}); take more shots of it"
                )
            values = fragment.values(bits) if correction is None else correction.values(fragment, bits)
            sample = Sample.of(values, numbers)
            deviation = float(part.deviations[m])
            lacking = None if correction else missed_variance(fragment, bits, sample, deviation, electrons)
            # A prediction that the data contradict counts only as far as outcomes may have been missed.
            believed.append(part.weight * (deviation if lacking is None else np.sqrt(sample.variance + lacking)))
            missed.append(part.weight**2 * (lacking or 0.0))
            drawn.append(sample.scaled(part.weight))
        samples.append(tuple(drawn))
        predicted.append(part.weight * part.deviations)
        value += part.weight * part.constant + sum(sample.mean for sample in drawn)
    if correction is not None:
        calibration = correction.variance(calibration_gradients(parts, correction))
        extra = [(calibration, correction.degrees_of_freedom)]
    flat = [sample for part in samples for sample in part]
    bar = error_bar(flat, np.array(believed), missed=missed, extra=extra)
    return Combined(float(value), bar, tuple(samples), tuple(predicted), calibration)


def calibration_gradients(parts: Sequence[Part], correction: Correction) -> list[Array]:
    """Derivatives of the combined value by the confusion of each block."""
    total = [np.zeros_like(confusion) for confusion in correction.errors.confusions]
    for part in parts:
        for fragment, bits, numbers in zip(part.fragments, part.counts.bits, part.counts.numbers, strict=True):
            for block, gradient in zip(total, correction.gradients(fragment, bits, numbers), strict=True):
                block += part.weight * gradient
    return total


def split(counts: Counts, folds: int, rng: np.random.Generator) -> list[Counts]:
    """The shots of every circuit dealt at random into folds whose sizes differ by at most one."""
    dealt: list[list[NDArray[np.int64]]] = [[] for _ in range(folds)]
    for numbers in counts.numbers:
        left = numbers.copy()
        total = int(np.sum(numbers))
        for k in range(folds):
            size = total // folds + (k < total % folds)
            drawn = left if k == folds - 1 else rng.multivariate_hypergeometric(left, size, method="marginals")
            dealt[k].append(drawn)
            left = left - drawn
    return [
        replace(
            counts,
            bits=tuple(bits[d > 0] for bits, d in zip(counts.bits, draws, strict=True)),
            numbers=tuple(d[d > 0] for d in draws),
            batches=tuple(f"{name} fold {k}" for name in counts.batches),
        )
        for k, draws in enumerate(dealt)
    ]
