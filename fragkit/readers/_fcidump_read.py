"""A strict reader of FCIDUMP files (Knowles & Handy, Comput. Phys. Commun. 54, 75 (1989))."""

import re
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fragkit.core import Hamiltonian, InputError, as_path, as_real_array, unpack_pairs

Array = NDArray[np.float64]

_HEADER_END = re.compile(r"&END\b|\$END\b|/", re.IGNORECASE)
_ASSIGNMENT = re.compile(r"([A-Za-z_]\w*)\s*=")
# Fortran leaves out the exponent letter when the exponent needs three digits: 0.1-104.
_BARE_EXPONENT = re.compile(r"([+-]?(?:\d+\.?\d*|\.\d+))([+-]\d{3})")


def from_fcidump(
    path: Any, *, electrons: Any = None, constant: float | None = None, tolerance: float = 1e-8
) -> Hamiltonian:
    """The Hamiltonian of an FCIDUMP file: one-based indices, chemists' notation, hartree.

    The header may take any number of lines in any case and end with `&END`, `$END` or `/`. Blank lines are passed
    over, `D` exponents understood, orbital energies (`i 0 0 0`) read and left out. Each integral may be given once or
    in several of its eight equal positions. ORBSYM and ISYM are checked for form and left out, as are header names that
    do not change the integrals.

    Parameters
    ----------
    path
        The file.
    electrons
        (alpha, beta) to use instead of the header's NELEC and MS2 = 2 S_z (0 when the header has none).
    constant
        Constant energy in hartree for a file without a `0 0 0 0` row. Without this argument such a file is refused,
        since the row is usually last and its absence the mark of a truncated file.
    tolerance
        Largest difference in hartree between repeated values of one integral that is taken for rounding noise; the
        first value counts.

    Raises
    ------
    InputError
        With file, line number, what was expected and what was found: for a malformed header or row, an index outside
        1 … NORB, contradicting repeated values, unrestricted (IUHF, UHF) or complex or spinor integrals, a missing
        constant, or impossible electron numbers.

    Examples
    --------
    >>> import pathlib, tempfile
    >>> text = "&FCI NORB=1,NELEC=2,MS2=0 /\\n 0.5 1 1 1 1\\n -1.25D0 1 1 0 0\\n 0.25 0 0 0 0\\n"
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     file = pathlib.Path(folder, "atom.fcidump")
    ...     _ = file.write_text(text)
    ...     from_fcidump(file).determinant_energy()
    -1.75
    """
    file = as_path(path)
    lines = _read_lines(file)
    header, first = _read_header(file, lines)
    norb = header.whole("NORB", minimum=1)
    header.refuse_unsupported()
    header.check_orbital_symmetries(norb)
    if electrons is None:
        electrons = header.electrons(norb)
    rows = _read_rows(file, lines, first, norb)
    return _assemble(file, rows, norb, electrons, constant, tolerance)


@dataclass(frozen=True)
class _Header:
    """Names (upper case) and their values as listed, from a header that ended on line `end`."""

    file: Path
    values: dict[str, list[str]]
    end: int

    def error(self, expected: str, got: str, step: str) -> InputError:
        return InputError(f"{self.file}, header (lines 1 to {self.end}): {expected} (got {got}); {step}")

    def whole(self, name: str, *, minimum: int | None = None, default: int | None = None) -> int:
        listed = self.values.get(name)
        if listed is None:
            if default is not None:
                return default
            raise self.error(f"{name} must be given", "none", f"add {name}=<whole number>")
        try:
            (number,) = (int(text) for text in listed)
        except ValueError:
            raise self.error(f"{name} must be one whole number", repr(",".join(listed)), "correct the header") from None
        if minimum is not None and number < minimum:
            raise self.error(f"{name} must be at least {minimum}", str(number), "correct the header")
        return number

    def electrons(self, norb: int) -> tuple[int, int]:
        total = self.whole("NELEC", minimum=0)
        twice_spin = self.whole("MS2", default=0)
        if abs(twice_spin) > total or (total - twice_spin) % 2 or (total + abs(twice_spin)) // 2 > norb:
            raise self.error(
                f"NELEC and MS2 = 2 S_z must be possible in NORB={norb} orbitals",
                f"NELEC={total}, MS2={twice_spin}",
                "correct them or pass electrons=(alpha, beta)",
            )
        return (total + twice_spin) // 2, (total - twice_spin) // 2

    def refuse_unsupported(self) -> None:
        for name, meaning in (
            ("IUHF", "separate alpha and beta (unrestricted) integrals"),
            ("UHF", "separate alpha and beta (unrestricted) integrals"),
            ("TREL", "relativistic spinor integrals"),
        ):
            listed = self.values.get(name, ["0"])
            if ",".join(listed).strip(".").upper() not in ("0", "F", "FALSE"):
                raise self.error(
                    f"{name} must be off, since {meaning} are not supported",
                    f"{name}={','.join(listed)}",
                    "write the file from a spin-restricted calculation",
                )

    def check_orbital_symmetries(self, norb: int) -> None:
        listed = self.values.get("ORBSYM")
        if listed is None:
            return
        count = 0
        for text in listed:
            # Namelists may write repetition as 8*1.
            match = re.fullmatch(r"(?:(\d+)\*)?-?\d+", text)
            if match is None:
                raise self.error("ORBSYM must list whole numbers", repr(text), "correct the header")
            count += int(match.group(1) or 1)
        if count != norb:
            raise self.error(f"ORBSYM must list NORB={norb} numbers", str(count), "correct the header")


