"""Counts in: orders of bits and spins, packed data, results of other frameworks, merging and files."""

import dataclasses
import json
import time

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from plans import full_ci_state, low_rank_plan

from fragkit.core import Fragment, InputError, MismatchError, evaluate_features
from fragkit.estimate import Counts, estimate, simulate
from fragkit.planning import Plan


def small_plan(orbitals: int = 2, circuits: int = 2, scale: float = 1.0) -> Plan:
    fragments = tuple(
        Fragment.one_body(np.eye(orbitals), scale * np.arange(1.0, orbitals + 1) * (m + 1)) for m in range(circuits)
    )
    return Plan(fragments, 0.0, [10] * circuits, [1.0] * circuits, (1, 1), "made up", 0.0, 0.0)


def random_bits(plan: Plan, shots: int = 50) -> dict[int, np.ndarray]:
    rng = np.random.default_rng(5)
    return {m: rng.integers(0, 2, (shots, 2 * plan.orbitals), dtype=np.uint8) for m in range(len(plan))}


def same(one: Counts, other: Counts) -> bool:
    return all(one.strings(m) == other.strings(m) for m in range(len(one)))


def test_qubit_zero_is_the_left_or_the_right_character() -> None:
    """Alpha in orbital 0 and beta in orbital 1 is qubits 0 and 3 of 4 in blocked order, 0 and 3 of (0a 0b 1a 1b)."""
    plan = small_plan(3)
    cases = [
        ("first-qubit-left", "blocked", "100010"),
        ("first-qubit-right", "blocked", "010001"),
        ("first-qubit-left", "interleaved", "100100"),
        ("first-qubit-right", "interleaved", "001001"),
    ]
    for bit_order, spin_order, text in cases:
        counts = Counts.from_strings(plan, {0: {text: 3}}, bit_order=bit_order, spin_order=spin_order)
        assert counts.strings(0) == {"100010": 3}, (bit_order, spin_order)


@given(st.lists(st.tuples(st.integers(0, 15), st.integers(0, 9)), min_size=1, max_size=20))
def test_all_importers_agree(draws: list[tuple[int, int]]) -> None:
    plan = small_plan()
    table: dict[str, int] = {}
    for value, number in draws:
        table[f"{value:04b}"] = table.get(f"{value:04b}", 0) + number
    rows = np.array([[int(c) for c in key] for key, number in table.items() for _ in range(number)], dtype=np.uint8)
    rows = rows.reshape(-1, 4)
    orders = {"bit_order": "first-qubit-left", "spin_order": "interleaved"}
    strings = Counts.from_strings(plan, {1: table}, **orders)
    arrays = Counts.from_arrays(plan, {1: rows}, **orders)
    packed = Counts.from_packed(plan, {1: np.packbits(rows, axis=1)}, **orders)
    little = Counts.from_packed(plan, {1: np.packbits(rows, axis=1, bitorder="little")}, byte_order="little", **orders)
    backwards = Counts.from_arrays(plan, {"1": rows[:, ::-1]}, bit_order="first-qubit-right", spin_order="interleaved")
    assert strings.total_shots == sum(table.values())
    for other in (arrays, packed, little, backwards):
        assert same(strings, other)


def test_reordering_accumulates_instead_of_overwriting() -> None:
    """With unused bits dropped, different strings become the same shot; their counts add up."""
    plan = small_plan()
    counts = Counts.from_strings(
        plan,
        {0: {"10100": 3, "10101": 4}},
        bit_order="first-qubit-left",
        spin_order="blocked",
        qubits=[0, 1, 2, 3],
    )
    assert counts.strings(0) == {"1010": 7}


def test_qubit_map_picks_device_bits() -> None:
    plan = small_plan()
    counts = Counts.from_strings(
        plan, {0: {"00101": 2}}, bit_order="first-qubit-left", spin_order="blocked", qubits=[4, 1, 2, 0]
    )
    assert counts.strings(0) == {"1010": 2}


def test_more_than_64_qubits_are_counted_like_fewer() -> None:
    plan = small_plan(40, 1)
    rows = np.random.default_rng(1).integers(0, 2, (30, 80), dtype=np.uint8)[np.arange(100) % 7]
    counts = Counts.from_arrays(plan, {0: rows}, spin_order="blocked")
    assert counts.total_shots == 100
    assert len(counts.bits[0]) == 7
    assert sorted(counts.numbers[0].tolist()) == [14] * 5 + [15] * 2


