"""Circuits and cost of measuring molecules as groups of Pauli strings, all computed in one run.

    python benchmarks/pauli.py [--quick] [--molecules LiH,H2O] [--noise 0.01]

Cost is shots × error² in Ha² on the full CI state, with noise if asked for. Molecules: STO-3G, geometries of the tests,
degenerate orbitals turned to symmetry species, interleaved spin-orbitals unless the column says "blocked". "2q gates":
mean number of two-qubit gates before the readout of a circuit. "limit": Var(H), which no measurement goes below.
"givens": rotations of one plan circuit, both spins.
"""

import argparse
import sys
import time
from pathlib import Path

import numpy as np
from pyscf import fci, gto, scf

from fragkit.core import Hamiltonian
from fragkit.pauli import pauli_costs
from fragkit.readers import from_pyscf
from fragkit.states import ReferenceState

sys.path.insert(0, str(Path(__file__).parents[1] / "tests"))
from molecules import FULL_CI, geometry

QUICK = ("H2", "H4", "LiH")
HEADER = (
    f"{'':6}{'strings':>8}{'qubit-wise':>16}{'q.-w. blocked':>16}{'commuting':>16}{'overlapping':>16}"
    f"{'limit':>9}{'2q gates':>14}{'givens':>8}{'seconds':>9}"
)


def symmetry_adapted(name: str) -> tuple[Hamiltonian, ReferenceState]:
    """A molecule with degenerate orbitals turned to symmetry species, and its full CI state."""
    mf = scf.RHF(gto.M(atom=geometry(name), basis="sto-3g", symmetry=True, verbose=0)).run(conv_tol=1e-12)
    ham = from_pyscf(mf)
    integrals = np.array(ham.one_body), np.array(ham.two_body)
    vector = fci.direct_spin1.kernel(*integrals, ham.orbitals, ham.electrons, conv_tol=1e-12)[1]
    return ham, ReferenceState.from_ci_vector(ham, vector)


def row(name: str, noise: float) -> str:
    ham, state = symmetry_adapted(name)
    state = state.with_noise(noise)
    start = time.perf_counter()
    ways = [pauli_costs(ham, state, kind) for kind in ("qubit-wise", "commuting", "overlapping")]
    blocked = pauli_costs(ham, state, "qubit-wise", order="blocked")
    seconds = time.perf_counter() - start
    cells = "".join(f"{way.groups:6d}{way.cost:10.4g}" for way in (ways[0], blocked, *ways[1:]))
    gates = "".join(f"{np.mean(way.two_qubit_gates):7.1f}" for way in ways[1:])
    givens = ham.orbitals * (ham.orbitals - 1)
    note = "" if ways[2].converged else "  " + ways[2].message
    limit = state.variance(ham)
    return f"{name:6}{ways[0].terms:8d}{cells}{limit:9.3g}{gates}{givens:8d}{seconds:9.1f}{note}"


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--quick", action="store_true", help="small molecules only")
    parser.add_argument("--molecules", default="", help="comma-separated names")
    parser.add_argument("--noise", type=float, default=0.0, help="weight of the maximally mixed state")
    options = parser.parse_args()
    names = options.molecules.split(",") if options.molecules else (QUICK if options.quick else tuple(FULL_CI))
    print(HEADER)
    for name in names:
        print(row(name, options.noise), flush=True)


if __name__ == "__main__":
    main()
