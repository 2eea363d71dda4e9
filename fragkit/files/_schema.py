"""The frame that every JSON file of this package has, and the checks at reading.

Each file says what it is (`schema_name`, `schema_version`), who wrote it (`provenance`), its units, and a digest of
everything else in it, so that a file that was cut off, edited or written by something else is refused, not misread.
Keys are lower case with underscores. Floats are written in Python's shortest form that reads back to the same bits.
"""

import hashlib
import json
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

import fragkit
from fragkit.core import InputError, as_path, as_real_array, write_atomically

FRAME = ("schema_name", "schema_version", "provenance", "digest")


@dataclass(frozen=True)
class Schema:
    """Name and newest version of one kind of file, and the function that reads it."""

    name: str
    version: int
    reader: str


PLAN = Schema("fragkit_plan", 1, "fragkit.load_plan")
FRAGMENTATION = Schema("fragkit_fragmentation", 1, "fragkit.files.load_fragmentation")
HAMILTONIAN = Schema("fragkit_hamiltonian", 1, "fragkit.files.load_hamiltonian")
COUNTS = Schema("fragkit_counts", 1, "fragkit.files.load_counts")
_KNOWN = {schema.name: schema for schema in (PLAN, FRAGMENTATION, HAMILTONIAN, COUNTS)}


def write_document(path: Any, schema: Schema, body: dict[str, Any], *, routine: str, overwrite: bool) -> Path:
    """Write `body` (JSON values and numpy arrays) with the frame around it, atomically, and return the path."""
    text = _layout(framed(schema, body, routine=routine), "")
    return write_atomically(path, text + "\n", overwrite=overwrite)


def framed(schema: Schema, body: dict[str, Any], *, routine: str) -> dict[str, Any]:
    """`body` in plain JSON values with the frame's entries, digest included."""
    plain = _plain(body, schema.name)
    document: dict[str, Any] = {
        "schema_name": schema.name,
        "schema_version": schema.version,
        "provenance": {"creator": "fragkit", "version": fragkit.__version__, "routine": routine},
        **plain,
    }
    document["digest"] = content_digest(document)
    return document


def content_digest(document: dict[str, Any]) -> str:
    """Hexadecimal SHA-256 of a document without its own digest, independent of spaces and the order of keys."""
    content = {key: value for key, value in document.items() if key != "digest"}
    text = json.dumps(_canonical(content), sort_keys=True, separators=(",", ":"))
    return hashlib.sha256(text.encode()).hexdigest()


@dataclass(frozen=True, eq=False)
class Document:
    """Entries of a file that passed the checks of its frame; `part` names the place for messages."""

    path: Path
    entries: dict[str, Any]
    part: str = ""

    def get(self, name: str, kind: type | tuple[type, ...]) -> Any:
        """The entry, which must be present and of the given type."""
        where = f"{self.part}{name}"
        if name not in self.entries:
            raise InputError(f"{self.path}: `{where}` must be present (got no such entry); write the file again")
        value = self.entries[name]
        kinds = kind if isinstance(kind, tuple) else (kind,)
        # JSON's true would pass for a number, since bool is an int.
        if not isinstance(value, kinds) or (isinstance(value, bool) and bool not in kinds):
            expected = " or ".join(k.__name__ for k in kinds)
            raise InputError(f"{self.path}: `{where}` must be {expected} (got {type(value).__name__})")
        return value

    def number(self, name: str) -> float:
        """The entry as a float."""
        return float(self.get(name, (int, float)))

    def optional_number(self, name: str) -> float | None:
        """The entry as a float, or None where the file has null."""
        value = self.get(name, (int, float, type(None)))
        return None if value is None else float(value)

    def array(self, name: str, shape: tuple[int | None, ...]) -> NDArray[np.float64]:
        """The entry, nested lists of numbers, as an array of the given shape (None matches any length)."""
        value = self.get(name, list)
        try:
            return as_real_array(value, f"{self.part}{name}", shape)
        except InputError as error:
            raise InputError(f"{self.path}: {error}") from None

    def children(self, name: str) -> "list[Document]":
        """The entry, a list of objects, as documents of their own."""
        listed = self.get(name, list)
        for k, value in enumerate(listed):
            if not isinstance(value, dict):
                raise InputError(
                    f"{self.path}: `{self.part}{name}[{k}]` must be an object (got {type(value).__name__})"
                )
        return [Document(self.path, value, f"{self.part}{name}[{k}].") for k, value in enumerate(listed)]

    def child(self, name: str) -> "Document":
        """The entry, an object, as a document of its own."""
        return Document(self.path, self.get(name, dict), f"{self.part}{name}.")


