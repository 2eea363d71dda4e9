"""Shots of optimised plans against the usual ways to measure, all computed in one run.

    python benchmarks/shots.py [--quick] [--part table] [--molecules LiH,H2O] [--starts 1]
    python benchmarks/shots.py --part noise|gap|time|figure [--quick] [--figure docs/figures/trade_off.png]

Cost is shots × error² in Ha², times 1e6 the shots for a standard error of 1 mEh. Coefficients, rotations and shares
are chosen on CISD; every cost is evaluated on the full CI state, at the shot shares of the plan (baselines: at the best
shares for that state). Molecules: STO-3G, every bond 1.0 Å, geometries of the tests. All data are computed here.

Part "table". "low rank": eigenvectors of the two-electron tensor, coefficients as they are; "+one-body": their linear
terms divided among the fragments for the least cost; "+ all": all coefficients of least variance on the low-rank
rotations and the Hamiltonian's own orbitals; "overlapping": commuting groups of Pauli strings with overlaps,
degenerate orbitals turned to symmetry species, coefficients divided for the least cost on full CI (`fragkit.pauli`);
"plan": optimised rotations, default settings; "sharp": the same with less planning noise. "HF": the default plan on the
Hartree-Fock state. "1 %": plan made for CISD with 1 % noise and four circuits more than the fewest that generic
rotations allow, cost on full CI with 1 % noise over the quantum limit Var(H). "apart": default plan on CISD + 0.2 ×
random vector, over that state's Var(H). "seconds": of the default plan.

Part "noise": what the noise that is mixed into the reference does, and plans for the bare Hartree-Fock determinant.
Part "gap": how far plans are from the best with any rotations. Part "time": seconds for 1 mEh in CISD with 0.1 % noise
on two devices whose times are invented, with the shots and coefficients of the fewest shots, with those coefficients
and shots for the least time, and with both for the least time; then the last two of these in CISD itself, and in full
CI with 1 % noise. "own": a circuit without gates added, in the orbitals of the Hamiltonian. Part "figure": cost against
number of circuits.
"""

import argparse
import sys
import time
from pathlib import Path
from typing import Any

import numpy as np

from fragkit.circuits import circuit_costs
from fragkit.core import Fragment, Fragmentation, Hamiltonian, TimeModel
from fragkit.fit import fragment
from fragkit.pauli import pauli_costs
from fragkit.planning import exact_coefficients, optimality_gap, plan, plan_cost, reweighted, trade_off
from fragkit.planning._counts import least_count
from fragkit.planning._robust import DETERMINANT_NOISE, PLANNING_NOISE
from fragkit.states import ReferenceState, reference_state

sys.path.insert(0, str(Path(__file__).parents[1] / "tests"))
from molecules import full_ci, molecule_hamiltonian
from pauli import symmetry_adapted

CIRCUITS = {
    "H2": (5,),
    "H4": (10,),
    "H6": (16,),
    "LiH": (18,),
    "BeH2": (21,),
    "H2O": (12, 20),
    "NH3": (25,),
    "N2": (38,),
}
QUICK = ("H2", "H4", "LiH")
SHARP_NOISE = 3e-4
DEVICES = {
    "slow layers": TimeModel(preparation_seconds=2e-3, layer_seconds=5e-4, readout_seconds=3e-4, reset_seconds=1e-3),
    "slow reset": TimeModel(preparation_seconds=5e-6, layer_seconds=1e-7, readout_seconds=1e-6, reset_seconds=1e-3),
}


