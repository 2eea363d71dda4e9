"""Energy and error bar from the counts of a plan."""

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fragkit.core import Fragment, InputError, as_positive, frozen
from fragkit.estimate._consistency import OccupationFit, check_reading
from fragkit.estimate._counts import Counts
from fragkit.estimate._missing import check_complete
from fragkit.estimate._sector import check_sector, in_sector
from fragkit.estimate._statistics import Sample, error_bar
from fragkit.planning import Plan

Array = NDArray[np.float64]

_DOUBTFUL = 1e-4
"""Chance below which a disagreement is reported: rare enough to be silent over hundreds of honest runs."""


@dataclass(frozen=True, eq=False, repr=False)
class Estimate:
    """An energy with its error bar, and what it is made of. Energies and deviations in hartree.

    Parameters
    ----------
    energy
        The estimate: the constant plus the sum of `means`.
    standard_error
        Its standard error, from the data; see `fragkit.estimate.estimate` for what happens with few shots.
    interval
        (low, high), which holds the true energy with probability `confidence`.
    confidence
        Probability of the interval.
    degrees_of_freedom
        Of Student's t distribution that the interval is made with.
    constant
        Energy that was not measured.
    means
        (circuits,) mean value of each fragment.
    deviations
        (circuits,) observed standard deviation of one shot.
    predicted_deviations
        (circuits,) deviation that the plan predicted.
    shots
        (circuits,) shots that were used.
    post_selected
        Whether only shots with the plan's electron numbers were used.
    discarded
        Fraction of all shots with other electron numbers; they were left out if `post_selected`.
    discarded_by_circuit
        (circuits,) the same for each circuit.
    without_post_selection
        (energy, standard error) of the same counts with all shots, or None if nothing was discarded.
    consistency
        p-value of "all circuits saw one state", from their occupations; None if there are too few circuits to test.
    agrees
        False when observed and predicted deviations differ beyond chance, or the circuits do not fit one state.
    message
        What `agrees` is about, in a sentence for each finding.
    """

    energy: float
    standard_error: float
    interval: tuple[float, float]
    confidence: float
    degrees_of_freedom: float
    constant: float
    means: Array
    deviations: Array
    predicted_deviations: Array
    shots: NDArray[np.int64]
    post_selected: bool
    discarded: float
    discarded_by_circuit: Array
    without_post_selection: tuple[float, float] | None
    consistency: float | None
    agrees: bool
    message: str

    @property
    def total_shots(self) -> int:
        """Shots that were used."""
        return int(np.sum(self.shots))

    def table(self) -> str:
        """The estimate as a text table, one row per circuit."""
        from fragkit.report import estimate_table

        return estimate_table(self)

    def _repr_html_(self) -> str:
        from fragkit.report import estimate_html

        return estimate_html(self)

    def __repr__(self) -> str:
        doubt = "" if self.agrees else ", in doubt: see message"
        return (
            f"Estimate(energy={self.energy:.6f} Ha, standard_error={self.standard_error:.2g} Ha, "
            f"{self.confidence:.0%} interval {self.interval[0]:.6f} to {self.interval[1]:.6f}, "
            f"{self.total_shots} shots, {self.discarded:.2%} discarded{doubt})"
        )


