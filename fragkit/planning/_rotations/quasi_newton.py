"""Limited-memory quasi-Newton directions in matrix form, which survive a change of scaling.

Compact form of the inverse update of Broyden, Fletcher, Goldfarb and Shanno (Byrd, Nocedal & Schnabel, Math. Program.
63, 129 (1994), eq. 3.13): a few products with (memory, variables) matrices in place of a loop over the memory.
"""

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import solve_triangular

Array = NDArray[np.float64]


class Memory:
    """The last steps s and gradient changes y, at most `size` of each, oldest first."""

    def __init__(self, size: int, variables: int) -> None:
        self._size = size
        self.variables = variables
        # Twice the room, so that dropping the oldest pair moves data only once in `size` times.
        self._steps = np.empty((2 * size, variables))
        self._changes = np.empty((2 * size, variables))
        self._first = self._last = 0
        self._upper = np.zeros((0, 0))  # s_i · y_j for i ≤ j
        self._gram = np.zeros((0, 0))  # y_i · y_j
        self.scale = 0.5

    def __len__(self) -> int:
        return self._last - self._first

    def clear(self) -> None:
        """Forget all pairs."""
        self._first = self._last = 0
        self._upper = self._gram = np.zeros((0, 0))

    def add(self, step: Array, change: Array) -> bool:
        """Keep a pair unless its curvature is not clearly positive; says whether it was kept."""
        curvature = float(step @ change)
        length = float(change @ change)
        if curvature <= 1e-10 * np.sqrt(float(step @ step) * length):
            return False
        if len(self) == self._size:
            self._first += 1
            self._upper, self._gram = self._upper[1:, 1:], self._gram[1:, 1:]
        if self._last == len(self._steps):
            kept = len(self)
            for array in (self._steps, self._changes):
                array[:kept] = array[self._first : self._last].copy()
            self._first, self._last = 0, kept
        self._steps[self._last], self._changes[self._last] = step, change
        self._last += 1
        live = slice(self._first, self._last)
        old = len(self._upper)
        upper, gram = np.zeros((old + 1, old + 1)), np.empty((old + 1, old + 1))
        upper[:old, :old], gram[:old, :old] = self._upper, self._gram
        upper[:, old] = self._steps[live] @ change
        gram[:, old] = gram[old, :] = self._changes[live] @ change
        self._upper, self._gram = upper, gram
        self.scale = curvature / length
        return True

    def direction(self, gradient: Array) -> Array:
        """−H g."""
        if not len(self):
            return -self.scale * gradient
        live = slice(self._first, self._last)
        steps, changes = self._steps[live], self._changes[live]
        along, across = steps @ gradient, self.scale * (changes @ gradient)
        first = solve_triangular(self._upper, along, check_finite=False)
        inner = np.diag(self._upper) * first + self.scale * (self._gram @ first) - across
        second = solve_triangular(self._upper, inner, trans=1, check_finite=False)
        return -(self.scale * gradient + steps.T @ second - self.scale * (changes.T @ first))

    def transform(self, steps: Callable[[Array], Array], changes: Callable[[Array], Array]) -> None:
        """Carry the pairs over to new variables: maps of (memory, variables) arrays for steps and for gradients."""
        kept = len(self)
        live = slice(self._first, self._last)
        moved = steps(self._steps[live]), changes(self._changes[live])
        self._steps[:kept], self._changes[:kept] = moved
        self._first, self._last = 0, kept
        self._upper = np.triu(moved[0] @ moved[1].T)
        self._gram = moved[1] @ moved[1].T
