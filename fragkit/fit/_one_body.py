"""One-body terms carried by the linear part of two-electron fragments."""

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from fragkit.core import Fragment
from fragkit.fit._pairs import occupation_pairs, pack_symmetric, unpack_symmetric

Array = NDArray[np.float64]


def absorb_one_body(fragments: Sequence[Fragment], one_body: Array) -> tuple[list[Fragment], str]:
    """Add linear terms to the fragments so that they carry Σ one_body[p, q] E_pq as well.

    Since n_iσ² = n_iσ, a fragment measures Σ_i l_i n_i at no cost. The l of all fragments solve
    Σ_m U_m diag(l_m) U_mᵀ = one_body with the smallest Σ |l|²: n(n+1)/2 equations, n unknowns for each fragment.
    What is outside the span of the fragments' diagonals becomes a fragment of its own.

    Returns the fragments, of which there is one more only if something is left, and a sentence about it.
    """
    n = len(one_body)
    left = one_body
    absorbed = list(fragments)
    if fragments:
        columns = occupation_pairs(np.stack([fragment.rotation for fragment in fragments]))
        system = columns.transpose(1, 0, 2).reshape(columns.shape[1], -1)
        # A cut-off on small singular values keeps nearly dependent diagonals from giving large cancelling terms.
        solution = np.linalg.lstsq(system, pack_symmetric(one_body), rcond=1e-9)[0]
        left = unpack_symmetric(pack_symmetric(one_body) - system @ solution, n)
        absorbed = [
            Fragment(fragment.rotation, fragment.opposite_spin, fragment.same_spin, fragment.linear + linear)
            for fragment, linear in zip(fragments, solution.reshape(-1, n), strict=True)
        ]
    size = float(np.linalg.norm(left))
    if size <= 1e-11 * max(1.0, float(np.linalg.norm(one_body))):
        return absorbed, "The one-body part is in the linear terms of the fragments."
    energies, orbitals = np.linalg.eigh(left)
    absorbed.append(Fragment.one_body(orbitals, energies))
    return absorbed, (
        f"The fragments' diagonals do not span the one-body part: {size:.3g} Ha of it is a fragment of its own; "
        "more fragments would absorb it."
    )
