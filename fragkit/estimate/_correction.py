"""Values of fragments from misread bits, right on average, and what an uncertain calibration does to them.

A feature is at most a product of two occupations. For a block with confusion A[read, prepared], a function x of its
prepared state is estimated without bias by g = A^{-T} x of the state that was read, as E[g | prepared] = Aᵀg = x. For
one qubit this is (bit − e₀)/(1 − e₀ − e₁). Products across blocks are products of such estimates, because errors of
different blocks are independent; the product of the two qubits of one block has a table of its own.
"""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fragkit.core import Fragment
from fragkit.estimate._readout import ReadoutErrors, block_states

Array = NDArray[np.float64]
Bits = NDArray[np.uint8]


@dataclass(frozen=True, eq=False)
class Correction:
    """Tables of one set of readout errors.

    `tables[k]` has one column per function of block k: its one or two occupations and, for two qubits, their product.
    """

    errors: ReadoutErrors
    tables: tuple[Array, ...]

    @classmethod
    def of(cls, errors: ReadoutErrors) -> "Correction":
        """Tables, with the bias removed that an uncertain confusion brings in second order.

        With δA independent between columns of covariance Q_b, E[δg] = A^{-T} R g, row b of R = Q_b A^{-T}[:, b].
        """
        tables = []
        for block, confusion, covariance in zip(errors.blocks, errors.confusions, errors.covariances, strict=True):
            inverse = np.linalg.inv(confusion).T
            plain = inverse @ _functions(len(block))
            second = np.stack([covariance[b] @ inverse[:, b] for b in range(len(confusion))])
            tables.append(plain - inverse @ (second @ plain))
        return cls(errors, tuple(tables))

    def occupations(self, bits: Bits) -> Array:
        """Estimates (rows, 2n) of the occupations, real numbers around 0 and 1."""
        result = np.empty(bits.shape)
        for block, table in zip(self.errors.blocks, self.tables, strict=True):
            states = block_states(bits, block)
            for k, qubit in enumerate(block):
                result[:, qubit] = table[states, k]
        return result

    def values(self, fragment: Fragment, bits: Bits) -> Array:
        """Estimates (rows,) of the fragment's value."""
        occupations = self.occupations(bits)
        values = fragment.values(occupations)  # type: ignore[arg-type]
        for block, table in zip(self.errors.blocks, self.tables, strict=True):
            if len(block) == 2:
                product = table[block_states(bits, block), 2]
                first, second = occupations[:, block[0]], occupations[:, block[1]]
                values += _pair_coefficient(fragment, block) * (product - first * second)
        return values

    def gradients(self, fragment: Fragment, bits: Bits, numbers: NDArray[np.int64]) -> list[Array]:
        """Derivatives of the fragment's mean value by each block's confusion [read, prepared].

        From dg = −A^{-T} dAᵀ g: the derivative by A[a, b] is −Σ g[a] (A^{-1} W)[b], W the mean of ∂value/∂g in each
        state that was read.
        """
        occupations = self.occupations(bits)
        n = fragment.orbitals
        alpha, beta = occupations[:, :n], occupations[:, n:]
        slopes = np.concatenate(
            [
                beta @ fragment.opposite_spin + alpha @ fragment.same_spin + fragment.linear,
                alpha @ fragment.opposite_spin + beta @ fragment.same_spin + fragment.linear,
            ],
            axis=1,
        )
        weights = numbers / np.sum(numbers)
        result = []
        for block, confusion, table in zip(self.errors.blocks, self.errors.confusions, self.tables, strict=True):
            states = block_states(bits, block)
            columns = [slopes[:, qubit] for qubit in block]
            if len(block) == 2:
                pair = _pair_coefficient(fragment, block)
                first, second = occupations[:, block[0]], occupations[:, block[1]]
                columns = [columns[0] - pair * second, columns[1] - pair * first, np.full(len(bits), pair)]
            binned = np.stack([np.bincount(states, weights * c, len(confusion)) for c in columns], axis=1)
            result.append(-(table @ np.linalg.solve(confusion, binned).T))
        return result

    def variance(self, gradients: list[Array]) -> float:
        """Variance that the calibration's uncertainty gives to a number with these derivatives."""
        total = 0.0
        for gradient, covariance in zip(gradients, self.errors.covariances, strict=True):
            total += float(np.einsum("ab,bac,cb->", gradient, covariance, gradient))
        return total

    @property
    def degrees_of_freedom(self) -> float:
        """Of the calibration's error bar."""
        shots = self.errors.calibration_shots
        return 1e9 if shots is None else max(float(shots - 1), 1.0)


def _functions(qubits: int) -> Array:
    """Occupations of a block's states, and for two qubits their product: (states, functions)."""
    if qubits == 1:
        return np.array([[0.0], [1.0]])
    return np.array([[0.0, 0.0, 0.0], [0.0, 1.0, 0.0], [1.0, 0.0, 0.0], [1.0, 1.0, 1.0]])


def _pair_coefficient(fragment: Fragment, block: tuple[int, ...]) -> float:
    """Coefficient of the product of the occupations of two qubits."""
    n = fragment.orbitals
    first, second = sorted(block)
    if second < n:
        return float(fragment.same_spin[first, second])
    if first >= n:
        return float(fragment.same_spin[first - n, second - n])
    return float(fragment.opposite_spin[first, second - n])
