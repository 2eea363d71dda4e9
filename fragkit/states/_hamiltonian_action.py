"""The Hamiltonian acting on full-CI vectors (by pyscf), and what follows from it."""

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

from fragkit.core import Hamiltonian

Array = NDArray[np.float64]


def hamiltonian_action(hamiltonian: Hamiltonian) -> tuple[Callable[[Array], Array], Array]:
    """Function v → (H − constant) v, and the diagonal of H − constant, on vectors (alpha strings, beta strings)."""
    from pyscf.fci import cistring, direct_spin1

    n, electrons = hamiltonian.orbitals, hamiltonian.electrons
    # pyscf wants writable contiguous arrays.
    one_body, two_body = np.array(hamiltonian.one_body), np.array(hamiltonian.two_body)
    shape = tuple(cistring.num_strings(n, k) for k in electrons)
    diagonal = np.asarray(direct_spin1.make_hdiag(one_body, two_body, n, electrons)).reshape(shape)
    if sum(electrons) == 0:
        return np.zeros_like, diagonal
    absorbed = direct_spin1.absorb_h1e(one_body, two_body, n, electrons, 0.5)  # pyright: ignore[reportArgumentType]
    links = tuple(cistring.gen_linkstr_index_trilidx(range(n), k) for k in electrons)

    def act(vector: Array) -> Array:
        result = direct_spin1.contract_2e(absorbed, np.ascontiguousarray(vector.reshape(shape)), n, electrons, links)
        return np.asarray(result).reshape(shape)

    return act, diagonal


def energy_and_variance(hamiltonian: Hamiltonian, vector: Array) -> tuple[float, float]:
    """Energy (hartree, constant included) and variance (hartree²) of a normalised vector."""
    act, _ = hamiltonian_action(hamiltonian)
    image = act(vector)
    energy = float(np.vdot(vector, image))
    # |(H − E)v|² and not ⟨H²⟩ − E², which would lose all digits near an eigenstate.
    residual = image - energy * vector
    return energy + hamiltonian.constant, float(np.vdot(residual, residual))
