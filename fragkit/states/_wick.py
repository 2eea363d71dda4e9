"""States without correlation: everything follows from the one-particle density matrices by Wick's theorem."""

from abc import ABC, abstractmethod
from typing import Any

import numpy as np

from fragkit.core import Hamiltonian
from fragkit.states._assembly import feature_moments
from fragkit.states._base import Array, Bits, Expectations, ReferenceState, as_shots, seeded
from fragkit.states._principal_minors import all_principal_minors, independent_spin_moments
from fragkit.states._wick_expectations import WickExpectations


class WickState(ReferenceState, ABC):
    """Number-conserving Gaussian states: two independent spins with given one-particle density matrices.

    Means of products of different occupations of one spin are principal minors of the rotated density matrix
    UᵀDU, so no CI vector is needed at any size.
    """

    density_alpha: Array  # (n, n), ⟨a†_p a_q⟩ of the alpha spin
    density_beta: Array

    @abstractmethod
    def __init__(self) -> None: ...

    def moments(self, rotation: Any) -> tuple[Array, Array]:
        """Mean and covariance of all features; see `ReferenceState.moments`."""
        u = self._rotation(rotation)
        tables = [all_principal_minors(u.T @ d @ u) for d in (self.density_alpha, self.density_beta)]
        return feature_moments(independent_spin_moments(tables[0], tables[1], self.orbitals), self.orbitals)

    def sample(self, rotation: Any, shots: int, rng: np.random.Generator | int | None = None) -> Bits:
        """Ideal measurement results by exact determinantal sampling; see `ReferenceState.sample`.

        Occupations of a determinant are a determinantal point process with the rotated density matrix as kernel
        (Hough, Krishnapur, Peres & Virág, Probability Surveys 3, 206 (2006), algorithm 18).
        """
        u = self._rotation(rotation)
        count = as_shots(shots)
        generator = seeded(rng)
        sides = [_determinantal_sample(u.T @ d @ u, count, generator) for d in (self.density_alpha, self.density_beta)]
        return np.hstack(sides)

    def energy(self, hamiltonian: Hamiltonian) -> float:
        """Expectation value of the Hamiltonian, hartree."""
        self._check_hamiltonian(hamiltonian)
        g = hamiltonian.two_body
        total = self.density_alpha + self.density_beta
        energy = np.vdot(hamiltonian.one_body, total)
        energy += 0.5 * np.vdot(total, np.einsum("pqrs,rs->pq", g, total))
        for density in (self.density_alpha, self.density_beta):
            energy -= 0.5 * np.vdot(density, np.einsum("psrq,rs->pq", g, density))
        return float(energy) + hamiltonian.constant

    def variance(self, hamiltonian: Hamiltonian) -> float:
        """Variance of the Hamiltonian, hartree².

        In natural orbitals with occupations n_p: Σ_σ Σ F_pq² n_p (1 − n_q) + Σ (pq|rs)² n_pα (1 − n_qα) n_rβ (1 − n_sβ)
        + ¼ Σ_σ Σ ((pq|rs) − (ps|rq))² n_p n_r (1 − n_q)(1 − n_s), F the mean-field matrix.
        """
        self._check_hamiltonian(hamiltonian)
        g = hamiltonian.two_body
        densities = (self.density_alpha, self.density_beta)
        coulomb = np.einsum("pqrs,rs->pq", g, densities[0] + densities[1])
        natural = [np.linalg.eigh(density) for density in densities]
        filled = [np.clip(occupations, 0.0, 1.0) for occupations, _ in natural]
        total = 0.0
        half = [np.einsum("pqrs,pi,qj->ijrs", g, c, c, optimize=True) for _, c in natural]
        for spin, density in enumerate(densities):
            orbitals, n = natural[spin][1], filled[spin]
            field = hamiltonian.one_body + coulomb - np.einsum("psrq,rs->pq", g, density)
            field = orbitals.T @ field @ orbitals
            total += np.einsum("pq,p,q->", field**2, n, 1.0 - n)
            same = np.einsum("ijrs,rk,sl->ijkl", half[spin], orbitals, orbitals, optimize=True)
            same = (same - same.transpose(0, 3, 2, 1)) ** 2
            total += 0.25 * np.einsum("pqrs,p,r,q,s->", same, n, n, 1.0 - n, 1.0 - n, optimize=True)
        other = natural[1][1]
        cross = np.einsum("ijrs,rk,sl->ijkl", half[0], other, other, optimize=True) ** 2
        a, b = filled
        total += np.einsum("pqrs,p,q,r,s->", cross, a, 1.0 - a, b, 1.0 - b, optimize=True)
        return float(total)

    def _expectations(self, rotations: Array, coefficients: Array) -> Expectations:
        return WickExpectations(self.density_alpha, self.density_beta, rotations, coefficients)

    def _batch(self) -> int:
        # The largest temporary has n³ entries per rotation.
        return max(1, 80_000 // self.orbitals**3)


def _determinantal_sample(density: Array, shots: int, generator: np.random.Generator) -> Bits:
    """Occupations (shots, n) of one spin, its density matrix in the measured basis given."""
    filled, orbitals = np.linalg.eigh(density)
    filled = np.clip(filled, 0.0, 1.0)
    # Each natural orbital is present with its occupation; then the chosen ones are a projector.
    present = generator.random((shots, len(filled))) < np.where(filled > 1.0 - 1e-12, 1.0, filled)
    present &= filled > 1e-12
    bits = np.zeros((shots, len(filled)), dtype=np.uint8)
    chunk = max(1, 4_000_000 // len(filled) ** 2)
    for start in range(0, shots, chunk):
        part = present[start : start + chunk]
        _, which = np.unique(part, axis=0, return_inverse=True)
        for kind in range(int(which.max(initial=-1)) + 1):
            rows = np.flatnonzero(which == kind)
            chosen = orbitals[:, part[rows[0]]]
            bits[start + rows] = _projection_sample(chosen @ chosen.T, chosen.shape[1], len(rows), generator)
    return bits


def _projection_sample(projector: Array, rank: int, shots: int, generator: np.random.Generator) -> Bits:
    """Draw `rank` orbitals one after another; given those drawn, the weights are the Schur complement's diagonal."""
    n = len(projector)
    bits = np.zeros((shots, n), dtype=np.uint8)
    left = np.tile(np.diag(projector), (shots, 1))
    rows = np.zeros((shots, rank, n))
    every = np.arange(shots)
    for step in range(rank):
        left = np.where(bits == 1, 0.0, np.clip(left, 0.0, None))
        ladder = np.cumsum(left, axis=1)
        threshold = generator.random(shots) * ladder[:, -1]
        # Rounding must not pick an orbital of weight zero at the end of the ladder.
        drawn = np.minimum((ladder <= threshold[:, None]).sum(axis=1), n - 1)
        bits[every, drawn] = 1
        known = rows[:, :step]
        row = projector[drawn] - np.einsum("st,stj->sj", known[every, :, drawn], known)
        rows[:, step] = row / np.sqrt(left[every, drawn])[:, None]
        left = left - rows[:, step] ** 2
    return bits
