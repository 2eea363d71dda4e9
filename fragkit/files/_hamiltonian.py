"""Hamiltonians as npz archives: arrays of numpy and one JSON text, nothing that runs code when read."""

import io
import json
import zipfile
from pathlib import Path
from typing import Any

import numpy as np

from fragkit.core import Hamiltonian, InputError, MismatchError, as_path, write_atomically
from fragkit.files._schema import HAMILTONIAN, Document, check_frame, framed, read_bytes

_ENTRIES = {False: ("one_body", "two_body"), True: ("one_body", "factors", "factor_signs")}


def save_hamiltonian(hamiltonian: Hamiltonian, path: Any, *, overwrite: bool = False) -> Path:
    """Write a Hamiltonian as an npz archive and return the path; reading it gives the same to the last bit.

    Orbitals differ in sign, order and degenerate mixtures from run to run, so keep this file beside the plans that
    were made for it. `fragkit.to_fcidump` writes the text format that other programmes read. The full two-body tensor
    or the factors are stored, whichever the Hamiltonian was made from.

    Raises
    ------
    InputError
        If the file exists and `overwrite` is false, or its folder cannot be written to.
    """
    header = framed(
        HAMILTONIAN,
        {
            "units": {"energy": "hartree"},
            "conventions": {"two_body": "chemists' notation, (pq|rs) = two_body[p, q, r, s]"},
            "hamiltonian_digest": hamiltonian.digest,
            "electrons": hamiltonian.electrons,
            "constant": hamiltonian.constant,
            "from_factors": hamiltonian.from_factors,
        },
        routine="fragkit.files.save_hamiltonian",
    )
    stream = io.BytesIO()
    arrays = {name: getattr(hamiltonian, name) for name in _ENTRIES[hamiltonian.from_factors]}
    np.savez_compressed(stream, header=np.array(json.dumps(header)), **arrays)
    return write_atomically(path, stream.getvalue(), overwrite=overwrite)


def load_hamiltonian(path: Any) -> Hamiltonian:
    """Read a Hamiltonian that `save_hamiltonian` wrote.

    Raises
    ------
    InputError
        If the file is missing, cut off, of another kind, or of a newer schema version.
    MismatchError
        If the integrals do not have the digest that the file states.
    """
    file = as_path(path)
    data = read_bytes(file)
    try:
        with np.load(io.BytesIO(data), allow_pickle=False) as archive:
            header = json.loads(str(archive["header"]))
            arrays = {name: archive[name] for name in archive.files if name != "header"}
    except (ValueError, KeyError, OSError, EOFError, TypeError, zipfile.BadZipFile) as error:
        raise InputError(
            f"{file} must be an npz archive written by save_hamiltonian (got {error}); it may be cut off or another "
            "kind of file: integrals of other programmes are read by fragkit.from_fcidump"
        ) from None
    check_frame(file, header, HAMILTONIAN)
    document = Document(file, header)
    from_factors = document.get("from_factors", bool)
    if set(arrays) != set(_ENTRIES[from_factors]):
        raise InputError(f"{file} must hold the arrays {_ENTRIES[from_factors]} (got {sorted(arrays)})")
    hamiltonian = Hamiltonian(
        document.number("constant"),
        arrays.pop("one_body"),
        **arrays,
        electrons=tuple(document.get("electrons", list)),
    )
    stated = document.get("hamiltonian_digest", str)
    if hamiltonian.digest != stated:
        raise MismatchError(
            f"{file} must hold integrals of the digest it states (got {hamiltonian.digest[:12]}, stated "
            f"{stated[:12]}); write it again"
        )
    return hamiltonian
