"""A Hamiltonian split into fragments, with what is left over."""

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from fragkit.core._errors import InputError, MismatchError
from fragkit.core._fragment import Fragment
from fragkit.core._hamiltonian import Hamiltonian
from fragkit.core._one_norm import one_norm
from fragkit.core._openfermion import interaction_operator
from fragkit.core._operator_tensors import OperatorTensors, energy_bound, fragment_tensors, residual_norm


@dataclass(frozen=True, eq=False, repr=False)
class Fragmentation:
    """Fragments whose sum with `constant` is the Hamiltonian up to a residual that is stated.

    Made by `fragkit.fragment` or by `Fragmentation.of`, which measure the residual.

    Parameters
    ----------
    fragments
        The fragments, all of the same number of orbitals.
    constant
        Energy that needs no measurement, hartree.
    electrons
        (alpha, beta) of the Hamiltonian.
    hamiltonian_digest
        Digest of the Hamiltonian that was split.
    residual_norm
        Size of Hamiltonian minus fragments, hartree: the Frobenius norm of the two-electron tensor's residual for
        fragments ½ Σ λ_ij n_i n_j, and zero exactly when the operators are equal.
    energy_bound
        Upper bound in hartree on the energy error in any state of the given electron numbers.
    converged, message
        Whether the strategy reached its tolerance, and a sentence that says how it ended.
    method
        The algorithm that made the fragments.
    iterations, seconds
        Work done.
    """

    fragments: tuple[Fragment, ...]
    constant: float
    electrons: tuple[int, int]
    hamiltonian_digest: str
    residual_norm: float
    energy_bound: float
    converged: bool
    message: str
    method: str = ""
    iterations: int = 0
    seconds: float = 0.0

    @classmethod
    def of(
        cls,
        hamiltonian: Hamiltonian,
        fragments: Sequence[Fragment],
        *,
        converged: bool = True,
        message: str = "given fragments",
        method: str = "given",
        iterations: int = 0,
        seconds: float = 0.0,
    ) -> "Fragmentation":
        """Wrap fragments of `hamiltonian`, measuring the residual and the bound on the energy error."""
        if not fragments:
            raise InputError("`fragments` must hold at least one fragment (got none)")
        for k, fragment in enumerate(fragments):
            if fragment.orbitals != hamiltonian.orbitals:
                raise InputError(
                    f"`fragments[{k}]` must have {hamiltonian.orbitals} orbitals like the Hamiltonian "
                    f"(got {fragment.orbitals})"
                )
        target = OperatorTensors(hamiltonian.one_body, hamiltonian.two_body, hamiltonian.two_body)
        residual = target - fragment_tensors(fragments)
        return cls(
            fragments=tuple(fragments),
            constant=hamiltonian.constant,
            electrons=hamiltonian.electrons,
            hamiltonian_digest=hamiltonian.digest,
            residual_norm=residual_norm(residual),
            energy_bound=energy_bound(residual, hamiltonian.electrons),
            converged=converged,
            message=message,
            method=method,
            iterations=iterations,
            seconds=seconds,
        )

    @property
    def orbitals(self) -> int:
        """Number of spatial orbitals n."""
        return self.fragments[0].orbitals

    @property
    def one_norm(self) -> float:
        """Sum of |coefficients| over reflections, hartree, as block encoding pays it; see `fragkit.core.one_norm`."""
        return one_norm(self.fragments)

    def check_belongs_to(self, hamiltonian: Hamiltonian) -> None:
        """Raise `MismatchError` unless these are fragments of exactly this Hamiltonian."""
        if self.hamiltonian_digest != hamiltonian.digest:
            raise MismatchError(
                "`fragments` must be fitted to the Hamiltonian they are used with (got digest "
                f"{self.hamiltonian_digest[:12]}, Hamiltonian {hamiltonian.digest[:12]}); orbitals differ between "
                "runs, so save the integrals with the fragments and load both"
            )

    def to_hamiltonian(self) -> Hamiltonian:
        """The Hamiltonian that the fragments and the constant sum to.

        Raises `InputError` if their same-spin and opposite-spin parts are not those of one set of integrals,
        as happens for plans; `to_openfermion` serves those.
        """
        tensors = fragment_tensors(self.fragments)
        opposite = tensors.opposite_spin
        error = float(np.max(np.abs(tensors.exchange_odd - (opposite - opposite.transpose(0, 3, 2, 1)))))
        if error > 1e-8:
            raise InputError(
                "the fragments must have same-spin parts that match their opposite-spin parts to be one set of "
                f"integrals (got a difference of {error:.3g}); use to_openfermion() for the operator"
            )
        return Hamiltonian(self.constant, tensors.one_body, opposite, electrons=self.electrons)

    def to_openfermion(self) -> Any:
        """The sum of the fragments as `openfermion.InteractionOperator`, spin-orbitals interleaved."""
        tensors = fragment_tensors(self.fragments)
        operator = interaction_operator(self.constant, tensors.one_body, tensors.opposite_spin)
        half = 0.5 * tensors.same_spin.transpose(0, 2, 3, 1)
        for s in (0, 1):
            operator.two_body_tensor[s::2, s::2, s::2, s::2] = half
        return operator

    def __len__(self) -> int:
        return len(self.fragments)

    def __getitem__(self, index: int) -> Fragment:
        return self.fragments[index]

    def __iter__(self) -> Iterator[Fragment]:
        return iter(self.fragments)

    def __repr__(self) -> str:
        state = "converged" if self.converged else "NOT converged"
        return (
            f"Fragmentation({len(self)} fragments, orbitals={self.orbitals}, residual_norm={self.residual_norm:.3g} Ha"
            f", energy_bound={self.energy_bound:.3g} Ha, {state}, method={self.method!r})"
        )
