"""Fragments against residual: low rank, greedy and joint fits, for the reference molecules and two larger ones.

    python benchmarks/fragments.py [--quick] [--part counts|seeds|bound|curve|large] [--figure FILE]

Parts: counts of fragments for stated residuals; one fragment above the counting bound for seeds 0 to 9; at the bound
and below it; residual against count, with the figure; larger molecules. All data are computed here with pyscf
(STO-3G geometries of the tests; water in larger basis sets). One BLAS thread, whatever the settings are.
"""

import argparse
import resource
import sys
import time
from pathlib import Path

import numpy as np

from fragkit.core import Hamiltonian
from fragkit.fit import Greedy, Joint, LowRank, fragment

sys.path.insert(0, str(Path(__file__).parents[1] / "tests"))
from molecules import geometry, molecule_hamiltonian

ABOVE = {"H2": 2, "LiH": 8, "BeH2": 10, "H2O": 10, "NH3": 12, "N2": 17}
HARD = [("LiH", 7), ("BeH2", 9), ("BeH2", 8), ("H2O", 9), ("H2O", 8), ("NH3", 11), ("N2", 16), ("N2", 15), ("NH3", 10)]


def counts(quick: bool) -> None:
    print("Two-electron fragments needed (seconds)")
    titles = ("molecule", "low rank", "low rank", "greedy", "greedy, no refit", "joint", "one-norm: low rank", "joint")
    print("".join(f"{title:>20}" for title in titles))
    print(
        "".join(f"{title:>20}" for title in ("", "1e-8 Ha", "1e-3 relative", *["1e-3 relative"] * 3, "exact", "exact"))
    )
    for name in list(ABOVE)[: 4 if quick else 6]:
        hamiltonian = molecule_hamiltonian(name)
        norm = float(np.linalg.norm(hamiltonian.two_body))
        low = fragment(hamiltonian, LowRank())
        truncated = 1
        while fragment(hamiltonian, LowRank(count=truncated)).residual_norm > 1e-3 * norm:
            truncated += 1
        cells = [str(len(low) - 1), str(truncated)]
        for strategy in (Greedy(tol=1e-3), Greedy(tol=1e-3, refit=False), Joint(tol=1e-3, relative=True)):
            found = fragment(hamiltonian, strategy)
            assert found.converged, found.message
            cells.append(f"{len(found) - 1} ({found.seconds:.1f})")
        exact = fragment(hamiltonian, Joint(count=ABOVE[name]))
        cells += [f"{low.one_norm:.2f}", f"{exact.one_norm:.2f}"]
        print(f"{name:>20}" + "".join(f"{cell:>20}" for cell in cells), flush=True)


def seeds(quick: bool) -> None:
    print("\nOne above the counting bound, default settings, seeds 0 to 9: residual ≤ 1e-8 Ha, iterations, seconds")
    for name, count in list(ABOVE.items())[: 4 if quick else 6]:
        hamiltonian = molecule_hamiltonian(name)
        runs = [fragment(hamiltonian, Joint(count=count), rng=seed) for seed in range(3 if quick else 10)]
        reached = sum(run.residual_norm <= 1.001e-8 for run in runs)
        iterations, times = [run.iterations for run in runs], [run.seconds for run in runs]
        print(
            f"{name:5} {count:3d} fragments: {reached} of {len(runs)}, "
            f"worst {max(run.residual_norm for run in runs):.1e} Ha, "
            f"iterations {min(iterations)} to {max(iterations)}, {min(times):.2f} to {max(times):.2f} s",
            flush=True,
        )


def bound(quick: bool) -> None:
    print("\nAt the counting bound and below: residual ≤ 1e-6 Ha, starts until the first success")
    for name, count in HARD[: 5 if quick else 9]:
        limit = 20.0 if quick else {"N2": 150.0, "NH3": 90.0}.get(name, 40.0)
        strategy = Joint(count=count, tol=1e-6, starts=10_000, seconds=limit)
        run = fragment(molecule_hamiltonian(name), strategy, rng=0)
        print(f"{name:5} {count:3d}: {run.residual_norm:.1e} Ha, {run.seconds:6.1f} s. {run.message}", flush=True)


def curve(quick: bool, figure: str | None) -> None:
    print("\nResidual (Ha) against number of two-electron fragments")
    data = {}
    for name in list(ABOVE)[1 : 4 if quick else 6]:
        hamiltonian = molecule_hamiltonian(name)
        most = ABOVE[name]
        shown = [*range(1, most - 1, 2), most - 1, most] if name == "N2" else range(1, most + 1)
        rows = {}
        for count in shown:
            # The greedy start is the better one for N2; for the others both are among the first three.
            how = {"start": "greedy", "starts": 1} if name == "N2" else {"starts": 3}
            joint = fragment(hamiltonian, Joint(count=count, tol=1e-8, **how))
            rows[count] = (
                fragment(hamiltonian, LowRank(count=count)).residual_norm,
                fragment(hamiltonian, Greedy(count=count, tol=1e-12)).residual_norm,
                joint.residual_norm,
            )
        data[name] = rows
        print(f"{name}: count, low rank, greedy, joint")
        for count, (low, greedy, joint) in rows.items():
            print(f"  {count:3d} {low:10.2e} {greedy:10.2e} {joint:10.2e}", flush=True)
    if figure is not None:
        draw(data, figure)


