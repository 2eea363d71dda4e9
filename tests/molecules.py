"""Small molecules for the tests, computed with pyscf alone so that they check fragkit from outside.

STO-3G, restricted Hartree-Fock orbitals, nothing frozen. Every bond is 1.0 Å; HOH 107.6°; all HNH angles 107°;
BeH2, H4 and H6 are linear.
"""

from functools import cache
from typing import Any

import numpy as np

from fragkit.core import Hamiltonian

FULL_CI = {
    # Full configuration interaction in hartree, from pyscf 2.14 (fci.direct_spin1) alone.
    "H2": -1.101150,
    "LiH": -7.784460,
    "BeH2": -15.481741,
    "H2O": -75.017689,
    "NH3": -55.515506,
    "N2": -107.549301,
    "H4": -2.166387,
    "H6": -3.236066,
}


def geometry(name: str) -> list[tuple[str, tuple[float, float, float]]]:
    """Atoms and positions in ångström."""
    if name in ("H2", "H4", "H6"):
        return [("H", (0.0, 0.0, float(k))) for k in range(int(name[1:]))]
    if name == "LiH":
        return [("Li", (0.0, 0.0, 0.0)), ("H", (0.0, 0.0, 1.0))]
    if name == "BeH2":
        return [("H", (0.0, 0.0, -1.0)), ("Be", (0.0, 0.0, 0.0)), ("H", (0.0, 0.0, 1.0))]
    if name == "N2":
        return [("N", (0.0, 0.0, 0.0)), ("N", (0.0, 0.0, 1.0))]
    if name == "H2O":
        half = np.radians(107.6 / 2)
        x, z = float(np.sin(half)), float(np.cos(half))
        return [("O", (0.0, 0.0, 0.0)), ("H", (x, 0.0, z)), ("H", (-x, 0.0, z))]
    if name == "NH3":
        # Three unit vectors with equal angles θ: cos θ = 1 − (3/2) ρ², ρ their distance from the axis.
        radius = float(np.sqrt((1 - np.cos(np.radians(107.0))) / 1.5))
        height = float(np.sqrt(1 - radius**2))
        turns = [2 * np.pi * k / 3 for k in range(3)]
        hydrogens = [("H", (radius * float(np.cos(t)), radius * float(np.sin(t)), height)) for t in turns]
        return [("N", (0.0, 0.0, 0.0)), *hydrogens]
    raise KeyError(name)


@cache
def mean_field(name: str) -> Any:
    """Converged pyscf RHF object."""
    from pyscf import gto, scf

    return scf.RHF(gto.M(atom=geometry(name), basis="sto-3g", verbose=0)).run(conv_tol=1e-12)


@cache
def molecule_integrals(name: str) -> tuple[float, np.ndarray, np.ndarray, tuple[int, int]]:
    """Constant, one-body, two-body integrals (chemists') and electrons, transformed with pyscf."""
    from pyscf import ao2mo

    mf = mean_field(name)
    one_body = mf.mo_coeff.T @ mf.get_hcore() @ mf.mo_coeff
    two_body = ao2mo.restore(1, ao2mo.kernel(mf.mol, mf.mo_coeff), len(one_body))
    return float(mf.energy_nuc()), one_body, two_body, mf.mol.nelec


@cache
def molecule_hamiltonian(name: str) -> Hamiltonian:
    """The Hamiltonian of the molecule."""
    constant, one_body, two_body, electrons = molecule_integrals(name)
    return Hamiltonian(constant, one_body, two_body, electrons=electrons)


@cache
def full_ci(name: str) -> tuple[float, np.ndarray]:
    """Energy and vector (α strings, β strings) from pyscf's full CI."""
    from pyscf import fci

    constant, one_body, two_body, electrons = molecule_integrals(name)
    energy, vector = fci.direct_spin1.kernel(
        one_body, two_body, len(one_body), electrons, ecore=constant, conv_tol=1e-12
    )
    return float(energy), np.asarray(vector)


def energy_of(hamiltonian: Hamiltonian) -> float:
    """Full CI energy of any small Hamiltonian by pyscf."""
    from pyscf import fci

    return float(
        fci.direct_spin1.kernel(
            np.array(hamiltonian.one_body),
            np.array(hamiltonian.two_body),
            hamiltonian.orbitals,
            hamiltonian.electrons,
            ecore=hamiltonian.constant,
            conv_tol=1e-12,
        )[0]
    )
