"""Mixtures of reference states."""

import hashlib
from collections.abc import Iterable
from typing import Any

import numpy as np

from fragkit.core import Hamiltonian, InputError, feature_count
from fragkit.states._base import Array, Bits, Expectations, ReferenceState, as_shots, as_weight, seeded


def mixture(parts: Iterable[tuple[float, ReferenceState]]) -> ReferenceState:
    """The mixed state Σ_i w_i ρ_i of states with the same orbitals and electron numbers.

    Parameters
    ----------
    parts
        Pairs (weight, state); weights in 0 … 1 that add up to 1 (to 1e-9; parts of weight 0 are left out).

    Raises
    ------
    InputError
        If the list is empty, the weights do not add up to 1, or the states do not fit together.

    Examples
    --------
    >>> from fragkit.states import MaximallyMixedState
    >>> mixture([(1.0, MaximallyMixedState(2, (1, 1)))])
    MaximallyMixedState(maximally mixed, orbitals=2, electrons=(1, 1))
    """
    try:
        listed = [(as_weight(weight, "weight"), state) for weight, state in parts]
    except TypeError as error:
        raise InputError(f"`parts` must be a list of pairs (weight, state) (got {parts!r})") from error
    total = sum(weight for weight, _ in listed)
    if not listed or abs(total - 1.0) > 1e-9:
        raise InputError(f"`parts` must have weights that add up to 1 (got {total:.10g}); rescale them")
    for _, state in listed:
        if not isinstance(state, ReferenceState):
            raise InputError(f"`parts` must be pairs (weight, state) (got a {type(state).__name__} as a state)")
    first = listed[0][1]
    if any((s.orbitals, s.electrons) != (first.orbitals, first.electrons) for _, s in listed):
        kinds = sorted({(s.orbitals, s.electrons) for _, s in listed})
        raise InputError(f"`parts` must have the same orbitals and electron numbers (got {kinds})")
    digests = {s.hamiltonian_digest for _, s in listed} - {None}
    if len(digests) > 1:
        raise InputError("`parts` must belong to one Hamiltonian (got states made for different ones)")
    flat: dict[str, tuple[float, ReferenceState]] = {}
    for weight, state in listed:
        inner = zip(state.weights, state.states, strict=True) if isinstance(state, MixedState) else [(1.0, state)]
        for share, leaf in inner:
            so_far = flat.get(leaf.digest, (0.0, leaf))[0]
            flat[leaf.digest] = (so_far + weight * share / total, leaf)
    kept = [(weight, state) for weight, state in flat.values() if weight > 0.0]
    return kept[0][1] if len(kept) == 1 else MixedState(tuple(w for w, _ in kept), tuple(s for _, s in kept))


class MixedState(ReferenceState):
    """A mixture with `weights` and `states`; made by `mixture` or `with_noise`."""

    def __init__(self, weights: tuple[float, ...], states: tuple[ReferenceState, ...]) -> None:
        self.weights = weights
        self.states = states
        self.orbitals = states[0].orbitals
        self.electrons = states[0].electrons
        self.description = " + ".join(f"{w:.6g} × {s.description}" for w, s in zip(weights, states, strict=True))
        self.hamiltonian_digest = next((s.hamiltonian_digest for s in states if s.hamiltonian_digest), None)
        text = " ".join(f"{w!r}:{s.digest}" for w, s in zip(weights, states, strict=True))
        self.digest = hashlib.sha256(f"mixed {text}".encode()).hexdigest()

    def moments(self, rotation: Any) -> tuple[Array, Array]:
        """Mean and covariance of all features, the spread between the states included."""
        u = self._rotation(rotation)
        mean = np.zeros(feature_count(self.orbitals))
        parts = [state.moments(u) for state in self.states]
        for weight, (part, _) in zip(self.weights, parts, strict=True):
            mean += weight * part
        covariance = np.zeros((len(mean), len(mean)))
        for weight, (part, spread) in zip(self.weights, parts, strict=True):
            covariance += weight * (spread + np.outer(part - mean, part - mean))
        return mean, covariance

    def sample(self, rotation: Any, shots: int, rng: np.random.Generator | int | None = None) -> Bits:
        """Ideal measurement results; every shot draws its state by weight."""
        generator = seeded(rng)
        total = as_shots(shots)
        counts = generator.multinomial(total, np.array(self.weights) / sum(self.weights))
        drawn = [s.sample(rotation, int(k), generator) for s, k in zip(self.states, counts, strict=True)]
        return np.concatenate(drawn)[generator.permutation(total)]

    def energy(self, hamiltonian: Hamiltonian) -> float:
        """Expectation value of the Hamiltonian, hartree."""
        return float(sum(w * s.energy(hamiltonian) for w, s in zip(self.weights, self.states, strict=True)))

    def variance(self, hamiltonian: Hamiltonian) -> float:
        """Variance of the Hamiltonian, hartree², the spread between the states' energies included."""
        energies = [state.energy(hamiltonian) for state in self.states]
        center = sum(w * e for w, e in zip(self.weights, energies, strict=True))
        parts = zip(self.weights, self.states, energies, strict=True)
        return float(sum(w * (s.variance(hamiltonian) + (e - center) ** 2) for w, s, e in parts))

    def _batch(self) -> int:
        return min(state._batch() for state in self.states)

    def _expectations(self, rotations: Array, coefficients: Array) -> Expectations:
        return _MixedExpectations(self.weights, [s._expectations(rotations, coefficients) for s in self.states])


class _MixedExpectations(Expectations):
    def __init__(self, weights: tuple[float, ...], parts: list[Expectations]) -> None:
        self._weights = weights
        self._parts = parts
        self.mean = np.sum([w * part.mean for w, part in zip(weights, parts, strict=True)], axis=0)

    def about(self, center: Array) -> tuple[Array, Array, Array]:
        """See `Expectations.about`: about a common centre, expectation values of a mixture simply add."""
        parts = [part.about(center) for part in self._parts]
        second, product, gradient = (
            np.sum([w * part[k] for w, part in zip(self._weights, parts, strict=True)], axis=0) for k in range(3)
        )
        return second, product, gradient
