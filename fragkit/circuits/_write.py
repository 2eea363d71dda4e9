"""Circuits as files, one for each fragment."""

from collections.abc import Sequence
from pathlib import Path
from typing import Any, Literal, get_args

from fragkit.circuits._circuit import RotationCircuit
from fragkit.core import InputError, as_path, write_atomically

Language = Literal["openqasm3", "openqasm2"]


def write_circuits(
    folder: Any,
    circuits: Sequence[RotationCircuit],
    *,
    language: Language = "openqasm3",
    preparation: str = "",
    overwrite: bool = False,
) -> list[Path]:
    """Write circuit_000.qasm, circuit_001.qasm, … to a folder, which is made if it is not there.

    Nothing is written if one of the files exists and `overwrite` is false.

    Parameters
    ----------
    folder
        Where to write.
    circuits
        As returned by `rotation_circuits`.
    language
        "openqasm3" or "openqasm2".
    preparation
        Statements that prepare the state, as for `openqasm3`.
    overwrite
        Whether to replace existing files.

    Returns
    -------
    list of pathlib.Path
        The files, in the order of the circuits.

    Raises
    ------
    InputError
        If the language is unknown, a file exists, or the folder cannot be made.
    """
    if language not in get_args(Language):
        raise InputError(f'`language` must be "openqasm3" or "openqasm2" (got {language!r})')
    circuits = list(circuits)
    place = as_path(folder)
    digits = max(3, len(str(len(circuits) - 1)))
    paths = [place / f"circuit_{k:0{digits}d}.qasm" for k in range(len(circuits))]
    present = [path for path in paths if path.exists()]
    if present and not overwrite:
        raise InputError(f"`folder` must not hold {present[0].name} already (got {place}); pass overwrite=True")
    try:
        place.mkdir(parents=True, exist_ok=True)
    except OSError as error:
        raise InputError(f"`folder` must be a folder that can be made (got {place}: {error.strerror})") from error
    for path, circuit in zip(paths, circuits, strict=True):
        text = circuit.to_openqasm3 if language == "openqasm3" else circuit.to_openqasm2
        write_atomically(path, text(preparation=preparation), overwrite=overwrite)
    return paths
