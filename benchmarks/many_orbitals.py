"""Plans for many orbitals from a single determinant: cost, time and memory against the number of orbitals.

    python benchmarks/many_orbitals.py [--quick] [--orbitals 13,16,20] [--evaluations 1500]

Water in cc-pVDZ, eight electrons in the lowest orbitals above the core (every bond 1.0 Å, 107.6°, restricted
Hartree-Fock orbitals); the reference is the Hartree-Fock determinant with the default planning noise. No CI vector is
made. "low rank": the fit's coefficients as they are. "limit": variance of the Hamiltonian in the reference with its
planning noise, below which no unbiased measurement can go; both costs are for that state. "memory" is the peak of the
process so far. All data are computed here.
"""

import argparse
import resource
import time

import numpy as np
from pyscf import gto, mcscf, scf

import fragkit
from fragkit.planning import plan_cost
from fragkit.planning._memory import memory_needed
from fragkit.planning._robust import robust_state


def water(orbitals: int) -> fragkit.Hamiltonian:
    """Eight electrons of water in so many orbitals."""
    half = np.radians(107.6 / 2)
    atoms = [("O", (0, 0, 0)), ("H", (np.sin(half), np.cos(half), 0)), ("H", (-np.sin(half), np.cos(half), 0))]
    mean_field = scf.RHF(gto.M(atom=atoms, basis="cc-pvdz", verbose=0)).run()
    return fragkit.from_pyscf(mcscf.CASCI(mean_field, orbitals, 8))


def main() -> None:
    parser = argparse.ArgumentParser(description=(__doc__ or "").split("\n")[0])
    parser.add_argument("--quick", action="store_true", help="13 orbitals and 200 evaluations only")
    parser.add_argument("--orbitals", default="13,16,20", help="comma-separated numbers of orbitals")
    parser.add_argument("--evaluations", type=int, default=1500, help="most evaluations of each optimisation")
    options = parser.parse_args()
    numbers = [13] if options.quick else [int(n) for n in options.orbitals.split(",")]
    evaluations = 200 if options.quick else options.evaluations
    print(
        f"{'orbitals':>8}{'circuits':>9}{'low rank':>10}{'plan':>9}{'limit':>9}{'residual':>10}{'seconds':>9}"
        f"{'memory/GB':>11}{'estimate':>10}"
    )
    for orbitals in numbers:
        hamiltonian = water(orbitals)
        state = fragkit.reference_state(hamiltonian, "hf")
        planned_on = robust_state(state)
        low_rank = fragkit.plan(hamiltonian, state, reweight=False, minimum_shots=1)
        began = time.perf_counter()
        made = fragkit.plan(hamiltonian, state, max_evaluations=evaluations, minimum_shots=1)
        seconds = time.perf_counter() - began
        peak = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1e6
        print(
            f"{orbitals:8d}{len(made):9d}{plan_cost(low_rank, planned_on):10.3g}{plan_cost(made, planned_on):9.3g}"
            f"{planned_on.variance(hamiltonian):9.3g}{made.residual_norm:10.1e}{seconds:9.0f}{peak:11.2f}"
            f"{memory_needed(orbitals, len(made)) / 1e9:10.2f}  {made.message}",
            flush=True,
        )


if __name__ == "__main__":
    main()
