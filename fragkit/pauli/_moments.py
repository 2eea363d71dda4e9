"""Variances and covariances of groups of Pauli strings, without ever building a matrix in Fock space.

A string moves each determinant to one other: P_a |b⟩ = ± |b ⊕ x_a⟩. Strings leave the electron-number sector one by
one, so images are compared by their labels.
"""

import numpy as np
from numpy.typing import NDArray

from fragkit.pauli import _state
from fragkit.pauli._groups import Indices
from fragkit.pauli._state import Determinants, QubitState
from fragkit.pauli._terms import Array, Masks, PauliTerms


def group_variance(terms: PauliTerms, group: Indices, weights: Array, state: QubitState) -> float:
    """Variance in hartree² of Σ_a weights[a] P_a over the terms of a group."""
    rank = np.argsort(terms.x[group], kind="stable")
    group, weights = group[rank], weights[rank]
    starts = _starts(terms.x[group])
    second, mean = 0.0, 0.0
    for share, pure in state.parts:
        squared, value = _pure_moments(terms, group, weights, starts, pure)
        second += share * squared
        mean += share * value
    if state.mixed_weight:
        products, means = _mixed_products(terms, group, starts, state)
        second += state.mixed_weight * float(weights @ products @ weights)
        mean += state.mixed_weight * float(means @ weights)
    return max(0.0, second - mean**2)


def group_covariances(terms: PauliTerms, groups: list[Indices], state: QubitState) -> list[Array]:
    """Covariance matrix of the strings of each group (members commute), real and dimensionless."""
    return [_covariance(terms, group, state) for group in groups]


def _covariance(terms: PauliTerms, group: Indices, state: QubitState) -> Array:
    rank = np.argsort(terms.x[group], kind="stable")
    ordered = group[rank]
    starts = _starts(terms.x[ordered])
    products, means = np.zeros((len(group), len(group))), np.zeros(len(group))
    for share, pure in state.parts:
        own_products, own_means = _pure_products(terms, ordered, starts, pure)
        products += share * own_products
        means += share * own_means
    if state.mixed_weight:
        own_products, own_means = _mixed_products(terms, ordered, starts, state)
        products += state.mixed_weight * own_products
        means += state.mixed_weight * own_means
    covariance = np.zeros_like(products)
    covariance[np.ix_(rank, rank)] = products - np.outer(means, means)
    return covariance


def _pure_moments(
    terms: PauliTerms, group: Indices, weights: Array, starts: Indices, state: Determinants
) -> tuple[float, float]:
    """⟨A²⟩ and ⟨A⟩ for A = Σ_a weights[a] P_a; the diagonal parts of the strings of one x mask are added up first."""
    labels, values = [], []
    for members, factors in zip(np.split(group, starts[1:]), np.split(weights, starts[1:]), strict=True):
        diagonal = _signs(terms, members, state.labels).T @ factors
        labels.append(state.labels ^ terms.x[members[0]])
        values.append(diagonal * state.amplitudes)
    reached, own, amplitudes = np.concatenate(labels), state.labels, state.amplitudes
    if terms.qubits > _state.DENSE_QUBITS:
        where, reached = np.unique(reached, return_inverse=True)
        _, own, here = np.intersect1d(where, own, assume_unique=True, return_indices=True)
        amplitudes = amplitudes[here]
    size = int(own.max(initial=0)) + 1
    moved = np.bincount(reached.astype(np.int64), weights=np.concatenate(values), minlength=size)
    return float(moved @ moved), float(moved[own] @ amplitudes)


def _pure_products(terms: PauliTerms, ordered: Indices, starts: Indices, state: Determinants) -> tuple[Array, Array]:
    """⟨P_a P_b⟩ and ⟨P_a⟩ for the members of a group, sorted by x mask."""
    masks = terms.x[ordered]
    stops = np.r_[starts[1:], len(ordered)]
    images = _signs(terms, ordered, state.labels) * state.amplitudes
    products, means = np.zeros((len(ordered), len(ordered))), np.zeros(len(ordered))
    for k, (a, b) in enumerate(zip(starts, stops, strict=True)):
        target = state.find(state.labels ^ masks[a])
        here = np.flatnonzero(target >= 0)
        means[a:b] = images[a:b, here] @ state.amplitudes[target[here]]
        products[a:b, a:b] = images[a:b] @ images[a:b].T
        for c, d in zip(starts[k + 1 :], stops[k + 1 :], strict=True):
            # P_a |b⟩ sits at b ⊕ x_a, which the other string reaches from b ⊕ x_a ⊕ x_c.
            source = state.find(state.labels ^ (masks[a] ^ masks[c]))
            here = np.flatnonzero(source >= 0)
            products[a:b, c:d] = images[a:b, here] @ images[c:d, source[here]].T
            products[c:d, a:b] = products[a:b, c:d].T
    return products, means


def _mixed_products(terms: PauliTerms, ordered: Indices, starts: Indices, state: QubitState) -> tuple[Array, Array]:
    """⟨P_a P_b⟩ and ⟨P_a⟩ in the maximally mixed state, where only diagonal strings have a mean."""
    products, means = np.zeros((len(ordered), len(ordered))), np.zeros(len(ordered))
    phases = np.where(_own_turns(terms, ordered), -1.0, 1.0)
    for a, b in zip(starts, np.r_[starts[1:], len(ordered)], strict=True):
        z = terms.z[ordered[a:b]]
        products[a:b, a:b] = np.outer(phases[a:b], phases[a:b]) * state.mixed_mean(z[:, None] ^ z[None, :])
        if terms.x[ordered[a]] == 0:
            means[a:b] = state.mixed_mean(z)
    return products, means


def _signs(terms: PauliTerms, members: Indices, labels: Masks) -> NDArray[np.float64]:
    """(members, labels) of ±1 with P_a |b⟩ = sign |b ⊕ x_a⟩."""
    turns = np.bitwise_count(terms.z[members][:, None] & labels[None, :]) & 1
    return np.where(turns ^ _own_turns(terms, members)[:, None], -1.0, 1.0)


def _own_turns(terms: PauliTerms, members: Indices) -> NDArray[np.uint8]:
    """1 where i^|x∧z| is −1; it is real for every term of a real symmetric operator."""
    return (np.bitwise_count(terms.x[members] & terms.z[members]) % 4 == 2).astype(np.uint8)


def _starts(masks: Masks) -> Indices:
    """Where each run of equal masks begins."""
    return np.flatnonzero(np.r_[True, masks[1:] != masks[:-1]])
