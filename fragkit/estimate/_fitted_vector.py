"""A CI vector that fits all counts of a plan best, for spaces that are small against the number of shots."""

from math import comb

import numpy as np
from numpy.typing import NDArray

from fragkit.estimate._counts import Counts
from fragkit.planning import Plan
from fragkit.states import CIState, ReferenceState, compound_matrix, string_ranks

Array = NDArray[np.float64]

SHOTS_PER_DETERMINANT = 10
"""Least number of shots for each determinant; with fewer, a vector would fit the noise."""

MOST_DETERMINANTS = 5000
"""Largest space; the fit stores a distribution for each circuit."""

_SWEEPS = 300
_SETTLED = 1e-7


def can_fit_vector(plan: Plan, counts: Counts) -> bool:
    """Whether the space is small enough for `fitted_state`."""
    n, (alpha, beta) = plan.orbitals, plan.electrons
    size = comb(n, alpha) * comb(n, beta)
    return size <= MOST_DETERMINANTS and counts.total_shots >= SHOTS_PER_DETERMINANT * size


def fitted_state(plan: Plan, counts: Counts, density: tuple[Array, Array]) -> ReferenceState:
    """The state (1 − q) |ψ⟩⟨ψ| + q · 1/D, real ψ, of high likelihood for counts within the sector.

    Iterates ψ ← R ψ, R = Σ_m U_mᵀ diag(n_m / p_m) U_m, from the determinant of the natural orbitals, and updates q by
    expectation and maximisation (Lvovsky, J. Opt. B 6, S556 (2004), for the iteration with density matrices). A fixed
    number of sweeps keeps it from following the noise to the end; the result is a model, and only needs to be near.
    """
    n, (alpha, beta) = plan.orbitals, plan.electrons
    rotations = np.stack([fragment.rotation for fragment in plan.fragments])
    left = compound_matrix(rotations, alpha)
    right = left if alpha == beta else compound_matrix(rotations, beta)
    observed = np.zeros((len(plan), left.shape[1], right.shape[1]))
    for table, bits, numbers in zip(observed, counts.bits, counts.numbers, strict=True):
        ranks = [string_ranks(np.nonzero(side)[1].reshape(len(side), -1)) for side in (bits[:, :n], bits[:, n:])]
        np.add.at(table, (ranks[0], ranks[1]), numbers)
    total, size = float(np.sum(observed)), observed[0].size
    vector = np.outer(*(_determinant(d, k) for d, k in zip(density, plan.electrons, strict=True)))
    noise = 0.01
    for _ in range(_SWEEPS):
        amplitudes = left @ vector @ right.transpose(0, 2, 1)
        pure = (1.0 - noise) * amplitudes**2
        ratio = observed / (pure + noise / size)
        step = np.einsum("maj,mab,mbk->jk", left, ratio * amplitudes, right, optimize=True)
        # Half of the old vector damps the iteration, which may overshoot by itself.
        moved = vector + step / np.linalg.norm(step)
        moved /= np.linalg.norm(moved)
        change = float(np.linalg.norm(moved - vector))
        vector = moved
        noise = float(np.clip(np.sum(ratio) * noise / size / total, 1e-6, 0.5))
        if change < _SETTLED:
            break
    state = CIState(
        vector, n, plan.electrons, description="fitted to counts", hamiltonian_digest=plan.hamiltonian_digest
    )
    return state.with_noise(noise)


def _determinant(density: Array, electrons: int) -> Array:
    """CI vector of one spin: the natural orbitals of largest occupation filled."""
    vectors = np.linalg.eigh(density)[1][:, ::-1]
    # Row J of the compound matrix of U holds the overlaps with the string J of the orbitals U; J = 0 are the first.
    return compound_matrix(vectors, electrons)[0]
