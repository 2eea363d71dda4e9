"""Plans and fragmentations as JSON files."""

from pathlib import Path
from typing import Any

import numpy as np

from fragkit.core import Fragment, Fragmentation, InputError, MismatchError
from fragkit.files._schema import FRAGMENTATION, PLAN, Document, read_document, write_document
from fragkit.planning import Plan, PlanBound

_UNITS = {"energy": "hartree", "cost": "hartree^2", "time": "second"}
_CONVENTIONS = {
    "rotation": "column k is new orbital k in the orbitals of the Hamiltonian, the same for both spins",
    "opposite_spin": "entry ij, i <= j, multiplies n_i_alpha n_j_beta + n_j_alpha n_i_beta; ii: n_i_alpha n_i_beta",
    "same_spin": "entry ij, i < j, multiplies n_i_alpha n_j_alpha + n_i_beta n_j_beta",
    "linear": "entry i multiplies n_i_alpha + n_i_beta",
    "energy": "constant plus the sum over fragments of the mean of the fragment's value",
}


def save_plan(plan: Plan, path: Any, *, overwrite: bool = False) -> Path:
    """Write a plan as JSON and return the path; reading it gives the same plan to the last bit.

    The file states its schema, units and conventions, so that a programme without fragkit can use it, and a digest of
    its content. It is written to a temporary name and then moved.

    Raises
    ------
    InputError
        If the file exists and `overwrite` is false, or its folder cannot be written to.
    """
    bound = plan.bound
    body = {
        "units": _UNITS,
        "conventions": _CONVENTIONS,
        "plan_digest": plan.digest,
        "hamiltonian_digest": plan.hamiltonian_digest,
        "orbitals": plan.orbitals,
        "electrons": plan.electrons,
        "constant": plan.constant,
        "residual_norm": plan.residual_norm,
        "energy_bound": plan.energy_bound,
        "sector_exact": plan.sector_exact,
        "target_error": plan.target_error,
        "reference": plan.reference,
        "bound": None
        if bound is None
        else {"quantum_limit": bound.quantum_limit, "design_limit": bound.design_limit, "note": bound.note},
        "diagnostics": plan.diagnostics,
        "converged": plan.converged,
        "message": plan.message,
        "method": plan.method,
        "seconds": plan.seconds,
        "shots": plan.shots,
        "deviations": plan.deviations,
        "fragments": [_fragment_entries(fragment) for fragment in plan.fragments],
    }
    return write_document(path, PLAN, body, routine="fragkit.files.save_plan", overwrite=overwrite)


def load_plan(path: Any) -> Plan:
    """Read a plan that `save_plan` wrote.

    Raises
    ------
    InputError
        If the file is missing, cut off, edited, of another kind, or of a newer schema version.
    MismatchError
        If the fragments do not have the plan digest that the file states.
    """
    document = read_document(path, PLAN)
    n = _orbitals(document)
    bound = None
    if document.get("bound", (dict, type(None))) is not None:
        part = document.child("bound")
        bound = PlanBound(part.number("quantum_limit"), part.optional_number("design_limit"), part.get("note", str))
    fragments = _read_fragments(document, n)
    diagnostics = document.child("diagnostics")
    plan = Plan(
        fragments=fragments,
        constant=document.number("constant"),
        shots=document.array("shots", (len(fragments),)).astype(np.int64),
        deviations=document.array("deviations", (len(fragments),)),
        electrons=_electrons(document),
        hamiltonian_digest=document.get("hamiltonian_digest", str),
        residual_norm=document.number("residual_norm"),
        energy_bound=document.number("energy_bound"),
        sector_exact=document.get("sector_exact", bool),
        target_error=document.optional_number("target_error"),
        reference=document.get("reference", str),
        bound=bound,
        diagnostics={name: diagnostics.number(name) for name in diagnostics.entries},
        converged=document.get("converged", bool),
        message=document.get("message", str),
        method=document.get("method", str),
        seconds=document.number("seconds"),
    )
    stated = document.get("plan_digest", str)
    if plan.digest != stated:
        raise MismatchError(
            f"{document.path} must hold fragments of the plan digest it states (got {plan.digest[:12]}, stated "
            f"{stated[:12]}); make the plan again"
        )
    return plan


def save_fragmentation(fragments: Fragmentation, path: Any, *, overwrite: bool = False) -> Path:
    """Write a fragmentation as JSON and return the path; reading it gives the same to the last bit.

    Raises
    ------
    InputError
        If the file exists and `overwrite` is false, or its folder cannot be written to.
    """
    body = {
        "units": _UNITS,
        "conventions": _CONVENTIONS,
        "hamiltonian_digest": fragments.hamiltonian_digest,
        "orbitals": fragments.orbitals,
        "electrons": fragments.electrons,
        "constant": fragments.constant,
        "residual_norm": fragments.residual_norm,
        "energy_bound": fragments.energy_bound,
        "converged": fragments.converged,
        "message": fragments.message,
        "method": fragments.method,
        "iterations": fragments.iterations,
        "seconds": fragments.seconds,
        "fragments": [_fragment_entries(fragment) for fragment in fragments],
    }
    return write_document(path, FRAGMENTATION, body, routine="fragkit.files.save_fragmentation", overwrite=overwrite)


def load_fragmentation(path: Any) -> Fragmentation:
    """Read a fragmentation that `save_fragmentation` wrote.

    Raises
    ------
    InputError
        If the file is missing, cut off, edited, of another kind, or of a newer schema version.
    """
    document = read_document(path, FRAGMENTATION)
    return Fragmentation(
        fragments=_read_fragments(document, _orbitals(document)),
        constant=document.number("constant"),
        electrons=_electrons(document),
        hamiltonian_digest=document.get("hamiltonian_digest", str),
        residual_norm=document.number("residual_norm"),
        energy_bound=document.number("energy_bound"),
        converged=document.get("converged", bool),
        message=document.get("message", str),
        method=document.get("method", str),
        iterations=document.get("iterations", int),
        seconds=document.number("seconds"),
    )


def _fragment_entries(fragment: Fragment) -> dict[str, Any]:
    return {
        "rotation": fragment.rotation,
        "opposite_spin": fragment.opposite_spin,
        "same_spin": fragment.same_spin,
        "linear": fragment.linear,
    }


def _read_fragments(document: Document, n: int) -> tuple[Fragment, ...]:
    listed = document.children("fragments")
    if not listed:
        raise InputError(f"{document.path}: `fragments` must hold at least one fragment (got none)")
    fragments = []
    for part in listed:
        rotation, opposite, same = (part.array(name, (n, n)) for name in ("rotation", "opposite_spin", "same_spin"))
        linear = part.array("linear", (n,))
        try:
            fragments.append(Fragment(rotation, opposite, same, linear))
        except InputError as error:
            raise InputError(f"{document.path}: `{part.part.rstrip('.')}`: {error}") from None
    return tuple(fragments)


def _orbitals(document: Document) -> int:
    n = document.get("orbitals", int)
    if n < 1:
        raise InputError(f"{document.path}: `orbitals` must be at least 1 (got {n})")
    return n


def _electrons(document: Document) -> tuple[int, int]:
    listed = document.get("electrons", list)
    if len(listed) != 2 or not all(type(k) is int for k in listed):
        raise InputError(f"{document.path}: `electrons` must be two whole numbers (got {listed})")
    return listed[0], listed[1]
