"""Angles and coefficients as plain data, so that the estimate can be made without this package.

One set of entries, two forms. JSON: objects and nested lists. npz: the same numbers as arrays, everything else as JSON
text in the entry `document`. `docs/circuits.md` describes the entries.
"""

import hashlib
import io
import json
from collections.abc import Sequence
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fragkit.circuits._rotation_circuits import rotation_circuits
from fragkit.core import (
    Fragment,
    InputError,
    MismatchError,
    as_electrons,
    as_path,
    as_real_array,
    write_atomically,
)

SCHEMA_NAME = "fragkit_circuits"
SCHEMA_VERSION = 1
CONVENTIONS = {
    "jordan_wigner": "blocked: qubit p is alpha orbital p, n + p beta orbital p; interleaved: 2p and 2p + 1",
    "rotation": "column k is new orbital k in the orbitals in which the state was prepared, the same for both spins",
    "gate": "[[cos t, -sin t], [sin t, cos t]] on |01>, |10> of the qubits (a, b), in the order listed",
    "measured_qubits": "entry j is the qubit that holds new spin-orbital j at the end, alpha 0 ... n-1, then beta",
    "opposite_spin": "entry ij, i <= j, multiplies n_i_alpha n_j_beta + n_j_alpha n_i_beta; ii: n_i_alpha n_i_beta",
    "same_spin": "entry ij, i < j, multiplies n_i_alpha n_j_alpha + n_i_beta n_j_beta",
    "linear": "entry i multiplies n_i_alpha + n_i_beta",
    "energy": "constant plus the sum over circuits of the mean of the circuit's polynomial",
}
Arrays = dict[str, NDArray[Any]]


def export_angles(
    path: Any,
    fragments: Sequence[Fragment],
    *,
    constant: float,
    electrons: Any = None,
    shots: Any = None,
    hamiltonian_digest: str = "",
    plan_digest: str = "",
    sector_exact: bool = False,
    overwrite: bool = False,
    **options: Any,
) -> Path:
    """Write gates, angles and diagonal coefficients of all fragments as JSON or npz.

    Parameters
    ----------
    path
        File to write; its ending, .json or .npz, chooses the form.
    fragments
        The fragments; they are compiled here, so that circuits and coefficients belong together.
    constant
        Energy that needs no measurement, hartree.
    electrons
        (alpha, beta), or None if not known.
    shots
        (circuits,) whole numbers, or None.
    hamiltonian_digest, plan_digest
        Digests to store with the data.
    sector_exact
        Whether the fragments are the Hamiltonian only at exactly `electrons`, so that the estimate has to discard
        shots with other numbers.
    overwrite
        Whether to replace an existing file.
    options
        As for `rotation_circuits`.

    Returns
    -------
    pathlib.Path
        The file written.

    Raises
    ------
    InputError
        If an argument is not as above, or the file exists and `overwrite` is false.
    """
    from fragkit import __version__

    target = as_path(path)
    if target.suffix not in (".json", ".npz"):
        raise InputError(f"`path` must end in .json or .npz (got {target.name!r})")
    fragments = list(fragments)
    for k, fragment in enumerate(fragments):
        if not isinstance(fragment, Fragment):
            raise InputError(f"`fragments[{k}]` must be a Fragment (got {type(fragment).__name__})")
    circuits = rotation_circuits(fragments, electrons=electrons, **options)
    energy = as_real_array(constant, "constant", ())
    gates = [
        (k, layer, circuit.qubits[a], circuit.qubits[b], theta)
        for k, circuit in enumerate(circuits)
        for layer, gates_of_layer in enumerate(circuit.givens)
        for a, b, theta in gates_of_layer
    ]
    arrays: Arrays = {
        "constant": energy,
        "rotation": np.array([circuit.rotation for circuit in circuits]),
        "opposite_spin": np.array([fragment.opposite_spin for fragment in fragments]),
        "same_spin": np.array([fragment.same_spin for fragment in fragments]),
        "linear": np.array([fragment.linear for fragment in fragments]),
        "gate_circuit": np.array([gate[0] for gate in gates], dtype=np.int64),
        "gate_layer": np.array([gate[1] for gate in gates], dtype=np.int64),
        "gate_qubits": np.array([gate[2:4] for gate in gates], dtype=np.int64).reshape(-1, 2),
        "gate_angle": np.array([gate[4] for gate in gates], dtype=np.float64),
        "measured_qubits": np.array([circuit.measured_qubits for circuit in circuits], dtype=np.int64),
        "distribution_bound": np.array([circuit.distribution_bound for circuit in circuits]),
    }
    if shots is not None:
        numbers = as_real_array(shots, "shots", (len(circuits),))
        if np.any(numbers != np.round(numbers)) or np.any(numbers < 0):
            raise InputError(f"`shots` must be whole numbers, not negative (got {numbers.tolist()})")
        arrays["shots"] = numbers.astype(np.int64)
    if sector_exact and electrons is None:
        raise InputError("`electrons` must be given with `sector_exact` (got None)")
    document = {
        "schema_name": SCHEMA_NAME,
        "schema_version": SCHEMA_VERSION,
        "provenance": {"creator": "fragkit", "version": __version__, "routine": "fragkit.circuits.export_angles"},
        "units": {"energy": "hartree", "angle": "radian"},
        "conventions": CONVENTIONS,
        "hamiltonian_digest": hamiltonian_digest,
        "plan_digest": plan_digest,
        "orbitals": circuits[0].orbitals,
        "electrons": None if electrons is None else list(as_electrons(electrons, circuits[0].orbitals)),
        "sector_exact": bool(sector_exact),
        "layout": circuits[0].layout,
        "angle_tolerance": circuits[0].angle_tolerance,
    }
    document["digest"] = _digest(document, arrays)
    if target.suffix == ".json":
        data: str | bytes = _json_text(document, arrays)
    else:
        buffer = io.BytesIO()
        np.savez_compressed(buffer, allow_pickle=False, document=np.array(json.dumps(document)), **arrays)
        data = buffer.getvalue()
    return write_atomically(target, data, overwrite=overwrite)


