"""The measurement plan: what to run, how often, and what it promises."""

import hashlib
from dataclasses import dataclass, field
from functools import cached_property
from typing import TYPE_CHECKING, Any

import numpy as np
from numpy.typing import NDArray

from fragkit.core import (
    Fragment,
    Hamiltonian,
    InputError,
    MismatchError,
    as_electrons,
    as_hamiltonian,
    as_real_array,
    frozen,
)

if TYPE_CHECKING:
    from fragkit.circuits import RotationCircuit
    from fragkit.estimate import Estimate

CHEMICAL_ACCURACY = 1.5936e-3
"""One kcal/mol in hartree (CODATA 2018 values of the hartree and the Avogadro constant)."""


@dataclass(frozen=True, eq=False)
class PlanBound:
    """How far a plan is from the best that any measurement can do, all in hartree².

    Parameters
    ----------
    quantum_limit
        Var_ρ(H) of the reference state: no unbiased measurement has a lower cost. Zero for an exact eigenstate.
    design_limit
        Lower bound on the cost of every plan with orbital rotations of any number, or None if not computed.
    note
        How the design limit was found and what it does not prove.
    """

    quantum_limit: float
    design_limit: float | None = None
    note: str = ""


@dataclass(frozen=True, eq=False, repr=False)
class Plan:
    """Fragments to measure, shots for each, and the error they are predicted to give.

    The energy is `constant` plus the sum over fragments of the mean of the fragment's value over its shots.

    Parameters
    ----------
    fragments
        One per circuit; qubit j of a spin register reads column j of `fragment.rotation`.
    constant
        Energy that needs no measurement, hartree.
    shots
        (circuits,) whole numbers, at least one each.
    deviations
        (circuits,) standard deviation of each fragment in the reference state, hartree.
    electrons
        (alpha, beta) electron numbers.
    hamiltonian_digest
        Digest of the Hamiltonian that was planned for.
    residual_norm
        Size of Hamiltonian minus fragments, hartree; operators that vanish at the stated electron numbers are
        taken out first when `sector_exact` is true.
    energy_bound
        Upper bound in hartree on the bias of the energy in any state with the stated electron numbers.
    sector_exact
        True when the fragments equal the Hamiltonian only on states with exactly `electrons`; estimates then
        post-select on the electron numbers.
    target_error
        Standard error the shots were chosen for, hartree; None when a shot or time budget was given.
    reference
        Description of the state whose variances were used.
    bound
        Distance from the quantum limit and, on request, from the best design.
    diagnostics
        Cost in hartree² at the plan's own shot shares in other states, by name, so that over-fitting shows.
    converged, message, method
        How the planning ended.
    seconds
        Time the planning took.
    """

    fragments: tuple[Fragment, ...]
    constant: float
    shots: NDArray[np.int64]
    deviations: NDArray[np.float64]
    electrons: tuple[int, int]
    hamiltonian_digest: str
    residual_norm: float
    energy_bound: float
    sector_exact: bool = False
    target_error: float | None = None
    reference: str = ""
    bound: PlanBound | None = None
    diagnostics: dict[str, float] = field(default_factory=dict)
    converged: bool = True
    message: str = ""
    method: str = ""
    seconds: float = 0.0

    def __post_init__(self) -> None:
        if not self.fragments:
            raise InputError("`fragments` must hold at least one fragment (got none)")
        count, n = len(self.fragments), self.fragments[0].orbitals
        shots = as_real_array(self.shots, "shots", (count,))
        if np.any(shots != np.round(shots)) or np.any(shots < 1):
            raise InputError(f"`shots` must be whole numbers of at least 1 (got a smallest value of {np.min(shots):g})")
        deviations = as_real_array(self.deviations, "deviations", (count,))
        if np.any(deviations < 0):
            raise InputError(f"`deviations` must not be negative (got {np.min(deviations):.3g})")
        whole = shots.astype(np.int64)
        whole.setflags(write=False)
        set_field = object.__setattr__
        set_field(self, "fragments", tuple(self.fragments))
        set_field(self, "shots", whole)
        set_field(self, "deviations", frozen(deviations))
        set_field(self, "electrons", as_electrons(self.electrons, n))

    @property
    def orbitals(self) -> int:
        """Number of spatial orbitals n."""
        return self.fragments[0].orbitals

    @property
    def total_shots(self) -> int:
        """Shots of all circuits together."""
        return int(np.sum(self.shots))

    @property
    def shares(self) -> NDArray[np.float64]:
        """(circuits,) fraction of the shots that each circuit gets."""
        return self.shots / self.total_shots

    @property
    def predicted_error(self) -> float:
        """Standard error in hartree that these shots give in the reference state."""
        return float(np.sqrt(np.sum(self.deviations**2 / self.shots)))

    @property
    def cost(self) -> float:
        """Shots × error² in hartree² with Neyman's shares, (Σ σ)²; the plan's figure of merit (Neyman 1934)."""
        return float(np.sum(self.deviations) ** 2)

    @cached_property
    def digest(self) -> str:
        """Hexadecimal SHA-256 of the fragments and the Hamiltonian's digest: counts belong to one plan."""
        chain = hashlib.sha256(f"{self.hamiltonian_digest} {self.electrons} {self.constant:z.10f}".encode())
        for fragment in self.fragments:
            for array in (fragment.rotation, fragment.coefficients):
                chain.update((np.round(array, 10) + 0.0).tobytes())
        return chain.hexdigest()

    def check_belongs_to(self, hamiltonian: Hamiltonian) -> None:
        """Raise `MismatchError` unless this plan was made for exactly this Hamiltonian."""
        if self.hamiltonian_digest != as_hamiltonian(hamiltonian).digest:
            raise MismatchError(
                f"`hamiltonian` must be the one that was planned for (got digest {hamiltonian.digest[:12]}, plan "
                f"{self.hamiltonian_digest[:12]}); load the integrals that the plan was made from"
            )

    def check_digest(self, digest: str, *, name: str = "counts") -> None:
        """Raise `MismatchError` unless `digest` is this plan's digest."""
        if digest != self.digest:
            raise MismatchError(
                f"`{name}` must come from this plan (got plan digest {digest[:12]}, this plan is {self.digest[:12]}); "
                "load the plan that the circuits were made from"
            )

    def circuits(self, **options: Any) -> "list[RotationCircuit]":
        """The rotation circuits, one per fragment; options as for `fragkit.circuits.rotation_circuits`.

        The electron numbers are the plan's, and exported files name the plan, the Hamiltonian and the shots.
        """
        from fragkit.circuits import rotation_circuits

        notes = {
            "circuit": [f"{k} of 0 ... {len(self) - 1}" for k in range(len(self))],
            "shots": [str(shots) for shots in self.shots],
            "plan digest": self.digest,
            "Hamiltonian digest": self.hamiltonian_digest,
        }
        notes |= options.pop("provenance", None) or {}
        return rotation_circuits(self.fragments, **{"electrons": self.electrons, "provenance": notes} | options)

    def estimate(self, counts: Any, **options: Any) -> "Estimate":
        """Energy and standard error from counts; options as for `fragkit.estimate.estimate`."""
        from fragkit.estimate import estimate

        return estimate(self, counts, **options)

    def save(self, path: Any, *, overwrite: bool = False) -> None:
        """Write the plan as JSON; see `fragkit.files.save_plan`."""
        from fragkit.files import save_plan

        save_plan(self, path, overwrite=overwrite)

    def table(self) -> str:
        """The plan as a text table, one row per circuit."""
        from fragkit.report import plan_table

        return plan_table(self)

    def __len__(self) -> int:
        return len(self.fragments)

    def __repr__(self) -> str:
        state = "" if self.converged else ", NOT converged"
        return (
            f"Plan({len(self)} circuits, {self.total_shots} shots, predicted_error={self.predicted_error:.3g} Ha, "
            f"cost={self.cost:.4g} Ha^2{state})"
        )

    def _repr_html_(self) -> str:
        from fragkit.report import plan_html

        return plan_html(self)


def as_plan(value: Any) -> Plan:
    """Return `value`, an argument named `plan`, if it is a plan; raise `InputError` otherwise."""
    if not isinstance(value, Plan):
        raise InputError(f"`plan` must be a Plan (got {type(value).__name__}); make one with fragkit.plan")
    return value
