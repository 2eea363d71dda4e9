"""Files, costs and times of circuits."""

import json
import sys
from pathlib import Path

import numpy as np
import openqasm3
import pytest
from circuit_simulation import Program, random_rotation

from fragkit import TimeModel
from fragkit.circuits import (
    circuit_costs,
    export_angles,
    parametrised_circuit,
    read_angles,
    rotation_circuits,
    write_circuits,
)
from fragkit.core import Fragment, InputError, MismatchError, MissingDependencyError

RNG_SEED = 20


def random_fragments(n, count):
    rng = np.random.default_rng(RNG_SEED)
    fragments = [Fragment.one_body(np.eye(n), rng.normal(size=n))]
    for _ in range(count - 1):
        matrix = rng.normal(size=(n, n))
        fragments.append(Fragment.plain(random_rotation(n, rng), matrix + matrix.T))
    return fragments


def test_program_is_joined_to_a_preparation_and_says_where_it_comes_from():
    fragments = random_fragments(2, 2)
    circuits = rotation_circuits(fragments, provenance={"molecule": "invented", "fragment": ["first", "second"]})
    text = circuits[1].to_openqasm3(preparation="x q[0];\nx q[2];")
    assert text.startswith('OPENQASM 3.0;\ninclude "stdgates.inc";\n')
    assert "// molecule: invented\n// fragment: second\n" in text
    program = Program(text)
    assert [name for name, _, _ in program.calls] == ["x", "x", "givens", "givens"]
    assert len(program.measured) == 4
    bare = Program(circuits[1].to_openqasm3(measure=False))
    assert (bare.bits, bare.measured) == (0, {})


def test_circuits_of_a_plan_name_the_plan_and_its_shots():
    from fragkit import Plan

    fragments = tuple(random_fragments(3, 2))
    plan = Plan(fragments, 0.0, [70, 30], [0.1, 0.2], (2, 1), "digest of integrals", 0.0, 0.0)
    text = plan.circuits(provenance={"state": "invented"})[1].to_openqasm3()
    for line in ("circuit: 1 of 0 ... 1", "shots: 30", f"plan digest: {plan.digest}", "state: invented"):
        assert f"// {line}\n" in text
    assert "// Hamiltonian digest: digest of integrals\n" in text


def test_angles_survive_the_text_to_the_last_bit():
    (circuit,) = rotation_circuits([random_rotation(6, np.random.default_rng(1))])
    written = [arguments[0] for _, arguments, _ in Program(circuit.to_openqasm3()).calls]
    assert written == [theta for _, _, theta in circuit.gates()]


@pytest.mark.parametrize("layout", ["blocked", "interleaved"])
def test_every_written_file_passes_the_reference_parser(layout, tmp_path):
    from qiskit import qasm2

    circuits = rotation_circuits(random_fragments(3, 4), layout=layout, qubit_map=[7, 6, 5, 4, 3, 2])
    paths = write_circuits(tmp_path / "new" / "folder", circuits)
    assert [path.name for path in paths] == [f"circuit_{k:03d}.qasm" for k in range(4)]
    for path in paths:
        assert openqasm3.parse(path.read_bytes().decode("ascii")).version == "3.0"
    assert openqasm3.parse(parametrised_circuit(circuits).to_openqasm3()).version == "3.0"
    with pytest.raises(InputError, match="overwrite"):
        write_circuits(tmp_path / "new" / "folder", circuits, language="openqasm2")
    for path in write_circuits(tmp_path / "new" / "folder", circuits, language="openqasm2", overwrite=True):
        assert qasm2.load(path).num_clbits == 6
    with pytest.raises(InputError, match="`language`"):
        write_circuits(tmp_path, circuits, language="qasm")
    with pytest.raises(InputError, match="`folder`"):
        write_circuits(paths[0], circuits)


