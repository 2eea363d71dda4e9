"""Lattice models as Hamiltonians."""

from collections.abc import Sequence
from itertools import product
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fragkit.core import Hamiltonian, InputError, as_count, as_real_array


def hubbard(
    sites: int | Sequence[int],
    *,
    electrons: Any,
    hopping: float = 1.0,
    repulsion: float = 4.0,
    periodic: bool = True,
) -> Hamiltonian:
    """The Hubbard model on a chain or a rectangular lattice, −t Σ_⟨ij⟩σ (a†_iσ a_jσ + h.c.) + U Σ_i n_iα n_iβ.

    Each pair of neighbours is one bond, also across a periodic edge of length 2, where the bond inside and the one
    around the edge join the same two sites. Source of the model: Hubbard, Proc. R. Soc. Lond. A 276, 238 (1963).

    Parameters
    ----------
    sites
        Number of sites of a chain, or the edge lengths of a rectangular lattice such as (2, 3). Sites of a lattice
        are numbered with the last direction fastest.
    electrons
        (alpha, beta) electron numbers.
    hopping, repulsion
        t and U, in the unit in which energies are wanted (called hartree elsewhere in this package).
    periodic
        Whether the last site of each direction neighbours the first.

    Raises
    ------
    InputError
        If a number of sites is below 1, a strength is not finite, or the electrons do not fit.

    Examples
    --------
    >>> ham = hubbard(2, electrons=(1, 1), hopping=1.0, repulsion=4.0)
    >>> ham.one_body.tolist()
    [[0.0, -1.0], [-1.0, 0.0]]
    """
    lengths = _edge_lengths(sites)
    count = int(np.prod(lengths))
    t = float(as_real_array(hopping, "hopping", ()))
    u = float(as_real_array(repulsion, "repulsion", ()))
    one_body = np.where(_neighbours(lengths, periodic), -t, 0.0)
    two_body = np.zeros((count,) * 4)
    site = np.arange(count)
    two_body[site, site, site, site] = u
    return Hamiltonian(0.0, one_body, two_body, electrons=electrons)


def _edge_lengths(sites: int | Sequence[int]) -> list[int]:
    if isinstance(sites, str | bytes):
        raise InputError(f"`sites` must be a whole number or a sequence of them (got {sites!r})")
    if isinstance(sites, Sequence | np.ndarray):
        if len(sites) == 0:
            raise InputError("`sites` must hold at least one edge length (got none); for example (2, 3)")
        return [as_count(length, f"sites[{k}]", minimum=1) for k, length in enumerate(sites)]
    return [as_count(sites, "sites", minimum=1)]


def _neighbours(lengths: list[int], periodic: bool) -> NDArray[np.bool_]:
    """Symmetric matrix that is true where two different sites are neighbours."""
    index = np.arange(int(np.prod(lengths))).reshape(lengths)
    joined = np.zeros((index.size, index.size), dtype=bool)
    for place in product(*(range(length) for length in lengths)):
        for axis, length in enumerate(lengths):
            step = list(place)
            step[axis] += 1
            if step[axis] == length:
                if not periodic:
                    continue
                step[axis] = 0
            a, b = index[place], index[tuple(step)]
            if a != b:
                joined[a, b] = joined[b, a] = True
    return joined
