"""Independent checks of circuits: an OpenQASM 3 reader on the reference parser, and CI vectors as qubit states.

Nothing here uses fragkit: programs are parsed by `openqasm3`, run by qiskit or cirq, and compared with CI vectors that
are rotated by compound matrices (minors of the rotation; Cauchy-Binet).
"""

import math
from itertools import combinations
from typing import Any

import numpy as np
import openqasm3
from openqasm3 import ast


def random_rotation(n: int, rng: np.random.Generator) -> np.ndarray:
    """Random orthogonal matrix with determinant +1 or −1."""
    q, r = np.linalg.qr(rng.normal(size=(n, n)))
    return q * np.sign(np.diag(r)) * rng.choice([-1.0, 1.0])


def determinants(n: int, k: int) -> list[tuple[int, ...]]:
    return list(combinations(range(n), k))


def compound(rotation: np.ndarray, k: int) -> np.ndarray:
    """All k×k minors, rows and columns in the order of `determinants`."""
    if k == 0:
        return np.ones((1, 1))
    sets = np.array(determinants(len(rotation), k))
    return np.linalg.det(rotation[sets[:, None, :, None], sets[None, :, None, :]])


def random_vector(n: int, electrons: tuple[int, int], rng: np.random.Generator) -> np.ndarray:
    shape = [math.comb(n, k) for k in electrons]
    vector = rng.normal(size=shape)
    return vector / np.linalg.norm(vector)


def occupied_vector(vector: np.ndarray, n: int, electrons: tuple[int, int]) -> np.ndarray:
    """The same CI vector from pyscf's order of strings (by value of the bit string) to that of `determinants`."""
    order = []
    for k in electrons:
        sets = determinants(n, k)
        ranked = sorted(range(len(sets)), key=lambda i, sets=sets: sum(1 << p for p in sets[i]))
        order.append(np.argsort(ranked))
    return vector[np.ix_(order[0], order[1])]


def qubit_state(vector: np.ndarray, n: int, electrons: tuple[int, int], layout: str) -> np.ndarray:
    """State of 2n qubits, shape (2,) * 2n with axis k = qubit k, of a CI vector under Jordan-Wigner.

    A determinant is a†_α1 a†_α2 … a†_β1 a†_β2 … |0⟩ with rising orbitals; its sign in another order of modes is that
    of the permutation that sorts the modes.
    """
    state = np.zeros((2,) * (2 * n))
    for i, alpha in enumerate(determinants(n, electrons[0])):
        for j, beta in enumerate(determinants(n, electrons[1])):
            if layout == "blocked":
                modes = [*alpha, *(n + q for q in beta)]
            else:
                modes = [*(2 * p for p in alpha), *(2 * q + 1 for q in beta)]
            inversions = sum(a > b for a, b in combinations(modes, 2))
            state[tuple(int(k in modes) for k in range(2 * n))] = (-1) ** inversions * vector[i, j]
    return state


def rotated_probabilities(vector: np.ndarray, rotation: np.ndarray, n: int, electrons: tuple[int, int]) -> np.ndarray:
    """Probabilities, shape (2,) * 2n in blocked order, of the occupations of the columns of `rotation`."""
    rotated = compound(rotation, electrons[0]).T @ vector @ compound(rotation, electrons[1])
    table = np.zeros((2,) * (2 * n))
    for i, alpha in enumerate(determinants(n, electrons[0])):
        for j, beta in enumerate(determinants(n, electrons[1])):
            modes = [*alpha, *(n + q for q in beta)]
            table[tuple(int(k in modes) for k in range(2 * n))] = rotated[i, j] ** 2
    return table


def run_cirq(circuit: Any, state: np.ndarray, qubits: list[int]) -> np.ndarray:
    """Final state of a cirq circuit on line qubits, same axes as `state`; axis k is qubit `qubits[k]`."""
    import cirq

    final = circuit.final_state_vector(
        initial_state=state.ravel().astype(np.complex128),
        qubit_order=[cirq.LineQubit(q) for q in qubits],
        dtype=np.complex128,
    )
    return final.reshape(state.shape)


