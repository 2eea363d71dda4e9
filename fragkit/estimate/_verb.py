"""The verb `estimate`: energy and error bar from the counts of a plan."""

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from fragkit.core import Fragment, InputError, MismatchError, as_positive, frozen
from fragkit.estimate._combine import Combined, Part, calibration_gradients, combine
from fragkit.estimate._consistency import OccupationFit, check_reading
from fragkit.estimate._correction import Correction
from fragkit.estimate._counts import Counts
from fragkit.estimate._estimate import Estimate
from fragkit.estimate._missing import check_complete
from fragkit.estimate._readout import ReadoutErrors
from fragkit.estimate._sector import check_every_circuit_keeps_shots, check_sector
from fragkit.estimate._statistics import Sample
from fragkit.planning import Plan

Array = NDArray[np.float64]

_DOUBTFUL = 1e-4
"""Chance below which a disagreement is reported: rare enough to be silent over hundreds of honest runs."""


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
    check_counts(plan, counts)
    return estimate_parts(
        plan,
        counts,
        [Part.of(plan, counts)],
        post_select=post_select,
        readout=readout,
        confidence=confidence,
        least_kept=least_kept,
    )


def check_counts(plan: Plan, counts: Counts) -> None:
    """Raise unless these are counts of this plan."""
    if not isinstance(counts, Counts):
        raise InputError(
            f"`counts` must be Counts (got {type(counts).__name__}); make them with Counts.from_strings, "
            "Counts.from_arrays or Counts.from_results, which ask for the bit order"
        )
    plan.check_digest(counts.plan_digest)


def estimate_parts(
    plan: Plan,
    counts: Counts,
    parts: Sequence[Part],
    *,
    post_select: bool | None,
    readout: ReadoutErrors | None,
    confidence: float,
    least_kept: float | None,
) -> Estimate:
    """The estimate from parts of `counts` with coefficients of their own; the plan gives circuits and electrons."""
    if not 0.0 < as_positive(confidence, "confidence") < 1.0:
        raise InputError(f"`confidence` must be between 0 and 1 (got {confidence})")
    check_complete(plan, counts)
    correction = None if readout is None else readout_correction(plan, readout, post_select)
    least = float(readout is None) / 2 if least_kept is None else least_kept
    kept = check_sector(counts, plan.electrons, least)
    consistency = check_reading(OccupationFit.of(plan, counts))
    select = readout is None and (plan.sector_exact if post_select is None else bool(post_select))
    if select:
        check_every_circuit_keeps_shots(counts, kept, plan.electrons)

    whole = combine(parts, plan.electrons, correction=correction)
    discards = select and bool(np.any(kept < counts.shots))
    used = combine(parts, plan.electrons, select=True) if discards else whole
    leak = None
    if correction is not None:
        leak, consistency = _sector_leak(plan, counts, correction), None
    half = used.bar.half_width(confidence)
    findings = _leak_findings(plan, leak) if leak else _findings(used, consistency)
    shots = used.shots
    shots.setflags(write=False)
    calibration = used.calibration_variance
    return Estimate(
        energy=used.value,
        standard_error=used.bar.standard_error,
        interval=(used.value - half, used.value + half),
        confidence=confidence,
        degrees_of_freedom=used.bar.degrees_of_freedom,
        constant=float(sum(part.weight * part.constant for part in parts)),
        means=frozen(used.means),
        deviations=frozen(used.deviations),
        predicted_deviations=frozen(used.predicted_deviations),
        shots=shots,
        post_selected=select,
        discarded=float(1.0 - np.sum(kept) / counts.total_shots),
        discarded_by_circuit=frozen(1.0 - kept / counts.shots),
        without_post_selection=(whole.value, whole.bar.standard_error) if discards else None,
        calibration_error=None if calibration is None else float(np.sqrt(calibration)),
        sector_leak=leak,
        consistency=consistency,
        agrees=not findings,
        message=" ".join(findings),
    )


def readout_correction(plan: Plan, readout: ReadoutErrors, post_select: bool | None) -> Correction:
    """Tables that correct for the readout errors, after checks."""
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


def _sector_leak(plan: Plan, counts: Counts, correction: Correction) -> tuple[float, float]:
    """Mean and standard error of (N̂ − N)² over all circuits, corrected for readout."""
    n, total = plan.orbitals, sum(plan.electrons)
    twos = np.full((n, n), 2.0)
    number = Fragment(np.eye(n), twos, twos - np.diag(np.diag(twos)), np.full(n, 1.0 - 2.0 * total))
    mean, variance, parts = float(total**2), 0.0, []
    for m, (share, bits, numbers) in enumerate(
        zip(counts.shots / counts.total_shots, counts.bits, counts.numbers, strict=True)
    ):
        sample = Sample.of(correction.values(number, bits), numbers)
        mean += share * sample.mean
        variance += share**2 * sample.variance / sample.shots
        only = Counts((counts.bits[m],), (counts.numbers[m],), counts.plan_digest, counts.batches)
        parts.append(Part((number,), 0.0, np.zeros(1), only, float(share)))
    return mean, float(np.sqrt(variance + correction.variance(calibration_gradients(parts, correction))))


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


def _findings(used: Combined, consistency: float | None) -> list[str]:
    """Sentences about what does not fit, empty if all does."""
    findings = []
    samples = [sample for part in used.samples for sample in part]
    observed = np.sqrt(np.sum(used.deviations**2 / used.shots))
    expected = np.sqrt(np.sum(used.predicted_deviations**2 / used.shots))
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
