"""Observables from the shots of a plan, each with its own least-variance coefficients."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fragkit.core import Fragment, Hamiltonian, InputError, MismatchError, as_positive, pair_indices
from fragkit.estimate._combine import Part, combine, split
from fragkit.estimate._consistency import OccupationFit, check_reading
from fragkit.estimate._correction import Correction
from fragkit.estimate._counts import Counts
from fragkit.estimate._least_variance import Combination, FixedShots
from fragkit.estimate._missing import check_complete
from fragkit.estimate._moments import MODEL_NOISE, model_state, selected, shrunk_covariances
from fragkit.estimate._observable import Observable
from fragkit.estimate._readout import ReadoutErrors
from fragkit.estimate._sector import check_every_circuit_keeps_shots, check_sector
from fragkit.estimate._verb import check_counts, readout_correction
from fragkit.planning import OperatorSpace, Plan
from fragkit.states import ReferenceState

Array = NDArray[np.float64]

FOLDS = 4
"""Parts that the data are dealt into; the coefficients of one come from the covariances of the others."""

_SPANNED = 1e-8


@dataclass(frozen=True)
class Measurement:
    """A measured observable: name, value, standard error, and interval of the given confidence."""

    name: str
    value: float
    standard_error: float
    interval: tuple[float, float]
    confidence: float

    def __repr__(self) -> str:
        return f"Measurement({self.name!r}: {self.value:.6g} +- {self.standard_error:.2g})"


def measure(
    plan: Plan,
    counts: Counts,
    observables: Sequence[Observable | Hamiltonian] | Observable | Hamiltonian,
    *,
    reference: ReferenceState | None = None,
    shifts: bool | None = None,
    readout: ReadoutErrors | None = None,
    confidence: float = 0.95,
    least_kept: float | None = None,
    seed: int = 0,
) -> list[Measurement]:
    """Expectation values of other operators from the counts of a plan.

    Each operator gets the coefficients of least variance on the plan's circuits at the shots that were taken, exactly
    reproducing it. The covariances come from `reference`, or without one from the data, in folds: the coefficients
    for one quarter of the shots come from the other three, so that values are unbiased.

    Parameters
    ----------
    plan, counts
        As for `fragkit.estimate.estimate`.
    observables
        One or several; a Hamiltonian is taken as the operator with its integrals (an energy derivative, say).
    reference
        State to take covariances from.
    shifts
        Use operators that vanish at the plan's electron numbers; the values then come from post-selected shots. As
        the plan does when None.
    readout
        Readout errors to correct for; then nothing is post-selected.
    confidence, least_kept
        As for `fragkit.estimate.estimate`.
    seed
        Of the deal into folds.

    Returns
    -------
    list of Measurement
        In the order of `observables`.

    Raises
    ------
    InputError
        If an operator is outside the span of the plan's circuits; the message says what is missing.

    Examples
    --------
    >>> import fragkit, numpy as np
    >>> ham = fragkit.hubbard(2, repulsion=4.0, electrons=(1, 1))
    >>> state = fragkit.reference_state(ham, "fci")
    >>> plan = fragkit.plan(ham, state, fragments=fragkit.fragment(ham), total_shots=20000)
    >>> counts = fragkit.simulate(plan, state, rng=1)
    >>> [result] = measure(plan, counts, Observable("hopping", 0.0, np.array([[0.0, 1.0], [1.0, 0.0]])))
    >>> abs(result.value - 1.4142) < 0.1
    True
    """
    if isinstance(observables, Observable | Hamiltonian):
        observables = [observables]
    listed = [Observable.of(o) if isinstance(o, Hamiltonian) else o for o in observables]
    for k, observable in enumerate(listed):
        if not isinstance(observable, Observable):
            raise InputError(
                f"`observables[{k}]` must be an Observable or a Hamiltonian (got {type(observable).__name__})"
            )
        if observable.orbitals != plan.orbitals:
            raise MismatchError(
                f"`observables[{k}]` must have {plan.orbitals} orbitals like the plan (got {observable.orbitals})"
            )
    data = _checked(plan, counts, shifts, readout, least_kept)
    parts = _parts(plan, data, listed, reference, seed)
    if not 0.0 < as_positive(confidence, "confidence") < 1.0:
        raise InputError(f"`confidence` must be between 0 and 1 (got {confidence})")
    results = []
    for observable, own in zip(listed, parts, strict=True):
        found = combine(own, plan.electrons, correction=data.correction)
        half = found.bar.half_width(confidence)
        value = observable.constant + found.value
        results.append(
            Measurement(observable.name, value, found.bar.standard_error, (value - half, value + half), confidence)
        )
    return results


def measure_density(
    plan: Plan,
    counts: Counts,
    *,
    reference: ReferenceState | None = None,
    shifts: bool | None = None,
    readout: ReadoutErrors | None = None,
    least_kept: float | None = None,
    seed: int = 0,
) -> tuple[Array, Array]:
    """Spin-summed one-particle density matrix ⟨E_pq⟩ (n, n), real part, and the standard error of each entry.

    Arguments and errors as for `measure`. The entries are unbiased one by one; the matrix is not forced to have
    eigenvalues in 0 … 2.
    """
    n = plan.orbitals
    p, q = pair_indices(n)
    units = []
    for a, b in zip(p, q, strict=True):
        matrix = np.zeros((n, n))
        matrix[a, b] = matrix[b, a] = 1.0 if a == b else 0.5
        units.append(Observable(f"E[{a},{b}]", 0.0, matrix))
    found = measure(
        plan,
        counts,
        units,
        reference=reference,
        shifts=shifts,
        readout=readout,
        least_kept=least_kept,
        seed=seed,
    )
    density, errors = np.zeros((n, n)), np.zeros((n, n))
    density[p, q] = density[q, p] = [result.value for result in found]
    errors[p, q] = errors[q, p] = [result.standard_error for result in found]
    return density, errors


@dataclass(frozen=True, eq=False)
class _Data:
    """Counts that passed the checks, post-selected if need be."""

    counts: Counts
    shifts: bool
    correction: Correction | None


def _checked(
    plan: Plan, counts: Counts, shifts: bool | None, readout: ReadoutErrors | None, least_kept: float | None
) -> _Data:
    check_counts(plan, counts)
    check_complete(plan, counts)
    use_shifts = plan.sector_exact if shifts is None else bool(shifts)
    correction = None if readout is None else readout_correction(plan, readout, None)
    least = float(readout is None) / 2 if least_kept is None else least_kept
    kept = check_sector(counts, plan.electrons, least)
    check_reading(OccupationFit.of(plan, counts))
    if use_shifts and readout is None:
        check_every_circuit_keeps_shots(counts, kept, plan.electrons)
        counts = selected(counts, plan.electrons)
    return _Data(counts, use_shifts, correction)


def _parts(
    plan: Plan, data: _Data, observables: Sequence[Observable], reference: ReferenceState | None, seed: int
) -> list[list[Part]]:
    """For each observable its parts: the data as a whole with a reference, folds without."""
    rotations = np.stack([fragment.rotation for fragment in plan.fragments])
    space = OperatorSpace(plan.orbitals)
    rows = [observable.rows(space) for observable in observables]
    if reference is not None:
        state = reference.with_noise(MODEL_NOISE)
        cases = [(np.stack([state.moments(u)[1] for u in rotations]), data.counts, 1.0)]
    else:
        if np.min(data.counts.shots) < 2 * FOLDS:
            raise InputError(
                f"every circuit must have at least {2 * FOLDS} shots to choose coefficients from the data (got "
                f"{int(np.min(data.counts.shots))} for circuit {int(np.argmin(data.counts.shots))}); pass `reference`"
            )
        folds = split(data.counts, FOLDS, np.random.default_rng(seed))
        cases = []
        for k, fold in enumerate(folds):
            first, *rest = [other for j, other in enumerate(folds) if j != k]
            others = first.merged(*rest)
            covariances = shrunk_covariances(plan, others, model_state(plan, others, None))
            cases.append((covariances, fold, 1.0 / FOLDS))
    parts: list[list[Part]] = [[] for _ in observables]
    for covariances, counts, weight in cases:
        ready = FixedShots(rotations, covariances, counts.shots, plan.electrons, shifts=data.shifts)
        for observable, own, target in zip(observables, parts, rows, strict=True):
            found = ready.combination(target)
            check_spanned(observable, found, space, data.shifts)
            products = np.einsum("kfg,kg->kf", covariances, found.coefficients)
            deviations = np.sqrt(np.maximum(np.einsum("kf,kf->k", found.coefficients, products), 0.0))
            fragments = tuple(
                Fragment.from_coefficients(u, c) for u, c in zip(rotations, found.coefficients, strict=True)
            )
            own.append(Part(fragments, found.constant, deviations, counts, weight))
    return parts


def check_spanned(observable: Observable, found: Combination, space: OperatorSpace, shifts: bool) -> None:
    """Raise `InputError` unless the circuits reproduce the observable, saying what is missing."""
    if found.relative <= _SPANNED:
        return
    tensors = space.tensors(found.missing)
    sizes = {
        "one-body": (tensors.one_body, found.missing[space.linear]),
        "opposite-spin": (tensors.opposite_spin, found.missing[space.opposite]),
        "same-spin": (tensors.exchange_odd, found.missing[space.same]),
    }
    kind = max(sizes, key=lambda name: float(np.linalg.norm(sizes[name][1])))
    tensor, part = sizes[kind]
    index = tuple(int(k) for k in np.unravel_index(int(np.argmax(np.abs(tensor))), tensor.shape))
    share = float(np.linalg.norm(part) / np.linalg.norm(found.missing)) ** 2
    other = "" if shifts else ", or allow operators that vanish at the electron numbers (shifts=True)"
    raise InputError(
        f"{observable.name!r} must be in the span of the plan's circuits (got a relative part of {found.relative:.2g} "
        f"outside, {share:.0%} of it {kind}, largest at orbitals {index}); add circuits whose orbitals mix these{other}"
    )
