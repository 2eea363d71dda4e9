"""What the circuits of a plan cost: gates, layers, seconds, and what left-out rotations do to the energy."""

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fragkit.circuits._circuit import RotationCircuit
from fragkit.core import Fragment, InputError, TimeModel, as_real_array, cheapest_form, givens_count

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class CircuitCosts:
    """Cost of every circuit and of all their shots; `str()` gives a table.

    Parameters
    ----------
    givens, depth
        (circuits,) neighbour rotations, and layers of them.
    two_qubit_gates, two_qubit_depth
        (circuits,) CNOT gates, and layers of them.
    shots
        (circuits,) or None.
    shot_seconds, fidelity
        (circuits,) seconds of one shot and its chance of having no error, by the time model; None without one.
    total_seconds
        Of all shots and switches; None without a time model or shots.
    distribution_bound
        (circuits,) as in `RotationCircuit`.
    """

    givens: NDArray[np.int64]
    depth: NDArray[np.int64]
    two_qubit_gates: NDArray[np.int64]
    two_qubit_depth: NDArray[np.int64]
    shots: NDArray[np.int64] | None
    shot_seconds: Array | None
    fidelity: Array | None
    total_seconds: float | None
    distribution_bound: Array

    def __str__(self) -> str:
        columns: list[tuple[str, list[str]]] = [
            ("circuit", [str(k) for k in range(len(self.givens))]),
            ("rotations", [str(k) for k in self.givens]),
            ("CNOT", [str(k) for k in self.two_qubit_gates]),
            ("CNOT layers", [str(k) for k in self.two_qubit_depth]),
        ]
        if self.shots is not None:
            columns.append(("shots", [str(k) for k in self.shots]))
        if self.shot_seconds is not None and self.fidelity is not None:
            columns.append(("s/shot", [f"{t:.3g}" for t in self.shot_seconds]))
            columns.append(("fidelity", [f"{f:.3f}" for f in self.fidelity]))
        widths = [max(len(title), *(len(cell) for cell in cells)) for title, cells in columns]
        titles = "  ".join(title.rjust(width) for (title, _), width in zip(columns, widths, strict=True))
        rows = [
            "  ".join(cell.rjust(width) for cell, width in zip(row, widths, strict=True))
            for row in zip(*(cells for _, cells in columns), strict=True)
        ]
        total = f"total: {int(np.sum(self.givens))} rotations, {int(np.sum(self.two_qubit_gates))} CNOT in all circuits"
        if self.total_seconds is not None:
            total += f"; {self.total_seconds:.4g} s for all shots and switches"
        return "\n".join([titles, *rows, total])


def circuit_costs(
    circuits: Sequence[RotationCircuit], *, shots: Any = None, time_model: TimeModel | None = None
) -> CircuitCosts:
    """Count gates and layers of circuits and, with a time model, seconds and fidelities.

    Parameters
    ----------
    circuits
        As returned by `rotation_circuits`.
    shots
        (circuits,) shots of each.
    time_model
        Times and error rates of the device.

    Examples
    --------
    >>> import numpy as np
    >>> from fragkit.circuits import rotation_circuits
    >>> print(circuit_costs(rotation_circuits([np.eye(2), np.eye(2)[::-1]])))
    circuit  rotations  CNOT  CNOT layers
          0          0     0            0
          1          2     4            2
    total: 2 rotations, 4 CNOT in all circuits
    """
    circuits = list(circuits)
    if not circuits:
        raise InputError("`circuits` must hold at least one circuit (got none)")
    numbers = None
    if shots is not None:
        values = as_real_array(shots, "shots", (len(circuits),))
        if np.any(values != np.round(values)) or np.any(values < 0):
            raise InputError(f"`shots` must be whole numbers, not negative (got {values.tolist()})")
        numbers = values.astype(np.int64)
    return CircuitCosts(
        givens=np.array([circuit.givens_count for circuit in circuits]),
        depth=np.array([circuit.depth for circuit in circuits]),
        two_qubit_gates=np.array([circuit.two_qubit_gates for circuit in circuits]),
        two_qubit_depth=np.array([circuit.two_qubit_depth for circuit in circuits]),
        shots=numbers,
        shot_seconds=None if time_model is None else np.array([time_model.shot_seconds(c.depth) for c in circuits]),
        fidelity=None if time_model is None else np.array([time_model.fidelity(c) for c in circuits]),
        total_seconds=None if time_model is None or numbers is None else time_model.seconds(circuits, numbers),
        distribution_bound=np.array([circuit.distribution_bound for circuit in circuits]),
    )


def gate_saving(fragments: Sequence[Fragment], *, tolerance: float = 0.0) -> tuple[int, int]:
    """Neighbour rotations per spin of all fragments as they are, and in the form of `fragkit.core.cheapest_form`.

    Matrix elements of at most `tolerance` count as zero in both.

    >>> gate_saving([Fragment.one_body([[0.0, 1.0], [1.0, 0.0]], [1.0, 2.0])])
    (1, 0)
    """
    before = sum(givens_count(fragment.rotation, tolerance=tolerance) for fragment in fragments)
    forms = [cheapest_form(fragment, tolerance) for fragment in fragments]
    return before, sum(givens_count(form.rotation, tolerance=tolerance) for form in forms)


def compilation_energy_bound(circuits: Sequence[RotationCircuit], fragments: Sequence[Fragment]) -> float:
    """Upper bound in hartree on the energy error from rotations that were left out.

    Each mean moves by at most the distance of the distributions times the range of the fragment's value, and the range
    is bounded by Σ |coefficient| × (largest value of the feature: 1 for n_iα n_iβ, 2 for the others).

    Raises `InputError` if there are not as many circuits as fragments.
    """
    if len(circuits) != len(fragments):
        raise InputError(
            f"`circuits` must hold one circuit for each of {len(fragments)} fragments (got {len(circuits)})"
        )
    total = 0.0
    for circuit, fragment in zip(circuits, fragments, strict=True):
        pairs = np.sum(np.abs(fragment.opposite_spin)) + np.sum(np.abs(fragment.same_spin))
        total += circuit.distribution_bound * float(pairs + 2.0 * np.sum(np.abs(fragment.linear)))
    return total
