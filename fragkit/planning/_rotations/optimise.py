"""Rotations, coefficients and shot shares of least variance together, at a given number of circuits."""

import os
import time
from dataclasses import dataclass
from typing import Any, Literal, get_args

import numpy as np
from numpy.typing import NDArray

from fragkit.core import Hamiltonian, InputError, as_count, as_positive
from fragkit.planning._memory import MEMORY, require_memory
from fragkit.planning._operators.design_map import DesignMap
from fragkit.planning._rotations.covariances import Covariances
from fragkit.planning._rotations.file import RotationsFile
from fragkit.planning._rotations.run import FEASIBLE, Run
from fragkit.planning._rotations.start import starting_rotations
from fragkit.planning._threads import sized_blas_threads
from fragkit.states import ReferenceState

Array = NDArray[np.float64]
OnInterrupt = Literal["raise", "return"]

RIDGE = 1e-5
WINDOW = 200  # evaluations over which the fall of the cost is judged
THINNING = 0.85  # of the circuits are kept where some are left out
TRIAL = 300  # evaluations that every start gets before the best goes on alone


@dataclass(frozen=True, eq=False)
class RotationDesign:
    """Rotations with exact coefficients, the best that an optimisation found.

    Parameters
    ----------
    rotations
        (K, n, n); columns are the new orbitals.
    coefficients
        (K, n² + n) packed features, hartree. They reproduce the Hamiltonian up to operators that are constant in the
        sector of its electron numbers, to `infeasibility`.
    shares
        (K,) fractions of the shots, σ/Σσ.
    cost
        (Σσ)² in hartree² on the regularised reference.
    cost_history
        (refreshes, 2) evaluations spent and cost at each exact refresh, of the start that was followed to the end.
    infeasibility
        Norm of Hamiltonian minus fragments over the norm of the Hamiltonian, as operator rows without the shifts.
    evaluations, seconds
        Evaluations of the Lagrangian, of all starts together, and the time they took.
    converged, message
        Whether the cost had settled to the tolerance, in words.
    """

    rotations: Array
    coefficients: Array
    shares: Array
    cost: float
    cost_history: Array
    infeasibility: float
    evaluations: int
    seconds: float
    converged: bool
    message: str