def estimate(
    plan: Plan,
    counts: Counts,
    *,
    post_select: bool | None = None,
    confidence: float = 0.95,
    least_kept: float = 0.5,
) -> Estimate:
    """Energy, standard error and confidence interval from the counts of a plan.

    The energy is the plan's constant plus, for each circuit, the mean of its fragment's value. It is unbiased
    for whatever state the device holds, within the plan's own residual. The error bar is the observed one,
    Σ s²/N. Where few shots leave that uncertain it is averaged with the prediction of the plan, never downwards,
    and the interval uses Student's t distribution (see `docs/estimation.md`).

    Parameters
    ----------
    plan
        The plan that was run.
    counts
        What the device returned, complete for all circuits.
    post_select
        Use only shots with the plan's electron numbers. By default this is done for plans that are exact only
        there (`plan.sector_exact`).
    confidence
        Probability of the interval.
    least_kept
        Smallest fraction of shots that must have the plan's electron numbers.

    Raises
    ------
    MismatchError
        If the counts belong to another plan.
    InputError
        If a circuit has no shots, most shots have impossible electron numbers, or the occupations show that the
        bits were read in a wrong order.

    Examples
    --------
    >>> import numpy as np
    >>> from fragkit.core import Fragment
    >>> from fragkit.planning import Plan
    >>> fragment = Fragment.one_body(np.eye(2), [-1.0, 0.5])
    >>> plan = Plan((fragment,), 0.25, [100], [0.45], (1, 1), "digest", 0.0, 0.0)
    >>> counts = Counts.from_strings(
    ...     plan, {0: {"1010": 90, "1001": 10}}, bit_order="first-qubit-left", spin_order="blocked"
    ... )
    >>> estimate(plan, counts).energy
    -1.6
    """
    if not isinstance(counts, Counts):
        raise InputError(
            f"`counts` must be Counts (got {type(counts).__name__}); make them with Counts.from_strings, "
            "Counts.from_arrays or Counts.from_results, which ask for the bit order"
        )
    plan.check_digest(counts.plan_digest)
    if not 0.0 < as_positive(confidence, "confidence") < 1.0:
        raise InputError(f"`confidence` must be between 0 and 1 (got {confidence})")
    check_complete(plan, counts)
    kept = check_sector(counts, plan.electrons, least_kept)
    consistency = check_reading(OccupationFit.of(plan, counts))
    select = plan.sector_exact if post_select is None else bool(post_select)

    whole = _samples(plan, counts, select=False)
    used = _samples(plan, counts, select=True) if select and np.any(kept < counts.shots) else whole
    bar = error_bar(used, plan.deviations)
    energy = plan.constant + sum(sample.mean for sample in used)
    raw = None
    if used is not whole:
        raw = (plan.constant + sum(s.mean for s in whole), error_bar(whole, plan.deviations).standard_error)
    half = bar.half_width(confidence)
    findings = _findings(used, plan.deviations, consistency)
    shots = np.array([sample.shots for sample in used], dtype=np.int64)
    shots.setflags(write=False)
    return Estimate(
        energy=float(energy),
        standard_error=bar.standard_error,
        interval=(float(energy - half), float(energy + half)),
        confidence=confidence,
        degrees_of_freedom=bar.degrees_of_freedom,
        constant=plan.constant,
        means=frozen(np.array([sample.mean for sample in used])),
        deviations=frozen(np.sqrt([sample.variance for sample in used])),
        predicted_deviations=plan.deviations,
        shots=shots,
        post_selected=select,
        discarded=float(1.0 - np.sum(kept) / counts.total_shots),
        discarded_by_circuit=frozen(1.0 - kept / counts.shots),
        without_post_selection=raw,
        consistency=consistency,
        agrees=not findings,
        message=" ".join(findings),
    )


def _samples(plan: Plan, counts: Counts, *, select: bool) -> list[Sample]:
    return [
        _sample(fragment, bits, numbers, plan.electrons if select else None)
        for fragment, bits, numbers in zip(plan.fragments, counts.bits, counts.numbers, strict=True)
    ]


def _sample(fragment: Fragment, bits: Any, numbers: Any, electrons: tuple[int, int] | None) -> Sample:
    if electrons is not None:
        keep = in_sector(bits, electrons)
        bits, numbers = bits[keep], numbers[keep]
    return Sample.of(fragment.values(bits), numbers)


def _findings(samples: list[Sample], predicted: Array, consistency: float | None) -> list[str]:
    """Sentences about what does not fit, empty if all does."""
    findings = []
    observed = np.sqrt(sum(sample.variance / sample.shots for sample in samples))
    expected = np.sqrt(sum(deviation**2 / s.shots for s, deviation in zip(samples, predicted, strict=True)))
    spread = np.sqrt(sum((s.error_of_variance / s.shots) ** 2 for s in samples))
    # Differences within 10 % in the error bar are of no consequence, however significant.
    if abs(observed**2 - expected**2) > 4.0 * spread and not 0.9 < observed / max(expected, 1e-300) < 1.1:
        if observed > expected:
            cause = "the device's state is noisier than the reference, or another one"
        else:
            cause = "the device's state is closer to an eigenstate than the reference"
        findings.append(
            f"The observed error is {observed / max(expected, 1e-300):.3g} times the predicted one: {cause}; the "
            "error bar is the observed one."
        )
    if consistency is not None and consistency < _DOUBTFUL:
        findings.append(
            f"The circuits do not fit one state (p = {consistency:.1g}): readout errors that differ between "
            "qubits, drift between circuits, or circuits in another order."
        )
    return findings
