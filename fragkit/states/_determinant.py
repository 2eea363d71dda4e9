"""A single Slater determinant, at any size."""

import hashlib
from typing import Any

import numpy as np

from fragkit.core import Hamiltonian, InputError, as_electrons, as_real_array, frozen
from fragkit.states._wick import WickState


class DeterminantState(WickState):
    """A Slater determinant given by its occupied orbitals; no CI vector is made.

    Parameters
    ----------
    alpha_orbitals, beta_orbitals
        (n, n_alpha) and (n, n_beta); orthonormal columns are the occupied orbitals in the Hamiltonian's orbitals.

    Raises
    ------
    InputError
        If a shape is wrong, an entry is not finite, or the columns are not orthonormal to 1e-8.

    Examples
    --------
    >>> import numpy as np
    >>> DeterminantState.lowest(3, (2, 1)).moments(np.eye(3))[0][-3:]
    array([2., 1., 0.])
    """

    def __init__(
        self,
        alpha_orbitals: Any,
        beta_orbitals: Any,
        *,
        description: str = "determinant",
        hamiltonian_digest: str | None = None,
    ) -> None:
        alpha = _orthonormal(alpha_orbitals, "alpha_orbitals", None)
        beta = _orthonormal(beta_orbitals, "beta_orbitals", len(alpha))
        self.orbitals = len(alpha)
        self.electrons = (alpha.shape[1], beta.shape[1])
        self.density_alpha = frozen(alpha @ alpha.T)
        self.density_beta = frozen(beta @ beta.T)
        self.description = description
        self.hamiltonian_digest = hamiltonian_digest
        self.digest = density_digest("determinant", self.density_alpha, self.density_beta)

    @classmethod
    def lowest(cls, orbitals: int, electrons: Any) -> "DeterminantState":
        """The determinant that occupies the first orbitals of each spin."""
        alpha, beta = as_electrons(electrons, orbitals)
        one = np.eye(orbitals)
        return cls(one[:, :alpha], one[:, :beta], description="Hartree-Fock determinant")

    @classmethod
    def hartree_fock(cls, hamiltonian: Hamiltonian) -> "DeterminantState":
        """The Hamiltonian's reference determinant: its first orbitals of each spin."""
        alpha, beta = hamiltonian.electrons
        one = np.eye(hamiltonian.orbitals)
        return cls(
            one[:, :alpha],
            one[:, :beta],
            description="Hartree-Fock determinant",
            hamiltonian_digest=hamiltonian.digest,
        )


def _orthonormal(value: Any, name: str, rows: int | None) -> np.ndarray:
    columns = as_real_array(value, name, (rows, None))
    error = float(np.max(np.abs(columns.T @ columns - np.eye(columns.shape[1])), initial=0.0))
    if error > 1e-8:
        raise InputError(
            f"`{name}` must have orthonormal columns to 1e-8 (got a deviation of {error:.3g}); "
            "orthonormalise them, for example with numpy.linalg.qr"
        )
    return columns


def density_digest(kind: str, alpha: np.ndarray, beta: np.ndarray) -> str:
    """Hexadecimal SHA-256 of a pair of density matrices, rounded to 1e-10."""
    chain = hashlib.sha256(f"{kind} {len(alpha)}".encode())
    for density in (alpha, beta):
        chain.update((np.round(density, 10) + 0.0).tobytes())
    return chain.hexdigest()
