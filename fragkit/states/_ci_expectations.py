"""Expectation values of fragments on a CI vector, and their gradient by the rotation, without a covariance matrix.

With c the vector in a rotated basis, p = c², f the fragment's value and g = (f − center)², the derivative of
Σ p g for U → U exp(X) is 2 Σ_pq X_pq ⟨c| E_pq |g∘c⟩: rotating by exp(X) changes c by its transposed one-electron
operator, so nothing has to be differentiated through the rotation of the vector.

c is a product of thin factors, A diag(s) Bᵀ, and f is one too: f[a, b] = f_α[a] + f_β[b] + x_aᵀ Y x_b. Determinants are
visited in blocks of alpha strings that fit in cache; for a vector that is symmetric in the spins only the blocks on
and above the diagonal.
"""

from dataclasses import dataclass

import numpy as np

from fragkit.core import pack_features, pair_indices, unpack_features
from fragkit.states._base import Array, Expectations
from fragkit.states._factored import FactoredVector
from fragkit.states._strings import Strings, strings
from fragkit.states._workspace import Workspace

_BLOCK = 50_000  # determinants in a block


@dataclass(frozen=True, eq=False)
class _Block:
    """Determinants of some alpha strings with all beta strings, or from the first of the alpha strings on.

    For a symmetric vector, coefficients off the diagonal are multiplied by √2: their squares count both mirror images.
    """

    start: int
    stop: int
    vector: Array  # (K, stop − start, beta strings)
    values: Array  # f there