def draw(data: dict[str, dict[int, tuple[float, float, float]]], path: str) -> None:
    import matplotlib

    matplotlib.use("Agg")
    from matplotlib import pyplot

    fig, axes = pyplot.subplots(1, len(data), figsize=(3.0 * len(data), 3.2), sharey=True, layout="constrained")
    for ax, (name, rows) in zip(np.atleast_1d(axes), data.items(), strict=True):
        for k, (label, marker) in enumerate((("low rank", "s"), ("greedy", "^"), ("joint", "o"))):
            ax.semilogy(list(rows), [row[k] for row in rows.values()], marker=marker, ms=3, lw=1, label=label)
        ax.axvline(ABOVE[name] - 1, color="0.4", lw=0.9, ls=":", label="counting bound")
        ax.xaxis.set_major_locator(pyplot.MaxNLocator(integer=True))
        ax.set_title(name)
        ax.set_xlabel("two-electron fragments")
        ax.grid(alpha=0.3)
    np.atleast_1d(axes)[0].set_ylabel("residual (Ha)")
    np.atleast_1d(axes)[0].legend(frameon=False)
    fig.savefig(path, dpi=110)


def water(basis: str, frozen: int) -> Hamiltonian:
    """Water; with `frozen`, from density-fitting factors, that many lowest orbitals folded into the constant."""
    from pyscf import ao2mo, gto, lib, mcscf, scf

    mol = gto.M(atom=geometry("H2O"), basis=basis, verbose=0)
    mean_field = scf.RHF(mol).density_fit(auxbasis="cc-pvtz-jkfit").run() if frozen else scf.RHF(mol).run()
    size = mean_field.mo_coeff.shape[1] - frozen
    electrons = mol.nelectron // 2 - frozen
    active = mcscf.CASCI(mean_field, size, 2 * electrons)
    one_body, constant = active.get_h1eff()
    orbitals = mean_field.mo_coeff[:, frozen:]
    if not frozen:
        tensor = ao2mo.restore(1, ao2mo.kernel(mol, orbitals), size)
        return Hamiltonian(constant, one_body, tensor, electrons=(electrons, electrons))
    blocks = [lib.unpack_tril(block) for block in mean_field.with_df.loop()]
    factors = orbitals.T @ np.concatenate(blocks) @ orbitals
    return Hamiltonian(
        constant,
        one_body,
        factors=0.5 * (factors + factors.transpose(0, 2, 1)),
        electrons=(electrons, electrons),
        tolerance=1e-6,
    )


def large(quick: bool) -> None:
    print("\nLarger molecules: truncated low rank against joint fits (matrix-free)")
    cases = [("H2O/cc-pVDZ", "cc-pvdz", 0, 30, (15.0, 60.0, 180.0))]
    if not quick:
        cases.append(("H2O/aug-cc-pVDZ, 1s frozen", "aug-cc-pvdz", 1, 40, (100.0, 300.0)))
    for label, basis, frozen, count, limits in cases:
        hamiltonian = water(basis, frozen)
        low = fragment(hamiltonian, LowRank(count=count))
        print(f"{label}: {hamiltonian.orbitals} orbitals, {count} fragments, low rank {low.residual_norm:.3f} Ha")
        start = "low rank"
        spent = 0.0
        for limit in limits[: 1 if quick else None]:
            began = time.perf_counter()
            run = fragment(
                hamiltonian, Joint(count=count, start=start, starts=1, max_iterations=100_000, seconds=limit - spent)
            )
            spent += time.perf_counter() - began
            start = run
            memory = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1e6
            largest = max(float(np.max(np.abs(f.opposite_spin))) for f in run)
            print(
                f"  {spent:6.0f} s: residual {run.residual_norm:.4f} Ha, "
                f"{low.residual_norm / run.residual_norm:.1f} times below low rank, largest λ {largest:.2f} Ha, "
                f"energy bound {run.energy_bound:.3f} (low rank {low.energy_bound:.3f}) Ha, memory {memory:.2f} GB",
                flush=True,
            )


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--quick", action="store_true", help="fewer and smaller cases")
    parser.add_argument("--part", choices=("counts", "seeds", "bound", "curve", "large"), help="only this part")
    parser.add_argument("--figure", metavar="FILE", help="save the figure of part `curve`")
    options = parser.parse_args()
    parts = {
        "counts": lambda: counts(options.quick),
        "seeds": lambda: seeds(options.quick),
        "bound": lambda: bound(options.quick),
        "curve": lambda: curve(options.quick, options.figure),
        "large": lambda: large(options.quick),
    }
    for name, part in parts.items():
        if options.part in (None, name):
            part()


if __name__ == "__main__":
    main()
