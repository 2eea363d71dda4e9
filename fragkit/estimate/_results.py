"""Result objects of circuit frameworks, recognised by what they offer; no framework is imported."""

from collections.abc import Mapping
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fragkit.core import InputError
from fragkit.estimate._bits import Bits, bits_of_array, bits_of_strings


def bits_of_result(result: Any, name: str, register: str | None) -> tuple[Bits, NDArray[np.int64] | None]:
    """Bits as the object writes them, left to right, and how often each row occurred (None: each once).

    Known are objects with `measurements` {key: (shots, qubits)} (cirq), with `data.<register>.get_counts()` (the
    qiskit samplers' elements), and with `get_counts()` (qiskit results of one circuit).
    """
    measurements = getattr(result, "measurements", None)
    if isinstance(measurements, Mapping):
        key = _only(list(measurements), register, name, "measurement key")
        return bits_of_array(np.asarray(measurements[key]), name), None
    data = getattr(result, "data", None)
    if data is not None and hasattr(data, "keys"):
        key = _only(list(data.keys()), register, name, "classical register")
        value = data[key] if isinstance(data, Mapping) or hasattr(data, "__getitem__") else getattr(data, key)
        if hasattr(value, "get_counts"):
            return bits_of_strings(value.get_counts(), name)
    if callable(getattr(result, "get_counts", None)):
        table = result.get_counts()
        if isinstance(table, Mapping):
            return bits_of_strings(table, name)
    raise InputError(
        f"`{name}` must be a cirq Result, an element of a qiskit sampler's result or an object with get_counts() "
        f"(got {type(result).__name__}); pass dictionaries of bit strings to Counts.from_strings instead"
    )


def _only(keys: list[Any], register: str | None, name: str, kind: str) -> Any:
    if register is not None:
        if register not in keys:
            raise InputError(f"`register` must be a {kind} of {name} (got {register!r}, there is {keys})")
        return register
    if len(keys) != 1:
        raise InputError(f"`{name}` must have one {kind}, or `register` must choose one (got {keys})")
    return keys[0]
