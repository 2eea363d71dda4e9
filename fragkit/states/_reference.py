"""The verb `reference_state`."""

from typing import Any

from fragkit.core import Hamiltonian, InputError, as_hamiltonian, as_positive
from fragkit.states._base import ReferenceState, as_weight
from fragkit.states._determinant import DeterminantState
from fragkit.states._solve import full_ci, singles_and_doubles


def reference_state(
    hamiltonian: Hamiltonian, method: str = "cisd", *, noise: float = 0.0, memory: float = 4e9
) -> ReferenceState:
    """The state that the device is expected to prepare, computed classically.

    Parameters
    ----------
    hamiltonian
        Orbitals, integrals and electron numbers (alpha and beta may differ).
    method
        "hf": the determinant of the lowest orbitals, any size. "cisd": all single and double excitations of it,
        normalised. "fci": full CI.
    noise
        Depolarisation within the electron-number sector, 0 … 1: ρ = (1 − noise) |ψ⟩⟨ψ| + noise · 1/D.
    memory
        Largest number of bytes that "cisd" and "fci" may need.

    Raises
    ------
    InputError
        If `method` is unknown, `noise` is not in 0 … 1, or the CI space needs more than `memory`.

    Notes
    -----
    An iterative solution that misses its tolerance is returned with `converged` False, `message` saying so, and a
    `description` that carries it into every table.

    Examples
    --------
    >>> import numpy as np
    >>> from fragkit.core import Hamiltonian
    >>> ham = Hamiltonian(0.0, np.array([[-1.0, 0.5], [0.5, 0.0]]), np.zeros((2, 2, 2, 2)), electrons=(1, 1))
    >>> reference_state(ham, "fci")
    CIState(full CI, orbitals=2, electrons=(1, 1))
    >>> round(reference_state(ham, "hf").energy(ham), 6)
    -2.0
    """
    as_hamiltonian(hamiltonian)
    weight = as_weight(noise, "noise")
    memory = as_positive(memory, "memory")
    name: Any = method.lower() if isinstance(method, str) else method
    state: ReferenceState
    if name == "hf":
        state = DeterminantState.hartree_fock(hamiltonian)
    elif name == "cisd":
        state = singles_and_doubles(hamiltonian, memory=memory)
    elif name == "fci":
        state = full_ci(hamiltonian, memory=memory)
    else:
        raise InputError(
            f'`method` must be "hf", "cisd" or "fci" (got {method!r}); '
            "for a CI vector of your own use ReferenceState.from_ci_vector"
        )
    return state.with_noise(weight)
