"""CI vectors as products of two thin factors, and the rotation of such factors.

A vector c (alpha strings × beta strings) is stored as L diag(s) Rᵀ. Its rank is small for truncated CI (about one
plus the number of single excitations for CISD), so that rotating the factors costs far less than rotating c.
"""

from dataclasses import dataclass, field
from functools import lru_cache
from math import comb

import numpy as np

from fragkit.states._strings import Array, Index, compound_matrix, minors, occupied_orbitals, string_ranks
from fragkit.states._workspace import Workspace

SMALL = 700  # up to this many strings a full decomposition is affordable
_PROBES = 320  # columns of the random probe that looks for low rank in larger vectors
_TABLE_BYTES = 2e8  # largest spread-out table; above it factors are rotated by compound matrices


@dataclass(frozen=True, eq=False)
class FactoredVector:
    """c = left · diag(scale) · rightᵀ, with `right is left` for a symmetric c (equal spins, even total spin)."""

    left: "Factor"
    right: "Factor"
    scale: Array
    workspace: Workspace = field(default_factory=Workspace)

    @property
    def symmetric(self) -> bool:
        """Whether alpha and beta share one factor."""
        return self.left is self.right


def factor_vector(vector: Array, orbitals: int, electrons: tuple[int, int]) -> FactoredVector:
    """Decompose a CI vector; singular values below 1e-14 of the largest are rounding noise and dropped."""
    a, b = electrons
    if a == b and max(vector.shape) <= SMALL and np.max(np.abs(vector - vector.T)) < 1e-14:
        scale, basis = np.linalg.eigh(0.5 * (vector + vector.T))
        kept = np.flatnonzero(np.abs(scale) > 1e-14 * np.max(np.abs(scale)))
        factor = Factor(np.ascontiguousarray(basis[:, kept]), orbitals, a)
        return FactoredVector(factor, factor, scale[kept])
    if max(vector.shape) <= SMALL:
        left, scale, right = np.linalg.svd(vector, full_matrices=False)
        kept = scale > 1e-14 * scale[0]
        left, scale, right = left[:, kept], scale[kept], right[kept].T
    else:
        found = _low_rank(vector)
        left, scale, right = found or (vector, np.ones(vector.shape[1]), np.eye(vector.shape[1]))
    return FactoredVector(Factor(left, orbitals, a), Factor(right, orbitals, b), scale)


def _low_rank(vector: Array) -> tuple[Array, Array, Array] | None:
    """Decomposition of a large vector of low rank by a random probe of its range, or None when it has high rank."""
    if min(vector.shape) <= 2 * _PROBES:
        return None
    probe = np.random.default_rng(0).standard_normal((vector.shape[1], _PROBES))
    basis, _ = np.linalg.qr(vector @ probe)
    inside = basis.T @ vector
    if np.linalg.norm(vector - basis @ inside) > 1e-13:
        return None
    left, scale, right = np.linalg.svd(inside, full_matrices=False)
    kept = scale > 1e-14 * scale[0]
    return basis @ left[:, kept], scale[kept], right[kept].T


@dataclass(frozen=True)
class _Split:
    """How a string of k orbitals divides into its first k1 and last k2 orbitals."""

    head: int
    tail: int
    heads: int  # number of head strings that leave room for a tail
    tail_order: Index  # tail strings by descending lowest orbital
    groups: tuple[tuple[int, int, int], ...]  # head slice with a common highest orbital, and length of its tails
    gather: Index  # position among the group results of each string


@lru_cache(maxsize=64)
def _split(orbitals: int, electrons: int) -> _Split:
    head = electrons // 2
    tail = electrons - head
    first, last = occupied_orbitals(orbitals, head), occupied_orbitals(orbitals, tail)
    order = np.argsort(-last[:, 0], kind="stable")
    groups, ranks = [], []
    for top in range(head - 1, orbitals - tail):
        start, stop = comb(top, head), comb(top + 1, head)
        count = comb(orbitals - top - 1, tail)
        groups.append((start, stop, count))
        joined = np.concatenate(
            [np.repeat(first[start:stop], count, axis=0), np.tile(last[order[:count]], (stop - start, 1))], axis=1
        )
        ranks.append(string_ranks(joined))
    return _Split(head, tail, groups[-1][1], order, tuple(groups), np.argsort(np.concatenate(ranks)))


