"""Cost against number of circuits."""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from fragkit.core import Hamiltonian, InputError, TimeModel, as_count, as_hamiltonian
from fragkit.planning._assemble import plan_of_design
from fragkit.planning._budget import Budget
from fragkit.planning._choose import Design, Settings, design_for
from fragkit.planning._cost import check_state
from fragkit.planning._counts import least_count
from fragkit.planning._plan import Plan
from fragkit.planning._robust import robust_state
from fragkit.planning._threads import sized_blas_threads
from fragkit.states import ReferenceState

if TYPE_CHECKING:
    from matplotlib.axes import Axes

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False, repr=False)
class TradeOff:
    """Plans of different numbers of circuits, fewest first.

    Parameters
    ----------
    plans
        One for each number of circuits.
    seconds
        (P,) time of each plan's shots and changes of circuit, or None without a time model.
    """

    plans: tuple[Plan, ...]
    seconds: Array | None = None

    @property
    def circuits(self) -> NDArray[np.int64]:
        """(P,) numbers of circuits."""
        return np.array([len(plan) for plan in self.plans])

    @property
    def cost(self) -> Array:
        """(P,) shots × error² in the reference state, hartree²."""
        return np.array([plan.diagnostics["reference"] for plan in self.plans])

    @property
    def shots(self) -> NDArray[np.int64]:
        """(P,) shots of each plan."""
        return np.array([plan.total_shots for plan in self.plans])

    def best(self, circuit_overhead: float = 0.0) -> Plan:
        """The plan with the least shots + circuit_overhead × circuits, or the least time when seconds are known.

        `circuit_overhead` is the number of shots that a further circuit is worth; it is not used with a time model.
        """
        spent = self.seconds if self.seconds is not None else self.shots + circuit_overhead * self.circuits
        return self.plans[int(np.argmin(spent))]

    def table(self) -> str:
        """A text table, one row per number of circuits."""
        from fragkit.report import text_table

        rows = []
        for k, plan in enumerate(self.plans):
            time = "-" if self.seconds is None else f"{self.seconds[k]:.4g}"
            error = f"{1e3 * plan.predicted_error:.3f}"
            rows.append((str(len(plan)), f"{self.cost[k]:.4g}", f"{plan.total_shots:,}", error, time))
        return text_table(("circuits", "cost / Ha^2", "shots", "error / mHa", "seconds"), rows)

    def plot(self, ax: "Axes | None" = None, *, label: str | None = None) -> "Axes":
        """Cost against number of circuits on the given matplotlib axes or new ones; returns the axes."""
        axes: Any = ax
        if axes is None:
            import matplotlib.pyplot as plt

            axes = plt.subplots(figsize=(6.0, 3.8), layout="constrained")[1]
        axes.plot(self.circuits, self.cost, marker="o", label=label)
        axes.set_xlabel("circuits")
        axes.set_ylabel("cost: shots × error² / Ha²")
        axes.set_yscale("log")
        if label is not None:
            axes.legend()
        return axes

    def __len__(self) -> int:
        return len(self.plans)

    def __str__(self) -> str:
        return self.table()

    def __repr__(self) -> str:
        return f"TradeOff({len(self)} plans, circuits {self.circuits.tolist()})"


@sized_blas_threads
def trade_off(
    hamiltonian: Hamiltonian,
    state: ReferenceState,
    counts: Sequence[int] | None = None,
    *,
    target_error: float | None = None,
    total_shots: int | None = None,
    minimum_shots: int = 10,
    time_model: TimeModel | None = None,
    shifts: bool = True,
    planning_noise: float | None = None,
    rng: np.random.Generator | int | None = 0,
    tolerance: float = 5e-3,
    max_evaluations: int = 4000,
    progress: bool = False,
) -> TradeOff:
    """Plans for several numbers of circuits, each started from its neighbours.

    Going up, random rotations are added to those found for the number before; going down again, the circuits with the
    fewest shots are dropped from those of the number after, and the better of the two results is kept. Ctrl-C ends the
    search and returns the plans that there are.

    Parameters
    ----------
    hamiltonian, state
        As for `fragkit.plan`.
    counts
        Numbers of circuits; seven from 0.7 to 1.6 times the fewest that generic rotations allow, (n+1)(n+2)/4, when
        None.
    target_error, total_shots, minimum_shots, time_model, shifts, planning_noise, rng, tolerance, max_evaluations
        As for `fragkit.plan`.
    progress
        Show a bar for each optimisation.

    Raises
    ------
    InputError
        If an argument is not what it must be.

    Examples
    --------
    >>> import fragkit
    >>> from fragkit.states import reference_state
    >>> ham = fragkit.hubbard(2, repulsion=4.0, electrons=(1, 1), periodic=False)
    >>> curve = trade_off(ham, reference_state(ham, "fci"), [3, 4], max_evaluations=60)
    >>> len(curve) in (1, 2)
    True
    """
    as_hamiltonian(hamiltonian)
    check_state(state, hamiltonian.orbitals, hamiltonian.electrons)
    fewest = least_count(hamiltonian.orbitals)
    if counts is None:
        counts = sorted({round(fewest * (0.7 + 0.15 * k)) for k in range(7)})
    numbers = sorted({as_count(k, "counts", minimum=1) for k in counts})
    if not numbers:
        raise InputError("`counts` must hold at least one number of circuits (got none)")
    budget = Budget(target_error, total_shots, None, minimum_shots, time_model)
    planned_on = robust_state(state, planning_noise)
    settings = Settings(
        budget, shifts=shifts, rng=rng, tolerance=tolerance, max_evaluations=max_evaluations, progress=progress
    )
    designs: list[Design] = []
    for count in numbers:
        warm = designs[-1].rotations if designs and len(designs[-1].rotations) <= count else None
        designs.append(design_for(hamiltonian, planned_on, count, settings, start=warm))
        if designs[-1].interrupted:
            break
    for k in range(len(designs) - 2, -1, -1):
        if designs[-1].interrupted:
            break
        shares = designs[k + 1].weighting.shares
        heavy = np.sort(np.argsort(-shares)[: numbers[k]])
        again = design_for(hamiltonian, planned_on, numbers[k], settings, start=designs[k + 1].rotations[heavy])
        if again.rank < designs[k].rank:
            designs[k] = again
        if again.interrupted:
            break
    # Circuits that are not needed are left out, so two numbers asked for can end as one.
    best: dict[int, Design] = {}
    for design in designs:
        count = len(design.rotations)
        if count not in best or design.rank < best[count].rank:
            best[count] = design
    plans = tuple(plan_of_design(hamiltonian, state, best[count], budget, planning_noise) for count in sorted(best))
    return TradeOff(plans, plan_seconds(plans, budget))


def plan_seconds(plans: Sequence[Plan], budget: Budget) -> Array | None:
    """(P,) seconds of shots and changes of circuit, or None without a time model."""
    if budget.time_model is None:
        return None
    return np.array(
        [
            float(plan.shots @ budget.prices([f.rotation for f in plan.fragments]))
            + len(plan) * budget.time_model.switch_seconds
            for plan in plans
        ]
    )
