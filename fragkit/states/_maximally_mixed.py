"""The maximally mixed state of an electron-number sector."""

import hashlib
from typing import Any

import numpy as np

from fragkit.core import Hamiltonian, as_count, as_electrons
from fragkit.states._assembly import feature_moments
from fragkit.states._base import Array, Bits, Expectations, ReferenceState, as_shots, seeded
from fragkit.states._principal_minors import independent_spin_moments, uniform_subset_means


class MaximallyMixedState(ReferenceState):
    """1/D on all determinants with the given electron numbers: the end point of depolarisation within the sector.

    Its occupations are two independent uniform draws without replacement, the same in every rotated basis, so its
    moments are combinatorial.

    Examples
    --------
    >>> import numpy as np
    >>> MaximallyMixedState(4, (2, 1)).moments(np.eye(4))[0][-4:]
    array([0.75, 0.75, 0.75, 0.75])
    """

    def __init__(self, orbitals: int, electrons: Any) -> None:
        self.orbitals = as_count(orbitals, "orbitals", minimum=1)
        self.electrons = as_electrons(electrons, self.orbitals)
        self.description = "maximally mixed"
        self.hamiltonian_digest = None
        self.digest = hashlib.sha256(f"maximally mixed {self.orbitals} {self.electrons}".encode()).hexdigest()
        tables = [uniform_subset_means(self.orbitals, k) for k in self.electrons]
        self._moments = feature_moments(independent_spin_moments(tables[0], tables[1], self.orbitals), self.orbitals)

    def moments(self, rotation: Any) -> tuple[Array, Array]:
        """Mean and covariance of all features, the same for every rotation."""
        self._rotation(rotation)
        mean, covariance = self._moments
        return mean.copy(), covariance.copy()

    def sample(self, rotation: Any, shots: int, rng: np.random.Generator | int | None = None) -> Bits:
        """Uniform draws of determinants; see `ReferenceState.sample`."""
        self._rotation(rotation)
        generator = seeded(rng)
        count, n = as_shots(shots), self.orbitals
        sides = []
        for electrons in self.electrons:
            bits = np.zeros((count, n), dtype=np.uint8)
            order = np.argsort(generator.random((count, n)), axis=1)
            np.put_along_axis(bits, order[:, :electrons], 1, axis=1)
            sides.append(bits)
        return np.hstack(sides)

    def energy(self, hamiltonian: Hamiltonian) -> float:
        """Mean of the Hamiltonian's eigenvalues in the sector, hartree."""
        self._check_hamiltonian(hamiltonian)
        n, (a, b) = self.orbitals, self.electrons
        g = hamiltonian.two_body
        direct, exchange = float(np.einsum("pprr->", g)), float(np.einsum("prrp->", g))
        energy = hamiltonian.constant + float(np.trace(hamiltonian.one_body)) * (a + b) / n
        energy += direct * a * b / n**2
        if n > 1:
            energy += 0.5 * (direct - exchange) * (a * (a - 1) + b * (b - 1)) / (n * (n - 1))
        return energy

    def variance(self, hamiltonian: Hamiltonian) -> float:
        """Variance of the Hamiltonian's eigenvalues in the sector, hartree², from the integrals alone.

        H splits into parts that belong to different representations of the two groups of orbital rotations (one
        per spin); under the maximally mixed state these are uncorrelated, and each variance is the squared norm of
        the part times a number that a diagonal example gives (Schur's lemma).
        """
        self._check_hamiltonian(hamiltonian)
        n = self.orbitals
        g = hamiltonian.two_body
        coulomb = np.einsum("pqrr->pq", g)
        exchange = np.einsum("prrq->pq", g)
        unit = np.eye(n)

        # Opposite spins: a traceless × traceless part, and one-body parts seen by each spin.
        trace = np.trace(coulomb) / n**2
        crossed = g - np.einsum("pq,rs->pqrs", coulomb, unit) / n - np.einsum("pq,rs->pqrs", unit, coulomb) / n
        crossed = crossed + trace * np.einsum("pq,rs->pqrs", unit, unit)
        alpha, beta = (k * (n - k) / (n * (n - 1)) if n > 1 else 0.0 for k in self.electrons)
        variance = alpha * beta * float(np.vdot(crossed, crossed))

        # Same spin: an antisymmetrised two-body part without traces, and one more one-body part.
        traced = _traceless(coulomb - exchange)
        pair = g - g.transpose(0, 3, 2, 1)
        scalar = float(np.trace(coulomb - exchange)) / (n * (n - 1)) if n > 1 else 0.0
        pair = pair - scalar * (np.einsum("pq,rs->pqrs", unit, unit) - np.einsum("ps,rq->pqrs", unit, unit))
        if n > 2:
            spread = np.einsum("pq,rs->pqrs", traced, unit) + np.einsum("pq,rs->pqrs", unit, traced)
            pair = pair - (spread - spread.transpose(0, 3, 2, 1)) / (n - 2)
        pair_norm = 0.25 * float(np.vdot(pair, pair))

        for electrons, others in (self.electrons, self.electrons[::-1]):
            k = electrons
            field = hamiltonian.one_body + others / n * coulomb
            if n > 2:
                field = field + (k - 1) / (n - 2) * traced
            field = _traceless(field)
            if n > 1:
                variance += k * (n - k) / (n * (n - 1)) * float(np.vdot(field, field))
            if n > 3:
                ways = k * (k - 1) * (n - k) * (n - k - 1)
                variance += ways / (n * (n - 1) * (n - 2) * (n - 3)) * pair_norm
        return variance

    def _expectations(self, rotations: Array, coefficients: Array) -> Expectations:
        return _UniformExpectations(*self._moments, coefficients, self.orbitals)


def _traceless(matrix: Array) -> Array:
    return matrix - np.eye(len(matrix)) * (np.trace(matrix) / len(matrix))


class _UniformExpectations(Expectations):
    def __init__(self, mean: Array, covariance: Array, coefficients: Array, orbitals: int) -> None:
        self._features = mean
        self._products = coefficients @ covariance
        self._variances = np.einsum("kf,kf->k", self._products, coefficients)
        self._orbitals = orbitals
        self.mean = coefficients @ mean

    def about(self, center: Array) -> tuple[Array, Array, Array]:
        """See `Expectations.about`; nothing depends on the rotation."""
        offset = self.mean - center
        products = self._products + np.outer(offset, self._features)
        return self._variances + offset**2, products, np.zeros((len(center), self._orbitals, self._orbitals))
