"""The least-variance cost as a function that jax differentiates, for small molecules."""

from dataclasses import dataclass
from functools import lru_cache, partial
from itertools import combinations
from typing import Any

import jax
import jax.numpy as jnp
import numpy as np
from numpy.typing import NDArray

from fragkit.core import Hamiltonian, InputError, as_positive, as_real_array, evaluate_features, pair_indices
from fragkit.planning._operators.design_map import DesignMap
from fragkit.planning._operators.space import OperatorSpace
from fragkit.states import MaximallyMixedState

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class DifferentiableCost:
    """V(U, w) of a Hamiltonian and a state: call it with rotations and shares inside jax code.

    Made by `differentiable_cost`. Calls return a jax scalar, in hartree²; `jax.grad`, `jax.jit` and `jax.vmap` apply.
    """

    orbitals: int
    electrons: tuple[int, int]
    noise: float
    vector: Array
    target: Array
    shifts: Array
    basis: Array
    mixed_mean: Array
    mixed_covariance: Array

    def __call__(self, rotations: Any, shares: Any = None) -> Any:
        """Variance of one shot, in total, of the best unbiased estimate that measures `rotations` in these `shares`.

        Parameters
        ----------
        rotations
            (K, n, n) orthogonal; K at least (n+1)(n+2)/4, or the result is not a number. Off the orthogonal group the
            function is some smooth continuation: move along rotations, or project the gradient.
        shares
            (K,) fractions of the shots; equal when None. They are scaled to add up to one.
        """
        if not jax.config.jax_enable_x64:  # pyright: ignore[reportAttributeAccessIssue]
            raise InputError(
                "jax must be in double precision for this function (got single); put "
                '`jax.config.update("jax_enable_x64", True)` before any jax computation'
            )
        rotations = jnp.asarray(rotations)
        if rotations.ndim != 3 or rotations.shape[1:] != (self.orbitals, self.orbitals):
            raise InputError(
                f"`rotations` must have shape (K, {self.orbitals}, {self.orbitals}) (got {rotations.shape})"
            )
        weights = jnp.ones(len(rotations)) if shares is None else jnp.asarray(shares)
        if weights.shape != (len(rotations),):
            raise InputError(f"`shares` must have shape ({len(rotations)},) (got {weights.shape})")
        constants = (self.vector, self.target, self.shifts, self.basis, self.mixed_mean, self.mixed_covariance)
        return _cost(self.orbitals, self.electrons, rotations, weights / jnp.sum(weights), self.noise, constants)


def differentiable_cost(hamiltonian: Hamiltonian, vector: Any, *, noise: float = 1e-3) -> DifferentiableCost:
    """The cost of measuring a Hamiltonian in given rotations, as a function that jax differentiates.

    V(U, w) = hᵀ M⁻¹ h with M = Σ_m w_m A_m C_m⁻¹ A_mᵀ, symmetry shifts projected out: shots × error² of the best
    unbiased estimate. The optimiser of `fragkit.plan` minimises the same function over both arguments with gradients in
    closed form; this one is for embedding in other differentiable code. It builds M, n⁴/5 rows: up to 8 orbitals or so.

    Parameters
    ----------
    hamiltonian
        What to measure.
    vector
        (C(n, n_alpha), C(n, n_beta)) full-CI coefficients, normalised, in pyscf's order.
    noise
        Weight of the maximally mixed state, above 0: it makes the covariances regular.

    Raises
    ------
    InputError
        If an argument is not what it must be; at the call, if jax is not in double precision.

    Examples
    --------
    >>> import fragkit
    >>> import jax
    >>> ham = fragkit.hubbard(2, repulsion=4.0, electrons=(1, 1), periodic=False)
    >>> cost = differentiable_cost(ham, np.full((2, 2), 0.5))
    >>> angles = np.array([0.3, 1.0, 2.0])
    >>> turns = np.stack([np.array([[np.cos(t), -np.sin(t)], [np.sin(t), np.cos(t)]]) for t in angles])
    >>> with jax.enable_x64(True):
    ...     slope = np.asarray(jax.grad(cost)(turns))
    >>> slope.shape
    (3, 2, 2)
    """
    n, electrons = hamiltonian.orbitals, hamiltonian.electrons
    shape = tuple(len(_occupied(n, k)) for k in electrons)
    given = as_real_array(vector, "vector", shape)
    if abs(float(np.linalg.norm(given)) - 1.0) > 1e-6:
        raise InputError(f"`vector` must be normalised to 1e-6 (got norm {np.linalg.norm(given):.8g})")
    weight = as_positive(noise, "noise")
    if weight > 1.0:
        raise InputError(f"`noise` must be at most 1 (got {weight})")
    # Features that are constant in the sector measure nothing; the others have regular covariances under noise.
    design = DesignMap(hamiltonian)
    return DifferentiableCost(
        orbitals=n,
        electrons=electrons,
        noise=weight,
        vector=given,
        target=design.target,
        shifts=design.shifts.basis,
        basis=design.features,
        mixed_mean=MaximallyMixedState(n, electrons).moments(np.eye(n))[0],
        mixed_covariance=design.mixed,
    )


