"""What measuring the Hamiltonian as Pauli strings would cost."""

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fragkit.core import Hamiltonian, InputError, as_positive, frozen
from fragkit.pauli._diagonalise import diagonalising_circuit
from fragkit.pauli._groups import CONFLICTS, Indices, overlapping, sorted_insertion
from fragkit.pauli._moments import group_covariances, group_variance
from fragkit.pauli._split import least_cost_split
from fragkit.pauli._state import qubit_state
from fragkit.pauli._terms import Array, PauliTerms, jordan_wigner

GROUPINGS = (*CONFLICTS, "overlapping")


@dataclass(frozen=True, eq=False, repr=False)
class PauliCosts:
    """Number of Pauli strings and groups, and the cost of measuring them, for comparison with plans.

    Parameters
    ----------
    grouping
        "qubit-wise", "commuting" or "overlapping".
    terms
        Number of Pauli strings, the identity included.
    groups
        Number of groups, that is of circuits.
    cost
        (Σ σ)² over groups in hartree²: shots × error² with Neyman's shares.
    deviations
        (groups,) standard deviation of each group in the state, hartree.
    two_qubit_gates
        (groups,) two-qubit gates before the readout of each circuit, any two qubits joined; zero for "qubit-wise".
    order
        Order of the spin-orbitals on the qubits.
    lower_bound
        For "overlapping", what no division of the coefficients among these groups can go below, hartree²; else None.
    converged, message
        How the division of the coefficients ended; always converged for the other groupings.
    """

    grouping: str
    terms: int
    groups: int
    cost: float
    deviations: Array
    two_qubit_gates: NDArray[np.int64]
    order: str
    lower_bound: float | None
    converged: bool
    message: str

    def shots(self, target_error: float) -> int:
        """Shots for a standard error in hartree: cost / error², rounded up."""
        return int(np.ceil(self.cost / as_positive(target_error, "target_error") ** 2))

    def __repr__(self) -> str:
        state = "" if self.converged else ", NOT converged"
        return (
            f"PauliCosts({self.grouping}, {self.terms} terms in {self.groups} groups, cost={self.cost:.4g} Ha^2{state})"
        )


def pauli_costs(
    hamiltonian: Hamiltonian, state: Any, grouping: str = "qubit-wise", *, order: str = "interleaved"
) -> PauliCosts:
    """Cost of measuring a Hamiltonian as Pauli strings under Jordan-Wigner, the qubit-side alternative to a plan.

    Groups are made by sorted insertion (Crawford et al., Quantum 5, 385 (2021)). "qubit-wise" groups need one-qubit
    rotations before the readout; "commuting" and "overlapping" ones need circuits of two-qubit gates. "overlapping"
    enlarges the commuting groups by every term that fits and divides each coefficient among the groups so that the
    cost for this state is least.

    Parameters
    ----------
    hamiltonian
        At most 31 orbitals.
    state
        A state of `fragkit.reference_state(ham, …)` with or without noise, or a CI vector, alpha strings × beta strings
        in the order of their binary numbers, bit 0 the lowest orbital, as pyscf has it.
    grouping
        "qubit-wise", "commuting" or "overlapping".
    order
        Order of the spin-orbitals on the qubits, "interleaved" or "blocked"; it changes qubit-wise groups only, apart
        from the order of terms of equal size.

    Raises
    ------
    InputError
        If `grouping` or `order` is not known, or the state is of another kind, shape or norm.
    MismatchError
        If the state was made for another Hamiltonian.

    Examples
    --------
    >>> from fragkit.readers import hubbard
    >>> ham = hubbard(2, electrons=(1, 1), periodic=False)
    >>> pauli_costs(ham, np.full((2, 2), 0.5), "qubit-wise", order="blocked")
    PauliCosts(qubit-wise, 11 terms in 3 groups, cost=4 Ha^2)
    """
    if grouping not in GROUPINGS:
        raise InputError(f"`grouping` must be one of {', '.join(map(repr, GROUPINGS))} (got {grouping!r})")
    terms = jordan_wigner(hamiltonian, order=order)
    on_qubits = qubit_state(state, terms, hamiltonian)
    if grouping == "overlapping":
        groups = overlapping(terms, sorted_insertion(terms, "commuting"))
        split = least_cost_split(terms, groups, group_covariances(terms, groups, on_qubits))
        return _result(grouping, terms, groups, split.deviations, split.lower_bound, split.converged, split.message)
    groups = sorted_insertion(terms, grouping)
    variances = [group_variance(terms, group, terms.coefficients[group], on_qubits) for group in groups]
    return _result(grouping, terms, groups, np.sqrt(variances), None, True, "sorted insertion")


def _result(
    grouping: str,
    terms: PauliTerms,
    groups: list[Indices],
    deviations: Array,
    lower_bound: float | None,
    converged: bool,
    message: str,
) -> PauliCosts:
    gates = np.zeros(len(groups), dtype=np.int64)
    if grouping != "qubit-wise":
        gates[:] = [diagonalising_circuit(terms, group).two_qubit_gates for group in groups]
    gates.setflags(write=False)
    return PauliCosts(
        grouping=grouping,
        terms=len(terms) + 1,
        groups=len(groups),
        cost=float(np.sum(deviations)) ** 2,
        deviations=frozen(np.array(deviations)),
        two_qubit_gates=gates,
        order=terms.order,
        lower_bound=lower_bound,
        converged=converged,
        message=message,
    )
