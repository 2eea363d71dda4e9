"""Adaptive runs: pilot shots choose coefficients and shots for the rest, and the energy stays unbiased."""

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fragkit.core import Fragment, Hamiltonian, InputError, MismatchError, as_count, as_positive
from fragkit.estimate._bits import BitOrder, SpinOrder
from fragkit.estimate._combine import Part, split
from fragkit.estimate._counts import Counts
from fragkit.estimate._estimate import Estimate
from fragkit.estimate._least_variance import FixedShots
from fragkit.estimate._moments import model_state, selected, shrunk_covariances
from fragkit.estimate._readout import ReadoutErrors
from fragkit.estimate._shares import whole_shots
from fragkit.estimate._verb import check_counts, estimate_parts
from fragkit.planning import Plan, as_plan, reweighted
from fragkit.states import ReferenceState

Array = NDArray[np.float64]

FOLDS = 4
"""Parts that each round is dealt into; the coefficients of one come from the others."""

MINIMUM_SHOTS = 5 * FOLDS
"""Least shots of a circuit in a round, so that each fold shows a spread."""

_MOST_ROUNDS = 8


@dataclass(frozen=True, eq=False, repr=False)
class AdaptiveRun:
    """A run that learns from its own counts: what has been measured, and what to measure next.

    The circuits are those of `plan` throughout. Round 0 is the pilot. Its counts, and those of every later round,
    give covariances of the features; these give coefficients and shots of the next round by the convex step of the
    planner. Coefficients are never used on the data that they were chosen with: a round is dealt into folds, each of
    which uses coefficients from the earlier rounds and the other folds, and the pilot uses coefficients from the
    later rounds. The energy is the average over folds and rounds with the shots as weights. So it is unbiased
    whatever the covariances were, up to one dependence of second order: that the pilot decides how many shots the
    data have that its own coefficients come from. With a target error, when to stop depends on the data as well.

    A run is immutable: `add` returns a new one. It can be saved between rounds (`save`, `load`).

    Parameters
    ----------
    plan
        Circuits, and shots for the pilot's shares.
    hamiltonian
        The Hamiltonian that was planned for.
    total_shots
        Budget, pilot included; the most that may be used when `target_error` is given.
    pilot_shots
        Shots of round 0.
    target_error
        Standard error to reach, hartree; the run then ends as soon as it is reached.
    reference
        State that the covariances are shrunk towards, besides the uncorrelated state with the measured density
        matrix; None for that alone.
    seed
        Of the deal into folds.
    rounds
        Counts of each round so far.
    """

    plan: Plan
    hamiltonian: Hamiltonian
    total_shots: int
    pilot_shots: int
    target_error: float | None = None
    reference: ReferenceState | None = None
    seed: int = 0
    rounds: tuple[Counts, ...] = ()

    @classmethod
    def start(
        cls,
        plan: Plan,
        hamiltonian: Hamiltonian,
        *,
        total_shots: int,
        target_error: float | None = None,
        pilot: float = 0.2,
        reference: ReferenceState | None = None,
        seed: int = 0,
    ) -> "AdaptiveRun":
        """A run without data; `pilot` is the fraction of the shots that round 0 takes.

        Raises
        ------
        InputError
            If the budget is too small for a pilot and a main round on all circuits.
        MismatchError
            If the plan or the reference belongs to another Hamiltonian.

        Examples
        --------
        >>> import fragkit
        >>> ham = fragkit.hubbard(2, repulsion=4.0, electrons=(1, 1))
        >>> plan = fragkit.plan(ham, fragkit.reference_state(ham, "hf"), fragments=fragkit.fragment(ham))
        >>> state = fragkit.reference_state(ham, "fci")
        >>> run = AdaptiveRun.start(plan, ham, total_shots=4000)
        >>> while (shots := run.next_shots()) is not None:
        ...     run = run.add(fragkit.simulate(plan, state, shots=shots, rng=len(run.rounds)))
        >>> run.used_shots
        4000
        """
        as_plan(plan).check_belongs_to(hamiltonian)
        if reference is not None and (reference.orbitals, reference.electrons) != (plan.orbitals, plan.electrons):
            raise MismatchError(
                f"`reference` must have {plan.orbitals} orbitals and electrons {plan.electrons} "
                f"(got {reference.orbitals} and {reference.electrons})"
            )
        if not 0.0 < as_positive(pilot, "pilot") < 1.0:
            raise InputError(f"`pilot` must be between 0 and 1 (got {pilot})")
        least = 2 * MINIMUM_SHOTS * len(plan)
        total = as_count(total_shots, "total_shots")
        if total < least:
            raise InputError(
                f"`total_shots` must be at least {least}, {2 * MINIMUM_SHOTS} for each of {len(plan)} circuits "
                f"(got {total}); allow more, or use a plan with fewer circuits"
            )
        first = min(max(round(pilot * total), MINIMUM_SHOTS * len(plan)), total - MINIMUM_SHOTS * len(plan))
        target = None if target_error is None else as_positive(target_error, "target_error")
        return cls(plan, hamiltonian, total, first, target, reference, as_count(seed, "seed"))

    @property
    def used_shots(self) -> int:
        """Shots of all rounds so far."""
        return sum(counts.total_shots for counts in self.rounds)

    @property
    def finished(self) -> bool:
        """Whether there is nothing left to measure: the target is reached, or the budget is spent."""
        return self.next_shots() is None

    def next_shots(self) -> NDArray[np.int64] | None:
        """(circuits,) shots to measure next, or None when the run is finished."""
        count = len(self.plan)
        if not self.rounds:
            # Half by the plan, half evenly: the plan's shares are what the pilot is to judge.
            return whole_shots(0.5 * self.plan.shares + 0.5 / count, self.pilot_shots, MINIMUM_SHOTS)
        left = self.total_shots - self.used_shots
        if left < MINIMUM_SHOTS * count or (self.target_error is None and len(self.rounds) > 1):
            return None
        spend: dict[str, Any] = {"total_shots": left}
        if self.target_error is not None:
            if len(self.rounds) > 1:
                reached = self.estimate().standard_error / self.target_error
                if reached <= 1.0 or len(self.rounds) >= _MOST_ROUNDS:
                    return None
                # A tenth on top, since the spread of the error bar itself would make every second run fall short.
                wanted = int(np.ceil(1.1 * (reached**2 - 1.0) * self.used_shots)) + MINIMUM_SHOTS * count
                spend = {"total_shots": min(left, max(wanted, 2 * MINIMUM_SHOTS * count))}
            else:
                spend = {"target_error": self.target_error}
        chosen = self._chosen(_joined(self.rounds), **spend).shots
        if np.sum(chosen) > left:
            chosen = whole_shots(chosen / np.sum(chosen), left, MINIMUM_SHOTS)
        return chosen

    def add(self, counts: Counts) -> "AdaptiveRun":
        """The run with the counts of one more round, complete for all circuits.

        Raises
        ------
        MismatchError
            If the counts belong to another plan.
        InputError
            If a circuit has fewer shots than a fold needs, or a batch was added before.
        """
        check_counts(self.plan, counts)
        few = np.flatnonzero(counts.shots < MINIMUM_SHOTS)
        if len(few):
            raise InputError(
                f"`counts` must have at least {MINIMUM_SHOTS} shots of every circuit (got fewer for "
                f"{', '.join(str(m) for m in few[:8])}); merge all batches of a round before adding it"
            )
        _joined((*self.rounds, counts))
        return replace(self, rounds=(*self.rounds, counts))

    def estimate(
        self,
        *,
        post_select: bool | None = None,
        readout: ReadoutErrors | None = None,
        confidence: float = 0.95,
        least_kept: float | None = None,
    ) -> Estimate:
        """Energy and error bar from all rounds; arguments as for `fragkit.estimate.estimate`.

        Raises
        ------
        InputError
            If there is no round after the pilot.
        """
        if len(self.rounds) < 2:
            raise InputError(
                f"the run must have at least one round after the pilot (got {len(self.rounds)} rounds); measure "
                "next_shots() and add the counts"
            )
        parts = []
        for index, counts in enumerate(self.rounds):
            if index == 0:
                known, folds = _joined(self.rounds[1:]), [counts]
            else:
                known, folds = _joined(self.rounds[:index]), self._folds(index)
            for k, fold in enumerate(folds):
                others = _joined((known, *(other for j, other in enumerate(folds) if j != k)))
                parts.append(self._part(others, fold, counts.total_shots / self.used_shots / len(folds)))
        return estimate_parts(
            self.plan,
            _joined(self.rounds),
            parts,
            post_select=post_select,
            readout=readout,
            confidence=confidence,
            least_kept=least_kept,
        )

    def reweighted_plan(self) -> Plan:
        """The plan's circuits with coefficients and shots by everything measured so far; same total of shots.

        For later runs on the same state. It must not be used on the counts that it was made from.
        """
        return self._chosen(_joined(self.rounds), total_shots=self.plan.total_shots)

    def save(self, path: Any, *, overwrite: bool = False) -> None:
        """Write the settings and all counts as JSON; see `fragkit.files.save_adaptive_run`."""
        from fragkit.files import save_adaptive_run

        save_adaptive_run(self, path, overwrite=overwrite)

    @staticmethod
    def load(
        path: Any, plan: Plan, hamiltonian: Hamiltonian, *, reference: ReferenceState | None = None
    ) -> "AdaptiveRun":
        """Read a run written by `save`, with what it was started with; see `fragkit.files.load_adaptive_run`."""
        from fragkit.files import load_adaptive_run

        return load_adaptive_run(path, plan, hamiltonian, reference=reference)

    def _folds(self, index: int) -> list[Counts]:
        return split(self.rounds[index], FOLDS, np.random.default_rng([self.seed, index]))

    def _covariances(self, counts: Counts) -> Array:
        seen = selected(counts, self.plan.electrons) if self.plan.sector_exact else counts
        return shrunk_covariances(self.plan, seen, model_state(self.plan, seen, self.reference))

    def _chosen(self, counts: Counts, **spend: Any) -> Plan:
        return reweighted(self.plan, self.hamiltonian, self._covariances(counts), minimum_shots=MINIMUM_SHOTS, **spend)

    def _part(self, known: Counts, fold: Counts, weight: float) -> Part:
        """The fold with the coefficients that are best for its shots by everything in `known`."""
        covariances = self._covariances(known)
        rotations = np.stack([fragment.rotation for fragment in self.plan.fragments])
        ready = FixedShots(rotations, covariances, fold.shots, self.plan.electrons, shifts=self.plan.sector_exact)
        found = ready.combination(ready.space.hamiltonian_rows(self.hamiltonian))
        products = np.einsum("kfg,kg->kf", covariances, found.coefficients)
        deviations = np.sqrt(np.maximum(np.einsum("kf,kf->k", found.coefficients, products), 0.0))
        fragments = tuple(Fragment.from_coefficients(u, c) for u, c in zip(rotations, found.coefficients, strict=True))
        return Part(fragments, self.hamiltonian.constant + found.constant, deviations, fold, weight)

    def __repr__(self) -> str:
        goal = "" if self.target_error is None else f", target_error={self.target_error:g} Ha"
        return (
            f"AdaptiveRun({len(self.plan)} circuits, {len(self.rounds)} rounds, {self.used_shots} of "
            f"{self.total_shots} shots{goal})"
        )