def read_document(path: Any, schema: Schema) -> Document:
    """Read a file of the given kind and check its frame and digest."""
    file = as_path(path)
    try:
        entries = json.loads(read_bytes(file).decode("utf-8"), parse_constant=_refuse_constant)
    except UnicodeDecodeError as error:
        raise InputError(f"{file} must be UTF-8 text (got another byte at position {error.start})") from None
    except json.JSONDecodeError as error:
        raise InputError(
            f"{file} must be a complete JSON file (got {error.msg} at line {error.lineno}, column {error.colno}); "
            "it may be cut off or another kind of file"
        ) from None
    except ValueError as error:
        raise InputError(f"{file} must hold finite numbers (got {error})") from None
    check_frame(file, entries, schema)
    return Document(file, entries)


def read_bytes(file: Path) -> bytes:
    """The file's bytes, with a clear error if it cannot be read."""
    try:
        return file.read_bytes()
    except FileNotFoundError:
        raise InputError(f"`path` must name an existing file (got {file}); check the folder") from None
    except OSError as error:
        raise InputError(f"`path` must name a readable file (got {file}: {error.strerror})") from None


def check_frame(file: Path, entries: Any, schema: Schema) -> None:
    """Raise `InputError` unless the document is of this kind, of a known version, and as it was written."""
    name = entries.get("schema_name") if isinstance(entries, dict) else None
    if name != schema.name:
        got = "no schema_name" if name is None else f"schema_name {name!r}"
        step = "it is not a file of this package"
        if name in _KNOWN:
            step = f"read it with {_KNOWN[name].reader}"
        raise InputError(f"{file} must have schema_name {schema.name!r} (got {got}); {step}")
    version = entries.get("schema_version")
    if not isinstance(version, int) or isinstance(version, bool) or version < 1:
        raise InputError(f"{file} must have a whole schema_version of at least 1 (got {version!r})")
    if version > schema.version:
        provenance = entries.get("provenance")
        writer = provenance.get("version", "unknown") if isinstance(provenance, dict) else "unknown"
        raise InputError(
            f"{file} must have schema_version {schema.version} or older (got {version}, written by version {writer} "
            f"of its creator); this is fragkit {fragkit.__version__}: update it"
        )
    digest = content_digest(entries)
    if entries.get("digest") != digest:
        raise InputError(
            f"{file} must be as it was written (got content whose digest is {digest[:12]}, the file says "
            f"{str(entries.get('digest'))[:12]}); it was changed or damaged: make it again instead of editing it"
        )


def _plain(value: Any, place: str) -> Any:
    """Nested lists, dictionaries and Python numbers, all finite."""
    if isinstance(value, dict):
        return {key: _plain(item, f"{place}.{key}") for key, item in value.items()}
    if isinstance(value, list | tuple):
        return [_plain(item, f"{place}[{k}]") for k, item in enumerate(value)]
    if isinstance(value, np.ndarray):
        return _plain(value.tolist(), place)
    if isinstance(value, np.generic):
        value = value.item()
    if isinstance(value, float) and not np.isfinite(value):
        raise InputError(f"`{place}` must be finite to be saved (got {value})")
    return value


def _canonical(value: Any) -> Any:
    """The same value with whole floats as ints, since some JSON tools turn 1.0 into 1."""
    if isinstance(value, dict):
        return {key: _canonical(item) for key, item in value.items()}
    if isinstance(value, list):
        return [_canonical(item) for item in value]
    if isinstance(value, float) and value.is_integer():
        return int(value)
    return value


def _layout(value: Any, margin: str) -> str:
    """JSON text with objects spread over lines and each row of numbers on one line."""
    inner = margin + " "
    if isinstance(value, dict) and value:
        parts = [f"{inner}{json.dumps(key)}: {_layout(item, inner)}" for key, item in value.items()]
        return "{\n" + ",\n".join(parts) + f"\n{margin}}}"
    if isinstance(value, list) and any(isinstance(item, dict | list) for item in value):
        return "[\n" + ",\n".join(inner + _layout(item, inner) for item in value) + f"\n{margin}]"
    return json.dumps(value, allow_nan=False)


def _refuse_constant(text: str) -> float:
    raise ValueError(text)
