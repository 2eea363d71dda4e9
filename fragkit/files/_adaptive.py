"""Adaptive runs as JSON: settings, and the counts of every round, so that a run can wait for its jobs."""

from pathlib import Path
from typing import Any

import numpy as np

from fragkit.core import Hamiltonian, InputError, MismatchError
from fragkit.estimate import AdaptiveRun, Counts
from fragkit.files._schema import Document, Schema, read_document, write_document
from fragkit.planning import Plan
from fragkit.states import ReferenceState

ADAPTIVE_RUN = Schema("fragkit_adaptive_run", 1, "fragkit.files.load_adaptive_run")


def save_adaptive_run(run: AdaptiveRun, path: Any, *, overwrite: bool = False) -> Path:
    """Write a run as JSON and return the path. Plan, Hamiltonian and reference are not in the file, only digests.

    Raises
    ------
    InputError
        If the file exists and `overwrite` is false, or its folder does not exist.
    """
    body = {
        "plan_digest": run.plan.digest,
        "hamiltonian_digest": run.hamiltonian.digest,
        "reference_digest": None if run.reference is None else run.reference.digest,
        "total_shots": run.total_shots,
        "pilot_shots": run.pilot_shots,
        "target_error": run.target_error,
        "seed": run.seed,
        "rounds": [
            {"batches": list(counts.batches), "circuits": [counts.strings(m) for m in range(len(counts))]}
            for counts in run.rounds
        ],
    }
    return write_document(path, ADAPTIVE_RUN, body, routine="fragkit.files.save_adaptive_run", overwrite=overwrite)


def load_adaptive_run(
    path: Any, plan: Plan, hamiltonian: Hamiltonian, *, reference: ReferenceState | None = None
) -> AdaptiveRun:
    """Read a run that `save_adaptive_run` wrote, with the plan, Hamiltonian and reference it was started with.

    Raises
    ------
    InputError
        If the file is not a complete file of this kind.
    MismatchError
        If the plan, the Hamiltonian or the reference is another one.
    """
    document = read_document(path, ADAPTIVE_RUN)
    plan.check_digest(document.get("plan_digest", str), name=str(path))
    given = {"hamiltonian": hamiltonian.digest, "reference": None if reference is None else reference.digest}
    for name, digest in given.items():
        saved = document.get(f"{name}_digest", (str, type(None)))
        if saved != digest:
            raise MismatchError(
                f"`{name}` must be the one that the run in {path} was started with (got digest {str(digest)[:12]}, "
                f"the file has {str(saved)[:12]})"
            )
    run = AdaptiveRun(
        plan,
        hamiltonian,
        document.get("total_shots", int),
        document.get("pilot_shots", int),
        document.optional_number("target_error"),
        reference,
        document.get("seed", int),
    )
    for entry in document.children("rounds"):
        run = run.add(_counts(entry, plan))
    return run


def _counts(entry: Document, plan: Plan) -> Counts:
    circuits, batches = entry.children("circuits"), entry.get("batches", list)
    if len(circuits) != len(plan) or not batches or not all(isinstance(name, str) for name in batches):
        raise InputError(
            f"{entry.path}: `{entry.part}circuits` must be {len(plan)} with named batches (got {len(circuits)})"
        )
    pairs = [Counts.rows_of_strings(c.entries, plan.orbitals, f"{entry.path}: `{c.part[:-1]}`") for c in circuits]
    bits, numbers = tuple(np.asarray(b) for b, _ in pairs), tuple(n for _, n in pairs)
    return Counts(bits, numbers, plan.digest, tuple(batches))
