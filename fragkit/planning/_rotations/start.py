"""Rotations to start the optimisation from."""

from typing import Any

import numpy as np
from numpy.typing import NDArray

from fragkit.core import Fragmentation, Hamiltonian, InputError, as_real_array, as_rotation

Array = NDArray[np.float64]

SPREAD = 0.15
"""Standard deviation, in radian, of the random turns that lead given rotations away from symmetric saddle points."""


def starting_rotations(hamiltonian: Hamiltonian, count: int, start: Any, rng: np.random.Generator) -> Array:
    """(count, n, n) rotations: those of `start` first, the heaviest when there are too many, then random ones.

    `start` is None (all random), a `Fragmentation`, "low-rank" (eigenvectors of the factors of the two-electron
    tensor), or rotations (K, n, n). Rotations from a fragmentation or of low rank are turned a little at random,
    since symmetric ones can sit on saddle points; an array is taken as it is.

    Raises
    ------
    InputError
        If `start` is none of these, or does not fit the Hamiltonian.
    """
    n = hamiltonian.orbitals
    if start is None:
        given = np.zeros((0, n, n))
    elif isinstance(start, str):
        if start != "low-rank":
            raise InputError(f"`start` must be 'low-rank', rotations, a Fragmentation or None (got {start!r})")
        given = _disturbed(_low_rank(hamiltonian, count), rng)
    elif isinstance(start, Fragmentation):
        start.check_belongs_to(hamiltonian)
        heavy = sorted(start.fragments, key=lambda f: -float(np.linalg.norm(f.coefficients)))[:count]
        given = _disturbed(np.stack([f.rotation for f in heavy]), rng)
    else:
        given = as_real_array(start, "start", (None, n, n))
        for index, rotation in enumerate(given):
            as_rotation(rotation, n, f"start[{index}]")
        if len(given) > count:
            raise InputError(f"`start` must hold at most `count` = {count} rotations (got {len(given)})")
    return np.concatenate([given, random_rotations(count - len(given), n, rng)])


def random_rotations(count: int, orbitals: int, rng: np.random.Generator) -> Array:
    """(count, n, n) orthogonal matrices from Haar's measure (Mezzadri, Notices AMS 54, 592 (2007))."""
    if count == 0:
        return np.zeros((0, orbitals, orbitals))
    q, r = np.linalg.qr(rng.standard_normal((count, orbitals, orbitals)))
    return q * np.sign(np.einsum("kii->ki", r))[:, None, :]


def _low_rank(hamiltonian: Hamiltonian, count: int) -> Array:
    """Eigenvectors of the factors, the largest first."""
    order = np.argsort(-np.linalg.norm(hamiltonian.factors, axis=(1, 2)))[:count]
    return np.linalg.eigh(hamiltonian.factors[order])[1]


def _disturbed(rotations: Array, rng: np.random.Generator) -> Array:
    noise = SPREAD * rng.standard_normal(rotations.shape)
    return np.linalg.qr(rotations + 0.5 * rotations @ (noise - noise.transpose(0, 2, 1)))[0]