def _read_lines(file: Path) -> list[str]:
    try:
        return file.read_text(encoding="ascii").splitlines()
    except FileNotFoundError:
        raise InputError(f"`path` must name an existing FCIDUMP file (got {file}); check the folder") from None
    except UnicodeDecodeError as error:
        raise InputError(
            f"{file}: an FCIDUMP file must be plain ASCII text (got another byte at position {error.start}); "
            "unpack or convert it first"
        ) from None
    except OSError as error:
        raise InputError(f"`path` must name a readable FCIDUMP file (got {file}: {error.strerror})") from None


def _read_header(file: Path, lines: Sequence[str]) -> tuple[_Header, int]:
    """The header and the index of the first line after it."""
    start = next((k for k, line in enumerate(lines) if line.strip()), None)
    opening = lines[start].lstrip() if start is not None else ""
    if start is None or opening[:4].upper() not in ("&FCI", "$FCI"):
        line = f"{opening[:40]!r}" if start is not None else "an empty file"
        raise InputError(
            f"{file}, line {1 + (start or 0)}: the header must begin with &FCI (got {line}); is this an FCIDUMP file?"
        )
    parts = []
    for k in range(start, len(lines)):
        line = opening[4:] if k == start else lines[k]
        end = _HEADER_END.search(line)
        parts.append(line if end is None else line[: end.start()])
        if end is None:
            continue
        rest = line[end.end() :].strip()
        if rest:
            raise InputError(
                f"{file}, line {k + 1}: the header's end must end its line (got {rest[:40]!r} after it); start the "
                "integrals on a new line"
            )
        return _Header(file, _assignments(file, " ".join(parts), k + 1), k + 1), k + 1
    raise InputError(f"{file}: the header must end with &END or / (got the end of the file); the file may be truncated")


def _assignments(file: Path, text: str, end: int) -> dict[str, list[str]]:
    found = list(_ASSIGNMENT.finditer(text))
    before = text[: found[0].start()] if found else text
    if before.strip(" ,\t"):
        raise InputError(
            f"{file}, header (lines 1 to {end}): names must be followed by '=' (got {before.strip()[:40]!r}); "
            "correct the header"
        )
    values: dict[str, list[str]] = {}
    for match, following in zip(found, [*found[1:], None], strict=True):
        name = match.group(1).upper()
        listed = re.split(r"[,\s]+", text[match.end() : following.start() if following else len(text)].strip(" ,\t"))
        if name in values and values[name] != listed:
            raise InputError(
                f"{file}, header (lines 1 to {end}): {name} must be given once (got {','.join(values[name])} and "
                f"{','.join(listed)}); correct the header"
            )
        values[name] = listed
    return values


@dataclass(frozen=True, eq=False)
class _Rows:
    """Values (N,), one-based indices (N, 4) and line numbers (N,) of the integrals."""

    values: Array
    indices: NDArray[np.int64]
    lines: NDArray[np.int64]


def _read_rows(file: Path, lines: Sequence[str], first: int, norb: int) -> _Rows:
    values: list[float] = []
    indices: list[tuple[int, int, int, int]] = []
    numbers: list[int] = []
    for number, line in enumerate(lines[first:], start=first + 1):
        words = line.split()
        if not words:
            continue
        if len(words) != 5 or words[0].startswith("("):
            raise _row_error(file, number, line)
        try:
            values.append(float(words[0]))
        except ValueError:
            values.append(_fortran_value(file, number, line, words[0]))
        try:
            i, j, k, l = int(words[1]), int(words[2]), int(words[3]), int(words[4])
        except ValueError:
            raise _row_error(file, number, line) from None
        indices.append((i, j, k, l))
        numbers.append(number)
    rows = _Rows(np.array(values), np.array(indices, dtype=np.int64).reshape(-1, 4), np.array(numbers, dtype=np.int64))
    for wrong, expected in (
        (~np.isfinite(rows.values), "the value must be finite"),
        (np.any((rows.indices < 0) | (rows.indices > norb), axis=1), f"indices must be in 0 … NORB={norb}"),
    ):
        if np.any(wrong):
            number = int(rows.lines[np.argmax(wrong)])
            raise InputError(
                f"{file}, line {number}: {expected} (got {lines[number - 1].strip()!r}); check the program that wrote "
                "the file"
            )
    return rows


