"""Estimates against exact energies over thousands of simulated experiments, all computed in one run.

    python benchmarks/estimate.py [--quick] [--only coverage,bias,readout,adaptive,speed] [--repetitions 4000]

coverage: share of 95 % intervals that hold the exact energy, at 20, 50, 500 and 5,000 shots per circuit, for low-rank
plans as they are and for optimised plans (chosen on CISD, measured on full CI). bias: mean deviation in standard errors
of the mean, in the four settings of the docs. readout: H2O with 1 % independent bit flips, energies raw, post-selected
and corrected. adaptive: H2O from a plan that knows only the determinant, 10⁵ shots with the pilot. speed: seconds of
processor time.

Molecules: STO-3G, every bond 1.0 Å, geometries of the tests. All data are simulated here from full CI vectors.
"""

import argparse
import sys
import time
from pathlib import Path
from typing import Any

import numpy as np

from fragkit.core import Fragment, Hamiltonian
from fragkit.estimate import AdaptiveRun, Counts, Estimate, ReadoutErrors, estimate, simulate
from fragkit.fit import LowRank, fragment
from fragkit.planning import Plan, plan, plan_cost, reweighted
from fragkit.states import CIState, reference_state

sys.path.insert(0, str(Path(__file__).parents[1] / "tests"))
from molecules import full_ci, molecule_hamiltonian

MOLECULES = ("H2", "H6", "H2O")
FIGURES = Path(__file__).parents[1] / "docs" / "figures"


class Device:
    """An ideal device that holds a full CI state: distributions over determinants, computed once per circuit."""

    def __init__(self, name: str, rotations: list[np.ndarray]) -> None:
        hamiltonian = molecule_hamiltonian(name)
        state = CIState.from_ci_vector(hamiltonian, full_ci(name)[1])
        n, (alpha, beta) = hamiltonian.orbitals, hamiltonian.electrons
        strings = [self._strings(n, k) for k in (alpha, beta)]
        self.bits = np.concatenate(
            [np.repeat(strings[0], len(strings[1]), axis=0), np.tile(strings[1], (len(strings[0]), 1))], axis=1
        )
        self.chances = []
        for rotation in rotations:
            chance = np.asarray(state.rotated_vector(rotation)).ravel() ** 2
            self.chances.append(chance / chance.sum())

    @staticmethod
    def _strings(n: int, k: int) -> np.ndarray:
        values = [v for v in range(2**n) if v.bit_count() == k]
        return np.array([[v >> i & 1 for i in range(n)] for v in values], dtype=np.uint8)

    def run(self, made: Plan, shots: Any, rng: np.random.Generator, flips: tuple[float, float] | None = None) -> Counts:
        """Counts of one run of all circuits."""
        found = {}
        for m, number in enumerate(np.broadcast_to(shots, (len(made),))):
            drawn = rng.multinomial(int(number), self.chances[m])
            hit = drawn > 0
            if flips is None:
                found[m] = (self.bits[hit], drawn[hit].astype(np.int64))
            else:
                rows = np.repeat(self.bits[hit], drawn[hit], axis=0)
                rows = rows ^ (rng.random(rows.shape) < np.where(rows == 1, flips[1], flips[0]))
                bits, numbers = np.unique(rows, axis=0, return_counts=True)
                found[m] = (bits.astype(np.uint8), numbers.astype(np.int64))
        return Counts.of_rows(made, found)


def low_rank(name: str) -> Plan:
    """Low-rank fragments with the coefficients they come with."""
    hamiltonian = molecule_hamiltonian(name)
    state = reference_state(hamiltonian, "cisd")
    return plan(hamiltonian, state, fragments=fragment(hamiltonian, LowRank()), reweight=False, total_shots=100_000)


def optimised(name: str) -> Plan:
    """Optimised rotations with default settings."""
    hamiltonian = molecule_hamiltonian(name)
    return plan(hamiltonian, reference_state(hamiltonian, "cisd"), total_shots=100_000)


def rotations(made: Plan) -> list[np.ndarray]:
    return [piece.rotation for piece in made.fragments]


def coverage(repetitions: int, figure: bool, molecules: tuple[str, ...]) -> None:
    print(f"\nCoverage of 95 % intervals, {repetitions} experiments each (standard error {sd(repetitions):.2f} %)")
    print(f"{'molecule':9}{'plan':12}{'shots':>7}{'coverage %':>12}{'bias / s.e.':>13}{'spread/error':>14}")
    results: dict[tuple[str, str], list[tuple[int, float]]] = {}
    for name in molecules:
        for kind, maker in (("low rank", low_rank), ("optimised", optimised)):
            made = maker(name)
            for shots in (20, 50, 500, 5000):
                hits = coverage_case(name, kind, made, shots, repetitions)
                results.setdefault((name, kind), []).append((shots, hits))
    if figure:
        coverage_figure(results)