def test_cirq_results_are_read() -> None:
    """cirq.Result from cirq's own simulator; measured in qubit order, so the first qubit is on the left."""
    import cirq

    plan = small_plan()
    qubits = cirq.LineQubit.range(4)
    circuit = cirq.Circuit(cirq.X(qubits[0]), cirq.X(qubits[3]), cirq.measure(*qubits, key="m"))
    result = cirq.Simulator().run(circuit, repetitions=5)
    counts = Counts.from_results(plan, {0: result}, bit_order="first-qubit-left", spin_order="blocked")
    assert counts.strings(0) == {"1001": 5}
    with pytest.raises(InputError, match="must be a measurement key"):
        Counts.from_results(plan, {0: result}, bit_order="first-qubit-left", spin_order="blocked", register="other")


def test_qiskit_results_are_read() -> None:
    """The statevector sampler that comes with qiskit; its strings have qubit 0 on the right."""
    from qiskit import QuantumCircuit
    from qiskit.primitives import StatevectorSampler

    plan = small_plan()
    circuits = []
    for flipped in ((0, 3), (1, 2)):
        circuit = QuantumCircuit(4)
        for qubit in flipped:
            circuit.x(qubit)
        circuit.measure_all()
        circuits.append(circuit)
    results = StatevectorSampler(seed=1).run(circuits, shots=6).result()
    counts = Counts.from_results(plan, results, bit_order="first-qubit-right", spin_order="blocked")
    assert counts.strings(0) == {"1001": 6}
    assert counts.strings(1) == {"0110": 6}


class OldResult:
    """A result in the older style, with one dictionary per experiment."""

    def get_counts(self) -> dict[str, int]:
        return {"0101": 4}


def test_objects_with_get_counts_are_read_and_others_refused() -> None:
    plan = small_plan()
    counts = Counts.from_results(plan, {1: OldResult()}, bit_order="first-qubit-right", spin_order="blocked")
    assert counts.strings(1) == {"1010": 4}
    with pytest.raises(InputError, match="get_counts"):
        Counts.from_results(plan, {1: object()}, bit_order="first-qubit-right", spin_order="blocked")
    with pytest.raises(InputError, match="one result for each of the 2 circuits"):
        Counts.from_results(plan, [OldResult()], bit_order="first-qubit-right", spin_order="blocked")


@pytest.mark.parametrize(
    ("tables", "message"),
    [
        ({0: {"1010": -1}}, "at least 0"),
        ({0: {"1010": 1.5}}, "whole number"),
        ({0: {"1010": 3.0}}, "whole number"),
        ({0: {"1010": True}}, "whole number"),
        ({0: {"101": 1}}, "4 bits"),
        ({0: {"10 10": 1}}, "strings of 0 and 1"),
        ({0: {"1010": 1, "101": 1}}, "strings of 0 and 1"),
        ({0: {"0x5": 1}}, "strings of 0 and 1"),
        ({0: {5: 1}}, "strings of 0 and 1"),
        ({2: {"1010": 1}}, "numbered 0 … 1"),
        ({"water": {"1010": 1}}, "numbered 0 … 1"),
        ({0: {"1010": 1}, "circuit_0": {"1010": 1}}, "given once"),
        ({0: [("1010", 1)]}, "dictionary"),
        ([{"1010": 1}], "circuit: data"),
    ],
)
def test_wrong_dictionaries_are_refused(tables: object, message: str) -> None:
    with pytest.raises(InputError, match=message):
        Counts.from_strings(small_plan(), tables, bit_order="first-qubit-left", spin_order="blocked")  # type: ignore[arg-type]


@pytest.mark.parametrize(
    ("array", "message"),
    [
        (np.array([[0, 1, 2, 0]]), "only 0 and 1"),
        (np.array([[0, 1, -1, 0]]), "only 0 and 1"),
        (np.array([[0.0, 1.0, 1.0, 0.0]]), "whole numbers"),
        (np.array([0, 1, 1, 0]), "shape"),
        (np.array([[0, 1, 1]]), "4 bits"),
    ],
)
def test_wrong_arrays_are_refused(array: np.ndarray, message: str) -> None:
    with pytest.raises(InputError, match=message):
        Counts.from_arrays(small_plan(), {0: array}, spin_order="blocked")


def test_orders_must_be_named() -> None:
    with pytest.raises(InputError, match="bit_order"):
        Counts.from_strings(small_plan(), {}, bit_order="little", spin_order="blocked")  # type: ignore[arg-type]
    with pytest.raises(InputError, match="spin_order"):
        Counts.from_strings(small_plan(), {}, bit_order="first-qubit-left", spin_order="up-down")  # type: ignore[arg-type]
    with pytest.raises(InputError, match="byte_order"):
        Counts.from_packed(
            small_plan(),
            {0: np.zeros((1, 1), np.uint8)},
            bit_order="first-qubit-left",
            spin_order="blocked",
            byte_order="middle",  # type: ignore[arg-type]
        )
    with pytest.raises(InputError, match="zero padding"):
        Counts.from_packed(
            small_plan(), {0: np.full((1, 1), 15, np.uint8)}, bit_order="first-qubit-left", spin_order="blocked"
        )


