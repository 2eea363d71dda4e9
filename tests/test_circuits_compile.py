"""Compilation: reconstruction, counts and depth, orders, left-out angles, and what bad input says."""

from itertools import permutations

import numpy as np
import pytest
import scipy.linalg
from circuit_simulation import (
    Program,
    qubit_state,
    random_rotation,
    random_vector,
    rotated_probabilities,
    run_cirq,
)
from hypothesis import given
from hypothesis import strategies as st

from fragkit.circuits import (
    circuit_costs,
    compilation_energy_bound,
    gate_saving,
    parametrised_circuit,
    rotation_circuits,
)
from fragkit.core import (
    Fragment,
    InputError,
    cheapest_form,
    cheapest_order,
    eliminate,
    fragment_tensors,
    givens_count,
    interchangeable_orbitals,
    mesh_matrix,
    mesh_positions,
)

LAYOUTS = ("blocked", "interleaved")


def givens(n, i, angle):
    matrix = np.eye(n)
    matrix[i : i + 2, i : i + 2] = [[np.cos(angle), -np.sin(angle)], [np.sin(angle), np.cos(angle)]]
    return matrix


def block_rotation(labels, rng):
    """Rotation that mixes only orbitals of equal label, new orbitals in random order."""
    n = len(labels)
    matrix, columns = np.zeros((n, n)), list(rng.permutation(n))
    for label in sorted(set(labels)):
        rows = [k for k in range(n) if labels[k] == label]
        matrix[np.ix_(rows, [columns.pop() for _ in rows])] = random_rotation(len(rows), rng)
    return matrix


@st.composite
def orthogonal_matrices(draw, largest=6):
    n = draw(st.integers(1, largest))
    rng = np.random.default_rng(draw(st.integers(0, 2**32 - 1)))
    kind = draw(st.sampled_from(["random", "near identity", "permutation", "blocks", "near permutation", "identity"]))
    generator = rng.normal(size=(n, n)) * 10.0 ** -draw(st.integers(1, 15))
    near = scipy.linalg.expm(generator - generator.T)
    permutation = np.eye(n)[rng.permutation(n)] * rng.choice([-1.0, 1.0], size=n)
    return {
        "random": lambda: random_rotation(n, rng),
        "near identity": lambda: near,
        "permutation": lambda: permutation,
        "blocks": lambda: block_rotation(rng.integers(0, 3, size=n).tolist(), rng),
        "near permutation": lambda: near @ permutation,
        "identity": lambda: np.eye(n),
    }[kind]()


@given(orthogonal_matrices(), st.sampled_from(LAYOUTS), st.sampled_from(["fixed", "free"]))
def test_compile_export_parse_gives_the_matrix_back(rotation, layout, readout):
    n = len(rotation)
    (circuit,) = rotation_circuits([rotation], layout=layout, readout=readout, angle_tolerance=0.0)
    assert circuit.dropped == 0
    expected = scipy.linalg.block_diag(rotation, rotation)
    np.testing.assert_allclose(circuit.matrix(), expected, atol=1e-12)
    for text in (circuit.to_openqasm3(), parametrised_circuit([circuit]).to_openqasm3()):
        program = Program(text, parametrised_circuit([circuit]).bindings(0))
        parsed = program.one_particle_matrix()
        mode = [p + s * n if layout == "blocked" else 2 * p + s for s in (0, 1) for p in range(n)]
        parsed = parsed[np.ix_(mode, [program.measured[j] for j in range(2 * n)])]
        # A readout does not see the sign of a new orbital, and the program does not hold it.
        np.testing.assert_allclose(parsed * circuit.signs, expected, atol=1e-12)
        np.testing.assert_allclose(np.abs(np.sum(parsed * expected, axis=0)), 1.0, atol=1e-12)