def coverage_case(name: str, kind: str, made: Plan, shots: int, repetitions: int) -> float:
    """Percent of intervals that hold the exact energy; prints a row."""
    exact, device, rng = full_ci(name)[0], Device(name, rotations(made)), np.random.default_rng([shots, len(made)])
    found = [estimate(made, device.run(made, shots, rng)) for _ in range(repetitions)]
    hits = 100 * float(np.mean([e.interval[0] <= exact <= e.interval[1] for e in found]))
    off, bars = deviations(found, exact)
    print(
        f"{name:9}{kind:12}{shots:7d}{hits:12.1f}{off.mean() / off.std() * repetitions**0.5:13.2f}"
        f"{off.std() / np.sqrt(np.mean(bars**2)):14.3f}",
        flush=True,
    )
    return hits


def coverage_figure(results: dict[tuple[str, str], list[tuple[int, float]]]) -> None:
    axes = new_axes()
    for (name, kind), points in results.items():
        x, y = zip(*points, strict=True)
        axes.semilogx(x, y, "o-" if kind == "low rank" else "s--", label=f"{name}, {kind}")
    axes.axhspan(94, 96, color="0.85")
    axes.set_xlabel("shots of each circuit")
    axes.set_ylabel("intervals that hold the exact energy / %")
    axes.set_ylim(90, 100.5)
    axes.legend(fontsize=7, ncols=2)
    save(axes, "coverage.png")


def sd(repetitions: int) -> float:
    return 100 * np.sqrt(0.05 * 0.95 / repetitions)


def deviations(found: list[Estimate], exact: float) -> tuple[np.ndarray, np.ndarray]:
    return np.array([e.energy - exact for e in found]), np.array([e.standard_error for e in found])


def bias(repetitions: int) -> None:
    print(f"\nBias over {repetitions} experiments: mean deviation / mHa, and in standard errors of the mean (|z| < 3)")
    print(f"{'molecule':9}{'setting':44}{'mean / mHa':>12}{'z':>8}{'spread/error':>14}")

    def show(name: str, setting: str, found: list[Estimate]) -> None:
        off, bars = deviations(found, full_ci(name)[0])
        z = off.mean() / off.std(ddof=1) * np.sqrt(len(off))
        print(
            f"{name:9}{setting:44}{1e3 * off.mean():12.4f}{z:8.2f}{off.std() / np.sqrt(np.mean(bars**2)):14.3f}",
            flush=True,
        )

    for name in ("H2", "H2O"):
        made = optimised(name) if name == "H2O" else low_rank(name)
        device, rng = Device(name, rotations(made)), np.random.default_rng(31)
        show(name, "100 shots per circuit", [estimate(made, device.run(made, 100, rng)) for _ in range(repetitions)])
        show(
            name,
            "the same, post-selected (ideal state)",
            [estimate(made, device.run(made, 100, rng), post_select=True) for _ in range(repetitions)],
        )
        n = made.orbitals
        for flips in ((0.02, 0.04), (0.05, 0.10)):
            known = ReadoutErrors.known(*flips, orbitals=n)
            show(
                name,
                f"flips {flips[0]:.0%}/{flips[1]:.0%}, known, {repetitions} runs",
                [estimate(made, device.run(made, 300, rng, flips), readout=known) for _ in range(repetitions)],
            )
            show(
                name,
                f"flips {flips[0]:.0%}/{flips[1]:.0%}, calibrated, {repetitions} runs",
                [
                    estimate(made, device.run(made, 300, rng, flips), readout=calibration(flips, n, 2000, rng))
                    for _ in range(repetitions)
                ],
            )
    adaptive_bias(repetitions, show)