def run_qiskit(circuit: Any, state: np.ndarray) -> np.ndarray:
    """Final state of a qiskit circuit without measurements; axis k of `state` is qubit k."""
    from qiskit.quantum_info import Statevector

    # qiskit's index has qubit 0 as its lowest bit, so the axes are reversed on the way in and out.
    start = Statevector(state.transpose(range(state.ndim)[::-1]).ravel())
    return start.evolve(circuit).data.reshape(state.shape).transpose(range(state.ndim)[::-1])


def evaluate(expression: Any, names: dict[str, float]) -> float:
    """Value of an angle expression."""
    if isinstance(expression, ast.FloatLiteral | ast.IntegerLiteral):
        return float(expression.value)
    if isinstance(expression, ast.Identifier):
        return names[expression.name]
    if isinstance(expression, ast.UnaryExpression) and expression.op.name == "-":
        return -evaluate(expression.expression, names)
    raise ValueError(f"expression {expression} is not expected in these programs")


class Program:
    """An OpenQASM 3 program: gate calls with numbers, register sizes, and which qubit each bit reads."""

    def __init__(self, text: str, inputs: dict[str, float] | None = None) -> None:
        text.encode("ascii")
        self.definitions: dict[str, Any] = {}
        self.calls: list[tuple[str, list[float], list[int]]] = []
        self.measured: dict[int, int] = {}
        self.inputs: list[str] = []
        self.qubits = self.bits = 0
        names = dict(inputs or {})
        for statement in openqasm3.parse(text).statements:
            if isinstance(statement, ast.Include):
                assert statement.filename == "stdgates.inc"
            elif isinstance(statement, ast.IODeclaration):
                self.inputs.append(statement.identifier.name)
            elif isinstance(statement, ast.QuantumGateDefinition):
                self.definitions[statement.name.name] = statement
            elif isinstance(statement, ast.QubitDeclaration):
                self.qubits = statement.size.value
            elif isinstance(statement, ast.ClassicalDeclaration):
                self.bits = statement.type.size.value
            elif isinstance(statement, ast.QuantumGate):
                arguments = [evaluate(a, names) for a in statement.arguments]
                places = [q.indices[0][0].value for q in statement.qubits]
                self.calls.append((statement.name.name, arguments, places))
            elif isinstance(statement, ast.QuantumMeasurementStatement):
                bit = statement.target.indices[0][0].value
                self.measured[bit] = statement.measure.qubit.indices[0][0].value
            else:
                raise ValueError(f"statement {statement} is not expected in these programs")

    def to_qiskit(self) -> Any:
        """A qiskit circuit of standard gates only, defined gates expanded as the program defines them."""
        from qiskit import QuantumCircuit

        circuit = QuantumCircuit(self.qubits)

        def apply(name: str, arguments: list[float], places: list[int]) -> None:
            if name not in self.definitions:
                getattr(circuit, name)(*arguments, *places)
                return
            gate = self.definitions[name]
            values = dict(zip((a.name for a in gate.arguments), arguments, strict=True))
            wires = dict(zip((q.name for q in gate.qubits), places, strict=True))
            for inner in gate.body:
                inner_arguments = [evaluate(a, values) for a in inner.arguments]
                apply(inner.name.name, inner_arguments, [wires[q.name] for q in inner.qubits])

        for name, arguments, places in self.calls:
            apply(name, arguments, places)
        return circuit

    def one_particle_matrix(self) -> np.ndarray:
        """Product of the neighbour rotations of the program on single-particle states, in the order of time."""
        product = np.eye(self.qubits)
        for name, (theta,), (a, b) in self.calls:
            assert name == "givens"
            factor = np.eye(self.qubits)
            factor[np.ix_([a, b], [a, b])] = [[np.cos(theta), -np.sin(theta)], [np.sin(theta), np.cos(theta)]]
            product = product @ factor
        return product
