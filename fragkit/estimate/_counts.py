"""Counts of a run: what the device returned, circuit by circuit, tied to the plan it was run for."""

import hashlib
import operator
from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass
from functools import cached_property
from typing import Any, Literal

import numpy as np
from numpy.typing import NDArray

from fragkit.core import InputError, MismatchError
from fragkit.estimate._bits import (
    BitOrder,
    Bits,
    SpinOrder,
    bits_of_array,
    bits_of_packed,
    bits_of_strings,
    check_orders,
    column_order,
    distinct_rows,
)
from fragkit.estimate._results import bits_of_result
from fragkit.planning import Plan


@dataclass(frozen=True, eq=False, repr=False)
class Counts:
    """Bit strings of every circuit of a plan and how often each occurred.

    Made by `from_strings`, `from_arrays`, `from_packed`, `from_results`, `fragkit.simulate` or `load`; batches of
    one plan are joined with `merged`.

    Parameters
    ----------
    bits
        One uint8 array (rows, 2n) per circuit, each different row once; column j is qubit j, the n alpha orbitals
        first, then the n beta. A circuit that has not been run has no rows.
    numbers
        One int64 array (rows,) per circuit, how often each row occurred.
    plan_digest
        Digest of the plan that the circuits were made from.
    batches
        Names of the batches in here; a batch without a name goes by the digest of its content.

    Examples
    --------
    >>> import numpy as np
    >>> from fragkit.core import Fragment
    >>> from fragkit.planning import Plan
    >>> fragment = Fragment.one_body(np.eye(2), [-1.0, 0.5])
    >>> plan = Plan((fragment,), 0.0, [100], [0.1], (1, 1), "digest", 0.0, 0.0)
    >>> counts = Counts.from_strings(
    ...     plan, {0: {"0101": 90, "0110": 10}}, bit_order="first-qubit-right", spin_order="blocked"
    ... )
    >>> counts.shots
    array([100])
    >>> counts.strings(0)
    {'0110': 10, '1010': 90}
    """

    bits: tuple[Bits, ...]
    numbers: tuple[NDArray[np.int64], ...]
    plan_digest: str
    batches: tuple[str, ...]

    def __post_init__(self) -> None:
        for bits, numbers in zip(self.bits, self.numbers, strict=True):
            bits.setflags(write=False)
            numbers.setflags(write=False)

    @classmethod
    def from_strings(
        cls,
        plan: Plan,
        tables: Mapping[Any, Mapping[str, int]],
        *,
        bit_order: BitOrder,
        spin_order: SpinOrder,
        qubits: Sequence[int] | None = None,
        batch: str | None = None,
    ) -> "Counts":
        """Counts from dictionaries of bit strings, one for each circuit.

        Parameters
        ----------
        plan
            The plan that the circuits came from.
        tables
            {circuit: {bit string: count}}; circuits go by their index in the plan, as a number or as the name
            of the exported circuit.
        bit_order
            "first-qubit-left" if the first character is qubit 0, "first-qubit-right" if the last one is.
        spin_order
            "blocked" if the alpha orbitals are the first n bits, "interleaved" if alpha and beta take turns. The
            measured bits of exported circuits are blocked in either layout; "interleaved" is for bits that were
            read qubit by qubit from an interleaved register whose readout stayed in place.
        qubits
            Position of each of the circuit's qubits among the measured bits, when they are not simply in order.
        batch
            Name of this run, for example the job's identifier. Two batches of one name cannot be merged.

        Raises
        ------
        InputError
            If a circuit is not in the plan, a key is not a string of 0 and 1 of the right length, or a count is
            not a whole number of at least zero.
        """

        def read(table: Any, name: str) -> tuple[Bits, NDArray[np.int64] | None]:
            return bits_of_strings(table, name)

        return cls._gather(plan, tables, read, bit_order, spin_order, qubits, batch)

    @classmethod
    def from_arrays(
        cls,
        plan: Plan,
        arrays: Mapping[Any, Any],
        *,
        spin_order: SpinOrder,
        bit_order: BitOrder = "first-qubit-left",
        qubits: Sequence[int] | None = None,
        batch: str | None = None,
    ) -> "Counts":
        """Counts from arrays (shots, qubits) of 0 and 1, one for each circuit.

        Column 0 is qubit 0, unless `bit_order` is "first-qubit-right". Other arguments and errors as for
        `from_strings`.
        """

        def read(array: Any, name: str) -> tuple[Bits, NDArray[np.int64] | None]:
            return bits_of_array(array, name), None

        return cls._gather(plan, arrays, read, bit_order, spin_order, qubits, batch)

    @classmethod
    def from_packed(
        cls,
        plan: Plan,
        arrays: Mapping[Any, Any],
        *,
        bit_order: BitOrder,
        spin_order: SpinOrder,
        width: int | None = None,
        byte_order: Literal["big", "little"] = "big",
        qubits: Sequence[int] | None = None,
        batch: str | None = None,
    ) -> "Counts":
        """Counts from uint8 arrays (shots, bytes) with eight bits in a byte, as `numpy.packbits` makes them.

        `width` is the number of bits of a shot, 2n when left out; `byte_order` is numpy's `bitorder`. Other
        arguments and errors as for `from_strings`.
        """

        def read(array: Any, name: str) -> tuple[Bits, NDArray[np.int64] | None]:
            return bits_of_packed(array, name, 2 * plan.orbitals if width is None else width, byte_order), None

        return cls._gather(plan, arrays, read, bit_order, spin_order, qubits, batch)

    @classmethod
    def from_results(
        cls,
        plan: Plan,
        results: Any,
        *,
        bit_order: BitOrder,
        spin_order: SpinOrder,
        qubits: Sequence[int] | None = None,
        register: str | None = None,
        batch: str | None = None,
    ) -> "Counts":
        """Counts from the result objects of cirq or qiskit, one for each circuit.

        Parameters
        ----------
        results
            {circuit: result}, or a sequence with one result per circuit in the plan's order. A result is a
            `cirq.Result`, an element of a qiskit sampler's result, or any object with `get_counts()`.
        bit_order
            Order of the bits in what the object holds: "first-qubit-left" for cirq results measured in qubit
            order, "first-qubit-right" for qiskit results.
        register
            Measurement key (cirq) or classical register (qiskit); needed when there are several.

        Other arguments and errors as for `from_strings`.
        """
        if not isinstance(results, Mapping):
            try:
                listed = list(results)
            except TypeError:
                raise InputError(
                    "`results` must be {circuit: result} or a sequence of one result per circuit "
                    f"(got {type(results).__name__})"
                ) from None
            if len(listed) != len(plan):
                raise InputError(
                    f"`results` must hold one result for each of the {len(plan)} circuits when it is a sequence "
                    f"(got {len(listed)}); pass {{circuit: result}} for a part of them"
                )
            results = dict(enumerate(listed))

        def read(result: Any, name: str) -> tuple[Bits, NDArray[np.int64] | None]:
            return bits_of_result(result, name, register)

        return cls._gather(plan, results, read, bit_order, spin_order, qubits, batch)

    @classmethod
    def _gather(
        cls,
        plan: Plan,
        data: Mapping[Any, Any],
        read: Callable[[Any, str], tuple[Bits, NDArray[np.int64] | None]],
        bit_order: BitOrder,
        spin_order: SpinOrder,
        qubits: Sequence[int] | None,
        batch: str | None,
    ) -> "Counts":
        check_orders(bit_order, spin_order)
        if not isinstance(data, Mapping):
            raise InputError(f"counts must be given as {{circuit: data}} (got {type(data).__name__})")
        if batch is not None and (not isinstance(batch, str) or not batch):
            raise InputError(f"`batch` must be a name or None (got {batch!r})")
        found: dict[int, tuple[Bits, NDArray[np.int64]]] = {}
        for key, value in data.items():
            index = _circuit_index(key, len(plan))
            if index in found:
                raise InputError(f"each circuit must be given once (got circuit {index} again as {key!r})")
            bits, numbers = read(value, f"counts of circuit {key}")
            if len(bits):
                columns = column_order(plan.orbitals, bit_order, spin_order, qubits, bits.shape[1])
                bits = bits[:, columns]
            else:
                bits = np.zeros((0, 2 * plan.orbitals), dtype=np.uint8)
            found[index] = distinct_rows(bits, numbers)
        return cls.of_rows(plan, found, batch)

    @classmethod
    def of_rows(
        cls, plan: Plan, found: Mapping[int, tuple[Bits, NDArray[np.int64]]], batch: str | None = None
    ) -> "Counts":
        """Counts from distinct rows and numbers by circuit index, in the order used inside."""
        nothing = (np.zeros((0, 2 * plan.orbitals), dtype=np.uint8), np.zeros(0, dtype=np.int64))
        pairs = [found.get(index, nothing) for index in range(len(plan))]
        bits, numbers = tuple(pair[0] for pair in pairs), tuple(pair[1] for pair in pairs)
        return cls(bits, numbers, plan.digest, (_content_digest(bits, numbers) if batch is None else batch,))

    @staticmethod
    def rows_of_strings(table: Mapping[str, int], orbitals: int, name: str) -> tuple[Bits, NDArray[np.int64]]:
        """Rows and numbers from {bit string: count} in the order used inside, the inverse of `strings`."""
        bits, numbers = bits_of_strings(table, name)
        if len(bits) and bits.shape[1] != 2 * orbitals:
            raise InputError(f"{name} must have strings of {2 * orbitals} bits (got {bits.shape[1]})")
        return distinct_rows(bits.reshape(-1, 2 * orbitals), numbers)

    @property
    def orbitals(self) -> int:
        """Number of spatial orbitals n."""
        return self.bits[0].shape[1] // 2

    @cached_property
    def shots(self) -> NDArray[np.int64]:
        """(circuits,) number of shots of each circuit."""
        totals = np.array([np.sum(numbers) for numbers in self.numbers], dtype=np.int64)
        totals.setflags(write=False)
        return totals

    @property
    def total_shots(self) -> int:
        """Shots of all circuits together."""
        return int(np.sum(self.shots))

    def strings(self, circuit: int) -> dict[str, int]:
        """{bit string: count} of one circuit; first character is qubit 0, alpha orbitals first."""
        return {
            row.tobytes().decode("ascii"): int(number)
            for row, number in zip(self.bits[circuit] + ord("0"), self.numbers[circuit], strict=True)
        }

    def merged(self, *others: "Counts") -> "Counts":
        """These counts and others of the same plan together.

        Raises
        ------
        MismatchError
            If the others belong to another plan.
        InputError
            If a batch occurs twice, by its name or, without a name, by having exactly the same content.
        """
        batches = list(self.batches)
        for other in others:
            if other.plan_digest != self.plan_digest:
                raise MismatchError(
                    f"`others` must belong to the same plan (got plan digest {other.plan_digest[:12]} and "
                    f"{self.plan_digest[:12]}); estimate them apart"
                )
            twice = sorted(set(batches) & set(other.batches))
            if twice:
                raise InputError(
                    f"each batch must be merged once (got {', '.join(twice)} again); if two runs really gave the "
                    "same counts, give each a `batch` name of its own"
                )
            batches += other.batches
        joined = [
            distinct_rows(np.concatenate([c.bits[m] for c in parts]), np.concatenate([c.numbers[m] for c in parts]))
            for parts in [(self, *others)]
            for m in range(len(self.bits))
        ]
        return Counts(
            tuple(bits for bits, _ in joined),
            tuple(numbers for _, numbers in joined),
            self.plan_digest,
            tuple(batches),
        )

    def save(self, path: Any, *, overwrite: bool = False) -> None:
        """Write the counts as JSON; see `fragkit.files.save_counts`."""
        from fragkit.files import save_counts

        save_counts(self, path, overwrite=overwrite)

    @staticmethod
    def load(path: Any, *, plan: Plan | None = None) -> "Counts":
        """Read counts written by `save`; with `plan`, they must belong to it. See `fragkit.files.load_counts`."""
        from fragkit.files import load_counts

        return load_counts(path, plan=plan)

    def __len__(self) -> int:
        return len(self.bits)

    def __repr__(self) -> str:
        run = int(np.count_nonzero(self.shots))
        return (
            f"Counts({self.total_shots} shots, {run} of {len(self)} circuits run, orbitals={self.orbitals}, "
            f"{len(self.batches)} batches, plan {self.plan_digest[:12]})"
        )


def _circuit_index(key: Any, count: int) -> int:
    """Index of a circuit from its number or its exported name, which ends in the number."""
    index = None
    if isinstance(key, str):
        digits = key.rpartition("_")[2] if key.startswith("circuit_") else key
        index = int(digits) if digits.isascii() and digits.isdigit() else None
    elif not isinstance(key, bool):
        try:
            index = operator.index(key)
        except TypeError:
            index = None
    if index is None or not 0 <= index < count:
        raise InputError(
            f"circuits must be numbered 0 … {count - 1} as in the plan, as a number or a name like 'circuit_3' "
            f"(got {key!r})"
        )
    return index


def _content_digest(bits: Sequence[Bits], numbers: Sequence[NDArray[np.int64]]) -> str:
    chain = hashlib.sha256()
    for rows, count in zip(bits, numbers, strict=True):
        chain.update(f"{rows.shape} ".encode())
        chain.update(rows.tobytes())
        chain.update(count.tobytes())
    return "content-" + chain.hexdigest()[:24]
