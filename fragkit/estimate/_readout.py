"""Readout errors of a device: confusion of single qubits or of correlated pairs, given or measured."""

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fragkit.core import InputError, as_real_array
from fragkit.estimate._bits import BitOrder, SpinOrder, bits_of_array, bits_of_strings, column_order

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False, repr=False)
class ReadoutErrors:
    """How the device misreads bits: independent blocks of one qubit, or of two whose errors are correlated.

    Made by `known` or `from_calibration`. Errors of different blocks are taken to be independent.

    Parameters
    ----------
    blocks
        Qubits of each block, one or two, in blocked order (alpha orbitals first); together all 2n qubits.
    confusions
        One matrix (2, 2) or (4, 4) per block: entry [read, prepared] is a probability. For two qubits i, j the state
        is 2 b_i + b_j.
    covariances
        One array (states, states, states) per block: `[prepared]` is the covariance matrix of that column of the
        confusion, zero where it is known.
    calibration_shots
        Smallest number of shots behind a column, or None if the probabilities were given.
    """

    blocks: tuple[tuple[int, ...], ...]
    confusions: tuple[Array, ...]
    covariances: tuple[Array, ...]
    calibration_shots: int | None = None

    def __post_init__(self) -> None:
        for block, confusion in zip(self.blocks, self.confusions, strict=True):
            smallest = float(np.min(np.abs(np.linalg.eigvals(confusion))))
            if smallest < 0.05:
                raise InputError(
                    f"readout errors must leave prepared states distinguishable (got a confusion matrix of smallest "
                    f"eigenvalue {smallest:.2g} for qubits {block}); check the calibration, or do not use these qubits"
                )

    @classmethod
    def known(cls, read_one: Any, read_zero: Any, *, orbitals: int, deviations: Any = None) -> "ReadoutErrors":
        """Independent errors of given probabilities.

        Parameters
        ----------
        read_one
            P(1 read | 0 prepared), one number or (2n,) numbers in blocked order.
        read_zero
            P(0 read | 1 prepared), likewise.
        orbitals
            Number of spatial orbitals n.
        deviations
            Pair of standard errors of the two, likewise; zero when left out.

        Raises
        ------
        InputError
            If a value is not a probability, or a qubit's errors add up to almost one or more.

        Examples
        --------
        >>> ReadoutErrors.known(0.01, 0.03, orbitals=2)
        ReadoutErrors(4 qubits, flips 0->1 0.01 and 1->0 0.03 on average, known)
        """
        count = 2 * orbitals
        one, zero = (_spread(v, name, count) for v, name in ((read_one, "read_one"), (read_zero, "read_zero")))
        spread = (0.0, 0.0) if deviations is None else deviations
        if not isinstance(spread, tuple | list) or len(spread) != 2:
            raise InputError(f"`deviations` must be a pair like the probabilities (got {deviations!r})")
        errors = [_spread(v, "deviations", count) for v in spread]
        pattern = np.array([[1.0, -1.0], [-1.0, 1.0]])
        return cls(
            tuple((j,) for j in range(count)),
            tuple(np.array([[1 - one[j], zero[j]], [one[j], 1 - zero[j]]]) for j in range(count)),
            tuple(np.array([errors[0][j] ** 2 * pattern, errors[1][j] ** 2 * pattern]) for j in range(count)),
        )

    @classmethod
    def from_calibration(
        cls,
        tables: Mapping[str, Any],
        *,
        orbitals: int,
        bit_order: BitOrder,
        spin_order: SpinOrder,
        qubits: Sequence[int] | None = None,
        pairs: Sequence[tuple[int, int]] = (),
    ) -> "ReadoutErrors":
        """Errors from calibration runs that prepare known bit strings.

        Parameters
        ----------
        tables
            {prepared bit string: counts}; counts are a dictionary {read bit string: number} or an array (shots,
            qubits). Every qubit must be prepared in 0 and in 1, every pair in all four states; "00…0" and "11…1" are
            enough without pairs. Prepared strings follow `bit_order` and `spin_order` like the others.
        orbitals
            Number of spatial orbitals n.
        bit_order, spin_order, qubits
            As for `Counts.from_strings`.
        pairs
            Pairs of qubits in blocked order whose errors are correlated; no qubit in two of them.

        Raises
        ------
        InputError
            If a table is not what it must be, or a qubit or pair was not prepared in every state.

        Examples
        --------
        >>> errors = ReadoutErrors.from_calibration(
        ...     {"00": {"00": 98, "01": 2}, "11": {"11": 95, "10": 5}},
        ...     orbitals=1, bit_order="first-qubit-left", spin_order="blocked",
        ... )
        >>> errors.confusions[1]
        array([[0.98, 0.05],
               [0.02, 0.95]])
        """
        if not isinstance(tables, Mapping) or not tables:
            raise InputError(f"`tables` must be {{prepared bit string: counts}} (got {tables!r})")
        blocks = _blocks(pairs, 2 * orbitals)
        totals = [np.zeros((2 ** len(block),) * 2) for block in blocks]
        for prepared, data in tables.items():
            name = f"calibration of {prepared!r}"
            known, _ = bits_of_strings({prepared: 1}, "prepared bit strings")
            if isinstance(data, Mapping):
                bits, numbers = bits_of_strings(data, name)
            else:
                bits = bits_of_array(data, name)
                numbers = np.ones(len(bits), dtype=np.int64)
            if not len(bits):
                raise InputError(f"{name} must have shots (got none)")
            order = column_order(orbitals, bit_order, spin_order, qubits, bits.shape[1])
            start = known[:, column_order(orbitals, bit_order, spin_order, qubits, known.shape[1])]
            for block, total in zip(blocks, totals, strict=True):
                read = block_states(bits[:, order], block)
                total[:, block_states(start, block)[0]] += np.bincount(read, numbers, len(total))
        confusions, covariances = [], []
        for block, total in zip(blocks, totals, strict=True):
            shots = np.sum(total, axis=0)
            if np.any(shots == 0):
                state = format(int(np.argmin(shots)), f"0{len(block)}b")
                raise InputError(
                    f"calibration must prepare every qubit in 0 and 1 and every pair in all four states (got no run "
                    f"with qubits {block} in {state}); add one"
                )
            confusions.append(total / shots)
            # Outcomes that never occurred are not impossible: one shot spread over all for the error (Laplace).
            chances = (total + 1.0 / len(total)) / (shots + 1.0)
            covariances.append(
                np.array([(np.diag(c) - np.outer(c, c)) / s for c, s in zip(chances.T, shots, strict=True)])
            )
        least = int(min(np.min(np.sum(total, axis=0)) for total in totals))
        return cls(blocks, tuple(confusions), tuple(covariances), least)

    @property
    def orbitals(self) -> int:
        """Number of spatial orbitals n."""
        return sum(len(block) for block in self.blocks) // 2

    def __repr__(self) -> str:
        flips = np.array([_flips(confusion) for confusion in self.confusions])
        pairs = sum(len(block) == 2 for block in self.blocks)
        joined = f", {pairs} correlated pairs" if pairs else ""
        source = "known" if self.calibration_shots is None else f"from {self.calibration_shots} shots or more"
        return (
            f"ReadoutErrors({2 * self.orbitals} qubits, flips 0->1 {flips[:, 0].mean():.3g} and 1->0 "
            f"{flips[:, 1].mean():.3g} on average{joined}, {source})"
        )