class Factor:
    """A matrix (strings of one spin × R) and its image under orbital rotations."""

    def __init__(self, matrix: Array, orbitals: int, electrons: int) -> None:
        self.matrix = np.ascontiguousarray(matrix)
        self.orbitals = orbitals
        self.electrons = electrons
        self._holes = 2 * electrons > orbitals
        count = orbitals - electrons if self._holes else electrons
        self._signs = (-1.0) ** occupied_orbitals(orbitals, electrons).sum(axis=1)[:, None]
        source = self._signs[::-1] * self.matrix[::-1] if self._holes else self.matrix
        self._count = count
        self._table: Array | None = None
        if count >= 2:
            size = comb(orbitals, count // 2) * comb(orbitals, count - count // 2) * matrix.shape[1]
            if 8 * size <= _TABLE_BYTES:
                self._table = _spread(source, orbitals, count)
        self._source = source
        self._casts: dict[np.dtype, tuple[Array, Array]] = {}

    def rotated(self, rotations: Array, workspace: Workspace) -> Array:
        """(K, strings, R) images up to a common sign of each rotation; in the precision of `rotations`.

        Column J of the compound matrix is the antisymmetrised product of k columns of U, so the first half of J and
        the second half are transformed one after the other, each by much smaller minors (Laplace's expansion).
        """
        count = self._count
        if count == 0:
            return np.broadcast_to(self.matrix.astype(rotations.dtype), (len(rotations), *self.matrix.shape))
        source, table = self._cast(rotations.dtype)
        if count == 1:
            image = rotations.swapaxes(1, 2) @ source
        elif self._table is None:
            # A sign common to the whole vector does not matter, so the determinant of U is left out.
            return compound_matrix(rotations, self.electrons) @ self.matrix.astype(rotations.dtype)
        else:
            image = self._by_halves(rotations, table, workspace)
        if not self._holes:
            return image
        return (self._signs.astype(rotations.dtype) * image[:, ::-1]).astype(rotations.dtype, copy=False)

    def _by_halves(self, rotations: Array, table: Array, workspace: Workspace) -> Array:
        split = _split(self.orbitals, self._count)
        head = minors(rotations, split.head)
        tail = head if split.tail == split.head else minors(rotations, split.tail)
        k, (p, q, r) = len(rotations), table.shape
        head = np.ascontiguousarray(head[:, : split.heads]).reshape(k * split.heads, p)
        half = workspace.array("half", (len(head), q * r), table.dtype)
        np.matmul(head, table.reshape(p, q * r), out=half)
        half = half.reshape(k, split.heads, q, r)
        tail = np.ascontiguousarray(tail[:, split.tail_order])
        parts = []
        for start, stop, count in split.groups:
            image = tail[:, None, :count] @ half[:, start:stop]
            parts.append(image.reshape(k, (stop - start) * count, r))
        return np.concatenate(parts, axis=1)[:, split.gather]

    def _cast(self, dtype: np.dtype) -> tuple[Array, Array]:
        if dtype not in self._casts:
            table = self._source if self._table is None else self._table
            self._casts[dtype] = (self._source.astype(dtype, copy=False), table.astype(dtype, copy=False))
        return self._casts[dtype]


def _spread(matrix: Array, orbitals: int, electrons: int) -> Array:
    """Rows of `matrix` spread over (head string, tail string) with the sign that sorts head + tail; 0 if they meet."""
    split = _split(orbitals, electrons)
    first, last = occupied_orbitals(orbitals, split.head), occupied_orbitals(orbitals, split.tail)
    joined = np.concatenate([np.repeat(first, len(last), axis=0), np.tile(last, (len(first), 1))], axis=1)
    order = np.argsort(joined, axis=1, kind="stable")
    i, j = np.triu_indices(electrons, 1)
    inversions = (joined[:, i] > joined[:, j]).sum(axis=1)
    ascending = np.take_along_axis(joined, order, axis=1)
    apart = np.all(np.diff(ascending, axis=1) > 0, axis=1)
    table = np.zeros((len(joined), matrix.shape[1]))
    signs = (-1.0) ** inversions[apart]
    table[apart] = signs[:, None] * matrix[string_ranks(ascending[apart])]
    return table.reshape(len(first), len(last), matrix.shape[1])
