"""One circuit for all fragments: the gates stay, the angles are data."""

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fragkit.circuits._circuit import Layout, RotationCircuit
from fragkit.circuits._compile import LineAngles, distribution_bound, earliest_layers, line_angles, readout_order
from fragkit.circuits._qasm import program
from fragkit.core import InputError, as_count, as_electrons, frozen

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False, repr=False)
class ParametrisedCircuit:
    """One circuit whose angles are inputs, and their values for each fragment.

    A stack that compiles a circuit once and runs it with many sets of angles saves the time of switching. Made by
    `fragkit.circuits.parametrised_circuit`; bits, places and layers are as in `RotationCircuit`.

    Parameters
    ----------
    orbitals
        Number of spatial orbitals n.
    layout
        "blocked" or "interleaved".
    layers
        Layers of (a, b, k): places a and b = a + 1, and the column of `angles` that holds the angle. In the blocked
        layout both spin registers use the same angles.
    angles
        (circuits, parameters), radian; zero where a fragment does not need a gate.
    readout, qubits
        (2n,) as in `RotationCircuit`, the same for all fragments.
    distribution_bounds
        (circuits,) as in `RotationCircuit`.
    provenance
        Pairs of key and text that all circuits share.
    """

    orbitals: int
    layout: Layout
    layers: tuple[tuple[tuple[int, int, int], ...], ...]
    angles: Array
    readout: tuple[int, ...]
    qubits: tuple[int, ...]
    distribution_bounds: Array
    provenance: tuple[tuple[str, str], ...] = ()

    @property
    def names(self) -> tuple[str, ...]:
        """Names of the inputs, theta_0, theta_1, …, in the order of the columns of `angles`."""
        return tuple(f"theta_{k}" for k in range(self.angles.shape[1]))

    @property
    def depth(self) -> int:
        """Number of layers of neighbour rotations."""
        return len(self.layers)

    @property
    def givens_count(self) -> int:
        """Number of neighbour rotations, both spins together."""
        return sum(len(layer) for layer in self.layers)

    @property
    def qubit_count(self) -> int:
        """Number of qubits read, 2n."""
        return len(self.qubits)

    def bindings(self, index: int) -> dict[str, float]:
        """Value in radian of every input for one fragment."""
        if as_count(index, "index") >= len(self):
            raise InputError(f"`index` must be below {len(self)}, the number of fragments (got {index})")
        return dict(zip(self.names, self.angles[index].tolist(), strict=True))

    def to_openqasm3(self, *, preparation: str = "", measure: bool = True) -> str:
        """OpenQASM 3 text with one `input float[64]` for each angle; arguments as for `fragkit.circuits.openqasm3`."""
        names = self.names
        gates = [(self.qubits[a], self.qubits[b], names[k]) for layer in self.layers for a, b, k in layer]
        return program(
            version=3,
            orbitals=self.orbitals,
            layout=self.layout,
            notes=[f"{key}: {text}" for key, text in self.provenance]
            + [f"One circuit for {len(self)} fragments; the angles in radian are inputs."],
            gates=gates,
            inputs=names,
            qubits=self.qubits,
            measured=[self.qubits[place] for place in self.readout] if measure else None,
            preparation=preparation,
        )

    def __len__(self) -> int:
        return len(self.angles)

    def __repr__(self) -> str:
        return (
            f"ParametrisedCircuit({len(self)} fragments, {self.qubit_count} qubits, {self.layout}, "
            f"{len(self.names)} angles, {self.givens_count} rotations in {self.depth} layers)"
        )


def parametrised_circuit(circuits: Sequence[RotationCircuit], *, electrons: Any = None) -> ParametrisedCircuit:
    """Merge circuits of one layout and qubit map into one circuit with angles as inputs.

    It has a gate wherever at least one of the circuits needs one. All fragments are read in the same places: where the
    circuits end in different orders, the most frequent of them and the orders of the two layouts are tried, and the one
    with the fewest gates is taken. Bit j still reads new spin-orbital j of each fragment.

    Parameters
    ----------
    circuits
        As returned by `rotation_circuits`.
    electrons
        (alpha, beta); makes the bounds tighter.

    Raises
    ------
    InputError
        If there are none, or they differ in orbitals, layout, qubits or tolerance.

    Examples
    --------
    >>> import numpy as np
    >>> from fragkit.circuits import rotation_circuits
    >>> turns = [np.array([[np.cos(t), -np.sin(t)], [np.sin(t), np.cos(t)]]) for t in (0.1, 0.2)]
    >>> circuit = parametrised_circuit(rotation_circuits(turns))
    >>> {name: round(value, 12) for name, value in circuit.bindings(1).items()}
    {'theta_0': 0.2}
    """
    circuits = list(circuits)
    if not circuits:
        raise InputError("`circuits` must hold at least one circuit (got none)")
    first = circuits[0]
    n, layout = first.orbitals, first.layout
    for k, circuit in enumerate(circuits):
        for name in ("orbitals", "layout", "qubits", "angle_tolerance"):
            if getattr(circuit, name) != getattr(first, name):
                raise InputError(
                    f"`circuits[{k}]` must have the {name} of the first one, {getattr(first, name)} "
                    f"(got {getattr(circuit, name)}); compile them together"
                )
    pair = None if electrons is None else as_electrons(electrons, n)
    choices = [Counter(circuit.readout for circuit in circuits).most_common(1)[0][0]]
    if any(circuit.readout != choices[0] for circuit in circuits):
        in_place = readout_order(first.rotation, layout, "fixed", 0.0)
        choices += [tuple(np.argsort(in_place).tolist()), tuple(range(2 * n))]
    compiled = min(
        ([_compile(circuit, readout) for circuit in circuits] for readout in dict.fromkeys(choices)),
        key=lambda lines: int(np.count_nonzero(np.any([line.angles for line in lines], axis=0))),
    )
    angles = np.array([line.angles for line in compiled])
    used = np.any(angles != 0.0, axis=0)
    # In the blocked layout the second half of the mesh is that of beta, with the angles of alpha.
    period = len(used) // 2 if layout == "blocked" else len(used)
    column = np.cumsum(used[:period]) - 1
    # Layers are those of a circuit with every used gate present; the angle stands in for the gate's number.
    numbered = earliest_layers(compiled[0].positions, np.where(used, np.arange(1.0, len(used) + 1.0), 0.0), 2 * n)
    return ParametrisedCircuit(
        orbitals=n,
        layout=layout,
        layers=tuple(
            tuple((a, b, int(column[(int(gate) - 1) % period])) for a, b, gate in layer) for layer in numbered
        ),
        angles=frozen(np.ascontiguousarray(angles[:, :period][:, used[:period]])),
        readout=compiled[0].readout,
        qubits=first.qubits,
        distribution_bounds=frozen(
            np.array(
                [
                    min(1.0, distribution_bound(circuit.rotation, layout, line, pair))
                    for circuit, line in zip(circuits, compiled, strict=True)
                ]
            )
        ),
        provenance=tuple(note for note in first.provenance if all(note in circuit.provenance for circuit in circuits)),
    )


def _compile(circuit: RotationCircuit, readout: tuple[int, ...]) -> LineAngles:
    return line_angles(circuit.rotation, circuit.layout, np.argsort(readout), circuit.angle_tolerance)
