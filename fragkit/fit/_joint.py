"""The strategy `Joint`: all fragments fitted together by non-linear least squares."""

from dataclasses import dataclass
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from fragkit.core import Fragmentation, Hamiltonian, InputError, as_count, as_positive
from fragkit.fit._controls import Controls
from fragkit.fit._count_search import counting_bound, smallest_count
from fragkit.fit._dense import dense_size, dense_solver
from fragkit.fit._fit import Fit
from fragkit.fit._greedy import Greedy
from fragkit.fit._levenberg import MatrixFreeSolver, Outcome, levenberg_marquardt
from fragkit.fit._pairs import pair_matrix
from fragkit.fit._penalty import Penalty
from fragkit.fit._point import Point, point_at
from fragkit.fit._starts import (
    FIRST_TURN,
    FIRST_TURN_OF_LARGE,
    KICK,
    given_start,
    grown,
    low_rank_start,
    pruned,
    random_turn,
    turned,
)
from fragkit.fit._wording import counted

Array = NDArray[np.float64]
Start = Literal["low rank", "greedy"]
Method = Literal["auto", "dense", "matrix-free"]

# Entries of the Jacobian up to which it is built as a matrix: 30 fragments of 14 orbitals, 1 GB with temporaries.
DENSE_LIMIT = 40_000_000

_METHOD_NAMES = {
    "dense": "Levenberg-Marquardt, normal equations by Cholesky factorisation",
    "matrix-free": "Levenberg-Marquardt, normal equations by conjugate gradients without a matrix",
}


