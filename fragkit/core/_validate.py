"""Checks of user input: each returns the value in its normal form or raises `InputError`."""

import operator
from collections.abc import Sequence
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fragkit.core._errors import InputError


def as_real_array(value: Any, name: str, shape: tuple[int | None, ...]) -> NDArray[np.float64]:
    """Return `value` as a new finite float64 array of the given shape (None matches any length)."""
    try:
        array: NDArray[Any] = np.asarray(value)
        if np.iscomplexobj(array):
            largest = float(np.max(np.abs(np.imag(array)), initial=0.0))
            if largest > 0.0:
                raise InputError(
                    f"`{name}` must be real (got an imaginary part up to {largest:.3g}); choose real orbitals first"
                )
            array = np.real(array)
        array = np.array(array, dtype=np.float64)
    except (TypeError, ValueError) as error:
        if isinstance(error, InputError):
            raise
        raise InputError(f"`{name}` must be an array of real numbers (got {type(value).__name__})") from error
    wanted = "(" + ", ".join("any" if k is None else str(k) for k in shape) + ("," if len(shape) == 1 else "") + ")"
    if array.ndim != len(shape) or any(k is not None and k != got for k, got in zip(shape, array.shape, strict=True)):
        raise InputError(f"`{name}` must have shape {wanted} (got {array.shape})")
    bad = np.argwhere(~np.isfinite(array))
    # One row per bad entry; for a single number the rows are empty, so `bad.size` would be zero.
    if len(bad):
        index = tuple(int(k) for k in bad[0])
        where = f" at index {index}, {len(bad)} such entries); check how the array was made" if shape else ")"
        raise InputError(f"`{name}` must be finite (got {array[index]}{where}")
    return array


def as_count(value: Any, name: str, *, minimum: int = 0) -> int:
    """Return `value` as an int of at least `minimum`."""
    try:
        if isinstance(value, bool):
            raise TypeError
        number = operator.index(value)
    except TypeError:
        raise InputError(f"`{name}` must be a whole number (got {value!r})") from None
    if number < minimum:
        raise InputError(f"`{name}` must be at least {minimum} (got {number})")
    return number


def as_positive(value: Any, name: str) -> float:
    """Return `value` as a finite float above zero."""
    try:
        number = float(value)
    except (TypeError, ValueError):
        raise InputError(f"`{name}` must be a number above zero (got {value!r})") from None
    if not np.isfinite(number) or number <= 0.0:
        raise InputError(f"`{name}` must be a finite number above zero (got {number})")
    return number


def as_electrons(value: Any, orbitals: int, name: str = "electrons") -> tuple[int, int]:
    """Return (alpha, beta) electron numbers, each between 0 and `orbitals`."""
    if not isinstance(value, Sequence) and not isinstance(value, np.ndarray):
        raise InputError(f"`{name}` must be a pair (alpha, beta) (got {value!r}); for example {name}=(5, 5)")
    if len(value) != 2:
        raise InputError(f"`{name}` must be a pair (alpha, beta) (got {len(value)} numbers)")
    alpha, beta = (as_count(k, f"{name}[{i}]") for i, k in enumerate(value))
    if max(alpha, beta) > orbitals:
        raise InputError(
            f"`{name}` must have at most {orbitals} electrons per spin, the number of orbitals (got ({alpha}, {beta}))"
        )
    return alpha, beta


def as_rotation(value: Any, orbitals: int | None = None, name: str = "rotation", *, atol: float = 1e-8):
    """Return a square orthogonal matrix as float64, shape (orbitals, orbitals)."""
    rotation = as_real_array(value, name, (orbitals, orbitals))
    if rotation.shape[0] != rotation.shape[1]:
        raise InputError(f"`{name}` must be square (got {rotation.shape})")
    error = float(np.max(np.abs(rotation.T @ rotation - np.eye(len(rotation))), initial=0.0))
    if error > atol:
        raise InputError(
            f"`{name}` must be orthogonal to {atol:g} (got a deviation of {error:.3g}); "
            "orthonormalise its columns, for example with numpy.linalg.qr"
        )
    return rotation


def frozen(array: NDArray[np.float64]) -> NDArray[np.float64]:
    """Mark an array read-only and return it."""
    array.setflags(write=False)
    return array
