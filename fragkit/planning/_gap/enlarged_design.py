"""A design that rotations are added to, all of them with their images under the symmetries, and its duals so far."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fragkit.planning._exact.newton import newton_weights
from fragkit.planning._exact.unit_design import UnitDesign
from fragkit.planning._gap.phi_search import PhiSearch

Array = NDArray[np.float64]

ACTIVE = 0.985
"""Value of φ from which on a rotation stays in the design."""

UNUSED = 1e-4
"""A rotation with fewer of the shots than this leaves the design if its φ is small."""

WEIGHT_TOLERANCE = 5e-4
"""Relative distance from the best weights at which the solution for given rotations ends."""


@dataclass(eq=False)
class Dual:
    """A dual vector and the largest φ seen for it.

    `rows` (rows,) are its operator rows, `invariant` (d,) its coordinates in the invariant rows, `value` is (hᵀν)² in
    hartree², `peak` rises whenever a rotation with a larger φ is found. `checked` tells whether it was searched for
    thoroughly.
    """

    rows: Array
    invariant: Array
    value: float
    peak: float
    checked: bool = False

    @property
    def bound(self) -> float:
        """Lower bound on every cost, as far as the largest φ is known."""
        return self.value / self.peak


class EnlargedDesign:
    """Rotations (K, n, n) with weights of least variance among designs that contain every image of a rotation as well.

    `basis` (rows, d) spans the invariant operator rows; all of them is right, but slower. `rotations` at the start are
    those of a plan; every peak is at least the largest φ of these. `cost` (hartree²) and `used`, the number of
    rotations in use, images not counted, are those of the last solution.
    """

    def __init__(self, search: PhiSearch, basis: Array, rotations: Array) -> None:
        self._search = search
        self._basis = basis
        self._wanted = basis.T @ search.map.target
        self.rotations = rotations
        self._blocks = self._reduced(rotations)
        self._own = np.concatenate(self._blocks, axis=1)
        self._own_ends = np.cumsum([block.shape[1] for block in self._blocks])[:-1]
        self._shares: Array | None = None
        self.duals: list[Dual] = []
        self.cost, self.used = np.inf, 0

    @property
    def best(self) -> Dual:
        """The dual with the largest lower bound."""
        return max(self.duals, key=lambda dual: dual.bound)

    @property
    def checked_bound(self) -> float:
        """The largest lower bound of a dual that was checked; 0 if none was."""
        return max((dual.bound for dual in self.duals if dual.checked), default=0.0)

    def solve(self) -> Dual | None:
        """Weights and cost for the present rotations; their dual, or None if nothing has to be measured."""
        sizes = [block.shape[1] for block in self._blocks]
        design = UnitDesign(np.concatenate(self._blocks, axis=1), sizes, self._wanted)
        found = newton_weights(design, start=self._shares, tolerance=WEIGHT_TOLERANCE)
        self.cost = found.cost
        if found.cost == 0.0:
            return None
        self._shares = found.weights / np.sum(found.weights)
        self.used = int(np.count_nonzero(self._shares > UNUSED))
        invariant = design.to_rows(found.dual)
        own = np.split((invariant @ self._own) ** 2, self._own_ends)
        peak = max(float(np.max(self._sizes(invariant))), max(float(np.sum(part)) for part in own))
        value = float(self._wanted @ invariant) ** 2
        self.duals.append(Dual(self._basis @ invariant, invariant, value, peak))
        return self.duals[-1]

    def largest(self, dual: Dual, count: int) -> Array:
        """Up to `count` of the rotations, those of largest φ first."""
        return self.rotations[np.argsort(-self._sizes(dual.invariant))[:count]]

    def add(self, rotations: Array) -> None:
        """Take rotations in, drop those that are not used, and correct the peaks of all duals."""
        if not len(rotations):
            return
        blocks = self._reduced(rotations)
        known = np.stack([dual.invariant for dual in self.duals])
        for block in blocks:
            for dual, size in zip(self.duals, np.sum((known @ block) ** 2, axis=1), strict=True):
                dual.peak = max(dual.peak, float(size))
        # A rotation with hardly any shots still holds the dual back where its constraint is active.
        kept = self._sizes(self.duals[-1].invariant) > ACTIVE
        if self._shares is not None:
            kept |= self._shares > UNUSED
            small = np.full(len(rotations), 0.3 / (np.count_nonzero(kept) + len(rotations)))
            self._shares = np.concatenate([self._shares[kept], small])
        self.rotations = np.concatenate([self.rotations[kept], rotations])
        self._blocks = [block for block, keep in zip(self._blocks, kept, strict=True) if keep] + blocks

    def _sizes(self, invariant: Array) -> Array:
        return np.array([np.sum((invariant @ block) ** 2) for block in self._blocks])

    def _reduced(self, rotations: Array) -> list[Array]:
        return [self._basis.T @ self._search.block(rotation) for rotation in rotations]
