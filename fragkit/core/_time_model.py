"""What a shot costs on a device: seconds, and the chance that nothing went wrong."""

from collections.abc import Iterable
from dataclasses import dataclass, fields
from typing import Any, Protocol

import numpy as np

from fragkit.core._errors import InputError
from fragkit.core._validate import as_count, as_positive, as_real_array

TWO_QUBIT_GATES_PER_GIVENS = 2
"""A real rotation of two neighbouring occupations takes two CNOT, one after the other."""


class HasGates(Protocol):
    """What the models need to know of a circuit: Givens rotations, layers of them, and qubits read."""

    @property
    def givens_count(self) -> int: ...
    @property
    def depth(self) -> int: ...
    @property
    def qubit_count(self) -> int: ...


@dataclass(frozen=True)
class TimeModel:
    """Times in seconds and error rates of a device, for choosing and judging plans.

    One shot takes preparation + 2 × (layers of Givens rotations) × layer + readout + reset; each new circuit costs a
    switch (loading, compiling, re-arming). Errors are taken as independent: the chance of a shot without any error is
    the product of those of its parts. That is the usual estimate of a device's fidelity (common practice, no source),
    not a model of what an error does to the energy.

    Parameters
    ----------
    preparation_seconds
        State preparation of one shot.
    layer_seconds
        One layer of two-qubit gates with the one-qubit gates around it. A layer of Givens rotations is two of them.
    readout_seconds, reset_seconds
        Reading all qubits, and bringing them back to zero for the next shot.
    switch_seconds
        Changing from one circuit to the next.
    preparation_fidelity
        Chance that the state preparation has no error.
    two_qubit_error, readout_error
        Error probability of a two-qubit gate and of reading one qubit.

    Raises
    ------
    InputError
        If a time is negative or not finite, the time of a shot is zero, or a probability is not in [0, 1].

    Examples
    --------
    >>> model = TimeModel(preparation_seconds=1e-5, layer_seconds=1e-7, readout_seconds=1e-6, switch_seconds=0.5)
    >>> round(model.shot_seconds(5), 9)
    1.2e-05
    """

    preparation_seconds: float
    layer_seconds: float
    readout_seconds: float
    reset_seconds: float = 0.0
    switch_seconds: float = 0.0
    preparation_fidelity: float = 1.0
    two_qubit_error: float = 0.0
    readout_error: float = 0.0

    def __post_init__(self) -> None:
        for item in fields(self):
            value = getattr(self, item.name)
            time = item.name.endswith("seconds")
            wanted = "a finite time in seconds, not negative" if time else "a probability between 0 and 1"
            try:
                number = float(value)
            except (TypeError, ValueError):
                raise InputError(f"`{item.name}` must be {wanted} (got {value!r})") from None
            if not np.isfinite(number) or number < 0.0 or (not time and number > 1.0):
                raise InputError(f"`{item.name}` must be {wanted} (got {value!r})")
            object.__setattr__(self, item.name, number)
        as_positive(self.shot_seconds(0), "preparation_seconds + readout_seconds + reset_seconds")

    def shot_seconds(self, depth: int) -> float:
        """Seconds of one shot of a circuit with `depth` layers of Givens rotations (n layers are always enough)."""
        layers = TWO_QUBIT_GATES_PER_GIVENS * as_count(depth, "depth")
        return self.preparation_seconds + layers * self.layer_seconds + self.readout_seconds + self.reset_seconds

    def seconds(self, circuits: Iterable[HasGates], shots: Any) -> float:
        """Seconds of all shots of all circuits, one switch for each circuit that is run."""
        circuits = list(circuits)
        numbers = as_real_array(shots, "shots", (len(circuits),))
        if np.any(numbers < 0):
            raise InputError(f"`shots` must not be negative (got {np.min(numbers):g})")
        running = float(np.dot(numbers, [self.shot_seconds(circuit.depth) for circuit in circuits]))
        return running + self.switch_seconds * int(np.count_nonzero(numbers))

    def fidelity(self, circuit: HasGates) -> float:
        """Chance that a shot of the circuit, state preparation and readout included, has no error."""
        gates = TWO_QUBIT_GATES_PER_GIVENS * circuit.givens_count
        rotation = (1.0 - self.two_qubit_error) ** gates
        return self.preparation_fidelity * rotation * (1.0 - self.readout_error) ** circuit.qubit_count
