"""Writing a file so that a reader sees either the old content or all of the new one."""

import os
import secrets
import shutil
from contextlib import suppress
from pathlib import Path
from typing import Any

from fragkit.core._errors import InputError


def write_atomically(path: Any, data: str | bytes, *, overwrite: bool = False) -> Path:
    """Write `data` (text as UTF-8 with \\n line ends) to `path` and return the path.

    The data go to a temporary file in the same folder, are flushed to the disk, and the file is then moved to its
    name. An interruption leaves the old file as it was and no partial one. A symbolic link stays a link.

    Raises
    ------
    InputError
        If the file exists and `overwrite` is false, or its folder does not exist or cannot be written to.
    OSError
        If the disk is full or fails while writing.

    Examples
    --------
    >>> import tempfile
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     write_atomically(folder + "/energy.txt", "-75.0\\n").read_text()
    '-75.0\\n'
    """
    target = Path(os.path.realpath(as_path(path)))
    if target.is_dir():
        raise InputError(f"`path` must name a file (got the folder {target}); add a file name")
    if target.exists() and not overwrite:
        raise _exists(target)
    temporary = target.with_name(f".{target.name}.{secrets.token_hex(6)}.part")
    try:
        # Mode 0o666 is narrowed by the user's umask, as for any file that open() makes.
        handle = os.open(temporary, os.O_WRONLY | os.O_CREAT | os.O_EXCL | getattr(os, "O_BINARY", 0), 0o666)
    except OSError as error:
        raise InputError(
            f"`path` must be in an existing folder that can be written to (got {target}: {error.strerror}); "
            "make the folder or choose another"
        ) from error
    try:
        with os.fdopen(handle, "wb") as stream:
            stream.write(data.encode("utf-8") if isinstance(data, str) else data)
            stream.flush()
            os.fsync(stream.fileno())
        if overwrite:
            if target.exists():
                shutil.copymode(target, temporary)
            os.replace(temporary, target)
        else:
            _move_to_new_name(temporary, target)
    finally:
        with suppress(FileNotFoundError):
            os.unlink(temporary)
    _flush_folder(target.parent)
    return Path(path)


def as_path(path: Any) -> Path:
    """Return `path` as a `pathlib.Path`, or raise `InputError` if it is not a path."""
    if not isinstance(path, str | os.PathLike) or not os.fspath(path):
        raise InputError(f"`path` must be a file name (got {path!r})")
    return Path(path)


def _move_to_new_name(temporary: Path, target: Path) -> None:
    """Give the file its name, refusing to replace one that appeared meanwhile."""
    try:
        os.link(temporary, target)
    except FileExistsError:
        raise _exists(target) from None
    except OSError:
        # Some file systems have no hard links; the check before the move leaves a short gap there.
        if target.exists():
            raise _exists(target) from None
        os.replace(temporary, target)


def _exists(target: Path) -> InputError:
    return InputError(f"`path` must name a new file (got {target}, which exists); pass overwrite=True to replace it")


def _flush_folder(folder: Path) -> None:
    """Make the new name itself durable where the system lets a folder be opened."""
    with suppress(OSError):
        handle = os.open(folder, os.O_RDONLY)
        try:
            os.fsync(handle)
        finally:
            os.close(handle)