def one_body_divided(hamiltonian: Hamiltonian, fragments: Fragmentation, state: ReferenceState) -> list:
    """Linear terms of least Σ σ at fixed two-electron coefficients: coefficients (K, F), found with cvxpy."""
    import cvxpy as cp

    n = hamiltonian.orbitals
    terms = [cp.Variable(n) for _ in fragments]
    total, lengths = 0, []
    for piece, linear in zip(fragments, terms, strict=True):
        covariance = state.moments(piece.rotation)[1]
        values, vectors = np.linalg.eigh(covariance)
        root = (vectors * np.sqrt(np.maximum(values, 0.0))).T
        fixed = piece.coefficients.copy()
        fixed[-n:] = 0.0
        lengths.append(cp.norm(root @ fixed + root[:, -n:] @ linear))
        total = total + piece.rotation @ cp.diag(linear) @ piece.rotation.T
    upper = np.triu_indices(n)
    cp.Problem(cp.Minimize(sum(lengths)), [total[upper] == hamiltonian.one_body[upper]]).solve(solver=cp.CLARABEL)
    return [
        np.concatenate([piece.coefficients[:-n], linear.value]) for piece, linear in zip(fragments, terms, strict=True)
    ]


def best_cost(rotations, coefficients, state: ReferenceState) -> float:
    """(Σσ)²: cost with the shares that are best for this very state, which flatters the baselines."""
    variances = state.variance_and_gradient(np.stack(rotations), np.stack(coefficients))[0]
    return float(np.sum(np.sqrt(np.maximum(variances, 0.0))) ** 2)


def row(name: str, circuits: int, starts: int, quick: bool) -> str:
    hamiltonian = molecule_hamiltonian(name)
    true = ReferenceState.from_ci_vector(hamiltonian, full_ci(name)[1])
    cisd = reference_state(hamiltonian, "cisd")
    pieces = fragment(hamiltonian)
    rotations = [piece.rotation for piece in pieces]
    low_rank = best_cost(rotations, [piece.coefficients for piece in pieces], true)
    divided = best_cost(rotations, one_body_divided(hamiltonian, pieces, cisd), true)
    wider = np.stack([*rotations, np.eye(hamiltonian.orbitals)])
    sharp = cisd.with_noise(SHARP_NOISE)
    best = exact_coefficients(hamiltonian, wider, [sharp.moments(u)[1] for u in wider])
    reweighted = best_cost(wider, best.coefficients, true)
    pauli = np.nan if quick else pauli_costs(*symmetry_adapted(name), "overlapping").cost
    began = time.perf_counter()
    default = plan(hamiltonian, cisd, circuits=circuits, minimum_shots=1, starts=starts)
    seconds = time.perf_counter() - began
    sharpest = plan(hamiltonian, cisd, circuits=circuits, planning_noise=SHARP_NOISE, minimum_shots=1, starts=starts)
    noisy = true.with_noise(0.01)
    most = least_count(hamiltonian.orbitals) + 4
    robust = plan(hamiltonian, cisd.with_noise(0.01), circuits=most, minimum_shots=1, starts=starts)
    ratio = plan_cost(robust, noisy) / noisy.variance(hamiltonian)
    apart = apart_from(cisd, hamiltonian)
    away = plan_cost(default, apart) / apart.variance(hamiltonian)
    converged = "" if default.converged and sharpest.converged and robust.converged else "  (not converged)"
    return (
        f"{name:6}{low_rank:10.4g}{divided:10.4g}{reweighted:10.4g}{pauli:12.4g}{len(default):9d}"
        f"{plan_cost(default, true):10.4g}{plan_cost(sharpest, true):10.4g}{default.diagnostics['Hartree-Fock']:9.3g}"
        f"{ratio:8.3f}{away:8.3f}{seconds:9.1f}{converged}"
    )


def draw(path: Path, quick: bool) -> None:
    """The trade-off figure."""
    import matplotlib as mpl

    mpl.use("Agg")
    axes = None
    names = ("H4",) if quick else ("H4", "LiH", "H2O")
    for name in names:
        hamiltonian = molecule_hamiltonian(name)
        curve = trade_off(hamiltonian, reference_state(hamiltonian, "cisd"), tolerance=2e-2)
        print(f"\n{name}\n{curve}")
        axes = curve.plot(axes, label=f"{name}, {hamiltonian.orbitals} orbitals")
    if axes is None:
        raise SystemExit("nothing to draw")
    axes.set_title("Cost in the reference state against number of circuits")
    axes.grid(True, which="both", alpha=0.3)
    axes.figure.savefig(path, dpi=110)
    print(f"\nwritten: {path}")