class CIExpectations(Expectations):
    """K fragments on one CI vector."""

    def __init__(
        self, factored: FactoredVector, electrons: tuple[int, int], rotations: Array, coefficients: Array
    ) -> None:
        n, count = rotations.shape[-1], len(rotations)
        kind = rotations.dtype
        alpha, beta = (strings(n, k) for k in electrons)
        self._alpha, self._beta = alpha, beta
        self._symmetric = factored.symmetric
        workspace = self._workspace = factored.workspace
        self._left = factored.left.rotated(rotations, workspace)
        self._right = self._left if self._symmetric else factored.right.rotated(rotations, workspace)
        self._scale = factored.scale.astype(kind)

        opposite, same, linear = unpack_features(coefficients, n)
        single = pack_features(np.zeros_like(same), same, linear)[:, -alpha.features.shape[1] :]
        towards_beta = alpha.occupations @ opposite
        at_alpha, at_beta = single @ alpha.features.T, single @ beta.features.T
        # Values are kept relative to their mean in the leading product of factors, so that few digits cancel.
        chief = int(np.argmax(np.abs(factored.scale)))
        x, y = (side[:, :, chief].astype(np.float64) ** 2 for side in (self._left, self._right))
        self._offset = np.vecdot(x, at_alpha) + np.vecdot(y, at_beta)
        self._offset += np.vecdot((x[:, None, :] @ towards_beta)[:, 0], y @ beta.occupations)
        row_values = _table(kind, towards_beta, at_alpha - self._offset[:, None], 1.0, count)
        column_values = _table(kind, beta.occupations, 1.0, at_beta, count).swapaxes(1, 2)

        step = max(1, min(alpha.count, _BLOCK // (beta.count * count)))
        scaled = self._left * self._scale
        right = self._right * kind.type(np.sqrt(2.0)) if self._symmetric else self._right
        self._blocks = []
        total = np.zeros(count)
        for start in range(0, alpha.count, step):
            stop = min(start + step, alpha.count)
            first = start if self._symmetric else 0
            if self._symmetric:
                right[:, start:stop] = self._right[:, start:stop]
            shape = (count, stop - start, beta.count - first)
            vector = workspace.array(f"vector {start}", shape, kind)
            values = workspace.array(f"values {start}", shape, kind)
            np.matmul(scaled[:, start:stop], right[:, first:].swapaxes(1, 2), out=vector)
            np.matmul(row_values[:, start:stop], column_values[:, :, first:], out=values)
            self._blocks.append(_Block(start, stop, vector, values))
            product = np.multiply(values, vector, out=workspace.array("tilted", shape, kind))
            total += _inner(product, vector)
        self.mean = total + self._offset

    def about(self, center: Array) -> tuple[Array, Array, Array]:
        """See `Expectations.about`."""
        alpha, beta, symmetric = self._alpha, self._beta, self._symmetric
        count, n = len(center), alpha.orbitals
        kind = self._left.dtype
        workspace = self._workspace
        shift = (center - self._offset).astype(kind)[:, None, None]
        rows = alpha.occupations.astype(kind)
        columns = np.ones((beta.count, n + 1), dtype=kind)
        columns[:, :n] = beta.occupations
        ones = np.ones(alpha.count, dtype=kind)

        second = np.zeros(count)
        cross = np.zeros((count, n, n))
        at_alpha, at_beta = np.zeros((count, alpha.count)), np.zeros((count, beta.count))
        tilted_alpha, tilted_beta = np.zeros_like(self._left), np.zeros_like(self._right)
        # Off the diagonal one factor √2 of a symmetric vector is taken back: there g∘c is wanted once, not its square.
        halved = self._left * kind.type(np.sqrt(0.5)) if symmetric else self._left
        right = halved.copy() if symmetric else self._right
        for block in self._blocks:
            here, shape = slice(block.start, block.stop), block.vector.shape
            deviation = np.subtract(block.values, shift, out=workspace.array("deviation", shape, kind))
            tilted = np.multiply(deviation, block.vector, out=workspace.array("tilted", shape, kind))
            second += _inner(tilted, tilted)
            weighted = np.multiply(tilted, block.vector, out=workspace.array("weighted", shape, kind))
            tilted *= deviation  # now g∘c
            first = block.start if symmetric else 0
            inside = weighted @ columns[first:]
            cross += rows[here].T @ inside[:, :, :n]
            at_alpha[:, here] = inside[:, :, n]
            at_beta[:, first:] += ones[here] @ weighted
            if symmetric:
                right[:, here] = self._left[:, here]
                stop = block.stop - block.start
                tilted_alpha[:, block.stop :] += tilted[:, :, stop:].swapaxes(1, 2) @ halved[:, here]
            else:
                tilted_beta += tilted.swapaxes(1, 2) @ self._left[:, here]
            tilted_alpha[:, here] += tilted @ right[:, first:]

        i, j = pair_indices(n)
        packed = np.where(i == j, 0.5, 1.0) * (cross[:, i, j] + cross[:, j, i])
        single = at_alpha @ alpha.features + at_beta @ beta.features
        gradient = _antisymmetric_transition(self._left, tilted_alpha * self._scale, alpha, workspace)
        if symmetric:
            gradient *= 2.0
        else:
            gradient += _antisymmetric_transition(self._right, tilted_beta * self._scale, beta, workspace)
        return second, np.concatenate([packed, single], axis=1), gradient


def _inner(x: Array, y: Array) -> Array:
    """Σ x y for each rotation, summed in the precision of the arrays."""
    return np.vecdot(x.reshape(len(x), -1), y.reshape(len(y), -1)).astype(np.float64)


def _table(kind: np.dtype, table: Array, second_last: Array | float, last: Array | float, count: int) -> Array:
    """(count, strings, n + 2): `table` and two more columns. The product of the two spins' tables is f."""
    n = table.shape[-1]
    result = np.empty((count, table.shape[-2], n + 2), dtype=kind)
    result[:, :, :n] = table
    result[:, :, n] = second_last
    result[:, :, n + 1] = last
    return result


def _antisymmetric_transition(left: Array, right: Array, spin: Strings, workspace: Workspace) -> Array:
    """2 (D_pq − D_qp), D_pq = Σ_r ⟨left_r| a†_p a_q |right_r⟩ in one spin, (K, strings, R) → (K, n, n)."""
    n = spin.orbitals
    if spin.electrons in (0, n):
        return np.zeros((len(left), n, n))
    # Below half filling ⟨a_p left|a_q right⟩; above it −⟨a†_q left|a†_p right⟩, which has fewer strings.
    bras, kets = (
        _ladder(vectors, spin, name, workspace).reshape(len(left), n, -1)
        for vectors, name in ((left, "bras"), (right, "kets"))
    )
    transition = (bras @ kets.swapaxes(1, 2)).astype(np.float64)
    return 2.0 * (transition - transition.swapaxes(1, 2))


def _ladder(vectors: Array, spin: Strings, name: str, workspace: Workspace) -> Array:
    """All a_p (or a†_p) on vectors (K, strings, R): one gather from the vectors, their negatives and a zero row."""
    count, rows, columns = vectors.shape
    signed = workspace.array("signed", (count, 2 * rows + 1, columns), vectors.dtype)
    signed[:, :rows] = vectors
    np.negative(vectors, out=signed[:, rows:-1])
    signed[:, -1] = 0.0
    result = workspace.array(name, (count, len(spin.ladder), columns), vectors.dtype)
    # Mode "clip" avoids a buffered copy; every index is in range.
    return np.take(signed, spin.ladder, axis=1, out=result, mode="clip")