@given(orthogonal_matrices(largest=9))
def test_no_more_gates_and_layers_than_the_rectangular_mesh(rotation):
    n = len(rotation)
    angles, signs = eliminate(rotation)
    np.testing.assert_allclose(mesh_matrix(mesh_positions(n), angles, n) * signs, rotation, atol=1e-12)
    assert np.max(np.abs(angles), initial=0.0) <= np.pi / 2
    (circuit,) = rotation_circuits([rotation])
    assert circuit.givens_count <= n * (n - 1)
    assert circuit.depth <= n
    for readout, gates in (("free", 3 * n * (n - 1) // 2), ("fixed", 2 * n * (n - 1))):
        (line,) = rotation_circuits([rotation], layout="interleaved", readout=readout)
        assert line.givens_count <= gates
        assert line.depth <= 2 * n


@pytest.mark.parametrize("n", [2, 3, 8, 24])
def test_generic_rotation_needs_the_full_mesh(n):
    """n(n−1)/2 rotations in n layers per spin (Clements et al., Optica 3, 1460 (2016)); one layer when n = 2."""
    (circuit,) = rotation_circuits([random_rotation(n, np.random.default_rng(n))])
    assert circuit.givens_count == n * (n - 1)
    assert circuit.depth == (1 if n == 2 else n)
    for layer in circuit.givens:
        touched = [q for a, b, _ in layer for q in (a, b)]
        assert len(touched) == len(set(touched))
        assert all(b == a + 1 and a != n - 1 for a, b, _ in layer)


@pytest.mark.parametrize("size", [3, 5, 7])
def test_permutation_needs_as_many_gates_as_it_has_inversions(size):
    """Sorting by neighbour exchanges takes exactly the inversions (Knuth, TAOCP vol. 3, 5.1.1); none once reordered."""
    rng = np.random.default_rng(size)
    for _ in range(20):
        places = rng.permutation(size)
        matrix = np.eye(size)[places]
        inversions = sum(places[a] > places[b] for a in range(size) for b in range(a + 1, size))
        assert givens_count(matrix) == inversions
        order, signs = cheapest_order(matrix)
        np.testing.assert_array_equal(matrix[:, order] * signs, np.eye(size))


def test_product_of_few_rotations_is_found_with_no_more():
    """A reduced word of neighbour rotations is compiled back to the same number of them."""
    rng = np.random.default_rng(0)
    for word in ([0], [2, 1], [0, 1, 0], [3, 1, 2], [0, 2, 1, 3], [1, 0, 2, 1, 3]):
        matrix = np.linalg.multi_dot([np.eye(5)] + [givens(5, i, rng.uniform(0.2, 1.3)) for i in word] + [np.eye(5)])
        assert givens_count(matrix) == len(word)


def test_cheapest_order_of_symmetry_blocks_against_all_orders():
    rng = np.random.default_rng(1)
    for labels in ([0, 1, 0, 1, 0], [0, 1, 2, 1, 0], [1, 0, 0, 1, 2], [0, 0, 1, 2, 2]):
        matrix = block_rotation(labels, rng)
        best = min(givens_count(matrix[:, list(order)]) for order in permutations(range(5)))
        order, signs = cheapest_order(matrix)
        assert givens_count(matrix[:, order] * signs) == best < 10


@pytest.mark.parametrize("labels", [[0, 1] * 4, [0, 1, 2, 3] * 3, list(range(12)), [0] * 5 + [1] * 5])
def test_blocks_cost_their_own_meshes_and_the_fewest_crossings(labels):
    """Within blocks n_b(n_b−1)/2, plus the crossings of rows in the best order of blocks, here found by trying all."""
    matrix = block_rotation(labels, np.random.default_rng(2))
    order, _ = cheapest_order(matrix)
    blocks = sorted(set(labels))
    inner = sum(labels.count(b) * (labels.count(b) - 1) // 2 for b in blocks)
    if len(blocks) > 6:  # all blocks have one orbital: already in order
        crossings = 0
    else:
        crossings = min(
            sum(p.index(labels[i]) > p.index(labels[j]) for i in range(len(labels)) for j in range(i, len(labels)))
            for p in permutations(blocks)
        )
    assert givens_count(matrix[:, order]) <= inner + crossings


@given(orthogonal_matrices())
def test_cheapest_order_never_costs_more_and_leaves_no_signs(rotation):
    order, signs = cheapest_order(rotation, 1e-14)
    assert sorted(order.tolist()) == list(range(len(rotation)))
    reordered = rotation[:, order] * signs
    assert givens_count(reordered) <= givens_count(rotation)
    (circuit,) = rotation_circuits([reordered])
    np.testing.assert_array_equal(circuit.signs, 1.0)


@pytest.mark.parametrize("tolerance", [0.0, 1e-3, 0.5, 2.0])
def test_any_tolerance_gives_a_permutation(tolerance):
    for n in (1, 2, 5, 9):
        order, signs = cheapest_order(random_rotation(n, np.random.default_rng(n)), tolerance)
        assert sorted(order.tolist()) == list(range(n))
        assert set(np.abs(signs)) == {1.0}


def test_reordered_fragment_is_the_same_operator_and_the_saving_is_reported():
    rng = np.random.default_rng(4)
    matrix = block_rotation([0, 1, 0, 1], rng)
    coefficients = rng.normal(size=(4, 4))
    fragment = Fragment.plain(matrix, coefficients + coefficients.T)
    before, after = gate_saving([fragment])
    assert (before, after) == (givens_count(matrix), 3)
    new = fragment.reordered(*cheapest_order(matrix))
    assert gate_saving([new])[0] == after
    np.testing.assert_allclose(
        np.einsum("pi,qi,ij,rj,sj->pqrs", new.rotation, new.rotation, new.opposite_spin, new.rotation, new.rotation),
        np.einsum("pi,qi,ij,rj,sj->pqrs", matrix, matrix, fragment.opposite_spin, matrix, matrix),
        atol=1e-12,
    )


GROUPS = [
    # linear coefficients, fewest rotations: n(n−1)/2 less m(m−1)/2 for each group of m equal ones, since only the
    # subspaces matter (dimension of the flag manifold)
    ([1, 2, 3, 4, 5, 6], 15),
    ([1, 0, 0, 0, 0, 0], 5),
    ([0, 1, 0, 2, 0, 1], 15 - 3 - 1),
    ([1, 0, 1, 0, 1, 0], 15 - 3 - 3),
    ([1, 1, 1, 1, 1, 1], 0),
]


@pytest.mark.parametrize(("linear", "fewest"), GROUPS)
def test_orbitals_that_a_fragment_does_not_tell_apart_save_rotations(linear, fewest):
    rotation = random_rotation(6, np.random.default_rng(3))
    fragment = Fragment.one_body(rotation, linear)
    assert len(interchangeable_orbitals(fragment)) == len(set(linear))
    form = cheapest_form(fragment)
    assert givens_count(form.rotation) == fewest
    np.testing.assert_allclose(
        form.rotation @ np.diag(form.linear) @ form.rotation.T, rotation @ np.diag(linear) @ rotation.T, atol=1e-13
    )


@given(st.integers(0, 2**32 - 1), st.lists(st.integers(0, 2), min_size=2, max_size=5))
def test_cheapest_form_is_the_same_operator(seed, labels):
    """Coefficients that depend on the groups alone; the opposite-spin and the antisymmetrised tensors are compared."""
    rng = np.random.default_rng(seed)
    n = len(labels)
    tables = rng.normal(size=(2, 3, 3))
    opposite, same = ((t + t.T)[np.ix_(labels, labels)] for t in tables)
    fragment = Fragment(random_rotation(n, rng), opposite, same - np.diag(np.diag(same)), rng.normal(size=3)[labels])
    assert len(interchangeable_orbitals(fragment)) == len(set(labels))
    form = cheapest_form(fragment)
    before, after = gate_saving([fragment])
    assert givens_count(form.rotation) == after <= givens_count(fragment.rotation) == before
    assert after <= n * (n - 1) // 2 - sum(labels.count(k) * (labels.count(k) - 1) // 2 for k in set(labels))
    made, wanted = fragment_tensors([form]), fragment_tensors([fragment])
    np.testing.assert_allclose(made.one_body, wanted.one_body, atol=1e-12)
    np.testing.assert_allclose(made.opposite_spin, wanted.opposite_spin, atol=1e-12)
    np.testing.assert_allclose(made.exchange_odd, wanted.exchange_odd, atol=1e-12)


def test_a_small_difference_between_coefficients_keeps_orbitals_apart():
    fragment = Fragment.one_body(np.eye(3), [1.0, 1.0 + 1e-9, 0.0])
    assert interchangeable_orbitals(fragment) == [[0], [1], [2]]
    assert interchangeable_orbitals(fragment, tolerance=1e-8) == [[0, 1], [2]]


@pytest.mark.parametrize("layout", LAYOUTS)
def test_free_readout_uses_fewer_gates_and_reads_the_same_orbitals(layout):
    rng = np.random.default_rng(6)
    matrix = block_rotation([0, 1, 0, 1, 0, 1], rng)
    (fixed,) = rotation_circuits([matrix], layout=layout, readout="fixed")
    (free,) = rotation_circuits([matrix], layout=layout, readout="free")
    assert free.givens_count < fixed.givens_count
    np.testing.assert_allclose(free.matrix(), fixed.matrix(), atol=1e-12)
    assert rotation_circuits([np.eye(6)], layout=layout)[0].givens_count == 0


@pytest.mark.parametrize("layout", LAYOUTS)
@pytest.mark.parametrize("tolerance", [1e-3, 1e-2])
def test_left_out_rotations_stay_within_the_reported_bounds(layout, tolerance):
    """The true distance of the distributions, worst case over random states, is below the bound, which is not loose."""
    n, electrons = 4, (2, 1)
    rng = np.random.default_rng(7)
    generator = rng.normal(size=(n, n)) * tolerance
    blocks = scipy.linalg.block_diag(random_rotation(2, rng), random_rotation(2, rng))
    rotation = blocks @ scipy.linalg.expm(generator - generator.T)
    (exact,) = rotation_circuits([rotation], layout=layout)
    (circuit,) = rotation_circuits([rotation], layout=layout, angle_tolerance=2 * tolerance, electrons=electrons)
    assert circuit.dropped > 0 == exact.dropped
    assert circuit.givens_count < exact.givens_count
    assert 0.0 < circuit.distribution_bound < 20 * tolerance
    assert f"at most {circuit.distribution_bound:.3g}." in circuit.to_openqasm3()
    assert "Approximate" not in exact.to_openqasm3()
    (unknown,) = rotation_circuits([rotation], layout=layout, angle_tolerance=2 * tolerance)
    assert unknown.distribution_bound >= circuit.distribution_bound

    coefficients = rng.normal(size=(n, n))
    fragment = Fragment.plain(rotation, coefficients + coefficients.T)
    bits = np.array(list(np.ndindex(*(2,) * (2 * n))), dtype=np.uint8)
    values = fragment.values(bits)
    worst = 0.0
    for _ in range(20):
        vector = random_vector(n, electrons, rng)
        final = run_cirq(circuit.to_cirq(measure=False), qubit_state(vector, n, electrons, layout), list(range(2 * n)))
        made = np.abs(final.transpose(circuit.measured_qubits)) ** 2
        difference = (made - rotated_probabilities(vector, rotation, n, electrons)).ravel()
        worst = max(worst, 0.5 * float(np.sum(np.abs(difference))))
        assert abs(float(difference @ values)) <= compilation_energy_bound([circuit], [fragment])
    assert circuit.distribution_bound / 50 < worst <= circuit.distribution_bound


def test_rounding_in_place_of_symmetry_zeros_costs_no_gates_by_default():
    rng = np.random.default_rng(13)
    noise = rng.normal(size=(4, 4)) * 1e-11
    rotation = block_rotation([0, 0, 1, 1], rng) @ scipy.linalg.expm(noise - noise.T)
    rotation = rotation[:, cheapest_order(rotation)[0]]
    (circuit,) = rotation_circuits([rotation])
    assert circuit.givens_count == 4
    assert circuit.distribution_bound < 1e-9
    assert rotation_circuits([rotation], angle_tolerance=0.0)[0].givens_count == 12


def test_exact_circuits_report_a_bound_of_rounding_size():
    circuits = rotation_circuits([random_rotation(8, np.random.default_rng(k)) for k in range(3)])
    assert max(circuit.distribution_bound for circuit in circuits) < 1e-13


@pytest.mark.parametrize("layout", LAYOUTS)
@pytest.mark.parametrize("kind", ["random", "blocks", "identity"])
def test_counts_and_depth_are_what_qiskit_counts(layout, kind):
    from qiskit import qasm2

    rng = np.random.default_rng(11)
    rotation = {
        "random": lambda: random_rotation(5, rng),
        "blocks": lambda: block_rotation([0, 1, 0, 1, 1], rng),
        "identity": lambda: np.eye(5),
    }[kind]()
    (circuit,) = rotation_circuits([rotation], layout=layout)
    without = {
        "OpenQASM 2": qasm2.loads(circuit.to_openqasm2(measure=False)),
        "qiskit object": circuit.to_qiskit(measure=False),
    }
    for name, loaded in without.items():
        assert loaded.size() == loaded.num_nonlocal_gates() == circuit.givens_count, name
        assert loaded.depth() == circuit.depth, name
    for expanded in (without["OpenQASM 2"].decompose(), Program(circuit.to_openqasm3()).to_qiskit()):
        assert expanded.count_ops().get("cx", 0) == expanded.num_nonlocal_gates() == circuit.two_qubit_gates
        assert expanded.depth(lambda instruction: len(instruction.qubits) == 2) == circuit.two_qubit_depth
    assert qasm2.loads(circuit.to_openqasm2()).count_ops()["measure"] == 10
    assert circuit.to_qiskit().count_ops()["measure"] == 10


def test_two_cnot_per_rotation_is_what_qiskit_finds():
    """The transpiler does not find a cheaper form of the gate than the two CNOT that are written."""
    from qiskit import transpile

    (circuit,) = rotation_circuits([givens(2, 0, 0.7)])
    best = transpile(circuit.to_qiskit(measure=False), basis_gates=["cx", "u"], optimization_level=3, seed_transpiler=1)
    assert best.count_ops()["cx"] == circuit.two_qubit_gates == 4


@pytest.mark.parametrize("layout", LAYOUTS)
def test_merged_circuit_has_the_union_of_the_gates(layout):
    rng = np.random.default_rng(12)
    rotations = [block_rotation([0, 0, 1, 1], rng) for _ in range(3)] + [np.eye(4)]
    circuits = rotation_circuits(rotations, layout=layout, readout="fixed", provenance={"molecule": "invented"})
    family = parametrised_circuit(circuits)
    assert len(family) == 4
    assert family.givens_count >= max(circuit.givens_count for circuit in circuits)
    assert not np.any(family.angles[3])
    assert family.angles.shape[1] * (2 if layout == "blocked" else 1) == family.givens_count
    assert family.provenance == (("molecule", "invented"),)
    assert family.bindings(3) == dict.fromkeys(family.names, 0.0)


BAD_ARGUMENTS = [
    (lambda r: rotation_circuits([]), "at least one"),
    (lambda r: rotation_circuits([r, np.eye(2)]), r"fragments\[1\].*3 orbitals"),
    (lambda r: rotation_circuits([2 * r]), r"fragments\[0\].*orthogonal"),
    (lambda r: rotation_circuits([r], layout="zigzag"), '"blocked" or "interleaved"'),
    (lambda r: rotation_circuits([r], readout="any"), '"fixed" or "free"'),
    (lambda r: rotation_circuits([r], frame=np.ones((3, 3))), "`frame`"),
    (lambda r: rotation_circuits([r], frame=np.eye(2)), "`frame`"),
    (lambda r: rotation_circuits([r], qubit_map=[0, 1, 2]), "6 qubits"),
    (lambda r: rotation_circuits([r], qubit_map=[0, 1, 2, 3, 4, 4]), "more than once"),
    (lambda r: rotation_circuits([r], qubit_map=[0, 1, 2, 3, 4, -1]), r"qubit_map\[5\]"),
    (lambda r: rotation_circuits([r], couplings=[(0, 1), (3, 4), (4, 5)]), "qubits 1 and 2"),
    (lambda r: rotation_circuits([r], couplings=[(0, 1), 2]), r"couplings\[1\]"),
    (lambda r: rotation_circuits([r], couplings=[(0, 0)]), "different qubits"),
    (lambda r: rotation_circuits([r], couplings=[("a", "b")]), "whole number"),
    (lambda r: rotation_circuits([r])[0].to_openqasm3(preparation="OPENQASM 3.0;\nx q[0];"), "leave that line out"),
    (lambda r: rotation_circuits([r])[0].to_openqasm2(preparation="qreg q[6];"), "leave that line out"),
    (lambda r: rotation_circuits([r], angle_tolerance=-1.0), "`angle_tolerance`"),
    (lambda r: rotation_circuits([r], angle_tolerance=1.0), "`angle_tolerance`"),
    (lambda r: rotation_circuits([r], angle_tolerance="small"), "`angle_tolerance`"),
    (lambda r: rotation_circuits([r], electrons=(4, 0)), "`electrons`"),
    (lambda r: rotation_circuits([r], provenance={"name": "Å"}), "ASCII"),
    (lambda r: rotation_circuits([r], provenance={"name": "one\ntwo"}), "one line"),
    (lambda r: rotation_circuits([r], provenance={"name": ["one", "two"]}), "each of 1 circuits"),
    (lambda r: parametrised_circuit([]), "at least one"),
    (lambda r: parametrised_circuit(rotation_circuits([r]) + rotation_circuits([r], layout="interleaved")), "layout"),
    (lambda r: parametrised_circuit(rotation_circuits([r])).bindings(1), "below 1"),
    (lambda r: rotation_circuits([r])[0].to_openqasm3(preparation="// Schrödinger"), "ASCII"),
    (lambda r: rotation_circuits([r])[0].to_cirq(qubits=[]), "6 different qubits"),
    (lambda r: circuit_costs([]), "at least one"),
    (lambda r: circuit_costs(rotation_circuits([r]), shots=[1.5]), "whole numbers"),
    (lambda r: compilation_energy_bound(rotation_circuits([r]), []), "0 fragments"),
]


@pytest.mark.parametrize(("call", "message"), BAD_ARGUMENTS, ids=[message for _, message in BAD_ARGUMENTS])
def test_bad_arguments_are_named(call, message):
    with pytest.raises(InputError, match=message):
        call(random_rotation(3, np.random.default_rng(0)))
