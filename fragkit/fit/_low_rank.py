"""The strategy `LowRank`: eigenvectors of the two-electron tensor as a matrix over orbital pairs."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fragkit.core import Fragment, Hamiltonian, as_count, as_positive, cheapest_form
from fragkit.fit._controls import Controls
from fragkit.fit._fit import Fit
from fragkit.fit._pairs import pack_symmetric, pair_matrix, unpack_symmetric

Array = NDArray[np.float64]


@dataclass(frozen=True)
class LowRank:
    """Fragments of rank one: each eigenvector of ½ (pq|rs) over pairs, ε (Σ_i l_i n_i)² in its own orbitals.

    Parameters
    ----------
    tol
        Eigenvectors with |ε| above it are kept, hartree.
    count
        Keep at most this many, the largest |ε| first; None keeps all above `tol`.

    Notes
    -----
    The decomposition is that of Motta et al., npj Quantum Inf. 7, 83 (2021), and Huggins et al., npj Quantum
    Inf. 7, 23 (2021). Tensors that are not positive (attractive lattice models) give negative ε, which is
    allowed. For Hamiltonians given by factors the eigenvectors are found in the span of the factors.

    Orbitals with equal l, most often zero, can be rotated among themselves. They are taken as near to the Hamiltonian's
    own orbitals as the fewest gates ask for, which is also what other coefficients on these rotations profit from.

    Examples
    --------
    >>> import fragkit
    >>> ham = fragkit.hubbard(2, repulsion=4.0, electrons=(1, 1), periodic=False)
    >>> from fragkit.fit import fragment
    >>> len(fragment(ham, LowRank()))  # two of the tensor and one of one-body terms
    3
    """

    tol: float = 1e-8
    count: int | None = None

    def __post_init__(self) -> None:
        as_positive(self.tol, "tol")
        if self.count is not None:
            as_count(self.count, "count", minimum=1)

    def fit(self, hamiltonian: Hamiltonian, controls: Controls) -> Fit:
        """Diagonalise the tensor and each eigenvector."""
        values, vectors = pair_eigenvectors(hamiltonian)
        above = int(np.count_nonzero(np.abs(values) > 2.0 * self.tol))
        kept = above if self.count is None else min(above, self.count)
        rotations, coefficients = rank_one_fragments(values[:kept], vectors[:, :kept], hamiltonian.orbitals)
        rotations, coefficients = _fewest_gates(rotations, coefficients)
        dropped = float(np.linalg.norm(values[kept:]))
        controls.update(rotations, coefficients, dropped, 1)
        if kept == above:
            message = f"Every eigenvector with weight above {self.tol:.3g} Ha is kept ({above})."
        else:
            message = (
                f"Of {above} eigenvectors with weight above {self.tol:.3g} Ha the largest {kept} were kept, which "
                f"leaves a residual of {dropped:.3g} Ha; raise `count`, or use Joint, which needs fewer fragments."
            )
        return Fit(rotations, coefficients, dropped, kept == above, message, "eigenvectors of the pair matrix", 1)


def pair_eigenvectors(hamiltonian: Hamiltonian) -> tuple[Array, Array]:
    """Eigenvalues of (pq|rs) over weighted pairs, largest magnitude first, and the eigenvectors as columns (P, K)."""
    n = hamiltonian.orbitals
    size = n * (n + 1) // 2
    if hamiltonian.from_factors and len(hamiltonian.factors) < size:
        # With factors L = Q T the tensor is Q (T s Tᵀ) Qᵀ: a matrix of the number of factors only.
        basis, triangle = np.linalg.qr(pack_symmetric(hamiltonian.factors).T)
        values, small = np.linalg.eigh((triangle * hamiltonian.factor_signs) @ triangle.T)
        vectors = basis @ small
    else:
        values, vectors = np.linalg.eigh(pair_matrix(hamiltonian))
    order = np.argsort(-np.abs(values), kind="stable")
    return values[order], vectors[:, order]


def rank_one_fragments(values: Array, vectors: Array, orbitals: int) -> tuple[Array, Array]:
    """Rotations and coefficients (K, n, n) of Σ_k value_k (Σ_i l_i n_i)²/2, one fragment for each column."""
    if len(values) == 0:
        return np.zeros((0, orbitals, orbitals)), np.zeros((0, orbitals, orbitals))
    diagonals, rotations = np.linalg.eigh(unpack_symmetric(vectors.T, orbitals))
    return rotations, values[:, None, None] * diagonals[:, :, None] * diagonals[:, None, :]


def _fewest_gates(rotations: Array, coefficients: Array) -> tuple[Array, Array]:
    """The same fragments with orbitals that they do not tell apart rotated to the fewest gates."""
    if len(rotations) == 0:
        return rotations, coefficients
    forms = [cheapest_form(Fragment.plain(u, c)) for u, c in zip(rotations, coefficients, strict=True)]
    return np.stack([form.rotation for form in forms]), np.stack([form.opposite_spin for form in forms])
