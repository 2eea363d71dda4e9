"""Circuits run by other people's simulators give the occupations of the rotated orbitals."""

import json

import numpy as np
import pytest
from circuit_simulation import (
    Program,
    compound,
    occupied_vector,
    qubit_state,
    random_rotation,
    random_vector,
    rotated_probabilities,
    run_cirq,
    run_qiskit,
)
from molecules import full_ci, molecule_hamiltonian

from fragkit.circuits import export_angles, parametrised_circuit, rotation_circuits


def in_bit_order(state, measured):
    return np.abs(np.transpose(state, measured)) ** 2


@pytest.mark.parametrize("layout", ["blocked", "interleaved"])
@pytest.mark.parametrize(
    ("n", "electrons"), [(2, (1, 1)), (3, (2, 1)), (4, (2, 3)), (5, (3, 2)), (6, (3, 3)), (7, (4, 3)), (8, (4, 4))]
)
def test_every_export_reproduces_the_rotated_ci_vector(n, electrons, layout):
    rng = np.random.default_rng(n)
    rotation = random_rotation(n, rng)
    vector = random_vector(n, electrons, rng)
    (circuit,) = rotation_circuits([rotation], layout=layout)
    expected = rotated_probabilities(vector, rotation, n, electrons)
    state = qubit_state(vector, n, electrons, layout)
    qubits = list(range(2 * n))

    program = Program(circuit.to_openqasm3())
    assert program.qubits == program.bits == 2 * n
    measured = [program.measured[j] for j in range(2 * n)]
    assert measured == list(circuit.measured_qubits)
    results = {
        "OpenQASM 3, reference parser, qiskit's simulator": run_qiskit(program.to_qiskit(), state),
        "qiskit object": run_qiskit(circuit.to_qiskit(measure=False), state),
        "cirq object": run_cirq(circuit.to_cirq(measure=False), state, qubits),
        "OpenQASM 2, qiskit": run_qiskit(from_openqasm2(circuit.to_openqasm2(measure=False)), state),
    }
    for name, result in results.items():
        np.testing.assert_allclose(in_bit_order(result, measured), expected, atol=1e-10, err_msg=name)


def from_openqasm2(text):
    from qiskit import qasm2

    return qasm2.loads(text)


@pytest.mark.parametrize("layout", ["blocked", "interleaved"])
@pytest.mark.parametrize("name", ["LiH", "H2O"])
def test_rotations_of_molecules_with_the_full_ci_state(name, layout):
    """Fragments with symmetry zeros and degeneracies, in the form that plans use: OpenQASM 3, reference parser."""
    from fragkit import LowRank, fragment
    from fragkit.core import cheapest_form

    hamiltonian = molecule_hamiltonian(name)
    n, electrons = hamiltonian.orbitals, hamiltonian.electrons
    vector = occupied_vector(full_ci(name)[1], n, electrons)
    state = qubit_state(vector, n, electrons, layout)
    fragments = [cheapest_form(f) for f in fragment(hamiltonian, LowRank(tol=1e-8))][::4]
    for form, circuit in zip(fragments, rotation_circuits(fragments, layout=layout), strict=True):
        program = Program(circuit.to_openqasm3())
        final = run_qiskit(program.to_qiskit(), state)
        measured = [program.measured[j] for j in range(2 * n)]
        expected = rotated_probabilities(vector, form.rotation, n, electrons)
        np.testing.assert_allclose(in_bit_order(final, measured), expected, atol=1e-9)


@pytest.mark.parametrize("layout", ["blocked", "interleaved"])
@pytest.mark.parametrize("readout", ["fixed", "free"])
def test_heisenberg_picture_agrees_with_openfermion(layout, readout):
    """W† n_j W is the occupation operator of new orbital j, as OpenFermion's Jordan-Wigner matrices say."""
    from cirq import LineQubit
    from openfermion import FermionOperator, get_sparse_operator

    n = 3
    rotation = random_rotation(n, np.random.default_rng(5))
    (circuit,) = rotation_circuits([rotation], layout=layout, readout=readout)
    unitary = circuit.to_cirq(measure=False).unitary(qubit_order=LineQubit.range(2 * n))
    mode = (lambda p, s: s * n + p) if layout == "blocked" else (lambda p, s: 2 * p + s)
    for j, qubit in enumerate(circuit.measured_qubits):
        spin, column = divmod(j, n)
        operator = FermionOperator()
        for p in range(n):
            for q in range(n):
                weight = rotation[p, column] * rotation[q, column]
                operator += FermionOperator(((mode(p, spin), 1), (mode(q, spin), 0)), weight)
        expected = get_sparse_operator(operator, n_qubits=2 * n).toarray()
        number = get_sparse_operator(FermionOperator(((qubit, 1), (qubit, 0))), n_qubits=2 * n).toarray()
        np.testing.assert_allclose(unitary.conj().T @ number @ unitary, expected, atol=1e-12)


@pytest.mark.parametrize("layout", ["blocked", "interleaved"])
def test_state_prepared_in_other_orbitals(layout):
    """A frame is merged: the same physical state, written in the user's orbitals, gives the same readout."""
    n, electrons = 4, (2, 1)
    rng = np.random.default_rng(8)
    rotation, frame = random_rotation(n, rng), random_rotation(n, rng)
    vector = random_vector(n, electrons, rng)
    in_frame = compound(frame, electrons[0]).T @ vector @ compound(frame, electrons[1])
    (circuit,) = rotation_circuits([rotation], layout=layout, frame=frame)
    final = run_cirq(circuit.to_cirq(measure=False), qubit_state(in_frame, n, electrons, layout), list(range(2 * n)))
    expected = rotated_probabilities(vector, rotation, n, electrons)
    np.testing.assert_allclose(in_bit_order(final, circuit.measured_qubits), expected, atol=1e-10)