def test_batches_merge_once() -> None:
    plan = small_plan()
    rows = random_bits(plan)
    half = {m: bits[:20] for m, bits in rows.items()}
    rest = {m: bits[20:] for m, bits in rows.items()}
    first, second = (Counts.from_arrays(plan, part, spin_order="blocked") for part in (half, rest))
    whole = first.merged(second)
    assert same(whole, Counts.from_arrays(plan, rows, spin_order="blocked"))
    assert whole.shots.tolist() == [50, 50]
    with pytest.raises(InputError, match="merged once"):
        whole.merged(second)
    with pytest.raises(InputError, match="merged once"):
        first.merged(Counts.from_arrays(plan, half, spin_order="blocked"))
    named = [Counts.from_arrays(plan, half, spin_order="blocked", batch=name) for name in ("monday", "tuesday")]
    assert named[0].merged(named[1]).total_shots == 2 * first.total_shots
    with pytest.raises(InputError, match="monday"):
        named[0].merged(named[0])


def test_counts_of_another_plan_are_refused() -> None:
    plan, other = small_plan(), small_plan(scale=2.0)
    counts = Counts.from_arrays(plan, random_bits(plan), spin_order="blocked")
    with pytest.raises(MismatchError, match="must come from this plan"):
        estimate(other, counts)
    with pytest.raises(MismatchError, match="same plan"):
        counts.merged(Counts.from_arrays(other, random_bits(other), spin_order="blocked"))


def test_file_round_trip(tmp_path) -> None:
    plan = low_rank_plan("H2")
    counts = simulate(plan, full_ci_state("H2"), shots=100, rng=1, batch="simulated")
    path = tmp_path / "run.counts.json"
    counts.save(path)
    loaded = Counts.load(path, plan=plan)
    assert same(counts, loaded)
    assert loaded.batches == ("simulated",)
    assert loaded.plan_digest == plan.digest
    with pytest.raises(InputError, match="exists"):
        counts.save(path)
    with pytest.raises(MismatchError, match="must come from this plan"):
        Counts.load(path, plan=small_plan())


def test_damaged_files_are_refused(tmp_path) -> None:
    plan = small_plan()
    counts = Counts.from_arrays(plan, random_bits(plan), spin_order="blocked")
    path = tmp_path / "run.counts.json"
    counts.save(path)
    text = path.read_text()
    document = json.loads(text)
    key = next(iter(document["circuits"][0]))
    document["circuits"][0][key] += 1
    damaged = {"cut.json": text[: len(text) // 2], "edited.json": json.dumps(document), "empty.json": ""}
    for name, content in damaged.items():
        (tmp_path / name).write_text(content)
        with pytest.raises(InputError):
            Counts.load(tmp_path / name)


def test_a_million_shots_are_estimated_faster_than_their_features_are_listed() -> None:
    """20 circuits, 20 qubits, nearly every row different; `benchmarks/estimate.py` takes the time in seconds."""
    rng = np.random.default_rng(2)
    n, circuits = 10, 20
    fragments = []
    for _ in range(circuits):
        rotation = np.linalg.qr(rng.normal(size=(n, n)))[0]
        matrix = rng.normal(size=(n, n))
        fragments.append(Fragment.plain(rotation, matrix + matrix.T))
    plan = Plan(tuple(fragments), 0.0, [50_000] * circuits, [1.0] * circuits, (5, 5), "made up", 0.0, 0.0)
    orders = np.argsort(rng.random((circuits, 50_000, 2, n)), axis=-1)
    arrays = {m: (orders[m] < 5).reshape(50_000, 2 * n).astype(np.uint8) for m in range(circuits)}
    counts = Counts.from_arrays(plan, arrays, spin_order="blocked")
    ratios = []
    for _ in range(2):
        start = time.process_time()
        result = estimate(plan, counts)
        made = time.process_time()
        listed = sum(
            float(np.mean(evaluate_features(arrays[m]) @ fragment.coefficients)) for m, fragment in enumerate(fragments)
        )
        ratios.append((made - start) / (time.process_time() - made))
    assert result.total_shots == 1_000_000
    assert result.energy == pytest.approx(listed, abs=1e-9)
    assert min(ratios) < 1.0


def test_counts_cannot_be_changed() -> None:
    counts = Counts.from_arrays(small_plan(), random_bits(small_plan()), spin_order="blocked")
    with pytest.raises(ValueError, match="read-only"):
        counts.numbers[0][0] = 5
    with pytest.raises(dataclasses.FrozenInstanceError):
        counts.plan_digest = ""  # type: ignore[misc]
