"""Circuits that turn a commuting group of Pauli strings into strings of Z, so that one readout gives all of them."""

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fragkit.core import InputError
from fragkit.pauli._groups import Indices, commuting_conflict
from fragkit.pauli._terms import Masks, PauliTerms

Gate = tuple[str, tuple[int, ...]]
Bits = NDArray[np.bool_]


@dataclass(frozen=True, eq=False, repr=False)
class GroupCircuit:
    """Gates to run before a readout, and what the readout means.

    Parameters
    ----------
    gates
        ("h" | "s" | "cx" | "cz", qubits) in the order of running; any pair of qubits may be joined.
    z
        (members,) masks: string a is measured as signs[a] × (−1)^(ones among the qubits of z[a]).
    signs
        (members,) of ±1.
    qubits
        Number of qubits.
    """

    gates: tuple[Gate, ...]
    z: Masks
    signs: NDArray[np.int64]
    qubits: int

    @property
    def two_qubit_gates(self) -> int:
        """Number of cx and cz gates."""
        return sum(len(place) == 2 for _, place in self.gates)

    def to_openqasm3(self) -> str:
        """The circuit as OpenQASM 3, a readout of all qubits at its end."""
        lines = ["OPENQASM 3.0;", 'include "stdgates.inc";', f"qubit[{self.qubits}] q;", f"bit[{self.qubits}] c;"]
        lines += [f"{name} {', '.join(f'q[{k}]' for k in place)};" for name, place in self.gates]
        return "\n".join([*lines, "c = measure q;"]) + "\n"

    def __repr__(self) -> str:
        return f"GroupCircuit({len(self.z)} strings, {len(self.gates)} gates, {self.two_qubit_gates} on two qubits)"


def diagonalising_circuit(terms: PauliTerms, group: Indices) -> GroupCircuit:
    """The circuit that measures all strings of a commuting group at once.

    Generators of the group are brought to X on one qubit each by row operations, which are free, and by Hadamard,
    CX, CZ and S gates, and then to Z by Hadamards (van den Berg & Temme, Quantum 4, 322 (2020)).

    Raises
    ------
    InputError
        If the strings do not commute.

    Examples
    --------
    >>> from fragkit.pauli import jordan_wigner
    >>> from fragkit.readers import hubbard
    >>> terms = jordan_wigner(hubbard(2, electrons=(1, 1)))
    >>> hopping = np.array([k for k in range(len(terms)) if terms.label(k) in ("XXII", "IIXX")])
    >>> diagonalising_circuit(terms, hopping)
    GroupCircuit(2 strings, 4 gates, 2 on two qubits)
    """
    for position, index in enumerate(group):
        if np.any(commuting_conflict(terms, int(index), group[:position])):
            raise InputError("`group` must hold commuting strings (got two that do not); see sorted_insertion")
    shifts = np.arange(terms.qubits, dtype=np.uint64)
    all_x = (terms.x[group][:, None] >> shifts & np.uint64(1)).astype(bool)
    all_z = (terms.z[group][:, None] >> shifts & np.uint64(1)).astype(bool)
    gates = _gates(*_generators(all_x, all_z))
    signs = _conjugate(all_x, all_z, gates)
    return GroupCircuit(
        gates=tuple(gates),
        z=(all_z.astype(np.uint64) << shifts).sum(axis=1, dtype=np.uint64),
        signs=np.where(signs, -1, 1),
        qubits=terms.qubits,
    )


def _generators(x: Bits, z: Bits) -> tuple[Bits, Bits]:
    """Independent rows that generate the strings up to sign, rows with an X part first and in echelon form."""
    rows = np.hstack([x, z])
    rank = 0
    for column in range(rows.shape[1]):
        below = np.flatnonzero(rows[rank:, column])
        if not below.size:
            continue
        rows[[rank, rank + below[0]]] = rows[[rank + below[0], rank]]
        others = np.flatnonzero(rows[:, column])
        rows[others[others != rank]] ^= rows[rank]
        rank += 1
        if rank == len(rows):
            break
    n = x.shape[1]
    return rows[:rank, :n], rows[:rank, n:]


def _gates(x: Bits, z: Bits) -> list[Gate]:
    """Gates that bring independent commuting generators to Z on one qubit each; x and z are used up."""
    gates: list[Gate] = []

    def apply(name: str, *place: int) -> None:
        gates.append((name, place))
        _conjugate(x, z, [(name, place)])

    pivots = [int(np.argmax(row)) for row in x if np.any(row)]
    # Rows of Z alone: echelon form has cleared the pivot of each from the others, and its qubit carries no pivot of
    # X, or can be freed of it by the X rows below; a Hadamard turns the pivot into X.
    for row in range(len(pivots), len(x)):
        free = [q for q in np.flatnonzero(z[row]) if q not in pivots]
        pivot = int(free[0])
        apply("h", pivot)
        for other in range(len(x)):
            if other != row and x[other, pivot]:
                x[other] ^= x[row]
                z[other] ^= z[row]
        pivots.append(pivot)
    for row, pivot in enumerate(pivots):
        for target in np.flatnonzero(x[row]):
            if target != pivot:
                apply("cx", pivot, int(target))
    for row, pivot in enumerate(pivots):
        for target in np.flatnonzero(z[row]):
            if target == pivot:
                apply("s", pivot)
            else:
                apply("cz", pivot, int(target))
        apply("h", pivot)
    return gates


def _conjugate(x: Bits, z: Bits, gates: Sequence[Gate]) -> Bits:
    """Carry strings through gates in place and return which of them changed sign (Aaronson & Gottesman, 2004)."""
    flipped = np.zeros(len(x), dtype=bool)
    for name, place in gates:
        a, b = place[0], place[-1]
        if name == "h":
            flipped ^= x[:, a] & z[:, a]
            x[:, a], z[:, a] = z[:, a].copy(), x[:, a].copy()
        elif name == "s":
            flipped ^= x[:, a] & z[:, a]
            z[:, a] ^= x[:, a]
        elif name == "cx":
            flipped ^= x[:, a] & z[:, b] & ~(x[:, b] ^ z[:, a])
            x[:, b] ^= x[:, a]
            z[:, a] ^= z[:, b]
        else:  # cz
            flipped ^= x[:, a] & x[:, b] & (z[:, a] ^ z[:, b])
            z[:, a] ^= x[:, b]
            z[:, b] ^= x[:, a]
    return flipped
