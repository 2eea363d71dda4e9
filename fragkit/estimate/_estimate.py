"""Energy and error bar from the counts of a plan."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fragkit.core import Fragment, InputError, MismatchError, as_positive, frozen
from fragkit.estimate._consistency import OccupationFit, check_reading
from fragkit.estimate._correction import Correction
from fragkit.estimate._counts import Counts
from fragkit.estimate._missing import check_complete
from fragkit.estimate._readout import ReadoutErrors
from fragkit.estimate._sector import check_every_circuit_keeps_shots, check_sector, in_sector
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
    calibration_error
        Part of `standard_error` that comes from the uncertain readout calibration; None without readout correction.
    sector_leak
        (mean, standard error) of (N̂ − N)² after readout correction, zero for a state with the right number of
        electrons; None without readout correction.
    consistency
        p-value of "all circuits saw one state", from their occupations; None if there are too few circuits to test,
        and with readout correction.
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
    calibration_error: float | None
    sector_leak: tuple[float, float] | None
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
    readout: ReadoutErrors | None = None,
    confidence: float = 0.95,
    least_kept: float | None = None,
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
    readout
        Readout errors to correct for. All shots are used then: discarding shots by their misread electron numbers
        would leave errors that are no longer independent. The state's own electron numbers are checked instead.
    confidence
        Probability of the interval.
    least_kept
        Smallest fraction of shots that must have the plan's electron numbers: one half, or 0 with `readout`.

    Raises
    ------
    MismatchError
        If the counts belong to another plan.
    InputError
        If a circuit has no shots, most shots have impossible electron numbers, the occupations show that the bits
        were read in a wrong order, or post-selection and readout correction are asked for together.

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
    correction = None if readout is None else _correction(plan, readout, post_select)
    least = float(readout is None) / 2 if least_kept is None else least_kept
    kept = check_sector(counts, plan.electrons, least)
    consistency = check_reading(OccupationFit.of(plan, counts))
    select = readout is None and (plan.sector_exact if post_select is None else bool(post_select))

    if select:
        check_every_circuit_keeps_shots(counts, kept, plan.electrons)

    whole = _samples(plan, counts, correction=correction)
    used = _samples(plan, counts, select=True) if select and np.any(kept < counts.shots) else whole
    extra, leak = [], None
    if correction is not None:
        extra = [(_calibration_variance(plan, counts, correction), correction.degrees_of_freedom)]
        leak, consistency = _sector_leak(plan, counts, correction), None
    bar = error_bar(used, plan.deviations, extra=extra)
    energy = plan.constant + sum(sample.mean for sample in used)
    raw = None
    if used is not whole:
        raw = (plan.constant + sum(s.mean for s in whole), error_bar(whole, plan.deviations).standard_error)
    half = bar.half_width(confidence)
    findings = _leak_findings(plan, leak) if leak else _findings(used, plan.deviations, consistency)
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
        calibration_error=float(np.sqrt(extra[0][0])) if extra else None,
        sector_leak=leak,
        consistency=consistency,
        agrees=not findings,
        message=" ".join(findings),
    )


def _samples(plan: Plan, counts: Counts, *, select: bool = False, correction: Correction | None = None) -> list[Sample]:
    samples = []
    for fragment, bits, numbers in zip(plan.fragments, counts.bits, counts.numbers, strict=True):
        if select:
            keep = in_sector(bits, plan.electrons)
            bits, numbers = bits[keep], numbers[keep]
        values = fragment.values(bits) if correction is None else correction.values(fragment, bits)
        samples.append(Sample.of(values, numbers))
    return samples


def _correction(plan: Plan, readout: ReadoutErrors, post_select: bool | None) -> Correction:
    if not isinstance(readout, ReadoutErrors):
        raise InputError(
            f"`readout` must be ReadoutErrors (got {type(readout).__name__}); make them with ReadoutErrors.known or "
            "ReadoutErrors.from_calibration"
        )
    if readout.orbitals != plan.orbitals:
        raise MismatchError(
            f"`readout` must be for {2 * plan.orbitals} qubits (got {2 * readout.orbitals}); "
            "calibrate the plan's qubits"
        )
    if post_select:
        raise InputError(
            "`post_select` must be False or left out together with `readout` (got True): among shots chosen by their "
            "misread electron numbers the errors of different qubits are no longer independent, and the correction "
            "would be wrong; use one of the two"
        )
    return Correction.of(readout)


def _calibration_variance(plan: Plan, counts: Counts, correction: Correction) -> float:
    parts = [
        correction.gradients(fragment, bits, numbers)
        for fragment, bits, numbers in zip(plan.fragments, counts.bits, counts.numbers, strict=True)
    ]
    return correction.variance([sum(blocks) for blocks in zip(*parts, strict=True)])  # type: ignore[misc]


def _sector_leak(plan: Plan, counts: Counts, correction: Correction) -> tuple[float, float]:
    """Mean and standard error of (N̂ − N)² over all circuits, corrected for readout."""
    n, total = plan.orbitals, sum(plan.electrons)
    twos = np.full((n, n), 2.0)
    number = Fragment(np.eye(n), twos, twos - np.diag(np.diag(twos)), np.full(n, 1.0 - 2.0 * total))
    shares = counts.shots / counts.total_shots
    mean, variance = float(total**2), 0.0
    blocks: list[Array] = [np.zeros_like(confusion) for confusion in correction.errors.confusions]
    for share, bits, numbers in zip(shares, counts.bits, counts.numbers, strict=True):
        sample = Sample.of(correction.values(number, bits), numbers)
        mean += share * sample.mean
        variance += share**2 * sample.variance / sample.shots
        blocks = [b + share * g for b, g in zip(blocks, correction.gradients(number, bits, numbers), strict=True)]
    return float(mean), float(np.sqrt(variance + correction.variance(blocks)))


def _leak_findings(plan: Plan, leak: tuple[float, float]) -> list[str]:
    mean, error = leak
    if abs(mean) <= 4.0 * error:
        return []
    if mean < 0.0:
        return [
            f"After readout correction (N - {sum(plan.electrons)})^2 is {mean:.3g} +- {error:.2g}, which no state has: "
            "the readout errors are not those of the calibration, or are correlated."
        ]
    consequence = (
        "the plan is exact only at the right electron numbers, so the energy is biased"
        if plan.sector_exact
        else "the energy is that of a state with other electron numbers mixed in"
    )
    return [
        f"After readout correction (N - {sum(plan.electrons)})^2 is {mean:.3g} +- {error:.2g} instead of 0: electrons "
        f"are lost or gained before the readout, or the calibration is wrong; {consequence}."
    ]


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