def block_states(bits: NDArray[np.uint8], block: tuple[int, ...]) -> NDArray[np.intp]:
    """State of a block in each row: the bit, or 2 b_i + b_j."""
    states = bits[:, block[0]].astype(np.intp)
    return states if len(block) == 1 else 2 * states + bits[:, block[1]]


def _spread(value: Any, name: str, count: int) -> Array:
    array = as_real_array(value, name, () if np.ndim(value) == 0 else (count,))
    if np.any(array < 0.0) or np.any(array > 1.0):
        raise InputError(f"`{name}` must be between 0 and 1 (got {array.min():.3g} to {array.max():.3g})")
    return np.broadcast_to(array, (count,))


def _blocks(pairs: Sequence[tuple[int, int]], count: int) -> tuple[tuple[int, ...], ...]:
    listed = [tuple(int(q) for q in pair) for pair in pairs]
    used = [q for pair in listed for q in pair]
    if any(len(pair) != 2 for pair in listed) or len(set(used)) != len(used) or any(not 0 <= q < count for q in used):
        raise InputError(
            f"`pairs` must hold pairs of different qubits below {count}, each qubit at most once (got {list(pairs)}); "
            "larger groups of correlated qubits cannot be corrected here"
        )
    return (*listed, *((q,) for q in range(count) if q not in used))


def _flips(confusion: Array) -> tuple[float, float]:
    """Mean P(1 read | 0) and P(0 read | 1) of the block's qubits."""
    if len(confusion) == 2:
        return confusion[1, 0], confusion[0, 1]
    # Marginals over the other qubit, in its two states alike.
    tensor = confusion.reshape(2, 2, 2, 2)
    first, second = tensor.sum(1).mean(2), tensor.sum(0).mean(1)
    return 0.5 * (first[1, 0] + second[1, 0]), 0.5 * (first[0, 1] + second[0, 1])
