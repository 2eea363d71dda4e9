"""Groups of Pauli strings that one circuit can measure together, by sorted insertion."""

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from fragkit.core import InputError
from fragkit.pauli._terms import Masks, PauliTerms

Indices = NDArray[np.intp]
Conflict = Callable[[PauliTerms, int, Indices], NDArray[np.bool_]]


def commuting_conflict(terms: PauliTerms, index: int, others: Indices) -> NDArray[np.bool_]:
    """Whether term `index` anticommutes with each of the others: |x∧z'| + |z∧x'| is odd."""
    x, z = terms.x[index], terms.z[index]
    # The parity of a sum is the parity of the symmetric difference.
    return (np.bitwise_count((terms.z[others] & x) ^ (terms.x[others] & z)) & 1).astype(bool)


def qubit_wise_conflict(terms: PauliTerms, index: int, others: Indices) -> NDArray[np.bool_]:
    """Whether term `index` has another letter than each of the others on a qubit where both have one."""
    x, z = terms.x[index], terms.z[index]
    other_x, other_z = terms.x[others], terms.z[others]
    different = (other_x ^ x) | (other_z ^ z)
    return (different & (x | z) & (other_x | other_z)) != 0


CONFLICTS: dict[str, Conflict] = {"qubit-wise": qubit_wise_conflict, "commuting": commuting_conflict}


def sorted_insertion(terms: PauliTerms, kind: str) -> list[Indices]:
    """Disjoint groups: terms by falling size of coefficient, each put into the first group it is compatible with.

    Source: Crawford et al., Quantum 5, 385 (2021). `kind` is "qubit-wise" (one-qubit rotations before the readout) or
    "commuting" (needs two-qubit gates). Returns term indices of each group, largest coefficient first.
    """
    conflict = _conflict(kind)
    # Equal sizes are frequent; rounding noise must not decide their order, so they are compared to 10 digits.
    sizes = np.round(np.abs(terms.coefficients), 10)
    sequence = np.argsort(-sizes, kind="stable")
    group_of = np.zeros(len(terms), dtype=np.intp)
    count = 0
    for position, index in enumerate(sequence):
        earlier = sequence[:position]
        taken = np.zeros(count + 1, dtype=bool)
        taken[group_of[earlier[conflict(terms, int(index), earlier)]]] = True
        group_of[index] = chosen = int(np.argmin(taken))
        count = max(count, chosen + 1)
    return [sequence[group_of[sequence] == k] for k in range(count)]


def overlapping(terms: PauliTerms, groups: list[Indices]) -> list[Indices]:
    """Each group enlarged by all terms that commute with every member, largest coefficients first.

    The first entries of each group are its original ones.
    """
    everything = np.argsort(-np.round(np.abs(terms.coefficients), 10), kind="stable")
    enlarged = []
    for group in groups:
        open_to = np.ones(len(terms), dtype=bool)
        for index in group:
            open_to &= ~commuting_conflict(terms, int(index), np.arange(len(terms)))
        open_to[group] = False
        added: list[int] = []
        for index in everything[open_to[everything]]:
            if not np.any(commuting_conflict(terms, int(index), np.array(added, dtype=np.intp))):
                added.append(int(index))
        enlarged.append(np.concatenate([group, np.array(added, dtype=np.intp)]))
    return enlarged


def measurement_settings(terms: PauliTerms, groups: list[Indices]) -> list[str]:
    """For qubit-wise groups, the letter to measure on each qubit, qubit 0 first; I where any will do.

    Raises
    ------
    InputError
        If the members of a group need different letters on one qubit.
    """
    settings = []
    for k, group in enumerate(groups):
        x = np.bitwise_or.reduce(terms.x[group], initial=np.uint64(0))
        z = np.bitwise_or.reduce(terms.z[group], initial=np.uint64(0))
        if np.any(_strays(terms, group, x, z)):
            raise InputError(
                f"`groups[{k}]` must commute qubit by qubit (got two letters on one qubit); make the groups with "
                'sorted_insertion(terms, "qubit-wise")'
            )
        settings.append("".join("IXZY"[(int(x) >> j & 1) + 2 * (int(z) >> j & 1)] for j in range(terms.qubits)))
    return settings


def _strays(terms: PauliTerms, group: Indices, x: np.uint64, z: np.uint64) -> Masks:
    """Qubits on which a member differs from the letters of the whole group without being empty there."""
    own_x, own_z = terms.x[group], terms.z[group]
    return ((own_x ^ x) | (own_z ^ z)) & (own_x | own_z)


def _conflict(kind: str) -> Conflict:
    if kind not in CONFLICTS:
        raise InputError(f'`kind` must be "qubit-wise" or "commuting" (got {kind!r})')
    return CONFLICTS[kind]
