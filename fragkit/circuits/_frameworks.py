"""The circuit as objects of two circuit frameworks, imported when asked for."""

from typing import TYPE_CHECKING, Any

import numpy as np

from fragkit.circuits._circuit import RotationCircuit
from fragkit.circuits._qasm import register_size
from fragkit.core import InputError, MissingDependencyError

if TYPE_CHECKING:
    import cirq
    import qiskit


def cirq_circuit(circuit: RotationCircuit, *, qubits: Any = None, measure: bool = True) -> "cirq.Circuit":
    """A `cirq.Circuit` of `cirq.givens` gates, one moment per layer.

    Parameters
    ----------
    circuit
        The circuit.
    qubits
        (2n,) cirq qubits, one for each place on the line; `cirq.LineQubit` with the device's numbers if left out.
    measure
        Whether to end with one measurement of key "c" whose bits are the new spin-orbitals in blocked order.

    Raises
    ------
    MissingDependencyError
        If cirq is not installed (`pip install cirq-core`).
    """
    try:
        import cirq
    except ImportError as error:
        raise MissingDependencyError("to_cirq needs cirq; install it with: pip install cirq-core") from error
    line = [cirq.LineQubit(q) for q in circuit.qubits] if qubits is None else list(qubits)
    if len(line) != circuit.qubit_count or len(set(line)) != len(line):
        raise InputError(
            f"`qubits` must be {circuit.qubit_count} different qubits (got {len(set(line))} of {len(line)})"
        )
    moments = [cirq.Moment(cirq.givens(theta)(line[a], line[b]) for a, b, theta in layer) for layer in circuit.givens]
    if measure:
        moments.append(cirq.Moment(cirq.measure(*(line[place] for place in circuit.readout), key="c")))
    return cirq.Circuit(moments)


def qiskit_circuit(circuit: RotationCircuit, *, measure: bool = True) -> "qiskit.QuantumCircuit":
    """A `qiskit.QuantumCircuit` on register `q` with classical bits `c`, as in `openqasm3`.

    The rotations are `XXPlusYYGate(2θ, −π/2)`, which the transpiler knows how to write with two CNOT.

    Raises
    ------
    MissingDependencyError
        If qiskit is not installed (`pip install qiskit`).
    """
    try:
        from qiskit import ClassicalRegister, QuantumCircuit, QuantumRegister
        from qiskit.circuit.library import XXPlusYYGate
    except ImportError as error:
        raise MissingDependencyError("to_qiskit needs qiskit; install it with: pip install qiskit") from error
    registers: list[Any] = [QuantumRegister(register_size(circuit), "q")]
    if measure:
        registers.append(ClassicalRegister(circuit.qubit_count, "c"))
    result = QuantumCircuit(*registers, metadata=dict(circuit.provenance))
    for a, b, theta in circuit.gates():
        result.append(XXPlusYYGate(2.0 * theta, -np.pi / 2), [a, b])
    if measure:
        for j, q in enumerate(circuit.measured_qubits):
            result.measure(q, j)
    return result