def apart_from(cisd, hamiltonian: Hamiltonian, seed: int = 1) -> ReferenceState:
    """CISD + 0.2 × random vector, normalised."""
    vector = np.random.default_rng(seed).standard_normal(cisd.vector.shape)
    vector = cisd.vector + 0.2 * vector / np.linalg.norm(vector)
    return ReferenceState.from_ci_vector(hamiltonian, vector / np.linalg.norm(vector))


def noise_part(name: str, circuits: int) -> None:
    """Cost on several states against the noise that plans were made with."""
    hamiltonian = molecule_hamiltonian(name)
    true = ReferenceState.from_ci_vector(hamiltonian, full_ci(name)[1])
    cisd, hf = reference_state(hamiltonian, "cisd"), reference_state(hamiltonian, "hf")
    apart, noisy = apart_from(cisd, hamiltonian), true.with_noise(0.01)
    print(f"{name}, {circuits} circuits: cost / Ha^2; the last two over the quantum limit of the state")
    print(f"{'reference':>22}{'noise':>8}{'CISD':>9}{'full CI':>9}{'HF':>9}{'full CI, 1 %':>14}{'apart':>8}")

    def show(label: str, noise: float, made) -> None:
        print(
            f"{label:>22}{noise:8.0e}{plan_cost(made, cisd):9.4f}{plan_cost(made, true):9.4f}{plan_cost(made, hf):9.3f}"
            f"{plan_cost(made, noisy) / noisy.variance(hamiltonian):14.3f}"
            f"{plan_cost(made, apart) / apart.variance(hamiltonian):8.3f}",
            flush=True,
        )

    for noise in (1e-4, 3e-4, 1e-3, 3e-3, 1e-2):
        show("CISD", noise, plan(hamiltonian, cisd, circuits=circuits, planning_noise=noise, minimum_shots=1))
    from_determinant = plan(hamiltonian, hf, circuits=circuits, minimum_shots=1)
    show("HF", DETERMINANT_NOISE, from_determinant)
    show("HF, then CISD", PLANNING_NOISE, reweighted(from_determinant, hamiltonian, cisd, minimum_shots=1))


def gap_part(names: list[str]) -> None:
    """Distance of plans from the best with any number of rotations.

    First default plans in CISD with planning noise, then plans with four circuits more than the fewest for full CI
    with 1 % noise. "enlarged" is the cost of the design with the rotations that were added.
    """
    for noisy in (False, True):
        print("full CI with 1 % noise" if noisy else "CISD with planning noise 1e-3")
        print(
            f"{'':6}{'circuits':>9}{'cost':>10}{'enlarged':>10}{'bound':>10}{'ratio':>8}{'quantum limit':>15}"
            f"{'cost/limit':>12}{'bound/limit':>13}{'seconds':>9}"
        )
        for name in names:
            hamiltonian = molecule_hamiltonian(name)
            state = reference_state(hamiltonian, "cisd")
            count = None
            if noisy:
                state = ReferenceState.from_ci_vector(hamiltonian, full_ci(name)[1]).with_noise(0.01)
                count = least_count(hamiltonian.orbitals) + 4
            made = plan(hamiltonian, state, circuits=count)
            began = time.perf_counter()
            gap = optimality_gap(made, hamiltonian, state)
            limit = gap.quantum_limit
            print(
                f"{name:6}{len(made):9d}{gap.cost:10.4g}{gap.enlarged_cost:10.4g}{gap.lower_bound:10.4g}"
                f"{gap.ratio:8.3f}{limit:15.4g}{gap.cost / limit:12.3f}{gap.lower_bound / limit:13.3f}"
                f"{time.perf_counter() - began:9.1f}  {gap.message}",
                flush=True,
            )


def seconds_in(made, state: ReferenceState, model: TimeModel, target: float) -> float:
    """Seconds that a plan takes for an error in some state, at the plan's own shares."""
    costs = circuit_costs(made.circuits(), shots=made.shots, time_model=model)
    return costs.total_seconds * plan_cost(made, state) / target**2 / made.total_shots


