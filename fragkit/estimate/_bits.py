"""Bit strings of a device brought to the one order used inside: column j is qubit j, alpha orbitals then beta."""

from collections.abc import Mapping, Sequence
from typing import Any, Literal, get_args

import numpy as np
from numpy.typing import NDArray

from fragkit.core import InputError, as_count

BitOrder = Literal["first-qubit-left", "first-qubit-right"]
SpinOrder = Literal["blocked", "interleaved"]
Bits = NDArray[np.uint8]


def check_orders(bit_order: Any, spin_order: Any) -> None:
    """Raise `InputError` unless both orders are among the allowed words."""
    for name, value, allowed in (("bit_order", bit_order, BitOrder), ("spin_order", spin_order, SpinOrder)):
        if value not in get_args(allowed):
            raise InputError(f"`{name}` must be one of {', '.join(map(repr, get_args(allowed)))} (got {value!r})")


def column_order(
    orbitals: int, bit_order: BitOrder, spin_order: SpinOrder, qubits: Sequence[int] | None, width: int
) -> NDArray[np.intp]:
    """For each qubit in blocked order, the column of the device's data that holds it.

    `width` is the number of bits in the data; `qubits[j]` says which of them (counted from the device's qubit 0)
    is qubit j of the circuit, and is needed when there are more bits than qubits.

    >>> column_order(2, "first-qubit-right", "blocked", None, 4)
    array([3, 2, 1, 0])
    >>> column_order(2, "first-qubit-left", "interleaved", None, 4)
    array([0, 2, 1, 3])
    """
    check_orders(bit_order, spin_order)
    count = 2 * orbitals
    if qubits is None:
        if width != count:
            raise InputError(
                f"each bit string must have {count} bits, two per orbital (got {width}); measure only the plan's "
                "qubits, or pass `qubits` with the position of each"
            )
        positions = np.arange(count)
    else:
        positions = np.array([as_count(q, "qubits") for q in qubits], dtype=np.intp)
        if len(positions) != count or len(set(positions.tolist())) != count or np.max(positions) >= width:
            raise InputError(
                f"`qubits` must list {count} different positions below {width}, the number of bits in the data "
                f"(got {positions.tolist()})"
            )
    if spin_order == "interleaved":
        positions = np.concatenate([positions[0::2], positions[1::2]])
    return positions if bit_order == "first-qubit-left" else width - 1 - positions


def bits_of_strings(table: Mapping[Any, Any], name: str) -> tuple[Bits, NDArray[np.int64]]:
    """Rows of bits as written, left to right, and how often each occurred, from {"0101": 12, …}."""
    if not isinstance(table, Mapping):
        raise InputError(f"`{name}` must be a dictionary of bit strings and counts (got {type(table).__name__})")
    keys = list(table)
    width = len(keys[0]) if keys and isinstance(keys[0], str) else 0
    for key in keys:
        if not isinstance(key, str) or len(key) != width or not key or set(key) - {"0", "1"}:
            raise InputError(
                f"`{name}` must have keys that are strings of 0 and 1, all of one length (got {key!r}); read all "
                "qubits into one register"
            )
    numbers = np.array([as_count(table[key], f"{name}[{key!r}]") for key in keys], dtype=np.int64)
    text = "".join(keys).encode("ascii")
    bits = np.frombuffer(text, dtype=np.uint8).reshape(len(keys), width) - ord("0")
    return bits, numbers


def bits_of_array(array: Any, name: str) -> Bits:
    """A (shots, qubits) array of 0 and 1 (or False and True) as uint8."""
    bits = np.asarray(array)
    if bits.ndim != 2:
        raise InputError(f"`{name}` must have shape (shots, qubits) (got {bits.shape})")
    if bits.dtype != np.bool_ and not np.issubdtype(bits.dtype, np.integer):
        raise InputError(f"`{name}` must hold whole numbers 0 and 1 (got an array of {bits.dtype})")
    if bits.size and (bits.min() < 0 or bits.max() > 1):
        raise InputError(f"`{name}` must hold only 0 and 1 (got values from {bits.min()} to {bits.max()})")
    return bits.astype(np.uint8, copy=False)


def bits_of_packed(array: Any, name: str, width: int, byte_order: Literal["big", "little"]) -> Bits:
    """Bits from a uint8 array (shots, bytes) of eight bits per byte, as `numpy.unpackbits` reads them.

    "big" takes the highest bit of a byte first. Padding is at the end of the last byte, as `numpy.packbits` puts it.
    """
    packed = np.asarray(array)
    if packed.dtype != np.uint8 or packed.ndim != 2 or packed.shape[1] != -(-width // 8):
        raise InputError(
            f"`{name}` must be a uint8 array of shape (shots, {-(-width // 8)}) for {width} bits "
            f"(got {packed.dtype} {packed.shape})"
        )
    if byte_order not in ("big", "little"):
        raise InputError(f"`byte_order` must be 'big' or 'little' (got {byte_order!r})")
    bits = np.unpackbits(packed, axis=1, bitorder=byte_order)
    if np.any(bits[:, width:]):
        raise InputError(
            f"`{name}` must have zero padding after {width} bits (got ones there); check `byte_order` and the width"
        )
    return bits[:, :width]


def distinct_rows(bits: Bits, numbers: NDArray[np.int64] | None = None) -> tuple[Bits, NDArray[np.int64]]:
    """Each different row once, in increasing order, and how often it occurred.

    >>> distinct_rows(np.array([[1, 0], [0, 1], [1, 0]], dtype=np.uint8))
    (array([[0, 1],
           [1, 0]], dtype=uint8), array([1, 2]))
    """
    if numbers is not None:
        bits, numbers = bits[numbers > 0], numbers[numbers > 0]
    columns = bits.shape[1]
    if columns > 64:
        packed = np.ascontiguousarray(np.packbits(bits, axis=1))
        keys = packed.view(np.dtype((np.void, packed.shape[1])))[:, 0]
        _, first, inverse = np.unique(keys, return_index=True, return_inverse=True)
        return np.ascontiguousarray(bits[first]), _totals(inverse, numbers, len(first))
    # Rows as big-endian whole numbers sort like the rows, and far faster than rows of bytes.
    size = next(size for size in (1, 2, 4, 8) if 8 * size >= columns)
    packed = np.zeros((len(bits), size), dtype=np.uint8)
    filled = np.packbits(bits, axis=1)
    packed[:, : filled.shape[1]] = filled
    keys = packed.view(f">u{size}")[:, 0].astype(f"u{size}")
    if numbers is None:
        different, totals = np.unique(keys, return_counts=True)
    else:
        different, inverse = np.unique(keys, return_inverse=True)
        totals = _totals(inverse, numbers, len(different))
    back = different.astype(f">u{size}").view(np.uint8).reshape(-1, size)
    return np.ascontiguousarray(np.unpackbits(back, axis=1, count=columns)), totals.astype(np.int64)


def _totals(inverse: NDArray[np.intp], numbers: NDArray[np.int64] | None, count: int) -> NDArray[np.int64]:
    totals = np.zeros(count, dtype=np.int64)
    np.add.at(totals, inverse, 1 if numbers is None else numbers)
    return totals
