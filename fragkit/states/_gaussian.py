"""Number-conserving Gaussian states from one-particle density matrices."""

from typing import Any

import numpy as np

from fragkit.core import InputError, as_real_array, frozen
from fragkit.states._determinant import density_digest
from fragkit.states._wick import WickState


class GaussianState(WickState):
    """The uncorrelated state with given one-particle density matrices, for example those of a correlated method.

    It is **not** conditioned on the electron number: unless the density matrices are projectors (then it is a
    determinant), the number of electrons fluctuates by Σ n_p (1 − n_p) per spin, and samples show it. Use it as a
    reference for planning when a CI vector is out of reach, not for data that are post-selected by electron number.

    Parameters
    ----------
    density_alpha, density_beta
        (n, n) symmetric, ⟨a†_p a_q⟩ of each spin; eigenvalues in 0 … 1 (to 1e-6, then clipped) and a trace that is a
        whole number to 1e-6. `density_beta` defaults to `density_alpha`.

    Raises
    ------
    InputError
        If one of these does not hold.

    Examples
    --------
    >>> import numpy as np
    >>> GaussianState(np.diag([0.98, 0.02])).electrons
    (1, 1)
    """

    def __init__(
        self,
        density_alpha: Any,
        density_beta: Any = None,
        *,
        description: str = "Gaussian state",
        hamiltonian_digest: str | None = None,
    ) -> None:
        alpha, electrons_alpha = _density(density_alpha, "density_alpha", None)
        if density_beta is None:
            beta, electrons_beta = alpha, electrons_alpha
        else:
            beta, electrons_beta = _density(density_beta, "density_beta", len(alpha))
        self.orbitals = len(alpha)
        self.electrons = (electrons_alpha, electrons_beta)
        self.density_alpha = frozen(alpha)
        self.density_beta = frozen(beta)
        self.description = description
        self.hamiltonian_digest = hamiltonian_digest
        self.digest = density_digest("gaussian", alpha, beta)


def _density(value: Any, name: str, rows: int | None) -> tuple[np.ndarray, int]:
    matrix = as_real_array(value, name, (rows, rows))
    if matrix.shape[0] != matrix.shape[1]:
        raise InputError(f"`{name}` must be square (got {matrix.shape})")
    error = float(np.max(np.abs(matrix - matrix.T), initial=0.0))
    if error > 1e-8:
        raise InputError(f"`{name}` must be symmetric to 1e-8 (got a violation of {error:.3g})")
    occupations, orbitals = np.linalg.eigh(0.5 * (matrix + matrix.T))
    if len(occupations) and (occupations[0] < -1e-6 or occupations[-1] > 1.0 + 1e-6):
        raise InputError(
            f"`{name}` must have eigenvalues in 0 … 1 (got {occupations[0]:.6g} … {occupations[-1]:.6g}); "
            "give the density matrix of one spin, half of a spin-summed one"
        )
    trace = float(occupations.sum())
    if abs(trace - round(trace)) > 1e-6:
        raise InputError(f"`{name}` must have a whole number of electrons as its trace (got {trace:.8g})")
    clipped = np.clip(occupations, 0.0, 1.0)
    return (orbitals * clipped) @ orbitals.T, round(trace)
