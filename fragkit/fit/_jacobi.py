"""Orbitals in which a two-electron tensor is as diagonal as it can be: Jacobi plane rotations.

In the orbitals U the best single fragment of a tensor G has λ_ij = (ii|jj) and removes Σ_ij (ii|jj)² from ‖G‖².
A rotation of two orbitals a, b by θ changes that sum by a trigonometric polynomial of second degree in 4θ, so each
plane is turned to its global maximum, and sweeps over all planes climb to a maximum of the sum (the method of
Jacobi; for joint diagonalisation Cardoso & Souloumiac, SIAM J. Matrix Anal. Appl. 17, 161 (1996)). Several starts
are turned together, on a leading axis.
"""

import numpy as np
from numpy.typing import NDArray

from fragkit.core import pair_indices
from fragkit.fit._pairs import occupation_pairs, pair_positions, pair_weights

Array = NDArray[np.float64]

_GRID = np.linspace(0.0, 2.0 * np.pi, 16, endpoint=False)


def diagonalise(
    tensor: Array, starts: Array, *, max_sweeps: int = 60, tol: float = 1e-5, keep: int = 2
) -> tuple[Array, Array, int]:
    """Best orbitals found from some starting orbitals, by Jacobi sweeps.

    Parameters
    ----------
    tensor
        (P, P) over weighted pairs.
    starts
        (S, n, n) orthogonal.
    max_sweeps
        Most sweeps for one start.
    tol
        A start is finished when a sweep adds less than this fraction to its Σ (ii|jj)².
    keep
        Starts that are followed beyond the third sweep: the others have fallen behind.

    Returns
    -------
    tuple
        Orbitals (n, n), λ (n, n) with λ_ij = (ii|jj), and the number of sweeps.
    """
    n = starts.shape[-1]
    planes = [_Plane(n, a, b) for a in range(n) for b in range(a + 1, n)]
    diagonal = pair_positions(n)[np.arange(n), np.arange(n)]
    orbitals = starts.copy()
    local = _rotated(tensor, orbitals)
    gains = _gain(local, diagonal)
    sweeps = 0
    while sweeps < max_sweeps:
        sweeps += 1
        for plane in planes:
            plane.turn(local, orbitals, diagonal)
        before, gains = gains, _gain(local, diagonal)
        if sweeps == 3 and len(gains) > keep:
            best = np.sort(np.argsort(-gains, kind="stable")[:keep])
            local, orbitals, gains, before = local[best], orbitals[best], gains[best], before[best]
        if np.all(gains - before <= tol * gains):
            break
    best = int(np.argmax(gains))
    rotation = _orthonormal(orbitals[best])
    pairs = occupation_pairs(rotation[None])[0]
    coefficients = pairs.T @ tensor @ pairs
    return rotation, 0.5 * (coefficients + coefficients.T), sweeps