def run_adaptively(
    plan: Plan,
    hamiltonian: Hamiltonian,
    sampler: Callable[[int, int], Any],
    *,
    total_shots: int,
    spin_order: SpinOrder,
    bit_order: BitOrder,
    target_error: float | None = None,
    pilot: float = 0.2,
    reference: ReferenceState | None = None,
    seed: int = 0,
) -> AdaptiveRun:
    """Measure a plan adaptively with a function that runs circuits, to the end; then call `estimate` on the result.

    Parameters
    ----------
    plan, hamiltonian, total_shots, target_error, pilot, reference, seed
        As for `AdaptiveRun.start`.
    sampler
        Called as sampler(circuit, shots) with the circuit's index in the plan; returns a dictionary
        {bit string: count} or an array (shots, qubits) of 0 and 1, with exactly that many shots.
    spin_order, bit_order
        Of what it returns; as for `Counts.from_strings`.

    Raises
    ------
    InputError
        If the sampler returns another number of shots or something that is not counts.

    Examples
    --------
    >>> import fragkit, numpy as np
    >>> ham = fragkit.hubbard(2, repulsion=4.0, electrons=(1, 1))
    >>> plan = fragkit.plan(ham, fragkit.reference_state(ham, "hf"), fragments=fragkit.fragment(ham))
    >>> state, rng = fragkit.reference_state(ham, "fci"), np.random.default_rng(5)
    >>> run = run_adaptively(
    ...     plan, ham, lambda circuit, shots: state.sample(plan.fragments[circuit].rotation, shots, rng),
    ...     total_shots=4000, spin_order="blocked", bit_order="first-qubit-left",
    ... )
    >>> abs(run.estimate().energy - state.energy(ham)) < 0.2
    True
    """
    run = AdaptiveRun.start(
        plan,
        hamiltonian,
        total_shots=total_shots,
        target_error=target_error,
        pilot=pilot,
        reference=reference,
        seed=seed,
    )
    while (shots := run.next_shots()) is not None:
        results = {circuit: sampler(circuit, int(number)) for circuit, number in enumerate(shots)}
        tables = {c: r for c, r in results.items() if isinstance(r, dict)}
        arrays = {c: r for c, r in results.items() if not isinstance(r, dict)}
        name = f"round {len(run.rounds)}"
        if tables and arrays:
            raise InputError("`sampler` must return only dictionaries or only arrays (got both)")
        if tables:
            counts = Counts.from_strings(plan, tables, bit_order=bit_order, spin_order=spin_order, batch=name)
        else:
            counts = Counts.from_arrays(plan, arrays, bit_order=bit_order, spin_order=spin_order, batch=name)
        wrong = np.flatnonzero(counts.shots != shots)
        if len(wrong):
            m = int(wrong[0])
            raise InputError(
                f"`sampler` must return the number of shots it was asked for (got {counts.shots[m]} instead of "
                f"{shots[m]} for circuit {m}); return every shot, impossible ones too"
            )
        run = run.add(counts)
    return run


def _joined(rounds: tuple[Counts, ...]) -> Counts:
    return rounds[0].merged(*rounds[1:])
