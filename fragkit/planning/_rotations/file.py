"""Files from which an interrupted optimisation of rotations goes on."""

import os

import numpy as np
from numpy.typing import NDArray

from fragkit.core import CheckpointArchive, MismatchError, as_real_array, as_rotation

Array = NDArray[np.float64]


class RotationsFile:
    """The best rotations and shares so far, for the Hamiltonian and the state of the given digests."""

    def __init__(self, path: str | os.PathLike[str], hamiltonian: str, state: str, *, every: float = 20.0) -> None:
        digests = {"hamiltonian": hamiltonian, "state": state}
        self._archive = CheckpointArchive(path, "fragkit_rotations_checkpoint", digests, every=every)
        self.path = self._archive.path

    def write_when_due(self, rotations: Array, shares: Array, evaluations: int) -> None:
        """Write if the last writing was long enough ago."""
        if self._archive.is_due:
            self.write(rotations, shares, evaluations)

    def write(self, rotations: Array, shares: Array, evaluations: int) -> None:
        """Replace the file."""
        self._archive.write({"rotations": rotations, "shares": shares, "evaluations": evaluations})

    def read(self, counts: list[int], orbitals: int) -> tuple[Array, Array, int]:
        """Rotations (K, n, n), shares (K,) and evaluations spent; K is one of `counts`.

        Raises `InputError` if the file is missing or damaged, `MismatchError` if it belongs to another problem.
        """
        rotations, shares, evaluations = self._archive.read(("rotations", "shares", "evaluations"))
        rotations = as_real_array(rotations, "checkpoint rotations", (None, orbitals, orbitals))
        if len(rotations) not in counts:
            raise MismatchError(
                f"`checkpoint` must hold `count` = {' or '.join(map(str, counts))} rotations (got {len(rotations)}); "
                "resume with the same count and surplus"
            )
        for rotation in rotations:
            as_rotation(rotation, orbitals, "checkpoint rotations")
        return rotations, as_real_array(shares, "checkpoint shares", (len(rotations),)), int(evaluations)
