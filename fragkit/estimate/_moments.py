"""What counts say about the state: density matrix, and covariances of the features that a plan can be chosen with."""

import numpy as np
from numpy.typing import NDArray

from fragkit.core import evaluate_features, pair_indices
from fragkit.estimate._counts import Counts
from fragkit.estimate._fitted_vector import can_fit_vector, fitted_state
from fragkit.estimate._sector import check_sector, in_sector
from fragkit.planning import Plan
from fragkit.states import GaussianState, ReferenceState, mixture

Array = NDArray[np.float64]

MODEL_SHOTS = 1000.0
"""Weight of the model in the covariances, in shots: outcomes rarer than one in so many are the model's business."""

MODEL_NOISE = 2e-3
"""Depolarisation mixed into an uncorrelated model, which bounds the coefficients."""

VECTOR_NOISE = 5e-4
"""The same for a model fitted to all counts, which is nearer to the state."""


def selected(counts: Counts, electrons: tuple[int, int]) -> Counts:
    """Only the shots with these electron numbers."""
    keep = [in_sector(bits, electrons) for bits in counts.bits]
    return Counts(
        tuple(bits[k] for bits, k in zip(counts.bits, keep, strict=True)),
        tuple(numbers[k] for numbers, k in zip(counts.numbers, keep, strict=True)),
        counts.plan_digest,
        counts.batches,
    )


def measured_density(plan: Plan, counts: Counts) -> tuple[Array, Array]:
    """One-particle density matrices (n, n) of both spins that fit the occupations best, eigenvalues in 0 … 1.

    Weighted least squares over all circuits; directions that no circuit sees are those of the uniform state. The
    eigenvalues are shifted and clipped to the right number of electrons. Equal electron numbers share one matrix.
    """
    n = plan.orbitals
    p, q = pair_indices(n)
    rows, values = [], []
    for fragment, bits, numbers in zip(plan.fragments, counts.bits, counts.numbers, strict=True):
        shots = int(np.sum(numbers))
        if not shots:
            continue
        means = ((numbers / shots) @ bits).reshape(2, n)
        u = fragment.rotation
        rows.append(np.sqrt(shots) * (u[p] * u[q] * np.where(p == q, 1.0, 2.0)[:, None]).T)
        values.append(np.sqrt(shots) * means)
    design = np.concatenate(rows)
    result = []
    for spin, electrons in enumerate(plan.electrons):
        target = np.concatenate([v[spin] for v in values])
        if plan.electrons[0] == plan.electrons[1]:
            target = np.concatenate([v.mean(axis=0) for v in values])
        start = np.where(p == q, electrons / n, 0.0)
        solution = start + np.linalg.lstsq(design, target - design @ start, rcond=1e-9)[0]
        matrix = np.zeros((n, n))
        matrix[p, q] = matrix[q, p] = solution
        result.append(_with_electrons(matrix, electrons))
    return result[0], result[1]


def model_state(plan: Plan, counts: Counts, reference: ReferenceState | None) -> ReferenceState:
    """The smooth state that covariances are shrunk towards, with a little noise.

    Where the sector is small against the number of shots it is the CI vector that fits all counts best; elsewhere the
    uncorrelated state with the measured density matrix. With a reference, both count in equal parts.
    """
    density, noise = measured_density(plan, counts), MODEL_NOISE
    # Shots outside the sector stay in where readout is corrected; a vector of the sector cannot have them.
    inside = selected(counts, plan.electrons)
    if can_fit_vector(plan, inside):
        model, noise = fitted_state(plan, inside, density), VECTOR_NOISE
    else:
        model = GaussianState(*density, hamiltonian_digest=plan.hamiltonian_digest)
    parts = [(1.0, model)] if reference is None else [(0.5, model), (0.5, reference)]
    return mixture(parts).with_noise(noise)


def measured_state(plan: Plan, counts: Counts, *, reference: ReferenceState | None = None) -> ReferenceState:
    """A reference state made from counts, to plan with: new rotations, coefficients and shots for the measured state.

    Where the sector is small against the number of shots (at most 5,000 determinants, ten shots for each) it is the
    noisy CI vector that fits all counts best, elsewhere the uncorrelated state with the measured one-particle density
    matrices; or that and `reference` in equal parts. A little noise is mixed in. Shots with other electron numbers
    than the plan's are left out.

    Raises
    ------
    MismatchError
        If the counts belong to another plan.
    InputError
        If most shots have other electron numbers than the plan.
    """
    plan.check_digest(counts.plan_digest)
    check_sector(counts, plan.electrons, 0.5)
    return model_state(plan, selected(counts, plan.electrons), reference)


def shrunk_covariances(plan: Plan, counts: Counts, model: ReferenceState) -> Array:
    """Covariances (K, n² + n, n² + n) of the features in each circuit: observed, with `MODEL_SHOTS` of the model."""
    result = []
    for fragment, bits, numbers in zip(plan.fragments, counts.bits, counts.numbers, strict=True):
        expected = model.moments(fragment.rotation)[1]
        shots = int(np.sum(numbers))
        if shots:
            features = evaluate_features(bits)
            weights = numbers / shots
            off = features - weights @ features
            observed = (off * weights[:, None]).T @ off
            expected = (shots * observed + MODEL_SHOTS * expected) / (shots + MODEL_SHOTS)
        result.append(expected)
    return np.array(result)


def _with_electrons(matrix: Array, electrons: int) -> Array:
    """Nearest matrix with eigenvalues in 0 … 1 and the given trace: shift and clip, the shift by bisection."""
    values, vectors = np.linalg.eigh(matrix)
    low, high = -1.0 - float(np.max(np.abs(values))), 1.0 + float(np.max(np.abs(values)))
    for _ in range(200):
        middle = 0.5 * (low + high)
        if np.sum(np.clip(values + middle, 0.0, 1.0)) > electrons:
            high = middle
        else:
            low = middle
    clipped = np.clip(values + 0.5 * (low + high), 0.0, 1.0)
    return (vectors * clipped) @ vectors.T