def adaptive_bias(repetitions: int, show: Any) -> None:
    hamiltonian = molecule_hamiltonian("H2")
    start = plan(hamiltonian, reference_state(hamiltonian, "hf"), fragments=fragment(hamiltonian), total_shots=2000)
    device, rng = Device("H2", rotations(start)), np.random.default_rng(32)
    found = []
    for seed in range(max(repetitions // 4, 50)):
        run = AdaptiveRun.start(start, hamiltonian, total_shots=2000, seed=seed)
        while (shots := run.next_shots()) is not None:
            run = run.add(device.run(start, shots, rng))
        found.append(run.estimate())
    show("H2", f"adaptive, 2,000 shots with pilot, {len(found)} runs", found)


def calibration(flips: tuple[float, float], n: int, shots: int, rng: np.random.Generator) -> ReadoutErrors:
    """All zeros and all ones, `shots` each."""
    tables = {}
    for bit in (0, 1):
        rows = np.full((shots, 2 * n), bit, dtype=np.uint8)
        tables[str(bit) * 2 * n] = rows ^ (rng.random(rows.shape) < flips[bit])
    return ReadoutErrors.from_calibration(tables, orbitals=n, bit_order="first-qubit-left", spin_order="blocked")


def readout(figure: bool, repetitions: int) -> None:
    name, flips = "H2O", (0.01, 0.01)
    exact = full_ci(name)[0]
    print(
        f"\nH2O with 1 % independent bit flips, {repetitions} runs of 100,000 shots: mean deviation from full CI / mHa"
    )
    print(f"{'plan':12}{'estimate':28}{'mean':>10}{'+-':>8}{'one run +-':>12}{'z':>8}")
    rows = []
    for kind, maker in (("low rank", low_rank), ("optimised", optimised)):
        made = maker(name)
        device, rng = Device(name, rotations(made)), np.random.default_rng(3)
        known = ReadoutErrors.known(*flips, orbitals=7)
        settings: dict[str, list[Estimate]] = {}
        for _ in range(repetitions):
            counts = device.run(made, made.shots, rng, flips)
            measured = calibration(flips, 7, 20_000, rng)
            for label, options in (
                ("raw", {"post_select": False}),
                ("post-selected", {"post_select": True}),
                ("corrected, errors known", {"readout": known}),
                ("corrected, calibrated", {"readout": measured}),
            ):
                settings.setdefault(label, []).append(estimate(made, counts, **options))
        for label, found in settings.items():
            off, bars = deviations(found, exact)
            error = off.std(ddof=1) / np.sqrt(len(off))
            print(
                f"{kind:12}{label:28}{1e3 * off.mean():10.2f}{1e3 * error:8.2f}{1e3 * bars.mean():12.2f}"
                f"{off.mean() / error:8.1f}",
                flush=True,
            )
            rows.append((kind, label, 1e3 * off.mean(), 1e3 * bars.mean()))
    if figure:
        readout_figure(rows)


def readout_figure(rows: list[tuple[str, str, float, float]]) -> None:
    """Rows are (plan, estimate, mean deviation / mHa, error bar of one run / mHa)."""
    axes = new_axes()
    for shift, kind in ((-0.12, "low rank"), (0.12, "optimised")):
        chosen = [row for row in rows if row[0] == kind]
        axes.errorbar(
            np.arange(len(chosen)) + shift,
            [row[2] for row in chosen],
            [row[3] for row in chosen],
            fmt="o",
            capsize=3,
            label=f"{kind} plan",
        )
    axes.axhline(0.0, color="0.6", lw=0.8)
    axes.set_xticks(range(4), [row[1].replace(", ", ",\n") for row in rows[:4]], fontsize=8)
    axes.set_yscale("symlog", linthresh=30)
    axes.set_ylim(-100, 1500)
    axes.set_ylabel("energy - full CI / mHa (bar: one run)")
    axes.legend(fontsize=8)
    save(axes, "readout.png")


def adaptive(repetitions: int) -> None:
    name, total = "H2O", 100_000
    hamiltonian = molecule_hamiltonian(name)
    state = CIState.from_ci_vector(hamiltonian, full_ci(name)[1])
    determinant = reference_state(hamiltonian, "hf")
    given = fragment(hamiltonian, LowRank())
    print(
        f"\nAdaptive runs on H2O from Hartree-Fock alone, {total} shots with the pilot, {repetitions} runs: cost / Ha^2"
    )
    print(f"{'start':44}{'as planned':>11}{'adaptive':>10}{'least':>8}{'ratio':>7}{'gain':>6}{'z':>7}")
    cases = {
        "low rank, coefficients as they come": {"fragments": given, "reweight": False},
        "low rank, least variance, default noise": {"fragments": given},
        "low rank, least variance, noise 1e-5": {"fragments": given, "planning_noise": 1e-5},
        "optimised rotations, default noise": {},
        "optimised rotations, noise 1e-2": {"planning_noise": 1e-2},
        "optimised rotations, noise 5e-5": {"planning_noise": 5e-5},
    }
    for label, options in cases.items():
        start = plan(hamiltonian, determinant, total_shots=total, **options)
        adapted(label, name, hamiltonian, state, start, total, repetitions)
    # The next step: rotations as well from what was measured.
    start = plan(hamiltonian, determinant, total_shots=total)
    counts = Device(name, rotations(start)).run(start, start.shots // 5, np.random.default_rng(5))
    from fragkit.estimate import measured_state

    again = plan(hamiltonian, measured_state(start, counts), total_shots=total)
    print(f"rotations planned again on {counts.total_shots} measured shots: cost {plan_cost(again, state):.3f} Ha^2")
    adapted("the same, then adaptive", name, hamiltonian, state, again, total, repetitions)


def adapted(
    label: str, name: str, hamiltonian: Hamiltonian, state: CIState, start: Plan, total: int, repetitions: int
) -> None:
    best = reweighted(start, hamiltonian, state, planning_noise=0.0, total_shots=total, minimum_shots=1, shifts=True)
    least, planned = plan_cost(best, state), plan_cost(start, state)
    if not start.sector_exact:
        # The adaptive run keeps what the plan promises; here it may use operators that vanish in the sector.
        start = reweighted(start, hamiltonian, reference_state(hamiltonian, "hf"), shifts=True, total_shots=total)
    device, rng = Device(name, rotations(start)), np.random.default_rng(8)
    found = []
    for seed in range(repetitions):
        run = AdaptiveRun.start(start, hamiltonian, total_shots=total, seed=seed)
        while (shots := run.next_shots()) is not None:
            run = run.add(device.run(start, shots, rng))
        found.append(run.estimate())
    off, bars = deviations(found, full_ci(name)[0])
    cost = float(np.mean(bars**2)) * total
    z = off.mean() / (np.sqrt(np.mean(bars**2)) / np.sqrt(len(off)))
    print(
        f"{label:44}{planned:11.3f}{cost:10.3f}{least:8.3f}{cost / least:7.2f}{planned / cost:6.1f}{z:7.2f}", flush=True
    )


def speed() -> None:
    rng = np.random.default_rng(2)
    n, circuits, shots = 10, 20, 50_000
    pieces = []
    for _ in range(circuits):
        matrix = rng.normal(size=(n, n))
        pieces.append(Fragment.plain(np.linalg.qr(rng.normal(size=(n, n)))[0], matrix + matrix.T))
    made = Plan(tuple(pieces), 0.0, [shots] * circuits, [1.0] * circuits, (5, 5), "made up", 0.0, 0.0)
    arrays = {}
    for m in range(circuits):
        order = np.argsort(rng.random((shots, 2, n)), axis=-1)
        arrays[m] = (order < 5).reshape(shots, 2 * n).astype(np.uint8)
    best = [np.inf, np.inf]
    for _ in range(3):
        began = time.process_time()
        counts = Counts.from_arrays(made, arrays, spin_order="blocked")
        middle = time.process_time()
        estimate(made, counts)
        best = [min(best[0], middle - began), min(best[1], time.process_time() - middle)]
    rows = sum(len(bits) for bits in counts.bits)
    print(f"\n1,000,000 shots, 20 circuits, 20 qubits, {rows} different rows:")
    print(f"Counts from arrays {best[0]:.3f} s, estimate {best[1]:.3f} s")
    for name in MOLECULES:
        made = low_rank(name)
        counts = simulate(made, CIState.from_ci_vector(molecule_hamiltonian(name), full_ci(name)[1]), shots=1000, rng=1)
        began = time.process_time()
        for _ in range(20):
            estimate(made, counts)
        each = (time.process_time() - began) / 20
        print(f"{name}: {len(made)} circuits of 1,000 shots: {1e3 * each:.1f} ms per estimate")


def new_axes() -> Any:
    import matplotlib as mpl

    mpl.use("Agg")
    import matplotlib.pyplot as plt

    return plt.subplots(figsize=(6.0, 3.6), layout="constrained")[1]


def save(axes: Any, name: str) -> None:
    FIGURES.mkdir(parents=True, exist_ok=True)
    axes.figure.savefig(FIGURES / name, dpi=110)
    print(f"figure written to {FIGURES / name}")


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--quick", action="store_true", help="200 repetitions, no figures")
    parser.add_argument("--only", default="coverage,bias,readout,adaptive,speed")
    parser.add_argument("--repetitions", type=int, default=4000)
    parser.add_argument("--molecules", default=",".join(MOLECULES), help="for coverage; the figure needs all")
    options = parser.parse_args()
    count = 200 if options.quick else options.repetitions
    molecules = tuple(options.molecules.split(","))
    for part in options.only.split(","):
        {
            "coverage": lambda: coverage(count, not options.quick and molecules == MOLECULES, molecules),
            "bias": lambda: bias(count),
            "readout": lambda: readout(not options.quick, max(count // 40, 10)),
            "adaptive": lambda: adaptive(4 if options.quick else 12),
            "speed": speed,
        }[part]()


if __name__ == "__main__":
    main()
