"""What a strategy is given and what it returns: the protocol between the verb `fragment` and the algorithms."""

from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from fragkit.core import Hamiltonian
from fragkit.fit._controls import Controls

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Fit:
    """Two-electron fragments as a strategy returns them.

    `rotations` (M, n, n) has the new orbitals in its columns; `coefficients` (M, n, n), hartree, are the symmetric
    λ of the plain fragments ½ Σ λ_ij n_i n_j. `residual` is the Frobenius norm of the tensor minus the fragments,
    hartree. `message` is a full sentence that says why the strategy ended and,
    unless `converged`, what to change. `method` names the algorithm that was used.
    """

    rotations: Array
    coefficients: Array
    residual: float
    converged: bool
    message: str
    method: str
    iterations: int


class Strategy(Protocol):
    """An algorithm that the verb `fragment` can run: any object with this method.

    The verb checks the Hamiltonian, takes the time, adds the one-body fragment and catches an interrupt; the
    strategy only fits the two-electron tensor. It calls `controls.update` whenever it has something better.
    """

    def fit(self, hamiltonian: Hamiltonian, controls: Controls) -> Fit:
        """Fit the two-electron tensor of `hamiltonian`."""
        ...