@sized_blas_threads
def optimise_rotations(
    hamiltonian: Hamiltonian,
    state: ReferenceState,
    count: int,
    *,
    start: Any = None,
    starts: int = 1,
    surplus: float = 0.0,
    rng: np.random.Generator | int | None = 0,
    tolerance: float = 5e-3,
    max_evaluations: int = 4000,
    ridge: float = RIDGE,
    progress: bool = False,
    checkpoint: str | os.PathLike[str] | None = None,
    resume: bool = False,
    on_interrupt: OnInterrupt = "raise",
    memory: float = MEMORY,
) -> RotationDesign:
    """Find rotations, coefficients and shot shares with the least cost (Σσ)², exact at every refresh.

    Minimises over K rotations and their coefficients together, by an augmented Lagrangian with quasi-Newton steps on
    the orthogonal group. Shot shares and operators that are constant in the sector are eliminated in closed form.
    Every hundred steps or so rotations and coefficients are led back to exactness; the best of these points is
    returned. The problem has many local minima, which differ by some per cent.

    Parameters
    ----------
    hamiltonian
        What the fragments must sum to.
    state
        Whose variances count. A little noise in it (1e-3 is a robust choice) keeps the plan good on states that
        differ from it.
    count
        Number of circuits K. Two more than the (n+1)(n+2)/4 that generic rotations need (`least_count`) is a good
        choice. Down to about two thirds of it rotations can be kept where they reproduce the Hamiltonian, at a cost
        that grows as they lose freedom.
    start
        None for random rotations, "low-rank", a `Fragmentation`, or rotations (at most K, n, n); missing ones are
        random.
    starts
        Independent starts; each gets a trial, the best goes on. From the second on all rotations are random.
    surplus
        Begin with this fraction of circuits more than `count`, and leave the lightest out step by step, with a descent
        after each: for three times the time with 1.0 the local minimum is up to 2 % lower.
    rng
        Seed or generator of the starts; the same seed gives the same result on the same machine.
    tolerance
        Converged when the cost fell by less than this fraction over the last 200 evaluations.
    max_evaluations
        Most evaluations of the Lagrangian, all starts together.
    ridge
        Variance added to every feature (dimensionless), which bounds the coefficients. 3e-4 with little noise in the
        state makes up for a reference such as CISD in place of the true state.
    progress
        Show a bar with the cost.
    checkpoint
        File (.npz) that keeps the best rotations so far, written every 20 seconds or so and at the end.
    resume
        Go on from `checkpoint`.
    on_interrupt
        What Ctrl-C does: "raise" lets KeyboardInterrupt through, "return" gives the best so far, not converged.
    memory
        Bytes that may be used; more are refused before the work begins.

    Raises
    ------
    InputError
        If an argument is not what it must be, `count` is too small to reproduce the Hamiltonian, or more
        `memory` is needed.
    MismatchError
        If the checkpoint belongs to another problem.

    Examples
    --------
    >>> import fragkit
    >>> from fragkit.states import reference_state
    >>> ham = fragkit.hubbard(2, repulsion=4.0, electrons=(1, 1), periodic=False)
    >>> design = optimise_rotations(ham, reference_state(ham, "fci", noise=1e-3), 3)
    >>> bool(design.infeasibility < 1e-10)
    True
    """
    count = as_count(count, "count", minimum=1)
    starts = as_count(starts, "starts", minimum=1)
    limit = as_count(max_evaluations, "max_evaluations", minimum=1)
    tolerance = as_positive(tolerance, "tolerance")
    ridge = as_ridge(ridge)
    sizes = _sizes(count, as_surplus(surplus))
    if on_interrupt not in get_args(OnInterrupt):
        raise InputError(f"`on_interrupt` must be 'raise' or 'return' (got {on_interrupt!r})")
    n = hamiltonian.orbitals
    require_memory(n, sizes[0], memory)
    began = time.perf_counter()
    generator = np.random.default_rng(rng)
    file = None if checkpoint is None else RotationsFile(checkpoint, hamiltonian.digest, state.digest)
    if resume and file is None:
        raise InputError("`checkpoint` must be given when `resume` is True (got None)")
    if file is not None and not resume and file.path.exists():
        raise InputError(
            f"`checkpoint` must not exist yet (got {str(checkpoint)!r}); go on from it with resume=True, or remove it"
        )
    spent, shares = 0, None
    if resume and file is not None:
        first, shares, spent = file.read(sizes, n)
        starts, sizes = 1, [size for size in sizes if size <= len(first)]
    else:
        first = starting_rotations(hamiltonian, sizes[0], start, generator)

    design = DesignMap(hamiltonian)
    if not np.linalg.norm(design.target) > 1e-12 * np.linalg.norm(design.space.hamiltonian_rows(hamiltonian)):
        return RotationDesign(
            rotations=first[:count],
            coefficients=np.zeros((count, n * n + n)),
            shares=np.full(count, 1.0 / count),
            cost=0.0,
            cost_history=np.array([[0, 0.0]]),
            infeasibility=0.0,
            evaluations=0,
            seconds=time.perf_counter() - began,
            converged=True,
            message="The Hamiltonian is a constant in this sector: nothing has to be measured.",
        )
    covariances = Covariances(state, design, ridge)
    bar = _Bar(progress, limit)
    runs: list[Run] = []
    interrupted = settled = False
    try:
        runs.append(Run(design, covariances, first, shares))
        for number in range(1, starts):
            other = starting_rotations(hamiltonian, sizes[0], None, generator)
            runs.append(Run(design, covariances, other))
            for run in runs[number - 1 :]:
                _advance(run, min(TRIAL, limit // starts), bar)
        runs.sort(key=lambda run: run.best.cost)
        while True:
            run, others = runs[0], spent + sum(run.evaluations for run in runs[1:])
            settled = False
            while not settled and not run.stuck and run.evaluations + others < limit:
                run.cycle(min(run.natural_steps, limit - others - run.evaluations), bar.show)
                fall = run.recent_fall(WINDOW)
                settled = fall is not None and fall < tolerance
                if file is not None:
                    file.write_when_due(run.best.rotations, run.best.shares, run.evaluations + others)
            sizes = [size for size in sizes if size < len(run.best.rotations)]
            if not sizes:
                break
            runs.insert(0, run.thinned(sizes[0] if run.evaluations + others < limit else count))
    except KeyboardInterrupt:
        if on_interrupt == "raise" or not runs:
            raise
        interrupted, settled = True, False
        runs.sort(key=lambda run: (len(run.best.rotations), run.best.cost))
    finally:
        bar.close()
        if file is not None and runs:
            best = min(runs, key=lambda run: (len(run.best.rotations), run.best.cost)).best
            file.write(best.rotations, best.shares, spent + sum(run.evaluations for run in runs))
    if len(runs[0].best.rotations) > count:
        runs.insert(0, runs[0].thinned(count))
    best = runs[0].finish()
    total = spent + sum(run.evaluations for run in runs)
    return RotationDesign(
        rotations=best.rotations,
        coefficients=best.coefficients,
        shares=best.shares,
        cost=best.cost,
        cost_history=np.array(runs[0].history),
        infeasibility=best.infeasibility,
        evaluations=total,
        seconds=time.perf_counter() - began,
        converged=settled and best.infeasibility <= FEASIBLE,
        message=_message(runs[0], total, settled, interrupted, tolerance),
    )


def as_ridge(value: Any) -> float:
    """Return `value` as a finite float of at least 0."""
    if isinstance(value, bool) or not isinstance(value, float | int) or not 0.0 <= value < np.inf:
        raise InputError(f"`ridge` must be a number of at least 0 (got {value!r})")
    return float(value)


def as_surplus(value: Any) -> float:
    """Return `value` as a finite float of at least 0."""
    if isinstance(value, bool) or not isinstance(value, float | int) or not 0.0 <= value < np.inf:
        raise InputError(f"`surplus` must be a number of at least 0, a fraction of the circuits (got {value!r})")
    return float(value)


def _sizes(count: int, surplus: float) -> list[int]:
    """Numbers of circuits that a search with a surplus goes through.

    >>> _sizes(20, 0.0), _sizes(20, 0.5)
    ([20], [30, 25, 21, 20])
    """
    sizes = [round(count * (1.0 + surplus))]
    while sizes[-1] > count:
        sizes.append(max(count, int(THINNING * sizes[-1])))
    return sizes


def _advance(run: Run, evaluations: int, bar: "_Bar") -> None:
    while run.evaluations < evaluations and not run.stuck:
        run.cycle(min(run.natural_steps, evaluations - run.evaluations), bar.show)


def _message(run: Run, evaluations: int, settled: bool, interrupted: bool, tolerance: float) -> str:
    if run.best.infeasibility > FEASIBLE:
        return (
            f"The Hamiltonian is not reproduced: a relative residual of {run.best.infeasibility:.2g} is left after "
            f"{evaluations} evaluations; use more circuits."
        )
    if settled:
        return f"The cost fell by less than {tolerance:g} in the last {WINDOW} evaluations, {evaluations} in all."
    fall = run.recent_fall(WINDOW)
    rate = "" if fall is None else f"; it fell by {fall:.2g} (relative) in the last {WINDOW}"
    if interrupted:
        return f"Interrupted after {evaluations} evaluations at a cost of {run.best.cost:.4g} Ha^2{rate}."
    if run.stuck:
        return f"No further progress after {evaluations} evaluations{rate}; try another seed or more circuits."
    return f"The cost was still falling after {evaluations} evaluations{rate}; raise `max_evaluations` to go on."


class _Bar:
    """A progress bar, or nothing."""

    def __init__(self, shown: bool, total: int) -> None:
        self._bar: Any = None
        self._done = 0
        if shown:
            from tqdm.auto import tqdm

            self._bar = tqdm(total=total, unit="eval", desc="rotations")

    def show(self, evaluations: int, cost: float) -> None:
        """One more evaluation at this cost."""
        if self._bar is not None:
            self._bar.set_postfix_str(f"cost {cost:.4g} Ha^2", refresh=False)
            self._bar.update(evaluations)

    def close(self) -> None:
        """End the bar."""
        if self._bar is not None:
            self._bar.close()