@pytest.mark.parametrize("ending", ["json", "npz"])
def test_plain_data_round_trip(ending, tmp_path):
    fragments = random_fragments(3, 4)
    path = tmp_path / f"angles.{ending}"
    options = {"electrons": (2, 1), "shots": [10, 20, 30, 40], "hamiltonian_digest": "abc", "layout": "interleaved"}
    assert export_angles(path, fragments, constant=-1.25, **options) == path
    document, arrays = read_angles(path)
    assert document["schema_name"] == "fragkit_circuits"
    assert document["schema_version"] == 1
    assert document["units"] == {"energy": "hartree", "angle": "radian"}
    assert document["electrons"] == [2, 1]
    assert document["hamiltonian_digest"] == "abc"
    assert float(arrays["constant"]) == -1.25
    assert arrays["shots"].tolist() == [10, 20, 30, 40]
    circuits = rotation_circuits(fragments, layout="interleaved")
    for k, (fragment, circuit) in enumerate(zip(fragments, circuits, strict=True)):
        np.testing.assert_array_equal(arrays["rotation"][k], fragment.rotation)
        np.testing.assert_array_equal(arrays["opposite_spin"][k], fragment.opposite_spin)
        np.testing.assert_array_equal(arrays["same_spin"][k], fragment.same_spin)
        np.testing.assert_array_equal(arrays["linear"][k], fragment.linear)
        mine = arrays["gate_circuit"] == k
        pairs, angles = arrays["gate_qubits"][mine].tolist(), arrays["gate_angle"][mine].tolist()
        gates = [(*pair, angle) for pair, angle in zip(pairs, angles, strict=True)]
        assert gates == list(circuit.gates())
        assert tuple(arrays["measured_qubits"][k]) == circuit.measured_qubits
    with pytest.raises(InputError, match="overwrite"):
        export_angles(path, fragments, constant=0.0)


def test_both_forms_hold_the_same_digest(tmp_path):
    fragments = random_fragments(2, 3)
    for ending in ("json", "npz"):
        export_angles(tmp_path / f"angles.{ending}", fragments, constant=0.5)
    documents = [read_angles(tmp_path / f"angles.{ending}")[0] for ending in ("json", "npz")]
    assert documents[0] == documents[1]


def test_damaged_and_foreign_files_are_refused(tmp_path):
    path = tmp_path / "angles.json"
    export_angles(path, random_fragments(2, 2), constant=0.5)
    content = json.loads(path.read_text())

    def write(change):
        copy = json.loads(json.dumps(content))
        change(copy)
        path.write_text(json.dumps(copy))

    write(lambda c: c["arrays"]["linear"][0].__setitem__(0, 3.0))
    with pytest.raises(MismatchError, match="digest"):
        read_angles(path)
    write(lambda c: c.update(schema_version=2))
    with pytest.raises(InputError, match="schema version 1"):
        read_angles(path)
    write(lambda c: c.update(schema_name="another"))
    with pytest.raises(InputError, match="fragkit_circuits"):
        read_angles(path)
    for text in ("", "[1, 2]", '{"arrays": 3}', "PK not a zip"):
        path.write_text(text)
        with pytest.raises(InputError, match="fragkit_circuits"):
            read_angles(path)
    with pytest.raises(InputError, match="can be read"):
        read_angles(tmp_path / "nowhere.json")


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"path": "angles.txt"}, "json or .npz"),
        ({"fragments": [np.eye(2)]}, "must be a Fragment"),
        ({"constant": np.nan}, "`constant`"),
        ({"shots": [1]}, "`shots`"),
        ({"shots": [1, 0.5]}, "whole numbers"),
        ({"electrons": (3, 0)}, "`electrons`"),
        ({"layout": "zigzag"}, "`layout`"),
        ({"sector_exact": True}, "`electrons`"),
    ],
)
def test_bad_export_arguments_are_named_and_write_nothing(change, message, tmp_path):
    arguments = {"path": "angles.json", "fragments": random_fragments(2, 2), "constant": 0.0} | change
    path = tmp_path / arguments.pop("path")
    with pytest.raises(InputError, match=message):
        export_angles(path, arguments.pop("fragments"), **arguments)
    assert not list(tmp_path.iterdir())


@pytest.mark.parametrize(("module", "method"), [("cirq", "to_cirq"), ("qiskit", "to_qiskit")])
def test_missing_framework_is_named_with_its_install_command(module, method, monkeypatch):
    monkeypatch.setitem(sys.modules, module, None)
    (circuit,) = rotation_circuits([np.eye(2)])
    with pytest.raises(MissingDependencyError, match=f"pip install {module}"):
        getattr(circuit, method)()


def test_cirq_measurement_key_holds_the_new_orbitals_in_blocked_order():
    import cirq

    (circuit,) = rotation_circuits([np.eye(3)[[1, 2, 0]]], layout="interleaved")
    # alpha in orbital 0 and beta in orbital 1 of the prepared state, which are the new orbitals 1 and 2.
    prepared = cirq.Circuit(cirq.X(cirq.LineQubit(0)), cirq.X(cirq.LineQubit(3))) + circuit.to_cirq()
    bits = cirq.Simulator(seed=1).run(prepared, repetitions=3).measurements["c"]
    assert bits.tolist() == [[0, 1, 0, 0, 0, 1]] * 3
    named = [cirq.NamedQubit(str(k)) for k in range(6)]
    assert circuit.to_cirq(qubits=named).all_qubits() == frozenset(named)


