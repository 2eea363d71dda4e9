"""Counts as JSON: bit strings of every circuit, the plan's digest and the names of the batches."""

from pathlib import Path
from typing import Any

import numpy as np

from fragkit.core import InputError, as_count
from fragkit.estimate import Counts
from fragkit.files._schema import COUNTS, read_document, write_document
from fragkit.planning import Plan


def save_counts(counts: Counts, path: Any, *, overwrite: bool = False) -> Path:
    """Write counts as JSON and return the path.

    `circuits` is a list in the plan's order with one object {bit string: count} each; the first character is
    qubit 0, the alpha orbitals come first. The file names these orders in `bit_order` and `spin_order`.

    Raises
    ------
    InputError
        If the file exists and `overwrite` is false, or its folder does not exist.
    """
    body = {
        "plan_digest": counts.plan_digest,
        "orbitals": counts.orbitals,
        "bit_order": "first-qubit-left",
        "spin_order": "blocked",
        "batches": list(counts.batches),
        "shots": [int(number) for number in counts.shots],
        "circuits": [counts.strings(m) for m in range(len(counts))],
    }
    return write_document(path, COUNTS, body, routine="fragkit.files.save_counts", overwrite=overwrite)


def load_counts(path: Any, *, plan: Plan | None = None) -> Counts:
    """Read counts that `save_counts` wrote; if `plan` is given they must belong to it.

    Raises
    ------
    InputError
        If the file is not a complete counts file, or does not hold together.
    MismatchError
        If the counts belong to another plan.
    """
    document = read_document(path, COUNTS)
    digest = document.get("plan_digest", str)
    if plan is not None:
        plan.check_digest(digest, name=str(path))
    n = as_count(document.get("orbitals", int), "orbitals", minimum=1)
    for name, expected in (("bit_order", "first-qubit-left"), ("spin_order", "blocked")):
        got = document.get(name, str)
        if got != expected:
            raise InputError(f"{path}: `{name}` must be {expected!r} in a saved file (got {got!r})")
    shots = document.get("shots", list)
    circuits = document.children("circuits")
    if len(circuits) != len(shots):
        raise InputError(f"{path}: `shots` must have one number per circuit (got {len(shots)} and {len(circuits)})")
    bits, numbers = [], []
    for index, (circuit, total) in enumerate(zip(circuits, shots, strict=True)):
        rows, number = Counts.rows_of_strings(circuit.entries, n, f"{path}: `circuits[{index}]`")
        if int(np.sum(number)) != total:
            raise InputError(f"{path}: `circuits[{index}]` must sum to {total} shots (got {int(np.sum(number))})")
        bits.append(rows)
        numbers.append(number)
    batches = document.get("batches", list)
    if not batches or not all(isinstance(name, str) for name in batches):
        raise InputError(f"{path}: `batches` must be a list of names (got {batches!r})")
    return Counts(tuple(bits), tuple(numbers), digest, tuple(batches))
