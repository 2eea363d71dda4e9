"""Variances of groups of Pauli strings in a real CI vector, without ever building a matrix in Fock space."""

from dataclasses import dataclass
from itertools import combinations
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fragkit.core import InputError, as_real_array
from fragkit.pauli._groups import Indices
from fragkit.pauli._terms import Array, Masks, PauliTerms, qubit_places

_DENSE_QUBITS = 22  # up to here a table of all basis states is faster than sorting the ones reached


@dataclass(frozen=True, eq=False)
class Determinants:
    """Amplitudes of a state on computational basis states, bit j of a label for qubit j, sorted by label."""

    labels: Masks
    amplitudes: Array


def determinants(vector: Any, terms: PauliTerms, electrons: tuple[int, int]) -> Determinants:
    """The basis states of a CI vector (alpha strings × beta strings, bit 0 the lowest orbital) and their amplitudes."""
    n = terms.orbitals
    alpha, beta = (_strings(n, count) for count in electrons)
    array = as_real_array(vector, "state", (len(alpha), len(beta)))
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
            filled = (beta >> np.uint64(j) & np.uint64(1)).astype(np.int64)
            above += np.bitwise_count(alpha >> np.uint64(j + 1)).astype(np.int64)[:, None] * filled[None, :]
        array = np.where(above & 1, -array, array)
    kept = np.flatnonzero(array)
    labels, amplitudes = labels.ravel()[kept], array.ravel()[kept] / norm
    rank = np.argsort(labels)
    return Determinants(labels[rank], amplitudes[rank])


def group_variance(terms: PauliTerms, group: Indices, weights: Array, state: Determinants) -> float:
    """Variance in hartree² of Σ_a weights[a] P_a over the terms of a group.

    The strings of one x mask move all determinants alike, so their diagonal parts are added up first.
    """
    rank = np.argsort(terms.x[group], kind="stable")
    group, weights = group[rank], weights[rank]
    starts = np.flatnonzero(np.r_[True, np.diff(terms.x[group]) != 0])
    labels, values = [], []
    for members, factors in zip(np.split(group, starts[1:]), np.split(weights, starts[1:]), strict=True):
        diagonal = string_signs(terms, members, state.labels).T @ factors
        labels.append(state.labels ^ terms.x[members[0]])
        values.append(diagonal * state.amplitudes)
    all_labels, all_values = np.concatenate(labels), np.concatenate(values)
    own_labels = state.labels
    if terms.qubits > _DENSE_QUBITS:
        where, all_labels = np.unique(all_labels, return_inverse=True)
        position = np.minimum(np.searchsorted(where, own_labels), len(where) - 1)
        found = where[position] == own_labels
        own_labels, amplitudes = position[found], state.amplitudes[found]
    else:
        amplitudes = state.amplitudes
    moved = np.bincount(all_labels.astype(np.int64), weights=all_values, minlength=int(own_labels.max(initial=0)) + 1)
    mean = float(moved[own_labels] @ amplitudes)
    return max(0.0, float(moved @ moved) - mean**2)


def string_signs(terms: PauliTerms, members: Indices, labels: Masks) -> NDArray[np.float64]:
    """(members, labels) of ±1 with P_a |b⟩ = sign |b ⊕ x_a⟩."""
    turns = np.bitwise_count(terms.z[members][:, None] & labels[None, :]) & 1
    own = (np.bitwise_count(terms.x[members] & terms.z[members]) % 4 == 2).astype(np.uint8)
    return 1.0 - 2.0 * (turns ^ own[:, None])


def _strings(orbitals: int, count: int) -> Masks:
    """Occupation strings in ascending order of their value, as CI vectors list them."""
    values = [sum(1 << k for k in filled) for filled in combinations(range(orbitals), count)]
    return np.array(sorted(values), dtype=np.uint64)


def _spread(strings: Masks, places: NDArray[np.int64]) -> Masks:
    """Strings with the bit of orbital p moved to qubit places[p]."""
    moved = np.zeros_like(strings)
    for p, place in enumerate(places):
        moved |= (strings >> np.uint64(p) & np.uint64(1)) << np.uint64(place)
    return moved
