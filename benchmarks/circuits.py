"""Gates, layers, seconds and bytes of measurement circuits.

    python benchmarks/circuits.py [--quick]

Part 1: gates of low-rank fragments of small molecules (STO-3G, every bond 1.0 Å, geometries of the tests), in the
orbitals as they come out of the diagonalisation and in the cheapest form, per layout. Part 2: seconds to compile and
write all circuits of a plan with random rotations, the worst case. All data are computed here.
"""

import argparse
import sys
import tempfile
import time
from pathlib import Path

import numpy as np

from fragkit import LowRank, fragment
from fragkit.circuits import export_angles, parametrised_circuit, rotation_circuits, write_circuits
from fragkit.core import Fragment, cheapest_form
from fragkit.fit._low_rank import pair_eigenvectors, rank_one_fragments

sys.path.insert(0, str(Path(__file__).parents[1] / "tests"))
from molecules import molecule_hamiltonian


def molecule_table(names: list[str]) -> None:
    print(
        "CNOT of all circuits (largest number of CNOT layers), low-rank fragments, matrix elements below 1e-8 left out"
    )
    print(
        f"{'molecule':9}{'circuits':>9}{'full mesh':>11}"
        f"{'as diagonalised':>16}{'cheapest':>16}{'interleaved':>16}  bound"
    )
    for name in names:
        hamiltonian = molecule_hamiltonian(name)
        fragments = fragment(hamiltonian, LowRank(tol=1e-8)).fragments
        n = hamiltonian.orbitals
        values, vectors = pair_eigenvectors(hamiltonian)
        kept = len(fragments) - 1
        pieces = zip(*rank_one_fragments(values[:kept], vectors[:, :kept], n), strict=True)
        diagonalised = [*(Fragment.plain(u, c) for u, c in pieces), fragments[-1]]
        cells, bound = [], 0.0
        ordered = [cheapest_form(f) for f in fragments]
        for listed, layout in ((diagonalised, "blocked"), (ordered, "blocked"), (ordered, "interleaved")):
            circuits = rotation_circuits(listed, layout=layout, angle_tolerance=1e-8)
            layers = max(circuit.two_qubit_depth for circuit in circuits)
            cells.append(f"{sum(circuit.two_qubit_gates for circuit in circuits)} ({layers})")
            bound = max(bound, *(circuit.distribution_bound for circuit in circuits))
        full = 2 * n * (n - 1) * len(fragments)
        print(f"{name:9}{len(fragments):9d}{full:11d}{cells[0]:>16}{cells[1]:>16}{cells[2]:>16}  {bound:.1e}")


def speed_table(cases: list[tuple[int, int]]) -> None:
    rng = np.random.default_rng(1)
    print("\nSeconds for all circuits of a plan with random rotations, and MB of OpenQASM 3")
    titles = ("qubits", "circuits", "layout", "form", "compile", "QASM 3", "JSON", "one", "MB")
    print("".join(f"{title:>12}" for title in titles))
    for n, count in cases:
        fragments = [
            Fragment.plain(np.linalg.qr(rng.normal(size=(n, n)))[0], np.eye(n) * rng.normal()) for _ in range(count)
        ]
        start = time.perf_counter()
        for f in fragments:
            cheapest_form(f)
        order = time.perf_counter() - start
        for layout in ("blocked", "interleaved"):
            with tempfile.TemporaryDirectory() as folder:
                times = [time.perf_counter()]
                circuits = rotation_circuits(fragments, layout=layout)
                times.append(time.perf_counter())
                paths = write_circuits(folder, circuits)
                times.append(time.perf_counter())
                export_angles(Path(folder) / "angles.json", fragments, constant=0.0, layout=layout)
                times.append(time.perf_counter())
                parametrised_circuit(circuits).to_openqasm3()
                times.append(time.perf_counter())
                size = sum(path.stat().st_size for path in paths) / 1e6
            row = [str(2 * n), str(count), layout, *(f"{value:.2f}" for value in (order, *np.diff(times), size))]
            print("".join(f"{cell:>12}" for cell in row))


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--quick", action="store_true", help="fewer molecules and sizes")
    quick = parser.parse_args().quick
    molecule_table(["H2", "LiH", "H2O"] if quick else ["H2", "LiH", "BeH2", "H2O", "NH3", "N2", "H4", "H6"])
    speed_table([(14, 60)] if quick else [(7, 12), (14, 60), (24, 100)])


if __name__ == "__main__":
    main()
