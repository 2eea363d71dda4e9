"""Files from which an interrupted optimisation of rotations goes on."""

import io
import os
import time
import zipfile

import numpy as np
from numpy.typing import NDArray

from fragkit.core import InputError, MismatchError, as_path, as_real_array, as_rotation, write_atomically

Array = NDArray[np.float64]

SCHEMA_NAME = "fragkit_rotations_checkpoint"
SCHEMA_VERSION = 1


class RotationsFile:
    """A .npz file with the best rotations and shares so far, replaced at most once in `every` seconds."""

    def __init__(self, path: str | os.PathLike[str], hamiltonian: str, state: str, *, every: float = 20.0) -> None:
        self.path = as_path(path)
        if self.path.suffix != ".npz":
            raise InputError(f"`checkpoint` must be a file name ending in .npz (got {str(path)!r})")
        if not self.path.parent.is_dir():
            raise InputError(f"`checkpoint` must be in a folder that exists (got {str(self.path.parent)!r})")
        self._digests = {"hamiltonian_digest": hamiltonian, "state_digest": state}
        self._every = every
        self._written = time.monotonic()

    def write_when_due(self, rotations: Array, shares: Array, evaluations: int) -> None:
        """Write if the last writing was long enough ago."""
        if time.monotonic() - self._written >= self._every:
            self.write(rotations, shares, evaluations)

    def write(self, rotations: Array, shares: Array, evaluations: int) -> None:
        """Replace the file; a crash leaves the old one."""
        buffer = io.BytesIO()
        digests = {name: np.array(value) for name, value in self._digests.items()}
        np.savez(
            buffer,
            allow_pickle=False,
            schema_name=np.array(SCHEMA_NAME),
            schema_version=np.array(SCHEMA_VERSION),
            rotations=rotations,
            shares=shares,
            evaluations=np.array(evaluations),
            **digests,
        )
        write_atomically(self.path, buffer.getvalue(), overwrite=True)
        self._written = time.monotonic()

    def read(self, count: int, orbitals: int) -> tuple[Array, Array, int]:
        """Rotations (count, n, n), shares (count,) and evaluations spent.

        Raises `InputError` if the file is missing or damaged, `MismatchError` if it belongs to another problem.
        """
        try:
            with np.load(self.path, allow_pickle=False) as stored:
                schema = str(stored["schema_name"]), int(stored["schema_version"])
                digests = {name: str(stored[name]) for name in self._digests}
                rotations, shares = stored["rotations"], stored["shares"]
                evaluations = int(stored["evaluations"])
        except FileNotFoundError:
            raise InputError(
                f"`checkpoint` must exist when `resume` is True (got {str(self.path)!r}); start with resume=False"
            ) from None
        except (OSError, ValueError, KeyError, zipfile.BadZipFile, EOFError) as error:
            raise InputError(
                f"`checkpoint` must be a file written by this package (got {str(self.path)!r}: {error}); "
                "remove it and start with resume=False"
            ) from None
        if schema != (SCHEMA_NAME, SCHEMA_VERSION):
            raise InputError(
                f"`checkpoint` must have schema {SCHEMA_NAME!r} version {SCHEMA_VERSION} (got {schema[0]!r} "
                f"{schema[1]}); use the version of the package that wrote it"
            )
        for name, digest in self._digests.items():
            if digests[name] != digest:
                raise MismatchError(
                    f"`checkpoint` must belong to this {name.split('_')[0]} (got digest {digests[name][:12]}, expected "
                    f"{digest[:12]}); load what the optimisation was started with"
                )
        rotations = as_real_array(rotations, "checkpoint rotations", (None, orbitals, orbitals))
        if len(rotations) != count:
            raise MismatchError(
                f"`checkpoint` must hold `count` = {count} rotations (got {len(rotations)}); resume with the same count"
            )
        for rotation in rotations:
            as_rotation(rotation, orbitals, "checkpoint rotations")
        return rotations, as_real_array(shares, "checkpoint shares", (count,)), evaluations
