"""Files from which an interrupted fit goes on."""

import os
import time
import zipfile
from dataclasses import dataclass
from pathlib import Path
from tempfile import NamedTemporaryFile

import numpy as np
from numpy.typing import NDArray

from fragkit.core import InputError, MismatchError, as_real_array, as_rotation

Array = NDArray[np.float64]

SCHEMA_NAME = "fragkit_fit_checkpoint"
SCHEMA_VERSION = 1


@dataclass(frozen=True, eq=False)
class Checkpoint:
    """Fragments of an unfinished fit: rotations and coefficients (M, n, n), residual in hartree, iterations done."""

    rotations: Array
    coefficients: Array
    residual: float
    iterations: int


class CheckpointFile:
    """A file that is replaced, never half written, at most once in `every` seconds.

    Parameters
    ----------
    path
        Where the file is; the name ends in .npz.
    digest
        Digest of the Hamiltonian the fragments belong to.
    every
        Least time between two writings, seconds.
    """

    def __init__(self, path: str | os.PathLike[str], digest: str, *, every: float = 30.0) -> None:
        self.path = Path(path)
        if self.path.suffix != ".npz":
            raise InputError(f"`checkpoint` must be a file name ending in .npz (got {str(path)!r})")
        if not self.path.parent.is_dir():
            raise InputError(f"`checkpoint` must be in a folder that exists (got {str(self.path.parent)!r})")
        self._digest = digest
        self._every = every
        self._written = time.monotonic()

    def write_when_due(self, checkpoint: Checkpoint) -> None:
        """Write if the last writing was long enough ago."""
        if time.monotonic() - self._written >= self._every:
            self.write(checkpoint)

    def write(self, checkpoint: Checkpoint) -> None:
        """Write to a temporary file in the same folder and rename it, so that a crash leaves the old file."""
        with NamedTemporaryFile(dir=self.path.parent, prefix=self.path.name, delete=False) as handle:
            try:
                np.savez(
                    handle,
                    allow_pickle=False,
                    schema_name=np.array(SCHEMA_NAME),
                    schema_version=np.array(SCHEMA_VERSION),
                    hamiltonian_digest=np.array(self._digest),
                    rotations=checkpoint.rotations,
                    coefficients=checkpoint.coefficients,
                    residual=np.array(checkpoint.residual),
                    iterations=np.array(checkpoint.iterations),
                )
                handle.flush()
                os.fsync(handle.fileno())
            except BaseException:
                os.unlink(handle.name)
                raise
        os.replace(handle.name, self.path)
        self._written = time.monotonic()

    def read(self, orbitals: int) -> Checkpoint:
        """Read the file back, checking that it belongs to this Hamiltonian.

        Raises `InputError` if the file is missing or damaged, `MismatchError` if it belongs to other integrals.
        """
        try:
            with np.load(self.path, allow_pickle=False) as stored:
                name, version = str(stored["schema_name"]), int(stored["schema_version"])
                digest = str(stored["hamiltonian_digest"])
                rotations, coefficients = stored["rotations"], stored["coefficients"]
                residual, iterations = float(stored["residual"]), int(stored["iterations"])
        except FileNotFoundError:
            raise InputError(
                f"`checkpoint` must exist when `resume` is True (got {str(self.path)!r}); start with resume=False"
            ) from None
        except (OSError, ValueError, KeyError, zipfile.BadZipFile, EOFError) as error:
            raise InputError(
                f"`checkpoint` must be a file written by this package (got {str(self.path)!r}: {error}); "
                "remove it and start with resume=False"
            ) from None
        if name != SCHEMA_NAME or version != SCHEMA_VERSION:
            raise InputError(
                f"`checkpoint` must have schema {SCHEMA_NAME!r} version {SCHEMA_VERSION} (got {name!r} {version}); "
                "use the version of the package that wrote it"
            )
        if digest != self._digest:
            raise MismatchError(
                f"`checkpoint` must belong to this Hamiltonian (got digest {digest[:12]}, Hamiltonian "
                f"{self._digest[:12]}); orbitals differ between runs, so load the integrals the fit was started with"
            )
        rotations = as_real_array(rotations, "rotations", (None, orbitals, orbitals))
        for rotation in rotations:
            as_rotation(rotation, orbitals, "rotations")
        coefficients = as_real_array(coefficients, "coefficients", rotations.shape)
        return Checkpoint(rotations, coefficients, residual, iterations)
