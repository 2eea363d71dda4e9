"""One descent of the Lagrangian: stretches of quasi-Newton steps between exact refreshes."""

from collections.abc import Callable
from dataclasses import replace
from functools import cache

import numpy as np
from numpy.typing import NDArray
from threadpoolctl import ThreadpoolController

from fragkit.core import InputError
from fragkit.planning._counts import least_count
from fragkit.planning._operators.design_map import DesignMap
from fragkit.planning._operators.factor import is_factorised
from fragkit.planning._rotations.covariances import Covariances
from fragkit.planning._rotations.lagrangian import Lagrangian, Point
from fragkit.planning._rotations.quasi_newton import Memory
from fragkit.planning._rotations.refresh import Refresh, settle
from fragkit.planning._rotations.restore import EXACT, first_coefficients, restore

Array = NDArray[np.float64]

MEMORY = 100
LARGEST_TURN = 0.5  # radian, of one step between two orbitals
MULTIPLIER_INTERVAL = 15  # steps between updates of the multipliers
FIRST_PENALTY = 1.5  # κ; the multipliers converge for κ above about 1/2, the steps are longer for small κ
LARGEST_PENALTY = 50.0
FEASIBLE = 1e-9  # relative residual of a refresh that counts as exact
ROUGH = 1e-6  # and of one between whiles where every digit costs conjugate-gradient iterations
SMALL = 1200  # rows up to which a refresh is cheap beside the steps between two of them


