"""Ground states in the full-CI space and in the space of single and double excitations."""

from math import comb

import numpy as np

from fragkit.core import Hamiltonian, InputError
from fragkit.states._ci import CIState
from fragkit.states._hamiltonian_action import Array, hamiltonian_action
from fragkit.states._strings import strings

_RESIDUAL = 1e-7  # |(H − E)v| at which a solution counts as converged, hartree; its energy error is about 1e-14
_DENSE = 400  # largest space that is diagonalised as a matrix


def require_memory(orbitals: int, electrons: tuple[int, int], memory: float) -> None:
    """Raise `InputError` when the vectors of this sector would need more than `memory` bytes."""
    determinants = comb(orbitals, electrons[0]) * comb(orbitals, electrons[1])
    # Davidson keeps about 12 trial vectors and their images, and pyscf works on a few more.
    needed = 8 * determinants * 30
    if needed > memory:
        raise InputError(
            f"`hamiltonian` must have a CI space that fits in {memory / 1e9:.3g} GB (got {determinants:,} determinants "
            f"of {orbitals} orbitals with electrons {electrons}, about {needed / 1e9:.3g} GB); choose a smaller active "
            'space, raise `memory`, or use reference_state(hamiltonian, "hf"), which needs no CI vector'
        )


def full_ci(hamiltonian: Hamiltonian, *, memory: float = 4e9) -> CIState:
    """The lowest full-CI state of the Hamiltonian's electron numbers."""
    return _ground_state(hamiltonian, None, "full CI", memory)


def singles_and_doubles(hamiltonian: Hamiltonian, *, memory: float = 4e9) -> CIState:
    """The lowest state among determinants that differ by at most two orbitals from the reference determinant.

    The reference occupies the lowest orbitals of each spin. Not restricted to spin eigenfunctions when the electron
    numbers differ. The vector is stored in the full-CI layout.
    """
    n, (a, b) = hamiltonian.orbitals, hamiltonian.electrons
    require_memory(n, (a, b), memory)
    ranks = [(strings(n, k).occupations[:, k:]).sum(axis=1) for k in (a, b)]
    allowed = ranks[0][:, None] + ranks[1][None, :] <= 2.0
    return _ground_state(hamiltonian, allowed, "CISD", memory)


def _ground_state(hamiltonian: Hamiltonian, allowed: np.ndarray | None, name: str, memory: float) -> CIState:
    from pyscf import lib

    n, electrons = hamiltonian.orbitals, hamiltonian.electrons
    require_memory(n, electrons, memory)
    act, full_diagonal = hamiltonian_action(hamiltonian)
    shape = full_diagonal.shape
    mask = np.ones(shape, dtype=bool) if allowed is None else allowed
    diagonal = full_diagonal[mask]

    def expand(vector: Array) -> Array:
        full = np.zeros(shape)
        full[mask] = vector
        return full

    def project(vector: Array) -> Array:
        return act(expand(vector))[mask]

    if len(diagonal) <= _DENSE:
        matrix = np.array([project(row) for row in np.eye(len(diagonal))])
        vector = _purified(expand(np.linalg.eigh(0.5 * (matrix + matrix.T))[1][:, 0]), electrons)[mask]
        image = project(vector)
    else:
        start = np.zeros(len(diagonal))
        # A little of every low determinant lets the start overlap with states of any spin and symmetry.
        lowest = np.argsort(diagonal, kind="stable")[:50]
        start[lowest] = 1e-3 * np.cos(1.0 + np.arange(len(lowest)))
        start[lowest[0]] = 1.0

        def precondition(residual: Array, energy: float, *_: object) -> Array:
            shifted = diagonal - energy
            return residual / np.where(np.abs(shifted) < 1e-8, 1e-8, shifted)

        _, _, vectors = lib.davidson1(
            lambda rows: [project(np.asarray(row)) for row in rows],
            [start],
            precondition,
            tol=1e-14,
            max_cycle=200,
            max_space=14,
            tol_residual=0.1 * _RESIDUAL,
            verbose=0,
        )
        vector = np.asarray(vectors[0])
        vector = _purified(expand(vector), electrons)[mask]
        image = project(vector)
    energy = float(vector @ image)
    residual = float(np.linalg.norm(image - energy * vector))
    converged = residual <= _RESIDUAL
    # A fixed sign makes the digest independent of the eigensolver's choice.
    vector = vector * np.sign(vector[np.argmax(np.abs(vector))])
    message = (
        f"{name} converged to a residual of {residual:.1e} hartree"
        if converged
        else f"{name} did not converge: residual {residual:.1e} hartree (wanted {_RESIDUAL:g}); near-degenerate states "
        "may be mixed, the state is still a valid reference"
    )
    return CIState(
        expand(vector),
        n,
        electrons,
        description=name if converged else f"{name} (not converged, residual {residual:.1e})",
        hamiltonian_digest=hamiltonian.digest,
        converged=converged,
        message=message,
    )


def _purified(vector: Array, electrons: tuple[int, int]) -> Array:
    """Normalised, and exactly symmetric under exchange of the spins when it is so up to the solver's noise.

    States of even total spin with equal electron numbers are symmetric matrices, which halves the work on them.
    """
    if electrons[0] == electrons[1] and np.linalg.norm(vector - vector.T) < 1e-5 * np.linalg.norm(vector):
        vector = 0.5 * (vector + vector.T)
    return vector / np.linalg.norm(vector)
