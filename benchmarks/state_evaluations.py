"""Time of one evaluation of all variances with gradients, the inner loop of planning, for several references.

Random rotations and coefficients; molecules of our own choice (STO-3G, bonds 1.0 Å, and water in 6-31G with the
oxygen 1s frozen: 12 orbitals, 245,025 determinants). CPU time of one thread, best of several.

    OMP_NUM_THREADS=1 python benchmarks/state_evaluations.py [--quick]
"""

import argparse
import sys
import time
from pathlib import Path

import numpy as np

sys.path.insert(0, str(Path(__file__).resolve().parent.parent / "tests"))

from molecules import geometry, molecule_hamiltonian

from fragkit import from_pyscf, reference_state
from fragkit.core import Hamiltonian, feature_count
from fragkit.states import DeterminantState, ReferenceState


def water_with_twelve_orbitals() -> Hamiltonian:
    """Water, 6-31G, 8 electrons in 12 orbitals."""
    from pyscf import gto, mcscf, scf

    mean_field = scf.RHF(gto.M(atom=geometry("H2O"), basis="6-31g", verbose=0)).run(conv_tol=1e-12)
    return from_pyscf(mcscf.CASCI(mean_field, 12, 8))


def best_time(state: ReferenceState, circuits: int, precision: str, repeats: int) -> float:
    """CPU milliseconds of one evaluation."""
    rng = np.random.default_rng(1)
    n = state.orbitals
    rotations = np.array([np.linalg.qr(rng.normal(size=(n, n)))[0] for _ in range(circuits)])
    coefficients = rng.normal(size=(circuits, feature_count(n)))
    times = []
    for _ in range(repeats + 1):
        start = time.thread_time()
        state.variance_and_gradient(rotations, coefficients, precision=precision, threads=1)
        times.append(time.thread_time() - start)
    return 1e3 * min(times[1:])


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--quick", action="store_true", help="small molecules only")
    quick = parser.parse_args().quick
    cases: list[tuple[str, ReferenceState, int]] = []
    for name, circuits in (("LiH", 18), ("BeH2", 21), ("H2O", 20), ("NH3", 25), ("N2", 38)):
        hamiltonian = molecule_hamiltonian(name)
        cases += [(f"{name} {m}", reference_state(hamiltonian, m), circuits) for m in ("hf", "cisd", "fci")]
    if not quick:
        large = water_with_twelve_orbitals()
        cases += [(f"H2O/6-31G(12) {m}", reference_state(large, m), 48) for m in ("hf", "cisd", "fci")]
        cases += [
            (f"{n} orbitals hf", DeterminantState.lowest(n, (n // 2, n // 2)), k) for n, k in ((16, 79), (20, 118))
        ]
    print(f"{'reference':22s} {'circuits':>8s} {'double ms':>10s} {'single ms':>10s}")
    for label, state, circuits in cases:
        repeats = 3 if "fci" in label and state.orbitals > 10 else 15
        double, single = (best_time(state, circuits, precision, repeats) for precision in ("double", "single"))
        print(f"{label:22s} {circuits:8d} {double:10.2f} {single:10.2f}")


if __name__ == "__main__":
    main()
