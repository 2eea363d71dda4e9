"""Occupation strings of one spin: their order, their features, and how they transform with the orbitals."""

from dataclasses import dataclass
from functools import cached_property, lru_cache
from math import comb

import numpy as np
from numpy.typing import NDArray

from fragkit.core import pair_indices

Array = NDArray[np.float64]
Index = NDArray[np.intp]


@lru_cache(maxsize=256)
def occupied_orbitals(orbitals: int, electrons: int) -> Index:
    """(C(n, k), k) occupied orbitals, ascending, of all strings in the order of their binary numbers.

    >>> occupied_orbitals(3, 2).tolist()
    [[0, 1], [0, 2], [1, 2]]
    """
    if electrons == 0:
        table = np.zeros((1, 0), dtype=np.intp)
    else:
        # Strings whose highest orbital is `top` are the strings of one electron less below it, in their order.
        blocks = []
        for top in range(electrons - 1, orbitals):
            below = occupied_orbitals(top, electrons - 1)
            blocks.append(np.hstack([below, np.full((len(below), 1), top, dtype=np.intp)]))
        table = np.vstack(blocks) if blocks else np.zeros((0, electrons), dtype=np.intp)
    table.setflags(write=False)
    return table


def string_ranks(occupied: Index) -> Index:
    """Positions of strings given by ascending occupied orbitals (…, k) in the order of their binary numbers."""
    k = occupied.shape[-1]
    top = int(occupied.max(initial=0)) + 1
    table = np.array([[comb(p, j + 1) for j in range(k)] for p in range(top)], dtype=np.intp).reshape(top, k)
    return table[occupied, np.arange(k)].sum(axis=-1)


@lru_cache(maxsize=64)
def _expansion(orbitals: int, electrons: int) -> tuple[Index, list[float]]:
    """For each string and each t: rank of the string without its t-th orbital, and the sign of that cofactor."""
    occupied = occupied_orbitals(orbitals, electrons)
    k = electrons
    ranks = np.stack([string_ranks(np.delete(occupied, t, axis=1)) for t in range(k)])
    return ranks, [1.0 if (k - 1 - t) % 2 == 0 else -1.0 for t in range(k)]


def minors(matrices: Array, size: int) -> Array:
    """All minors of a size of (…, n, n) matrices as (…, columns, rows): entry [J, I] is det M[I, J].

    Built size by size with a Laplace expansion along the last row.

    >>> minors(np.array([[1.0, 2.0], [3.0, 4.0]]), 2)
    array([[-2.]])
    """
    n = matrices.shape[-1]
    lead = matrices.shape[:-2]
    if size == 0:
        return np.ones((*lead, 1, 1), dtype=matrices.dtype)
    columns_first = np.ascontiguousarray(np.swapaxes(matrices, -1, -2))
    table = columns_first
    for k in range(2, size + 1):
        occupied = occupied_orbitals(n, k)
        without, signs = _expansion(n, k)
        last, before = occupied[:, -1], without[k - 1]
        terms = [
            signs[t] * columns_first[..., occupied[:, t], :][..., last] * table[..., without[t], :][..., before]
            for t in range(k)
        ]
        table = sum(terms[1:], start=terms[0])
    return table


def compound_matrix(rotations: Array, electrons: int) -> Array:
    """(…, N, N) matrices T with T[J, I] = ⟨I|J'⟩ = det U[I, J], J' a string of the orbitals U.

    Above half filling the minors of the complement are used: for orthogonal U, det U[I, J] is
    det U · (−1)^(ΣI + ΣJ) · det U[Iᶜ, Jᶜ] (Jacobi; Horn & Johnson, Matrix Analysis, section 0.8.4).
    """
    n = rotations.shape[-1]
    if 2 * electrons <= n:
        return minors(rotations, electrons)
    small = minors(rotations, n - electrons)
    # The complement of a string has the complementary binary number, so the order is reversed.
    signs = (-1.0) ** occupied_orbitals(n, electrons).sum(axis=1)
    determinant = np.linalg.det(rotations)[..., None, None]
    return determinant * (small[..., ::-1, ::-1] * np.outer(signs, signs))


@dataclass(frozen=True)
class Strings:
    """All strings of `electrons` electrons of one spin in n orbitals, with the tables that moments need."""

    orbitals: int
    electrons: int

    @property
    def count(self) -> int:
        """Number of strings."""
        return comb(self.orbitals, self.electrons)

    @cached_property
    def occupations(self) -> Array:
        """(count, n) of 0 and 1."""
        table = np.zeros((self.count, self.orbitals))
        np.put_along_axis(table, occupied_orbitals(self.orbitals, self.electrons), 1.0, axis=1)
        table.setflags(write=False)
        return table

    @cached_property
    def pairs(self) -> Array:
        """(count, n(n−1)/2) products of two different occupations, packed."""
        i, j = pair_indices(self.orbitals, strict=True)
        table = self.occupations[:, i] * self.occupations[:, j]
        table.setflags(write=False)
        return table

    @cached_property
    def features(self) -> Array:
        """(count, n(n−1)/2 + n): `pairs`, then `occupations`."""
        table = np.hstack([self.pairs, self.occupations])
        table.setflags(write=False)
        return table

    @cached_property
    def products(self) -> Array:
        """(count, n(n+1)/2) products of two occupations i ≤ j, packed."""
        i, j = pair_indices(self.orbitals)
        table = self.occupations[:, i] * self.occupations[:, j]
        table.setflags(write=False)
        return table

    @cached_property
    def ladder(self) -> Index:
        """What one annihilator (below half filling) or one creator (above) does, for all n operators in turn.

        For operator p and each string I of one electron less (or more): the rank of the string that a_p (a†_p) takes to
        +I, `count` plus the rank of the one it takes to −I, or 2 · `count` where there is none.
        """
        n, k = self.orbitals, self.electrons
        creates = 2 * k > n
        bits = strings(n, k + 1 if creates else k - 1).occupations.astype(np.intp)
        powers = 1 << np.arange(n, dtype=np.intp)
        reached, own = bits @ powers, self.occupations.astype(np.intp) @ powers
        below = np.cumsum(bits, axis=1) - bits
        table = []
        for p in range(n):
            allowed = bits[:, p] == (1 if creates else 0)
            source = np.searchsorted(own, np.where(allowed, reached - powers[p] if creates else reached + powers[p], 0))
            table.append(np.where(allowed, source + self.count * (below[:, p] % 2), 2 * self.count))
        return np.concatenate(table)


@lru_cache(maxsize=64)
def strings(orbitals: int, electrons: int) -> Strings:
    """The (cached) strings of one spin."""
    return Strings(orbitals, electrons)