def test_qubit_map_moves_gates_and_measurements():
    n, electrons = 3, (1, 2)
    rng = np.random.default_rng(9)
    rotation, vector = random_rotation(n, rng), random_vector(n, electrons, rng)
    # A 2 × 4 grid of qubits numbered row by row: each spin register is a path of its own.
    qubit_map = [0, 1, 2, 7, 6, 5]
    couplings = [(0, 1), (1, 2), (2, 3), (4, 5), (5, 6), (6, 7), (0, 4), (1, 5), (2, 6), (3, 7)]
    (circuit,) = rotation_circuits([rotation], qubit_map=qubit_map, couplings=couplings)
    program = Program(circuit.to_openqasm3())
    assert program.qubits == 8
    state = np.zeros((2,) * 8)
    state[:, :, :, 0, 0] = qubit_state(vector, n, electrons, "blocked").transpose(0, 1, 2, 5, 4, 3)
    expected = rotated_probabilities(vector, rotation, n, electrons)
    for final in (run_qiskit(program.to_qiskit(), state), run_qiskit(circuit.to_qiskit(measure=False), state)):
        kept = final[:, :, :, 0, 0]
        axes = [{0: 0, 1: 1, 2: 2, 5: 3, 6: 4, 7: 5}[program.measured[j]] for j in range(2 * n)]
        np.testing.assert_allclose(in_bit_order(kept, axes), expected, atol=1e-10)


@pytest.mark.parametrize("layout", ["blocked", "interleaved"])
def test_one_circuit_with_angles_as_inputs(layout):
    n, electrons = 4, (2, 2)
    rng = np.random.default_rng(10)
    blocks = np.eye(n)
    blocks[:2, :2] = random_rotation(2, rng)
    rotations = [random_rotation(n, rng), np.eye(n)[[2, 0, 3, 1]], blocks]
    vector = random_vector(n, electrons, rng)
    family = parametrised_circuit(rotation_circuits(rotations, layout=layout))
    text = family.to_openqasm3()
    assert Program(text, dict.fromkeys(family.names, 0.0)).inputs == list(family.names)
    for k, rotation in enumerate(rotations):
        program = Program(text, family.bindings(k))
        final = run_qiskit(program.to_qiskit(), qubit_state(vector, n, electrons, layout))
        measured = [program.measured[j] for j in range(2 * n)]
        expected = rotated_probabilities(vector, rotation, n, electrons)
        np.testing.assert_allclose(in_bit_order(final, measured), expected, atol=1e-10)


@pytest.mark.parametrize("name", ["H2", "LiH", "H2O"])
@pytest.mark.parametrize("ending", ["json", "npz"])
def test_energy_from_the_exported_data_alone(name, ending, tmp_path):
    """Gates, angles, measured qubits and coefficients of the file give the full CI energy, with numpy and cirq only."""
    import cirq

    from fragkit import LowRank, fragment

    hamiltonian = molecule_hamiltonian(name)
    n, electrons = hamiltonian.orbitals, hamiltonian.electrons
    energy, vector = full_ci(name)
    vector = occupied_vector(vector, n, electrons)
    # The device holds the state in other orbitals than the Hamiltonian's, with alpha and beta in turn for npz.
    frame = random_rotation(n, np.random.default_rng(3))
    layout = "interleaved" if ending == "npz" else "blocked"
    fragments = fragment(hamiltonian, LowRank(tol=1e-10))
    path = tmp_path / f"circuits.{ending}"
    export_angles(
        path, fragments.fragments, constant=fragments.constant, electrons=electrons, layout=layout, frame=frame
    )
    if ending == "json":
        data = {key: np.array(value) for key, value in json.loads(path.read_text())["arrays"].items()}
    else:
        with np.load(path, allow_pickle=False) as archive:
            data = {key: archive[key] for key in archive.files if key != "document"}

    in_frame = compound(frame, electrons[0]).T @ vector @ compound(frame, electrons[1])
    state = qubit_state(in_frame, n, electrons, layout)
    bits = np.array(list(np.ndindex(*state.shape)))
    alpha, beta = bits[:, :n].astype(float), bits[:, n:].astype(float)
    total = float(data["constant"])
    for k in range(len(data["linear"])):
        mine = data["gate_circuit"] == k
        gates = zip(data["gate_qubits"][mine], data["gate_angle"][mine], strict=True)
        circuit = cirq.Circuit(
            cirq.givens(theta)(cirq.LineQubit(int(a)), cirq.LineQubit(int(b))) for (a, b), theta in gates
        )
        final = run_cirq(circuit, state, list(range(2 * n)))
        probabilities = in_bit_order(final, data["measured_qubits"][k]).ravel()
        y, z, linear = data["opposite_spin"][k], data["same_spin"][k], data["linear"][k]
        values = np.einsum("si,ij,sj->s", alpha, y, beta, optimize=True) + (alpha + beta) @ linear
        for spin in (alpha, beta):
            values += 0.5 * np.einsum("si,ij,sj->s", spin, z, spin, optimize=True)
        total += float(probabilities @ values)
    assert total == pytest.approx(energy, abs=1e-8)
