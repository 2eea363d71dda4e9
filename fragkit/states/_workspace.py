"""Scratch arrays that are kept from one evaluation to the next.

Evaluations allocate the same large temporaries again and again; handing the memory back to the system and getting it
again costs more than the arithmetic on it.
"""

import math
import threading
from typing import Any

import numpy as np
from numpy.typing import NDArray

_LARGEST = 4_000_000  # entries; larger arrays are allocated each time and given back


class Workspace(threading.local):
    """Named scratch arrays of one thread; an array is overwritten when its name is asked for again."""

    def __init__(self) -> None:
        self._arrays: dict[tuple[str, np.dtype], NDArray[Any]] = {}

    def __reduce__(self) -> tuple[type, tuple[()]]:
        # A copy, or a state sent to another process, starts with scratch arrays of its own.
        return Workspace, ()

    def array(self, name: str, shape: tuple[int, ...], kind: np.dtype) -> NDArray[Any]:
        """An uninitialised array of the given shape and type."""
        size = math.prod(shape)
        if size > _LARGEST:
            return np.empty(shape, kind)
        key = (name, kind)
        kept = self._arrays.get(key)
        if kept is None or kept.size < size:
            kept = self._arrays[key] = np.empty(size, kind)
        return kept[:size].reshape(shape)
