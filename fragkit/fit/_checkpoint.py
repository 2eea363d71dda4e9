"""Files from which an interrupted fit goes on."""

import os
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fragkit.core import CheckpointArchive, as_real_array, as_rotation

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Checkpoint:
    """Fragments of an unfinished fit: rotations and coefficients (M, n, n), residual in hartree, iterations done."""

    rotations: Array
    coefficients: Array
    residual: float
    iterations: int


class CheckpointFile:
    """The best fragments so far, for the Hamiltonian of the given digest."""

    def __init__(self, path: str | os.PathLike[str], digest: str, *, every: float = 30.0) -> None:
        self._archive = CheckpointArchive(path, "fragkit_fit_checkpoint", {"hamiltonian": digest}, every=every)

    def write_when_due(self, checkpoint: Checkpoint) -> None:
        """Write if the last writing was long enough ago."""
        if self._archive.is_due:
            self.write(checkpoint)

    def write(self, checkpoint: Checkpoint) -> None:
        """Replace the file."""
        self._archive.write(vars(checkpoint))

    def read(self, orbitals: int) -> Checkpoint:
        """Read the file back, checking that it belongs to this Hamiltonian."""
        rotations, coefficients, residual, iterations = self._archive.read(
            ("rotations", "coefficients", "residual", "iterations")
        )
        rotations = as_real_array(rotations, "rotations", (None, orbitals, orbitals))
        for rotation in rotations:
            as_rotation(rotation, orbitals, "rotations")
        coefficients = as_real_array(coefficients, "coefficients", rotations.shape)
        return Checkpoint(rotations, coefficients, float(residual), int(iterations))