class _Plane:
    """Where the pairs that involve orbitals a and b are, and how a rotation of the two acts on them."""

    def __init__(self, n: int, a: int, b: int) -> None:
        position = pair_positions(n)
        others = np.array([p for p in range(n) if p not in (a, b)], dtype=np.intp)
        self.a, self.b = a, b
        self.aa, self.bb, self.ab = position[a, a], position[b, b], position[a, b]
        self.with_a, self.with_b = position[others, a], position[others, b]
        self.others = position[others, others]

    def turn(self, local: Array, orbitals: Array, diagonal: NDArray[np.intp]) -> None:
        """Rotate a and b to the largest Σ (ii|jj)², in every start; changes the arrays in place."""
        rows = local[:, [self.aa, self.bb, self.ab], :]
        # Orthonormal combinations of the pairs: sum is unchanged, (difference, mixed) turns by 2θ.
        total = (rows[:, 0] + rows[:, 1]) * np.sqrt(0.5)
        difference = (rows[:, 0] - rows[:, 1]) * np.sqrt(0.5)
        mixed = rows[:, 2]
        x, y = difference[:, self.others], mixed[:, self.others]
        sum_x = (total[:, self.aa] - total[:, self.bb]) * np.sqrt(0.5)
        sum_y = total[:, self.ab]
        xx = (difference[:, self.aa] - difference[:, self.bb]) * np.sqrt(0.5)
        xy, yy = difference[:, self.ab], mixed[:, self.ab]
        # With z = (cos 4θ, sin 4θ) the sum is α z_1 + β z_2 + (d z_1 + e z_2)² and a constant.
        mean, d, e = 0.5 * (xx + yy), 0.5 * (xx - yy), xy
        alpha = np.sum(x * x - y * y, axis=1) + sum_x**2 - sum_y**2 + 2.0 * mean * d
        beta = 2.0 * np.sum(x * y, axis=1) + 2.0 * sum_x * sum_y + 2.0 * mean * e
        angle = 0.25 * _best_angle(alpha, beta, d, e)
        self._rotate(local, orbitals, np.cos(angle), np.sin(angle))

    def _rotate(self, local: Array, orbitals: Array, c: Array, s: Array) -> None:
        c, s = c[:, None], s[:, None]
        old_a, old_b = orbitals[:, :, self.a].copy(), orbitals[:, :, self.b]
        orbitals[:, :, self.a], orbitals[:, :, self.b] = c * old_a + s * old_b, c * old_b - s * old_a
        c, s = c[:, :, None], s[:, :, None]
        root = np.sqrt(2.0)
        # Rows, then columns, of the symmetric matrix over pairs.
        for matrix in (local, local.transpose(0, 2, 1)):
            one, two = matrix[:, self.with_a], matrix[:, self.with_b]
            matrix[:, self.with_a] = c * one + s * two
            matrix[:, self.with_b] = c * two - s * one
            aa, bb, ab = (matrix[:, [k]] for k in (self.aa, self.bb, self.ab))
            matrix[:, [self.aa]] = c * c * aa + s * s * bb + root * c * s * ab
            matrix[:, [self.bb]] = s * s * aa + c * c * bb - root * c * s * ab
            matrix[:, [self.ab]] = (c * c - s * s) * ab + root * c * s * (bb - aa)


def _best_angle(alpha: Array, beta: Array, d: Array, e: Array) -> Array:
    """Global maximum of α cos ψ + β sin ψ + (d cos ψ + e sin ψ)² for each entry."""
    # Two maxima at most: sixteen points tell which is higher, Newton steps do the rest.
    values = (
        alpha[:, None] * np.cos(_GRID) + beta[:, None] * np.sin(_GRID)
        + (d[:, None] * np.cos(_GRID) + e[:, None] * np.sin(_GRID)) ** 2
    )  # fmt: skip
    angle = _GRID[np.argmax(values, axis=1)]
    for _ in range(6):
        c, s = np.cos(angle), np.sin(angle)
        inner, turned = d * c + e * s, e * c - d * s
        slope = beta * c - alpha * s + 2.0 * inner * turned
        bend = -alpha * c - beta * s + 2.0 * (turned**2 - inner**2)
        step = np.where(bend < 0.0, -slope / np.where(bend < 0.0, bend, -1.0), 0.0)
        angle = angle + np.clip(step, -0.2, 0.2)
    return np.remainder(angle + np.pi, 2.0 * np.pi) - np.pi


def _gain(local: Array, diagonal: NDArray[np.intp]) -> Array:
    block = local[:, diagonal][:, :, diagonal]
    return np.sum(block * block, axis=(1, 2))


def _rotated(tensor: Array, rotations: Array) -> Array:
    """The tensor in the orbitals of each rotation, (S, P, P)."""
    n = rotations.shape[-1]
    rows, columns = pair_indices(n)
    weights = pair_weights(n)
    # Pair (p, q) in new pair (i, j): U_pi U_qj + U_qi U_pj, with the weights of both; half of it on the diagonal.
    left, right = rotations[:, rows], rotations[:, columns]
    change = left[:, :, rows] * right[:, :, columns] + left[:, :, columns] * right[:, :, rows]
    change *= weights[:, None] * weights * 0.5
    return change.transpose(0, 2, 1) @ tensor @ change


def _orthonormal(matrix: Array) -> Array:
    """Nearest orthogonal matrix: many small rotations leave rounding behind."""
    left, _, right = np.linalg.svd(matrix)
    return left @ right
