"""Hubbard models against closed formulas, free particles and OpenFermion's own model."""

import numpy as np
import pytest
from molecules import energy_of

import fragkit
from fragkit.core import InputError


@pytest.mark.parametrize("periodic", [True, False])
@pytest.mark.parametrize(("t", "u"), [(1.0, 4.0), (0.7, 2.0), (1.0, -3.0), (-1.0, 8.0)])
def test_half_filled_pair_of_sites(t: float, u: float, periodic: bool) -> None:
    """E = U/2 − √((U/2)² + 4t²); Ashcroft & Mermin, Solid State Physics (1976), problem 32.5 (cited from memory)."""
    ham = fragkit.hubbard(2, electrons=(1, 1), hopping=t, repulsion=u, periodic=periodic)
    assert energy_of(ham) == pytest.approx(u / 2 - np.sqrt((u / 2) ** 2 + 4 * t**2), abs=1e-10)


def test_free_electrons_fill_cosine_bands() -> None:
    """Without repulsion a ring has levels −2t cos k (Bloch); three lowest twice filled."""
    levels = np.sort(-2 * np.cos(2 * np.pi * np.arange(6) / 6))
    assert energy_of(fragkit.hubbard(6, electrons=(3, 3), repulsion=0.0)) == pytest.approx(
        2 * sum(levels[:3]), abs=1e-9
    )
    chain = np.sort(-2 * np.cos(np.pi * np.arange(1, 6) / 6))
    ham = fragkit.hubbard(5, electrons=(2, 2), repulsion=0.0, periodic=False)
    assert energy_of(ham) == pytest.approx(2 * sum(chain[:2]), abs=1e-9)


@pytest.mark.parametrize(
    ("sites", "periodic", "electrons"),
    [(4, True, (2, 2)), (4, False, (2, 1)), ((2, 2), False, (2, 2)), ((3,), True, (1, 2)), ((1, 4), False, (1, 1))],
)
def test_against_openfermion(sites: int | tuple[int, ...], periodic: bool, electrons: tuple[int, int]) -> None:
    """OpenFermion's fermi_hubbard, diagonalised from its sparse matrix in the sector."""
    from openfermion import fermi_hubbard, get_sparse_operator
    from openfermion.linalg import jw_sz_restrict_operator

    # OpenFermion's x direction is the fastest.
    rows, columns = (1, sites) if isinstance(sites, int) else (1, *sites)[-2:]
    sparse = get_sparse_operator(fermi_hubbard(columns, rows, 1.0, 4.0, periodic=periodic))
    alpha, beta = electrons
    restricted = jw_sz_restrict_operator(sparse, (alpha - beta) / 2, n_electrons=alpha + beta)
    exact = np.linalg.eigvalsh(restricted.toarray())[0]
    ham = fragkit.hubbard(sites, electrons=electrons, periodic=periodic)
    assert energy_of(ham) == pytest.approx(exact, abs=1e-9)


def test_bonds_of_a_lattice() -> None:
    bonds = fragkit.hubbard((2, 3), electrons=(3, 3), periodic=True).one_body
    # Rows 0 1 2 / 3 4 5; a periodic edge of length 2 has one bond, not two.
    neighbours = {0: {1, 2, 3}, 1: {0, 2, 4}, 2: {0, 1, 5}, 3: {0, 4, 5}, 4: {1, 3, 5}, 5: {2, 3, 4}}
    for site, expected in neighbours.items():
        assert set(np.flatnonzero(bonds[site])) == expected
    assert set(np.unique(bonds)) == {-1.0, 0.0}


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({"sites": 0, "electrons": (0, 0)}, "`sites` must be at least 1"),
        ({"sites": 2.5, "electrons": (1, 1)}, "`sites` must be a whole number"),
        ({"sites": "4", "electrons": (1, 1)}, "`sites` must be a whole number"),
        ({"sites": (), "electrons": (1, 1)}, "at least one edge length"),
        ({"sites": (2, 0), "electrons": (1, 1)}, r"`sites\[1\]` must be at least 1"),
        ({"sites": 2, "electrons": (3, 1)}, "`electrons` must have at most 2"),
        ({"sites": 2, "electrons": (1, 1), "hopping": float("nan")}, "`hopping` must be finite"),
        ({"sites": 2, "electrons": (1, 1), "repulsion": 1j}, "`repulsion` must be real"),
    ],
)
def test_what_is_refused(arguments: dict, message: str) -> None:
    with pytest.raises(InputError, match=message):
        fragkit.hubbard(**arguments)
