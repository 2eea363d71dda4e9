"""The verb of this room: rotations in, measurement circuits out."""

from collections.abc import Iterable, Mapping, Sequence
from typing import Any, get_args

import numpy as np

from fragkit.circuits._circuit import Layout, RotationCircuit
from fragkit.circuits._compile import (
    Readout,
    distribution_bound,
    earliest_layers,
    line_angles,
    readout_order,
)
from fragkit.core import ANGLE_TOLERANCE, Fragment, InputError, as_count, as_electrons, as_rotation, frozen

LARGEST_TOLERANCE = 0.1


def rotation_circuits(
    fragments: Iterable[Any],
    *,
    layout: Layout = "blocked",
    readout: Readout | None = None,
    frame: Any = None,
    qubit_map: Sequence[int] | None = None,
    couplings: Iterable[tuple[int, int]] | None = None,
    angle_tolerance: float = ANGLE_TOLERANCE,
    electrons: Any = None,
    provenance: Mapping[str, Any] | None = None,
) -> list[RotationCircuit]:
    """Compile one circuit of neighbour rotations for each fragment.

    A fragment's n×n rotation needs at most n(n−1)/2 rotations per spin in at most n layers in the blocked layout
    (Clements et al., Optica 3, 1460 (2016)); in the interleaved layout at most 3n(n−1)/2 on the whole line with free
    readout, in at most 2n layers. Every gate acts on neighbours on the line.

    Parameters
    ----------
    fragments
        Fragments, or rotations of shape (n, n) whose columns are the new orbitals.
    layout
        Jordan-Wigner order of the prepared state: "blocked" (alpha 0 … n−1, then beta) or "interleaved"
        (alpha 0, beta 0, alpha 1, …).
    readout
        "fixed": the new orbitals end on the places of the layout, new orbital j where prepared orbital j was.
        "free": each ends where it costs least; `circuit.readout` says where, and the exported measurements put it
        into bit j all the same. Default: fixed for blocked, free for interleaved.
    frame
        (n, n) orthogonal; columns are the orbitals in which the state is prepared, in the orbitals of the
        Hamiltonian. It is merged into each rotation and costs nothing extra.
    qubit_map
        (2n,) device qubit of each place on the line; 0 … 2n−1 when left out.
    couplings
        Pairs of device qubits on which a gate can act, either way round. If given, every gate is checked.
    angle_tolerance
        Radian, at most 0.1. Rotations that would clear a matrix element of at most this size are left out; the error is
        bounded by `circuit.distribution_bound` and stated in exported files. The default takes out what the rounding
        of integrals and fits leaves in place of symmetry zeros. Zero keeps every rotation above 1e-14.
    electrons
        (alpha, beta); makes the bound tighter.
    provenance
        Texts by key (ASCII) for the comments of exported files; values may be sequences with one text per circuit.

    Returns
    -------
    list of RotationCircuit
        In the order of `fragments`.

    Raises
    ------
    InputError
        If an argument is not as above, or a gate falls on a pair that is not in `couplings`.

    Examples
    --------
    >>> import numpy as np
    >>> turn = np.array([[np.cos(0.3), -np.sin(0.3)], [np.sin(0.3), np.cos(0.3)]])
    >>> circuit, = rotation_circuits([turn])
    >>> circuit
    RotationCircuit(4 qubits, blocked, 2 rotations in 1 layers, 4 CNOT)
    >>> [(a, b, round(theta, 12)) for a, b, theta in circuit.gates()]
    [(0, 1, 0.3), (2, 3, 0.3)]
    """
    rotations = [
        f.rotation if isinstance(f, Fragment) else as_rotation(f, name=f"fragments[{k}]")
        for k, f in enumerate(fragments)
    ]
    if not rotations:
        raise InputError("`fragments` must hold at least one fragment or rotation (got none)")
    n = len(rotations[0])
    for k, rotation in enumerate(rotations):
        if len(rotation) != n:
            raise InputError(f"`fragments[{k}]` must have {n} orbitals like the first one (got {len(rotation)})")
    if layout not in get_args(Layout):
        raise InputError(f'`layout` must be "blocked" or "interleaved" (got {layout!r})')
    if readout is None:
        readout = "fixed" if layout == "blocked" else "free"
    if readout not in get_args(Readout):
        raise InputError(f'`readout` must be "fixed" or "free" (got {readout!r})')
    tolerance = _tolerance(angle_tolerance)
    pair = None if electrons is None else as_electrons(electrons, n)
    qubits = _qubits(qubit_map, 2 * n)
    allowed = None if couplings is None else _couplings(couplings)
    notes = _provenance(provenance, len(rotations))
    if frame is not None:
        prepared = as_rotation(frame, n, name="frame")
        rotations = [prepared.T @ rotation for rotation in rotations]
    circuits = []
    for rotation, note in zip(rotations, notes, strict=True):
        order = readout_order(rotation, layout, readout, tolerance)
        compiled = line_angles(rotation, layout, order, tolerance)
        circuit = RotationCircuit(
            rotation=frozen(np.array(rotation)),
            layout=layout,
            givens=earliest_layers(compiled.positions, compiled.angles, 2 * n),
            readout=compiled.readout,
            qubits=qubits,
            signs=frozen(compiled.signs),
            dropped=compiled.dropped,
            angle_tolerance=tolerance,
            distribution_bound=min(1.0, distribution_bound(rotation, layout, compiled, pair)),
            provenance=note,
        )
        if allowed is not None:
            _check_couplings(circuit, allowed)
        circuits.append(circuit)
    return circuits