def read_angles(path: Any) -> tuple[dict[str, Any], Arrays]:
    """Read a file of `export_angles` in either form, as its document and its arrays, after checking the digest.

    Raises
    ------
    InputError
        If the file is missing, not of this schema, or of a newer version.
    MismatchError
        If the content does not have the digest that is stored in it.
    """
    target = as_path(path)
    try:
        raw = target.read_bytes()
    except OSError as error:
        raise InputError(f"`path` must name a file that can be read (got {target}: {error.strerror})") from error
    wrong = InputError(f"`path` must name a {SCHEMA_NAME} file (got {target}); write one with export_angles")
    try:
        if raw[:2] == b"PK":
            with np.load(io.BytesIO(raw), allow_pickle=False) as archive:
                arrays = {name: archive[name] for name in archive.files}
            document = json.loads(str(arrays.pop("document")))
        else:
            document = json.loads(raw.decode("utf-8"))
            numbers = document.pop("arrays")
            arrays = {name: np.array(value) for name, value in numbers.items()}
            arrays["gate_qubits"] = arrays["gate_qubits"].reshape(-1, 2)
    except (ValueError, KeyError, AttributeError, TypeError) as error:
        raise wrong from error
    if not isinstance(document, dict) or document.get("schema_name") != SCHEMA_NAME:
        raise wrong
    if document.get("schema_version") != SCHEMA_VERSION:
        raise InputError(
            f"`path` must have schema version {SCHEMA_VERSION} (got {document.get('schema_version')}); update fragkit"
        )
    if document.get("digest") != _digest(document, arrays):
        raise MismatchError(f"`path` must have the content its digest was made of (got {target}); export it again")
    return document, arrays


def _digest(document: dict[str, Any], arrays: Arrays) -> str:
    """SHA-256 of the document without its digest, then of each array in the order of the names."""
    content = {key: value for key, value in document.items() if key != "digest"}
    chain = hashlib.sha256(json.dumps(content, sort_keys=True, separators=(",", ":")).encode())
    for name in sorted(arrays):
        kind = "<i8" if name.startswith(("gate_circuit", "gate_layer", "gate_qubits", "measured", "shots")) else "<f8"
        array = np.ascontiguousarray(arrays[name], dtype=kind)
        chain.update(f"{name}{array.shape}".encode())
        chain.update(array.tobytes())
    return chain.hexdigest()


def _json_text(document: dict[str, Any], arrays: Arrays) -> str:
    """JSON with one entry per line, and one circuit per line inside the larger arrays."""
    lines = [f" {json.dumps(key)}: {json.dumps(value)}," for key, value in document.items()]
    entries = []
    for name, array in arrays.items():
        value = array.tolist()
        if array.ndim > 1 and len(value):
            text = "[\n   " + ",\n   ".join(json.dumps(row) for row in value) + "\n  ]"
        else:
            text = json.dumps(value)
        entries.append(f"  {json.dumps(name)}: {text}")
    return "\n".join(["{", *lines, ' "arrays": {', ",\n".join(entries), " }", "}"]) + "\n"
