"""What a plan may spend, or must reach, and the whole numbers of shots that follow."""

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from fragkit.core import (
    ANGLE_TOLERANCE,
    InputError,
    TimeModel,
    as_count,
    as_positive,
    cheapest_order,
    eliminate,
    mesh_positions,
)
from fragkit.planning._allocation import shots_for_error, shots_for_seconds, shots_for_total
from fragkit.planning._plan import CHEMICAL_ACCURACY

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Budget:
    """One of a target error (hartree), a number of shots or a time (seconds), and the least shots of a circuit.

    Without any of the three the target is one kcal/mol. With a time model and a target error or a time, coefficients
    and shots are chosen for the least time instead of the fewest shots: least Σ σ √t, t the seconds of a shot, and
    shots in proportion to σ/√t.
    """

    target_error: float | None = None
    total_shots: int | None = None
    seconds: float | None = None
    minimum_shots: int = 10
    time_model: TimeModel | None = None

    def __post_init__(self) -> None:
        given = [name for name in ("target_error", "total_shots", "seconds") if getattr(self, name) is not None]
        if len(given) > 1:
            raise InputError(
                f"only one of `target_error`, `total_shots` and `seconds` may be given (got {' and '.join(given)})"
            )
        if not given:
            object.__setattr__(self, "target_error", CHEMICAL_ACCURACY)
        if self.target_error is not None:
            object.__setattr__(self, "target_error", as_positive(self.target_error, "target_error"))
        if self.total_shots is not None:
            as_count(self.total_shots, "total_shots", minimum=1)
        if self.seconds is not None:
            as_positive(self.seconds, "seconds")
            if self.time_model is None:
                raise InputError(
                    "`time_model` must be given with `seconds` (got None); "
                    "say how long a shot takes with fragkit.TimeModel(...)"
                )
        as_count(self.minimum_shots, "minimum_shots", minimum=1)
        if self.time_model is not None and not callable(getattr(self.time_model, "shot_seconds", None)):
            raise InputError(f"`time_model` must be a TimeModel (got {type(self.time_model).__name__})")

    @cached_property
    def saves_time(self) -> bool:
        """Whether time, not the number of shots, is what is spent."""
        return self.time_model is not None and self.total_shots is None

    @property
    def goal(self) -> str:
        """What coefficients and shots are chosen for, in words."""
        return "least time" if self.saves_time else "fewest shots"

    def shot_weights(self, rotations: Sequence[Array], *, reorder: bool = True) -> Array:
        """(K,) what a shot of each circuit counts where coefficients are chosen: the least Σ σ √weight is wanted.

        Ones, unless time is spent: then the seconds of a shot over those with all n layers, so that generic rotations
        have ones as well and costs of different circuits compare. With `reorder` the circuits may list their orbitals
        in the order that is cheapest to compile.
        """
        if self.time_model is None or not self.saves_time:
            return np.ones(len(rotations))
        if reorder:
            rotations = [rotation[:, cheapest_order(rotation)[0]] for rotation in rotations]
        return self.prices(rotations) / self.time_model.shot_seconds(len(rotations[0]))

    def prices(self, rotations: Sequence[Array]) -> Array:
        """(K,) seconds of a shot of each circuit, or ones without a time model."""
        if self.time_model is None:
            return np.ones(len(rotations))
        return np.array([self.time_model.shot_seconds(circuit_layers(rotation)) for rotation in rotations])

    def shots(self, deviations: Array, guide: Array, rotations: Sequence[Array]) -> NDArray[np.int64]:
        """Shots for circuits with these deviations; shared in proportion to `guide`, deviations in some other state.

        Raises `InputError` if the minimum for every circuit is more than the budget.
        """
        count = len(deviations)
        prices = self.prices(rotations)
        shape = guide / np.sqrt(prices) if self.saves_time else guide
        if self.target_error is not None:
            return shots_for_error(deviations, self.target_error, minimum=self.minimum_shots, guide=shape)
        if self.total_shots is not None:
            if self.total_shots < count * self.minimum_shots:
                raise InputError(
                    f"`total_shots` must be at least {count * self.minimum_shots}, {self.minimum_shots} for each of "
                    f"{count} circuits (got {self.total_shots}); allow more shots, fewer circuits, or a smaller "
                    "`minimum_shots`"
                )
            return shots_for_total(deviations, self.total_shots, minimum=self.minimum_shots, guide=shape)
        model, available = self.time_model, self.seconds
        if model is None or available is None:
            raise RuntimeError("a budget without target, shots or time passed its own check")
        switches = count * model.switch_seconds
        least = switches + self.minimum_shots * float(np.sum(prices))
        if available < least:
            raise InputError(
                f"`seconds` must be at least {least:.3g}, for {count} changes of circuit and {self.minimum_shots} "
                f"shots of each (got {available:.3g}); allow more time, fewer circuits, or a smaller `minimum_shots`"
            )
        return shots_for_seconds(deviations, available - switches, prices, minimum=self.minimum_shots, guide=shape)


def circuit_layers(rotation: Array) -> int:
    """Layers of neighbour rotations that a rotation circuit on a line takes, each gate as early as it can be."""
    angles, _ = eliminate(rotation, tolerance=ANGLE_TOLERANCE)
    busy = np.zeros(len(rotation) + 1, dtype=int)
    for i, angle in zip(mesh_positions(len(rotation)), angles, strict=True):
        if angle != 0.0:
            busy[i] = busy[i + 1] = max(busy[i], busy[i + 1]) + 1
    return int(np.max(busy))
