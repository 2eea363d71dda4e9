"""One measurement circuit: neighbour rotations on a line of qubits, then a readout of all of them."""

from collections.abc import Iterator
from dataclasses import dataclass
from typing import TYPE_CHECKING, Any, Literal

import numpy as np
from numpy.typing import NDArray

from fragkit.core import TWO_QUBIT_GATES_PER_GIVENS, mesh_matrix

if TYPE_CHECKING:
    import cirq
    import qiskit

Layout = Literal["blocked", "interleaved"]
Givens = tuple[int, int, float]
Layers = tuple[tuple[Givens, ...], ...]


@dataclass(frozen=True, eq=False, repr=False)
class RotationCircuit:
    """The gates that turn a z readout of the qubits into one of the occupations of new orbitals.

    The circuit follows the state preparation. Made by `fragkit.circuits.rotation_circuits`.

    With spin-orbitals counted in blocked order (alpha 0 … n−1, then beta), classical bit j is the occupation of new
    spin-orbital j, the column j (or j − n) of `rotation`, in every layout. Under Jordan-Wigner the line has one
    qubit per spin-orbital of the *prepared* state: place p is alpha p and place n + p beta p in the blocked layout,
    places 2p and 2p + 1 are alpha p and beta p in the interleaved one.

    Parameters
    ----------
    rotation
        (n, n); column i is new orbital i in the orbitals in which the state was prepared.
    layout
        "blocked" or "interleaved".
    givens
        Layers in the order of time, each a tuple of (a, b, theta) with places a and b = a + 1 on the line. Each acts as
        [[cos θ, −sin θ], [sin θ, cos θ]] on |01⟩, |10⟩ of (a, b), that is exp(θ(a†_a a_b − a†_b a_a)). Gates of one
        layer share no qubit, and no gate could be in an earlier layer.
    readout
        (2n,) place on the line where the new spin-orbital j is read.
    qubits
        (2n,) device qubit of each place on the line.
    signs
        (2n,) of ±1: what the gates leave on the new spin-orbitals; a readout does not see it.
    dropped
        Number of matrix elements above rounding that were not cleared because of `angle_tolerance`.
    angle_tolerance
        Radian.
    distribution_bound
        Upper bound on the total variation distance between the probabilities of this circuit and those of the exact
        rotation, for every state with the electron numbers given (for every state at all if none were given).
    provenance
        Pairs of key and text that are written into the exported files.
    """

    rotation: NDArray[np.float64]
    layout: Layout
    givens: Layers
    readout: tuple[int, ...]
    qubits: tuple[int, ...]
    signs: NDArray[np.float64]
    dropped: int = 0
    angle_tolerance: float = 0.0
    distribution_bound: float = 0.0
    provenance: tuple[tuple[str, str], ...] = ()

    @property
    def orbitals(self) -> int:
        """Number of spatial orbitals n."""
        return len(self.rotation)

    @property
    def qubit_count(self) -> int:
        """Number of qubits read, 2n."""
        return len(self.qubits)

    @property
    def givens_count(self) -> int:
        """Number of neighbour rotations, both spins together."""
        return sum(len(layer) for layer in self.givens)

    @property
    def depth(self) -> int:
        """Number of layers of neighbour rotations."""
        return len(self.givens)

    @property
    def two_qubit_gates(self) -> int:
        """Number of CNOT gates: two for each neighbour rotation."""
        return TWO_QUBIT_GATES_PER_GIVENS * self.givens_count

    @property
    def two_qubit_depth(self) -> int:
        """Number of layers of CNOT gates."""
        return TWO_QUBIT_GATES_PER_GIVENS * self.depth

    def gates(self) -> Iterator[Givens]:
        """Every neighbour rotation in the order of time, with device qubits instead of places on the line."""
        for layer in self.givens:
            for a, b, theta in layer:
                yield self.qubits[a], self.qubits[b], theta

    @property
    def measured_qubits(self) -> tuple[int, ...]:
        """(2n,) device qubit that holds new spin-orbital j (blocked order) at the end."""
        return tuple(self.qubits[place] for place in self.readout)

    def matrix(self) -> NDArray[np.float64]:
        """The rotation of the spin-orbitals (2n, 2n) rebuilt from the gates, blocked order, signs included.

        Rows are the spin-orbitals of the prepared state, columns the new ones as the bits read them. It equals the
        block-diagonal matrix of `rotation` twice, to rounding if `dropped` is zero.
        """
        places = [a for layer in self.givens for a, _, _ in layer]
        angles = [theta for layer in self.givens for _, _, theta in layer]
        product = mesh_matrix(places, angles, self.qubit_count)
        return product[np.ix_(line_places(self.orbitals, self.layout), self.readout)] * self.signs

    def to_openqasm3(self, *, preparation: str = "", measure: bool = True) -> str:
        """The circuit as OpenQASM 3 text; see `fragkit.circuits.openqasm3`."""
        from fragkit.circuits._qasm import openqasm3

        return openqasm3(self, preparation=preparation, measure=measure)

    def to_openqasm2(self, *, preparation: str = "", measure: bool = True) -> str:
        """The circuit as OpenQASM 2 text; see `fragkit.circuits.openqasm2`."""
        from fragkit.circuits._qasm import openqasm2

        return openqasm2(self, preparation=preparation, measure=measure)

    def to_cirq(self, *, qubits: Any = None, measure: bool = True) -> "cirq.Circuit":
        """The circuit as a cirq object; see `fragkit.circuits.cirq_circuit`."""
        from fragkit.circuits._frameworks import cirq_circuit

        return cirq_circuit(self, qubits=qubits, measure=measure)

    def to_qiskit(self, *, measure: bool = True) -> "qiskit.QuantumCircuit":
        """The circuit as a qiskit object; see `fragkit.circuits.qiskit_circuit`."""
        from fragkit.circuits._frameworks import qiskit_circuit

        return qiskit_circuit(self, measure=measure)

    def __repr__(self) -> str:
        approximate = f", distribution_bound={self.distribution_bound:.2g}" if self.dropped else ""
        return (
            f"RotationCircuit({self.qubit_count} qubits, {self.layout}, {self.givens_count} rotations in "
            f"{self.depth} layers, {self.two_qubit_gates} CNOT{approximate})"
        )


def line_places(orbitals: int, layout: Layout) -> list[int]:
    """Place on the line of each spin-orbital of the prepared state in blocked order.

    >>> line_places(2, "blocked"), line_places(2, "interleaved")
    ([0, 1, 2, 3], [0, 2, 1, 3])
    """
    if layout == "blocked":
        return list(range(2 * orbitals))
    return [2 * p + spin for spin in (0, 1) for p in range(orbitals)]
