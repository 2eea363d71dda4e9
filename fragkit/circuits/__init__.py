"""Circuits: rotations of orbitals as gates on a line of qubits, their export, and what they cost."""

from fragkit.circuits._circuit import RotationCircuit as RotationCircuit
from fragkit.circuits._frameworks import cirq_circuit as cirq_circuit
from fragkit.circuits._frameworks import qiskit_circuit as qiskit_circuit
from fragkit.circuits._qasm import openqasm2 as openqasm2
from fragkit.circuits._qasm import openqasm3 as openqasm3
from fragkit.circuits._rotation_circuits import rotation_circuits as rotation_circuits