def time_part(names: list[str]) -> None:
    """Seconds for one error with coefficients of the fewest shots and of the least time."""
    print(
        f"{'':6}{'rotations':16}{'device':12}{'circuits':>9}{'fewest shots':>14}{'shots by time':>15}"
        f"{'all by time':>13}{'shots':>10}{'by time':>10}{'CISD':>10}{'by time':>10}{'FCI, 1 %':>10}{'by time':>10}"
    )
    target = 1e-3
    for name in names:
        hamiltonian = molecule_hamiltonian(name)
        cisd = reference_state(hamiltonian, "cisd")
        state = cisd.with_noise(1e-3)
        others = cisd, ReferenceState.from_ci_vector(hamiltonian, full_ci(name)[1]).with_noise(0.01)
        optimised = plan(hamiltonian, state, minimum_shots=1).fragments
        own = Fragment.one_body(np.eye(hamiltonian.orbitals), np.zeros(hamiltonian.orbitals))
        ways = {
            "low rank": fragment(hamiltonian).fragments,
            "low rank, own": (*fragment(hamiltonian), own),
            "optimised": optimised,
            "optimised, own": (*optimised, own),
        }
        for way, pieces in ways.items():
            options: dict[str, Any] = {"target_error": target, "minimum_shots": 1}
            given = Fragmentation.of(hamiltonian, pieces)
            fewest = plan(hamiltonian, state, fragments=given, **options)
            same = Fragmentation.of(hamiltonian, fewest.fragments)
            for device, model in DEVICES.items():
                options["time_model"] = model
                shared = plan(hamiltonian, state, fragments=same, reweight=False, **options)
                made = plan(hamiltonian, state, fragments=given, **options)
                times = [seconds_in(one, state, model, target) for one in (fewest, shared, made)]
                elsewhere = [seconds_in(one, other, model, target) for other in others for one in (shared, made)]
                print(
                    f"{name:6}{way:16}{device:12}{len(made):9d}{times[0]:14.1f}{times[1]:15.1f}{times[2]:13.1f}"
                    f"{fewest.total_shots:10d}{made.total_shots:10d}" + "".join(f"{t:10.1f}" for t in elsewhere),
                    flush=True,
                )


def main() -> None:
    parser = argparse.ArgumentParser(description=(__doc__ or "").split("\n")[0])
    parser.add_argument("--quick", action="store_true", help="the smallest molecules only, without Pauli groups")
    parser.add_argument("--molecules", help="comma-separated names")
    parser.add_argument("--starts", type=int, default=1, help="independent starts of the optimisation")
    parser.add_argument("--part", choices=("table", "noise", "gap", "time", "figure"), default="table")
    parser.add_argument("--figure", type=Path, default=Path("trade_off.png"), help="file of the figure")
    options = parser.parse_args()
    names = options.molecules.split(",") if options.molecules else (QUICK if options.quick else tuple(CIRCUITS))
    if options.part == "figure":
        draw(options.figure, options.quick)
        return
    if options.part == "noise":
        for name in names if options.molecules else ("H4",) if options.quick else ("H2O",):
            noise_part(name, CIRCUITS[name][-1])
        return
    if options.part == "time":
        time_part(list(names) if options.molecules else ["H4"] if options.quick else ["H4", "LiH", "H2O"])
        return
    if options.part == "gap":
        gap_part(list(names) if options.molecules else ["H4"] if options.quick else ["H4", "LiH", "BeH2", "H2O"])
        return
    print(
        f"{'':6}{'low rank':>10}{'+one-body':>10}{'+ all':>10}{'overlapping':>12}{'circuits':>9}{'plan':>10}"
        f"{'sharp':>10}{'HF':>9}{'1 %':>8}{'apart':>8}{'seconds':>9}"
    )
    for name in names:
        for circuits in CIRCUITS[name]:
            print(row(name, circuits, options.starts, options.quick), flush=True)


if __name__ == "__main__":
    main()