class Run:
    """The state of one descent; `best` is the refresh of lowest cost so far, exact or, of many orbitals, nearly so."""

    def __init__(
        self,
        design: DesignMap,
        covariances: Covariances,
        rotations: Array,
        shares: Array | None = None,
        coefficients: Array | None = None,
    ) -> None:
        self._design = design
        self._covariances = covariances
        count, n = len(rotations), design.orbitals
        # From `least_count` on exact coefficients exist at almost every rotation, and they make the better start.
        self._factorised = is_factorised(design.space.size)
        self._exact, self._feasible = (EXACT, FEASIBLE) if self._factorised else (ROUGH, 3.0 * ROUGH)
        self._generic = self._factorised and count >= least_count(n)
        if coefficients is None and self._generic:
            weights = np.full(count, 1.0 / count) if shares is None else shares
            coefficients = settle(design, covariances, rotations, weights, iterations=2).coefficients
        elif coefficients is None:
            coefficients = first_coefficients(design, rotations)
        self.current = self.best = restore(design, covariances, rotations, coefficients, exact=self._exact)
        self._memory = Memory(MEMORY, count * (n * (n - 1) // 2 + design.features.shape[1]))
        self._penalty = FIRST_PENALTY
        self.evaluations = 0
        self.history: list[tuple[int, float]] = [(0, self.best.cost)]
        self.stuck = False

    @property
    def natural_steps(self) -> int:
        """Steps until the next refresh: few while the scaling changes fast, more where a refresh is dear."""
        if not self._factorised:
            return min(400, 60 * len(self.history))
        longest = 80 if self._design.space.size < SMALL else 160
        if len(self.history) > 1 and 0.98 * self.history[-2][1] < self.history[-1][1] < self.history[-2][1]:
            longest *= 2
        return min(longest, 20 + 15 * (len(self.history) - 1))

    def recent_fall(self, window: int) -> float | None:
        """Relative fall of the best cost over the last `window` evaluations, or None while there were fewer.

        Over at least the last three refreshes: some are unlucky.
        """
        if len(self.history) > 3:
            window = max(window, self.evaluations - self.history[-4][0])
        earlier = [cost for spent, cost in self.history if spent <= self.evaluations - window]
        return 1.0 - self.best.cost / min(earlier) if earlier else None

    def cycle(self, steps: int, report: Callable[[int, float], None]) -> None:
        """Take up to `steps` steps, then refresh. `report` gets new evaluations and the cost of the last refresh."""
        lagrangian = Lagrangian(self._design, self._covariances, self.current, self._penalty)
        # Products are small between refreshes: threads of the linear algebra would only get in the way.
        with _linear_algebra().limit(limits=1, user_api="blas"):
            end = self._descend(lagrangian, steps, report)
        rotations = _orthonormal(end.rotations)
        coefficients = np.einsum("kfr,kr->kf", self.current.scale, end.scaled)
        try:
            new = restore(
                self._design, self._covariances, rotations, coefficients, exact=self._exact, dual=self.current.dual
            )
        except InputError:
            # With very few circuits one that falls out of use takes the last freedom with it.
            if self.best.infeasibility > self._feasible:
                raise
            self.stuck = True
            return
        self.history.append((self.evaluations, new.cost))
        worse = new.cost > 1.02 * self.best.cost or new.infeasibility > self._feasible
        if worse and self.best.infeasibility <= self._feasible:
            # Too soft a penalty lets rotations run ahead of feasibility.
            self.stuck = self._penalty >= LARGEST_PENALTY
            self._penalty = min(2.0 * self._penalty, LARGEST_PENALTY)
            self.current = self.best
            self._memory.clear()
            return
        if new.cost > self.best.cost:
            self._penalty = min(1.5 * self._penalty, LARGEST_PENALTY)
        self._carry_over(self.current, new)
        self.current = new
        if self.best.infeasibility > self._feasible or new.cost < self.best.cost:
            self.best = new

    def thinned(self, count: int) -> "Run":
        """A descent from the best refresh without its lightest circuits."""
        heaviest = np.sort(np.argsort(-self.best.shares)[:count])
        rotations, coefficients = self.best.rotations[heaviest], self.best.coefficients[heaviest]
        return Run(self._design, self._covariances, rotations, coefficients=coefficients)

    def finish(self) -> Refresh:
        """The best refresh, exact, with coefficients of least variance for its rotations where that is cheap."""
        if not self._factorised:
            best = self.best
            self.best = restore(self._design, self._covariances, best.rotations, best.coefficients, dual=best.dual)
        if self._generic:
            try:
                found = settle(self._design, self._covariances, self.best.rotations, self.best.shares, iterations=2)
            except InputError:
                return self.best  # exact, but with hardly any freedom at these rotations
            if found.cost < self.best.cost and found.infeasibility <= FEASIBLE:
                self.best = replace(
                    self.best,
                    coefficients=found.coefficients,
                    shares=found.shares,
                    cost=found.cost,
                    infeasibility=found.infeasibility,
                )
        return self.best

    def _descend(self, lagrangian: Lagrangian, steps: int, report: Callable[[int, float], None]) -> Point:
        base = self.current
        dual = base.dual
        point = lagrangian.evaluate(base.rotations, base.scaled, dual)
        self.evaluations += 1
        for number in range(1, steps + 1):
            direction = self._memory.direction(point.gradient)
            slope = float(direction @ point.gradient)
            if slope >= 0.0:
                self._memory.clear()
                direction = self._memory.direction(point.gradient)
                slope = float(direction @ point.gradient)
            if slope == 0.0:
                break
            length = min(1.0, LARGEST_TURN / max(lagrangian.largest_turn(direction), 1e-300))
            for _ in range(10):
                new = lagrangian.evaluate(*lagrangian.step(point, length * direction), dual)
                self.evaluations += 1
                report(1, base.cost)
                rise = new.value - point.value
                if rise <= 1e-4 * length * slope:
                    break
                # Minimum of the parabola through the two values and the slope.
                curved = rise - length * slope
                fitted = -0.5 * length * slope / curved if np.isfinite(curved) and curved > 0 else 0.1
                length *= min(0.5, max(0.1, fitted))
            else:
                break
            self._memory.add(length * direction, new.gradient - point.gradient)
            point = new
            if number % MULTIPLIER_INTERVAL == 0:
                dual = dual + point.multiplier_step
                point = lagrangian.evaluate(point.rotations, point.scaled, dual, point.moments)
        return point

    def _carry_over(self, old: Refresh, new: Refresh) -> None:
        """Change the variables of the memory from one scaling to the next."""
        count, features = old.scaled.shape
        forward = new.unscale @ old.scale  # z_new = forward z_old
        backward = (old.unscale @ new.scale).transpose(0, 2, 1)  # gradients go the other way
        ratio = old.steps / new.steps
        turns = self._memory.variables - count * features

        def mapped(rows: Array, ratios: Array, blocks: Array) -> Array:
            turned = rows[:, :turns].reshape(len(rows), count, turns // count) * ratios
            mixed = np.matmul(rows[:, turns:].reshape(len(rows), count, features).transpose(1, 0, 2), blocks)
            mixed = mixed.transpose(1, 0, 2).reshape(len(rows), count * features)
            return np.concatenate([turned.reshape(len(rows), turns), mixed], axis=1)

        self._memory.transform(
            lambda rows: mapped(rows, ratio, forward.transpose(0, 2, 1)),
            lambda rows: mapped(rows, 1.0 / ratio, backward.transpose(0, 2, 1)),
        )


@cache
def _linear_algebra() -> ThreadpoolController:
    return ThreadpoolController()


def _orthonormal(rotations: Array) -> Array:
    """The same rotations with the rounding errors of many steps taken out (one Newton-Schulz step)."""
    n = rotations.shape[-1]
    return rotations @ (1.5 * np.eye(n) - 0.5 * rotations.transpose(0, 2, 1) @ rotations)
