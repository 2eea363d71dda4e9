"""Circuits: rotations of orbitals as gates on a line of qubits, their export, and what they cost."""

from fragkit.circuits._circuit import RotationCircuit as RotationCircuit
from fragkit.circuits._cost import CircuitCosts as CircuitCosts
from fragkit.circuits._cost import circuit_costs as circuit_costs
from fragkit.circuits._cost import compilation_energy_bound as compilation_energy_bound
from fragkit.circuits._cost import gate_saving as gate_saving
from fragkit.circuits._export import export_angles as export_angles
from fragkit.circuits._export import read_angles as read_angles
from fragkit.circuits._frameworks import cirq_circuit as cirq_circuit
from fragkit.circuits._frameworks import qiskit_circuit as qiskit_circuit
from fragkit.circuits._parametrised import ParametrisedCircuit as ParametrisedCircuit
from fragkit.circuits._parametrised import parametrised_circuit as parametrised_circuit
from fragkit.circuits._qasm import openqasm2 as openqasm2
from fragkit.circuits._qasm import openqasm3 as openqasm3
from fragkit.circuits._rotation_circuits import rotation_circuits as rotation_circuits
from fragkit.circuits._write import write_circuits as write_circuits
