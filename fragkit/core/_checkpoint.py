"""Checkpoints: npz files without pickle that are replaced, never half written."""

import io
import os
import time
import zipfile
from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fragkit.core._atomic import as_path, write_atomically
from fragkit.core._errors import InputError, MismatchError

SCHEMA_VERSION = 1


class CheckpointArchive:
    """A file of named arrays that belongs to given objects and is written at most once in `every` seconds.

    Parameters
    ----------
    path
        Where the file is; the name ends in .npz.
    schema
        Name of what the file holds.
    digests
        Digest of each object it belongs to, by name ("hamiltonian", "state").
    every
        Least time between two writings, seconds.

    Raises
    ------
    InputError
        If the name does not end in .npz or the folder does not exist.
    """

    def __init__(
        self, path: str | os.PathLike[str], schema: str, digests: dict[str, str], *, every: float = 30.0
    ) -> None:
        self.path = as_path(path)
        if self.path.suffix != ".npz":
            raise InputError(f"`checkpoint` must be a file name ending in .npz (got {str(path)!r})")
        if not self.path.parent.is_dir():
            raise InputError(f"`checkpoint` must be in a folder that exists (got {str(self.path.parent)!r})")
        self._schema = schema
        self._digests = {f"{name}_digest": digest for name, digest in digests.items()}
        self._every = every
        self._written = time.monotonic()

    @property
    def is_due(self) -> bool:
        """Whether the last writing was long enough ago."""
        return time.monotonic() - self._written >= self._every

    def write(self, arrays: dict[str, Any]) -> None:
        """Replace the file; a crash leaves the old one."""
        buffer = io.BytesIO()
        labels = {"schema_name": self._schema, "schema_version": SCHEMA_VERSION, **self._digests}
        np.savez(buffer, allow_pickle=False, **{name: np.array(value) for name, value in (labels | arrays).items()})
        write_atomically(self.path, buffer.getvalue(), overwrite=True)
        self._written = time.monotonic()

    def read(self, names: Sequence[str]) -> list[NDArray[Any]]:
        """The named arrays, in order.

        Raises `InputError` if the file is missing, damaged or of another kind, `MismatchError` if it belongs to
        other objects.
        """
        try:
            with np.load(self.path, allow_pickle=False) as stored:
                schema = str(stored["schema_name"]), int(stored["schema_version"])
                digests = {name: str(stored[name]) for name in self._digests if schema[0] == self._schema}
                arrays = [stored[name] for name in names if schema[0] == self._schema]
        except FileNotFoundError:
            raise InputError(
                f"`checkpoint` must exist when `resume` is True (got {str(self.path)!r}); start with resume=False"
            ) from None
        except (OSError, ValueError, KeyError, zipfile.BadZipFile, EOFError) as error:
            raise InputError(
                f"`checkpoint` must be a file written by this package (got {str(self.path)!r}: {error}); "
                "remove it and start with resume=False"
            ) from None
        if schema != (self._schema, SCHEMA_VERSION):
            raise InputError(
                f"`checkpoint` must have schema {self._schema!r} version {SCHEMA_VERSION} (got {schema[0]!r} "
                f"{schema[1]}); give the file that this call wrote, with the version of the package that wrote it"
            )
        for name, digest in self._digests.items():
            if digests[name] != digest:
                owner = name.removesuffix("_digest").replace("hamiltonian", "Hamiltonian")
                raise MismatchError(
                    f"`checkpoint` must belong to this {owner} (got digest {digests[name][:12]}, expected "
                    f"{digest[:12]}); orbitals differ between runs, so load what the call was started with"
                )
        return arrays