def _tolerance(value: Any) -> float:
    try:
        number = float(value)
    except (TypeError, ValueError):
        number = np.nan
    if not 0.0 <= number <= LARGEST_TOLERANCE:
        raise InputError(f"`angle_tolerance` must be between 0 and {LARGEST_TOLERANCE} radian (got {value!r})")
    return number


def _qubits(qubit_map: Sequence[int] | None, count: int) -> tuple[int, ...]:
    if qubit_map is None:
        return tuple(range(count))
    qubits = tuple(as_count(q, f"qubit_map[{k}]") for k, q in enumerate(qubit_map))
    if len(qubits) != count:
        raise InputError(f"`qubit_map` must name {count} qubits, one for each place on the line (got {len(qubits)})")
    if len(set(qubits)) != count:
        twice = sorted({q for q in qubits if qubits.count(q) > 1})
        raise InputError(f"`qubit_map` must name every qubit once (got {twice} more than once)")
    return qubits


def _couplings(couplings: Iterable[tuple[int, int]]) -> set[frozenset[int]]:
    pairs = set()
    for k, edge in enumerate(couplings):
        if not isinstance(edge, Sequence | np.ndarray) or len(edge) != 2 or edge[0] == edge[1]:
            raise InputError(f"`couplings[{k}]` must be a pair of different qubits (got {edge!r})")
        pairs.add(frozenset(as_count(qubit, f"couplings[{k}]") for qubit in edge))
    return pairs


def _check_couplings(circuit: RotationCircuit, allowed: set[frozenset[int]]) -> None:
    for a, b, _ in circuit.gates():
        if frozenset((a, b)) not in allowed:
            raise InputError(
                f"`couplings` must hold every pair of neighbours with a gate (got none for qubits {a} and {b}); "
                "choose a `qubit_map` that follows coupled qubits, for the blocked layout one path per spin"
            )


def _provenance(given: Mapping[str, Any] | None, count: int) -> list[tuple[tuple[str, str], ...]]:
    notes: list[list[tuple[str, str]]] = [[] for _ in range(count)]
    for key, value in (given or {}).items():
        texts = [value] * count if isinstance(value, str) or not isinstance(value, Sequence) else list(value)
        if len(texts) != count:
            raise InputError(
                f"`provenance[{key!r}]` must have one text for each of {count} circuits (got {len(texts)})"
            )
        for note, text in zip(notes, texts, strict=True):
            line = (str(key), str(text))
            if not all(part.isascii() and part.isprintable() for part in line):
                raise InputError(f"`provenance[{key!r}]` must be one line of printable ASCII (got {text!r})")
            note.append(line)
    return [tuple(note) for note in notes]