@partial(jax.jit, static_argnums=(0, 1))
def _cost(n: int, electrons: tuple[int, int], rotations: Any, shares: Any, noise: Any, constants: Any) -> Any:
    vector, target, shifts, basis, mixed_mean, mixed_covariance = constants
    features = jnp.asarray(_determinant_features(n, electrons))

    def information(rotation: Any) -> Any:
        left = _compound(rotation, n, electrons[0])
        right = left if electrons[0] == electrons[1] else _compound(rotation, n, electrons[1])
        # c' = L c Rᵀ with minors of U: rows are the new strings (U_J,I summed over old strings J).
        weights = ((left.T @ vector @ right) ** 2).ravel()
        mean = weights @ features
        centred = features - mean
        covariance = (1.0 - noise) * (centred.T @ (weights[:, None] * centred)) + noise * mixed_covariance
        apart = mean - mixed_mean
        covariance = covariance + noise * (1.0 - noise) * jnp.outer(apart, apart)
        operators = _operators(rotation, n)
        operators = operators - shifts @ (shifts.T @ operators)
        return (operators @ basis) @ jnp.linalg.solve(basis.T @ covariance @ basis, (operators @ basis).T)

    # lax.map, not vmap: batched LAPACK calls stall on CPUs.
    parts = jax.lax.map(information, rotations)
    matrix = jnp.einsum("k,kab->ab", shares, parts)
    scale = jnp.trace(matrix) / len(matrix)
    matrix = matrix + scale * (shifts @ shifts.T)
    return target @ jnp.linalg.solve(matrix, target)


def _operators(rotation: Any, n: int) -> Any:
    """`OperatorSpace.dense` in jax."""
    space = OperatorSpace(n)
    i, j = pair_indices(n)
    a, b = pair_indices(n, strict=True)
    x, y = space.triangle
    pair_weights = np.where(i == j, 1.0, np.sqrt(2.0))[:, None]
    columns = rotation[i] * rotation[j] * pair_weights
    products = columns[x][:, i] * columns[y][:, j]
    products = products + np.where(i == j, 0.0, 1.0) * (columns[x][:, j] * columns[y][:, i])
    opposite = products * space.triangle_weights[:, None]
    mixed = columns[:, None, a] * columns[None, :, b]
    mixed = (mixed + mixed.transpose(1, 0, 2)).reshape(space.pairs**2, len(a))
    same = jnp.asarray(space.antisymmetriser.toarray()) @ mixed
    result = jnp.zeros((space.size, n * n + n))
    result = result.at[space.opposite, : len(i)].set(opposite)
    result = result.at[space.same, len(i) : len(i) + len(a)].set(same)
    return result.at[space.linear, len(i) + len(a) :].set(columns)


def _compound(rotation: Any, n: int, electrons: int) -> Any:
    """All minors of `electrons` rows and columns, (strings, strings), by expansion along the last row.

    Products and sums only, so that derivatives of any order exist, also where determinants vanish.
    """
    minors = jnp.ones((1, 1))
    for k in range(1, electrons + 1):
        sets = _occupied(n, k)
        smaller = {s: index for index, s in enumerate(_occupied(n, k - 1))}
        last = np.array([s[-1] for s in sets])
        rest = np.array([smaller[s[:-1]] for s in sets])
        total = jnp.zeros((len(sets), len(sets)))
        for place in range(k):
            column = np.array([s[place] for s in sets])
            without = np.array([smaller[s[:place] + s[place + 1 :]] for s in sets])
            sign = (-1.0) ** (k - 1 + place)
            total = total + sign * rotation[last][:, column] * minors[rest][:, without]
        minors = total
    return minors


@lru_cache(maxsize=16)
def _occupied(n: int, electrons: int) -> tuple[tuple[int, ...], ...]:
    """Occupied orbitals of each string, sorted as binary numbers with bit 0 the lowest orbital."""
    return tuple(sorted(combinations(range(n), electrons), key=lambda s: sum(1 << k for k in s)))


@lru_cache(maxsize=16)
def _determinant_features(n: int, electrons: tuple[int, int]) -> Array:
    """(determinants, n² + n) features of every determinant, alpha strings outermost."""
    tables = []
    for count in electrons:
        table = np.zeros((len(_occupied(n, count)), n), dtype=np.uint8)
        for row, string in enumerate(_occupied(n, count)):
            table[row, list(string)] = 1
        tables.append(table)
    alpha = np.repeat(tables[0], len(tables[1]), axis=0)
    beta = np.tile(tables[1], (len(tables[0]), 1))
    return evaluate_features(np.concatenate([alpha, beta], axis=1))