def _fortran_value(file: Path, number: int, line: str, word: str) -> float:
    """A number with a D exponent, or with an exponent whose letter was left out."""
    text = word.upper().replace("D", "E", 1)
    bare = _BARE_EXPONENT.fullmatch(text)
    try:
        return float(f"{bare.group(1)}E{bare.group(2)}" if bare else text)
    except ValueError:
        raise _row_error(file, number, line) from None


def _row_error(file: Path, number: int, line: str) -> InputError:
    if "(" in line:
        return InputError(
            f"{file}, line {number}: values must be real (got {line.strip()[:60]!r}, a complex number); use real "
            "orbitals"
        )
    return InputError(
        f"{file}, line {number}: a row must be a value and four indices (got {line.strip()[:60]!r}); the file may be "
        "truncated or damaged"
    )


def _assemble(
    file: Path, rows: _Rows, norb: int, electrons: Any, constant: float | None, tolerance: float
) -> Hamiltonian:
    zero = rows.indices == 0
    filled = 4 - np.sum(zero, axis=1)
    kinds = {
        "two_body": filled == 4,
        "one_body": (filled == 2) & zero[:, 2] & zero[:, 3],
        "orbital_energy": (filled == 1) & ~zero[:, 0],
        "constant": filled == 0,
    }
    stray = ~np.any(list(kinds.values()), axis=0)
    if np.any(stray):
        k = int(np.argmax(stray))
        raise InputError(
            f"{file}, line {rows.lines[k]}: zero indices must come last, as in i j k l, i j 0 0, i 0 0 0 or 0 0 0 0 "
            f"(got {' '.join(map(str, rows.indices[k]))}); correct the row"
        )
    pairs = norb * (norb + 1) // 2
    # Position of each pair of orbitals in the packed order of numpy.triu_indices.
    order = np.zeros((norb, norb), dtype=np.int64)
    upper = np.triu_indices(norb)
    order[upper] = np.arange(pairs)
    order.T[upper] = order[upper]

    pick = kinds["two_body"]
    places = rows.indices[pick] - 1
    bra, ket = order[places[:, 0], places[:, 1]], order[places[:, 2], places[:, 3]]
    keys = np.minimum(bra, ket) * pairs + np.maximum(bra, ket)
    unique, values = _first_values(file, rows, pick, keys, tolerance)
    matrix = np.zeros((pairs, pairs))
    matrix[unique // pairs, unique % pairs] = values
    matrix[unique % pairs, unique // pairs] = values

    pick = kinds["one_body"]
    places = rows.indices[pick] - 1
    unique, values = _first_values(file, rows, pick, order[places[:, 0], places[:, 1]], tolerance)
    packed = np.zeros(pairs)
    packed[unique] = values
    one_body = packed[order]

    pick = kinds["constant"]
    _, stated = _first_values(file, rows, pick, np.zeros(int(np.sum(pick)), dtype=np.int64), tolerance)
    if stated.size:
        total = float(stated[0])
    elif constant is not None:
        total = float(as_real_array(constant, "constant", ()))
    else:
        last = int(rows.lines[-1]) if len(rows.lines) else 0
        raise InputError(
            f"{file}: a row '<constant> 0 0 0 0' must be present (got none up to the last row, line {last}); the file "
            "may be truncated: if it is complete, pass constant=<energy in hartree>"
        )
    return Hamiltonian(total, one_body, unpack_pairs(matrix, norb), electrons=electrons)


def _first_values(
    file: Path, rows: _Rows, pick: NDArray[np.bool_], keys: NDArray[np.int64], tolerance: float
) -> tuple[NDArray[np.int64], Array]:
    """Different keys and the first value of each, after checking that repeated values agree."""
    values, lines = rows.values[pick], rows.lines[pick]
    unique, first, inverse = np.unique(keys, return_index=True, return_inverse=True)
    difference = np.abs(values - values[first][inverse])
    wrong = difference > tolerance
    if np.any(wrong):
        k = int(np.argmax(wrong))
        origin = int(first[inverse[k]])
        raise InputError(
            f"{file}, line {lines[k]}: repeated values of one integral must agree to {tolerance:g} (got "
            f"{values[k]:.12g} here and {values[origin]:.12g} on line {lines[origin]}); a list with several spin "
            "blocks (unrestricted) or without 8-fold symmetry (complex orbitals) is not supported"
        )
    return unique, values[first]