def test_time_model_by_hand():
    """2 circuits of n = 3: the identity has no layer, a generic one 3 layers of rotations, 6 of CNOT, 12 CNOT."""
    circuits = rotation_circuits([np.eye(3), random_rotation(3, np.random.default_rng(0))])
    model = TimeModel(
        preparation_seconds=100e-6,
        layer_seconds=1e-6,
        readout_seconds=10e-6,
        reset_seconds=4e-6,
        switch_seconds=0.25,
        preparation_fidelity=0.9,
        two_qubit_error=0.01,
        readout_error=0.02,
    )
    assert model.shot_seconds(0) == pytest.approx(114e-6)
    assert model.shot_seconds(3) == pytest.approx(120e-6)
    assert model.seconds(circuits, [1000, 500]) == pytest.approx(0.114 + 0.060 + 0.5)
    assert model.seconds(circuits, [1000, 0]) == pytest.approx(0.114 + 0.25)
    assert model.fidelity(circuits[0]) == pytest.approx(0.9 * 0.98**6)
    assert model.fidelity(circuits[1]) == pytest.approx(0.9 * 0.99**12 * 0.98**6)

    costs = circuit_costs(circuits, shots=[1000, 500], time_model=model)
    assert costs.total_seconds == pytest.approx(0.674)
    assert costs.two_qubit_gates.tolist() == [0, 12]
    assert costs.two_qubit_depth.tolist() == [0, 6]
    table = str(costs)
    assert "fidelity" in table
    assert "0.674 s" in table
    assert "seconds" not in str(circuit_costs(circuits))


@pytest.mark.parametrize(
    ("change", "message"),
    [
        ({"layer_seconds": -1.0}, "`layer_seconds`.*not negative"),
        ({"readout_seconds": np.inf}, "`readout_seconds`.*finite"),
        ({"readout_error": 1.5}, "`readout_error`.*between 0 and 1"),
        ({"two_qubit_error": "low"}, "`two_qubit_error`"),
        ({"preparation_seconds": 0.0, "readout_seconds": 0.0}, "above zero"),
    ],
)
def test_impossible_times_and_probabilities_are_named(change, message):
    good = {"preparation_seconds": 1e-4, "layer_seconds": 1e-6, "readout_seconds": 1e-5}
    with pytest.raises(InputError, match=message):
        TimeModel(**(good | change))
    with pytest.raises(InputError, match="`shots`"):
        TimeModel(**good).seconds(rotation_circuits([np.eye(2)]), [-1])


def test_mid_size_plan_is_compiled_and_written(tmp_path):
    """60 circuits on 28 qubits; `benchmarks/circuits.py` takes the time."""
    fragments = random_fragments(14, 60)
    circuits = rotation_circuits(fragments, electrons=(5, 5))
    write_circuits(tmp_path, circuits)
    export_angles(tmp_path / "angles.json", fragments, constant=0.0, electrons=(5, 5))
    assert all(circuit.givens_count <= 2 * 14 * 13 / 2 and circuit.depth <= 14 for circuit in circuits)
    assert len(list(tmp_path.glob("*.qasm"))) == 60


def test_the_numpy_example_of_the_documentation_gives_the_estimate(tmp_path, monkeypatch, capsys):
    """The code block of docs/circuits.md is run as it stands on counts of an invented two-fragment Hamiltonian."""
    import fragkit

    page = (Path(__file__).parents[1] / "docs" / "circuits.md").read_text(encoding="utf-8")
    section = page.split("### The estimate without this package")[1]
    code = section.split("```python\n")[1].split("```")[0]

    ham = fragkit.hubbard(3, hopping=1.0, repulsion=2.0, electrons=(2, 1))
    state = fragkit.reference_state(ham, "fci")
    plan = fragkit.plan(ham, state, fragments=fragkit.fragment(ham, fragkit.LowRank()), total_shots=3000)
    counts = fragkit.simulate(plan, state, rng=5)
    tables = [counts.strings(k) for k in range(len(plan))]
    monkeypatch.chdir(tmp_path)
    (tmp_path / "counts.json").write_text(json.dumps(tables))
    export_angles(
        "circuits.json",
        plan.fragments,
        constant=plan.constant,
        electrons=plan.electrons,
        sector_exact=plan.sector_exact,
    )
    exec(code, {})
    energy, error = (float(word) for word in capsys.readouterr().out.split())
    estimate = plan.estimate(counts)
    assert energy == pytest.approx(estimate.energy, abs=1e-10)
    assert error == pytest.approx(estimate.standard_error, rel=1e-2)
