"""A reference state as basis states of the qubits, for the expectation values of Pauli strings."""

from dataclasses import dataclass
from functools import cached_property
from itertools import combinations
from math import comb
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fragkit.core import Hamiltonian, InputError, MismatchError, as_real_array
from fragkit.pauli._terms import Array, Masks, PauliTerms, qubit_places
from fragkit.states import CIState, DeterminantState, MaximallyMixedState, MixedState

DENSE_QUBITS = 22  # up to here a table of all basis states is faster than searching or sorting the ones reached


@dataclass(frozen=True, eq=False)
class Determinants:
    """Amplitudes of a pure state on computational basis states, bit j of a label for qubit j, sorted by label."""

    labels: Masks
    amplitudes: Array

    def find(self, labels: Masks) -> NDArray[np.intp]:
        """Where each label stands in the list, −1 if it is not there."""
        if self._table is not None:
            # Labels beyond the table would be of other qubits; the largest own label bounds the table.
            inside = labels < len(self._table)
            return np.where(inside, self._table[np.where(inside, labels, 0).astype(np.intp)], -1)
        place = np.minimum(np.searchsorted(self.labels, labels), len(self.labels) - 1)
        return np.where(self.labels[place] == labels, place, -1)

    @cached_property
    def _table(self) -> NDArray[np.intp] | None:
        """Position of every basis state, where a table of all of them is small enough to be faster than a search."""
        size = int(self.labels.max(initial=0)) + 1
        if size > 1 << DENSE_QUBITS:
            return None
        table = np.full(size, -1, dtype=np.intp)
        table[self.labels.astype(np.intp)] = np.arange(len(self.labels))
        return table


@dataclass(frozen=True, eq=False)
class QubitState:
    """A mixture of pure states and of the maximally mixed state of the electron-number sector.

    Parameters
    ----------
    parts
        Pairs (weight, pure state).
    mixed_weight
        Weight of the maximally mixed state.
    spin_masks
        Masks of the alpha and the beta qubits.
    parities
        (2, n + 1): mean of Z on k qubits of a spin in the maximally mixed state.
    """

    parts: tuple[tuple[float, Determinants], ...]
    mixed_weight: float
    spin_masks: tuple[np.uint64, np.uint64]
    parities: Array

    def mixed_mean(self, z: Masks) -> Array:
        """Mean of the strings Zᶻ in the maximally mixed state."""
        alpha, beta = (np.bitwise_count(z & mask) for mask in self.spin_masks)
        return self.parities[0, alpha] * self.parities[1, beta]


def qubit_state(state: Any, terms: PauliTerms, hamiltonian: Hamiltonian) -> QubitState:
    """The state on the qubits of `terms`; see `fragkit.pauli.pauli_costs` for what is taken.

    Raises
    ------
    InputError
        If it is of a kind without determinants, or its shape or norm is wrong.
    MismatchError
        If it was made for another Hamiltonian.
    """
    digest = getattr(state, "hamiltonian_digest", None)
    if digest is not None and digest != hamiltonian.digest:
        raise MismatchError(
            f"`state` must belong to this Hamiltonian (got a state of {digest[:12]}, Hamiltonian "
            f"{hamiltonian.digest[:12]}); make it again for these integrals"
        )
    listed = list(zip(state.weights, state.states, strict=True)) if isinstance(state, MixedState) else [(1.0, state)]
    places = qubit_places(terms.orbitals, terms.order)
    masks = tuple(np.bitwise_or.reduce(np.uint64(1) << side.astype(np.uint64)) for side in places)
    mixed = sum(weight for weight, part in listed if isinstance(part, MaximallyMixedState))
    return QubitState(
        parts=tuple(
            (weight, _determinants(part, terms, hamiltonian.electrons))
            for weight, part in listed
            if not isinstance(part, MaximallyMixedState)
        ),
        mixed_weight=float(mixed),
        spin_masks=(masks[0], masks[1]),
        parities=np.array([_mixed_parities(terms.orbitals, count) for count in hamiltonian.electrons]),
    )


def _determinants(state: Any, terms: PauliTerms, electrons: tuple[int, int]) -> Determinants:
    n = terms.orbitals
    filled = [_filled(n, count) for count in electrons]
    alpha, beta = (np.array([sum(1 << int(k) for k in row) for row in rows], dtype=np.uint64) for rows in filled)
    array = as_real_array(_vector(state, filled), "state", (len(alpha), len(beta)))
    norm = float(np.linalg.norm(array))
    if abs(norm - 1.0) > 1e-6:
        raise InputError(f"`state` must be normalised to 1e-6 (got norm {norm:.8g}); divide it by its norm")
    places = qubit_places(n, terms.order)
    labels = _spread(alpha, places[0])[:, None] | _spread(beta, places[1])[None, :]
    # CI vectors create all alpha electrons, then all beta; in interleaved order each pair of an alpha orbital above
    # a beta one costs a sign.
    if terms.order == "interleaved":
        above = np.zeros(array.shape, dtype=np.int64)
        for j in range(n):
            in_beta = (beta >> np.uint64(j) & np.uint64(1)).astype(np.int64)
            above += np.bitwise_count(alpha >> np.uint64(j + 1)).astype(np.int64)[:, None] * in_beta[None, :]
        array = np.where(above & 1, -array, array)
    kept = np.flatnonzero(array)
    labels, amplitudes = labels.ravel()[kept], array.ravel()[kept] / norm
    rank = np.argsort(labels)
    return Determinants(labels[rank], amplitudes[rank])


def _vector(state: Any, filled: list[NDArray[np.intp]]) -> Any:
    if isinstance(state, np.ndarray | list):
        return state
    if isinstance(state, CIState):
        return state.vector
    if isinstance(state, DeterminantState):
        sides = []
        for density, rows in zip((state.density_alpha, state.density_beta), filled, strict=True):
            occupied = np.linalg.eigh(density)[1][:, len(density) - rows.shape[1] :]
            sides.append(np.linalg.det(occupied[rows]))
        return np.outer(*sides)
    raise InputError(
        "`state` must be a CI vector, a CIState, a DeterminantState, or a mixture of these with noise "
        f'(got {type(state).__name__}); for example fragkit.reference_state(hamiltonian, "fci")'
    )


def _filled(orbitals: int, count: int) -> NDArray[np.intp]:
    """(strings, count) occupied orbitals of all strings in the order of their binary numbers, as CI vectors have."""
    rows = sorted(combinations(range(orbitals), count), key=lambda row: sum(1 << k for k in row))
    return np.array(rows, dtype=np.intp).reshape(len(rows), count)


def _spread(strings: Masks, places: NDArray[np.int64]) -> Masks:
    """Strings with the bit of orbital p moved to qubit places[p]."""
    moved = np.zeros_like(strings)
    for p, place in enumerate(places):
        moved |= (strings >> np.uint64(p) & np.uint64(1)) << np.uint64(place)
    return moved


def _mixed_parities(orbitals: int, count: int) -> list[float]:
    """Mean of (−1)^(electrons on k given orbitals) over all strings, for k = 0 … n (a Krawtchouk polynomial)."""
    total = comb(orbitals, count)
    return [
        sum((-1) ** j * comb(k, j) * comb(orbitals - k, count - j) for j in range(min(k, count) + 1)) / total
        for k in range(orbitals + 1)
    ]