@dataclass(frozen=True)
class Joint:
    """All fragments at once: rotations and coefficients that minimise ‖(pq|rs) − Σ fragments‖.

    Fragments of full rank have n² free numbers each, so about P(P+1)/(2n²) of them, P = n(n+1)/2, are needed for an
    exact fit; with one more the problem is easy, at that bound it is hard and may need many starts.

    Parameters
    ----------
    count
        Number of two-electron fragments. None searches for the smallest number that reaches `tol`.
    tol
        Residual to reach: Frobenius norm of the two-electron tensor, hartree, or, if `relative`, this fraction of
        the tensor's own norm.
    relative
        What `tol` means.
    start
        Where the first start begins. "low rank": the largest rank-one fragments, turned at random; "greedy": those of
        `Greedy`; or a Fragmentation of the same Hamiltonian, which is grown or pruned to `count`. Further starts are
        low-rank and greedy ones, turned or found at random.
    starts
        Most starts for one number of fragments; the first that reaches `tol` ends the fit. From the fourth on, every
        other one leaves the best point found so far. At the counting bound tens of starts may be needed.
    max_iterations
        Most iterations for one start.
    penalty
        Adds penalty · Σ λ² to the squared residual, which keeps large cancelling coefficients away. The penalised
        fit is followed by steps of least length without the penalty, if it alone does not reach `tol`.
    one_norm_weight
        Adds one_norm_weight times the two-electron part of the 1-norm (see `fragkit.core.one_norm`), in the same way.
    method
        "dense" builds the Jacobian, "matrix-free" does not, "auto" chooses by size.
    seconds
        End after about this time with the best so far. None sets no limit. A time limit makes the result depend on
        the speed of the machine.

    Examples
    --------
    >>> import numpy as np
    >>> from fragkit.core import Hamiltonian
    >>> from fragkit.fit import fragment
    >>> factor = np.array([[1.0, 0.2], [0.2, 0.5]])
    >>> tensor = np.einsum("pq,rs->pqrs", factor, factor) + 0.1 * np.einsum("pq,rs->pqrs", np.eye(2), np.eye(2))
    >>> fragments = fragment(Hamiltonian(0.0, factor, tensor, electrons=(1, 1)), Joint(count=1))
    >>> fragments.converged, len(fragments)
    (True, 2)
    """

    count: int | None = None
    tol: float = 1e-8
    relative: bool = False
    start: Start | Fragmentation = "low rank"
    starts: int = 4
    max_iterations: int = 400
    penalty: float = 0.0
    one_norm_weight: float = 0.0
    method: Method = "auto"
    seconds: float | None = None

    def __post_init__(self) -> None:
        if self.count is not None:
            as_count(self.count, "count", minimum=1)
        as_positive(self.tol, "tol")
        as_count(self.starts, "starts", minimum=1)
        as_count(self.max_iterations, "max_iterations", minimum=1)
        for name in ("penalty", "one_norm_weight"):
            value = getattr(self, name)
            if not np.isfinite(value) or value < 0.0:
                raise InputError(f"`{name}` must be zero or a positive number (got {value!r})")
        if self.method not in ("auto", "dense", "matrix-free"):
            raise InputError(f"`method` must be 'auto', 'dense' or 'matrix-free' (got {self.method!r})")
        if not isinstance(self.start, Fragmentation) and self.start not in ("low rank", "greedy"):
            raise InputError(f"`start` must be 'low rank', 'greedy' or a Fragmentation (got {self.start!r})")
        if self.seconds is not None:
            as_positive(self.seconds, "seconds")

    def fit(self, hamiltonian: Hamiltonian, controls: Controls) -> Fit:
        """Fit with the given number of fragments, or with the smallest number that reaches the tolerance."""
        if isinstance(self.start, Fragmentation):
            self.start.check_belongs_to(hamiltonian)
        run = _Run(self, hamiltonian, controls)
        if self.count is not None:
            point = run.best_with(self.count, warm=run.resumed())
            return run.result(point, run.ending(point))
        point, note = smallest_count(run, guess=self._first_guess(run))
        return run.result(point, note)

    def _first_guess(self, run: "_Run") -> int:
        """One above the counting bound, or less where the tolerance is loose."""
        resumed = run.resumed()
        if resumed is not None:
            return len(resumed.rotations)
        exact = counting_bound(run.hamiltonian.orbitals) + 1
        rank_one = run.low_rank_count()
        return max(1, min(exact, -(-rank_one // 3)))


class _Run:
    """One call of `Joint.fit`: the tensor, the tolerance in hartree, and what has been used up."""

    def __init__(self, strategy: Joint, hamiltonian: Hamiltonian, controls: Controls) -> None:
        self.strategy = strategy
        self.hamiltonian = hamiltonian
        self.controls = controls
        self.target = pair_matrix(hamiltonian)
        self.tol = strategy.tol * (float(np.linalg.norm(self.target)) if strategy.relative else 1.0)
        self.penalty = Penalty(strategy.penalty, strategy.one_norm_weight)
        self.iterations = 0
        self.starts_used = 0
        self.some_count_reached = False
        self.last_reason = ""
        self.method = ""

    def resumed(self) -> Point | None:
        """The point of the checkpoint, if the call resumes."""
        start = self.controls.start
        return None if start is None else point_at(self.target, start.rotations, start.coefficients)

    def low_rank_count(self) -> int:
        """Number of rank-one fragments that reach the tolerance."""
        values = np.sort(np.linalg.eigvalsh(self.target) ** 2)[::-1]
        left = np.sqrt(np.maximum(np.cumsum(values[::-1])[::-1], 0.0))
        return max(1, int(np.count_nonzero(left > self.tol)))

    @property
    def out_of_time(self) -> bool:
        """Whether the time limit is over."""
        return self.strategy.seconds is not None and self.controls.seconds > self.strategy.seconds

    def reached(self, point: Point) -> bool:
        """Whether the residual is within the tolerance."""
        return point.norm <= self.tol

    def best_with(self, count: int, *, warm: Point | None = None) -> Point:
        """Best point with `count` fragments over the allowed starts, first from `warm` if it is given."""
        best: Point | None = None
        self.starts_used = 0
        while self.starts_used < self.strategy.starts:
            begin = self._start(count, self.starts_used, warm, best)
            self.starts_used += 1
            point = self._minimise(begin, best)
            if best is None or point.squared < best.squared:
                best = point
            if self.reached(best):
                self.some_count_reached = True
                break
            if self.out_of_time:
                break
        assert best is not None  # `starts` is at least one
        return best

    def _start(self, count: int, number: int, warm: Point | None, best: Point | None) -> Point:
        """Where start `number` begins: the one asked for, then low rank and greedy in turn, and the best so far."""
        rng = self.controls.rng
        large = self._method_for(count) == "matrix-free"
        if number == 0:
            return self._first_start(count, warm, large)
        if best is not None and number >= 3 and number % 2 == 1:
            return point_at(self.target, turned(best.rotations, KICK, rng), best.coefficients)
        if (number == 1 or number % 4 == 0) and not large:
            # The best greedy set first, then rougher ones that differ from each other.
            return self._greedy_start(count, starts=8 if number == 1 else 2)
        rotations, coefficients = low_rank_start(self.hamiltonian, count)
        return point_at(self.target, turned(rotations, random_turn(rng), rng), coefficients)

    def _first_start(self, count: int, warm: Point | None, large: bool) -> Point:
        start, rng = self.strategy.start, self.controls.rng
        if warm is None and isinstance(start, Fragmentation):
            warm = point_at(self.target, *given_start(start.fragments, self.hamiltonian.orbitals))
        if warm is not None:
            return grown(self.target, pruned(self.target, warm, count), count, rng)
        if start == "greedy":
            return self._greedy_start(count, starts=8)
        rotations, coefficients = low_rank_start(self.hamiltonian, count)
        return point_at(self.target, turned(rotations, FIRST_TURN_OF_LARGE if large else FIRST_TURN, rng), coefficients)

    def _greedy_start(self, count: int, *, starts: int) -> Point:
        rng = self.controls.rng
        fit = Greedy(count=count, tol=1e-12, starts=starts).fit(self.hamiltonian, Controls(rng=rng))
        return grown(self.target, point_at(self.target, fit.rotations, fit.coefficients), count, rng)

    def _method_for(self, count: int) -> Literal["dense", "matrix-free"]:
        if self.strategy.method != "auto":
            return self.strategy.method
        return "dense" if dense_size(count, self.hamiltonian.orbitals) <= DENSE_LIMIT else "matrix-free"

    def _minimise(self, begin: Point, best: Point | None) -> Point:
        if not self.penalty:
            return self._iterate(begin, best, Penalty()).point
        point = self._iterate(begin, best, self.penalty).point
        if self.reached(point) or self.out_of_time:
            return point
        return self._iterate(point, best, Penalty(), damping=1e-6).point

    def _iterate(self, begin: Point, best: Point | None, penalty: Penalty, damping: float = 1e-2) -> Outcome:
        method = self._method_for(len(begin.rotations))
        self.method = _METHOD_NAMES[method]
        done = self.iterations

        def update(point: Point, iteration: int) -> None:
            # In a search, a set that reaches the tolerance is better than a smaller one that does not.
            allowed = self.reached(point) or not self.some_count_reached
            if allowed and (best is None or point.squared < best.squared):
                self.controls.update(point.rotations, point.coefficients, point.norm, done + iteration)

        def out_of_time() -> bool:
            return self.out_of_time

        # An interrupt in a long first iteration has something to return.
        update(begin, 0)

        solver_at = dense_solver if method == "dense" else MatrixFreeSolver(out_of_time=out_of_time)
        outcome = levenberg_marquardt(
            self.target,
            begin,
            solver_at,
            tol=self.tol,
            max_iterations=self.strategy.max_iterations,
            penalty=penalty,
            damping=damping,
            update=update,
            out_of_time=out_of_time,
        )
        self.iterations += outcome.iterations
        self.last_reason = outcome.reason
        return outcome

    def ending(self, point: Point) -> str:
        """How the fit with a given number of fragments ended, as a sentence."""
        count = len(point.rotations)
        fragments, starts = counted(count, "fragment"), counted(self.starts_used, "start")
        if self.reached(point):
            reached = f"A residual of {point.norm:.2g} Ha was reached with {fragments}"
            return f"{reached} in {starts} (tolerance {self.tol:.2g} Ha)."
        why = {
            "seconds": "the time limit ended the fit; raise `seconds`",
            "iterations": "the last start used all its iterations; raise `max_iterations`, `count` or `starts`",
            "stalled": "the iterations came to a standstill; raise `count`, or `starts` to try more of them",
        }[self.last_reason]
        bound = counting_bound(self.hamiltonian.orbitals)
        hint = f" (an exact fit needs about {bound} fragments, and {bound + 1} make it easy)" if count <= bound else ""
        return (
            f"A residual of {point.norm:.2g} Ha was left by {fragments} after {starts} (tolerance {self.tol:.2g} Ha): "
            f"{why}{hint}."
        )

    def result(self, point: Point, message: str) -> Fit:
        """The point as the strategy's result."""
        return Fit(
            point.rotations,
            point.coefficients,
            point.norm,
            converged=self.reached(point),
            message=message,
            method=self.method,
            iterations=self.iterations,
        )
