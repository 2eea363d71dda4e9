"""The command `fragkit`: plan, show, export, simulate, estimate and compare from the shell."""

import argparse
import json
import sys
from collections.abc import Callable, Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import fragkit

if TYPE_CHECKING:
    from fragkit.core import Hamiltonian
    from fragkit.estimate import Counts
    from fragkit.planning import Plan
    from fragkit.states import ReferenceState

EXIT_OK, EXIT_INPUT, EXIT_NOT_CONVERGED, EXIT_INTERRUPTED = 0, 2, 3, 130

DESCRIPTION = """\
Plan the measurement of a molecule's energy on a quantum processor, and turn the counts into an energy.

  fragkit plan water.fcidump -o water.plan.json        integrals -> plan
  fragkit show water.plan.json                         what the plan promises
  fragkit export water.plan.json -o circuits/          one OpenQASM 3 file per circuit
  fragkit estimate water.plan.json counts.json         counts -> energy and standard error

Integrals are read from FCIDUMP files. Energies are in hartree (Ha)."""

EPILOG = """\
exit codes: 0 done, 2 wrong input or an existing output file, 3 done but not converged, 130 interrupted"""


def main(arguments: Sequence[str] | None = None) -> int:
    """Run the command line and return its exit code."""
    options = _parser().parse_args(arguments)
    try:
        return options.run(options)
    except fragkit.FragkitError as error:
        print(f"fragkit: {error}", file=sys.stderr)
        return EXIT_INPUT
    except KeyboardInterrupt:
        print("fragkit: interrupted; no file was changed", file=sys.stderr)
        return EXIT_INTERRUPTED
    except BrokenPipeError:
        # The reader of our output (head, less) has gone; there is nobody left to tell.
        sys.stderr.close()
        return EXIT_OK


def _parser() -> argparse.ArgumentParser:
    parser = argparse.ArgumentParser(
        prog="fragkit", description=DESCRIPTION, epilog=EPILOG, formatter_class=argparse.RawDescriptionHelpFormatter
    )
    parser.add_argument("--version", action="version", version=f"fragkit {fragkit.__version__}")
    commands = parser.add_subparsers(title="commands", required=True, metavar="COMMAND")

    def command(name: str, run: Callable[[argparse.Namespace], int], help_text: str) -> argparse.ArgumentParser:
        sub = commands.add_parser(name, help=help_text, description=help_text[0].upper() + help_text[1:] + ".")
        sub.set_defaults(run=run)
        return sub

    sub = command("example", _example, "run the whole job on a built-in molecule, from integrals to an energy")
    sub.add_argument("--seed", type=int, default=7, help="seed of the simulated device and of the search (default 7)")

    sub = command("plan", _plan, "choose circuits and shots for the integrals in an FCIDUMP file")
    _add_integrals(sub)
    _add_output(sub, "plan file to write", required=True)
    _add_state(sub, "cisd")
    budget = sub.add_mutually_exclusive_group()
    budget.add_argument("--error", type=float, metavar="HA", help="standard error to reach (default 1 kcal/mol)")
    budget.add_argument("--shots", type=int, metavar="N", help="total number of shots to spend instead")
    sub.add_argument(
        "--circuits", default=None, metavar="K", help='number of circuits, or "auto" or "minimal" (default: by size)'
    )
    sub.add_argument(
        "--fragments",
        choices=("optimised", "low-rank"),
        default="optimised",
        help="optimise the rotations, or take the low-rank ones as they are (default optimised)",
    )
    sub.add_argument(
        "--exact-for-all-states",
        action="store_true",
        help="use no operator that vanishes only at the stated electron numbers (costs more shots)",
    )
    sub.add_argument("--seed", type=int, default=0, help="seed of the search (default 0)")
    sub.add_argument("--progress", action="store_true", help="show a progress bar")

    sub = command("show", _show, "print what a plan promises, circuit by circuit")
    sub.add_argument("plan", help="plan file")
    sub.add_argument("--summary", action="store_true", help="leave out the table of circuits")

    sub = command("export", _export, "write the measurement circuits of a plan")
    sub.add_argument("plan", help="plan file")
    _add_output(sub, "folder to write to; a .json or .npz file for the format json", required=True)
    sub.add_argument(
        "--format", choices=("openqasm3", "openqasm2", "json"), default="openqasm3", help="default openqasm3"
    )
    sub.add_argument(
        "--layout",
        choices=("blocked", "interleaved"),
        default="blocked",
        help="qubit order: all alpha then all beta, or alpha and beta in turn (default blocked)",
    )

    sub = command("simulate", _simulate, "write the counts that an ideal device would return for a plan")
    sub.add_argument("plan", help="plan file")
    _add_integrals(sub)
    _add_output(sub, "counts file to write", required=True)
    _add_state(sub, "fci")
    sub.add_argument("--seed", type=int, default=None, help="seed of the simulated device")

    sub = command("estimate", _estimate, "turn counts into an energy with a standard error")
    sub.add_argument("plan", help="plan file the circuits came from")
    sub.add_argument("counts", help="counts file")
    sub.add_argument(
        "--bit-order",
        choices=("first-qubit-left", "first-qubit-right"),
        help="read COUNTS as a plain JSON list of {bit string: count}, with the first qubit at this end",
    )
    sub.add_argument(
        "--spin-order",
        choices=("blocked", "interleaved"),
        help="order of the bits in such a list; the bits of exported circuits are blocked in either layout",
    )

    sub = command("compare", _compare, "compare the shots that different ways of measuring need")
    _add_integrals(sub)
    _add_state(sub, "cisd")
    sub.add_argument("--error", type=float, metavar="HA", help="standard error to reach (default 1 kcal/mol)")
    sub.add_argument("--circuits", type=int, metavar="K", help="circuits of the optimised plan (default: by size)")
    sub.add_argument("--seed", type=int, default=0, help="seed of the search (default 0)")
    return parser


def _add_integrals(parser: argparse.ArgumentParser) -> None:
    parser.add_argument("integrals", help="FCIDUMP file")


def _add_output(parser: argparse.ArgumentParser, help_text: str, *, required: bool) -> None:
    parser.add_argument("-o", "--output", required=required, help=help_text)
    parser.add_argument("--overwrite", action="store_true", help="replace what is there")


def _add_state(parser: argparse.ArgumentParser, default: str) -> None:
    parser.add_argument(
        "--state",
        choices=("hf", "cisd", "fci"),
        default=default,
        help=f"the state: the reference determinant, CISD or full CI (default {default})",
    )
    parser.add_argument(
        "--noise",
        type=float,
        default=0.0,
        metavar="P",
        help="probability of depolarisation within the electron-number sector, 0 to 1 (default 0)",
    )


def _load_state(options: argparse.Namespace) -> "tuple[Hamiltonian, ReferenceState]":
    hamiltonian = fragkit.from_fcidump(options.integrals)
    return hamiltonian, fragkit.reference_state(hamiltonian, options.state, noise=options.noise)


def _refuse_existing(path: str, overwrite: bool) -> None:
    # Asked before the work starts, so that an hour of planning is not lost to a name that is taken.
    if Path(path).exists() and not overwrite:
        raise fragkit.InputError(
            f"the output {path} must not exist yet (got a file or folder); add --overwrite to replace it"
        )
    if not Path(path).absolute().parent.is_dir():
        raise fragkit.InputError(f"the folder of the output {path} must exist (got none); make it first")


def _end(plan: "Plan") -> int:
    if plan.converged:
        return EXIT_OK
    print(f"fragkit: not converged: {plan.message}", file=sys.stderr)
    return EXIT_NOT_CONVERGED


def _plan(options: argparse.Namespace) -> int:
    _refuse_existing(options.output, options.overwrite)
    hamiltonian, state = _load_state(options)
    plan = _make_plan(hamiltonian, state, options)
    plan.save(options.output, overwrite=options.overwrite)
    print(plan.table())
    print(f"\nwritten to {options.output}")
    return _end(plan)


def _make_plan(hamiltonian: "Hamiltonian", state: "ReferenceState", options: argparse.Namespace) -> "Plan":
    keywords: dict[str, Any] = {"shifts": not options.exact_for_all_states, "rng": options.seed}
    if options.error is not None:
        keywords["target_error"] = options.error
    if options.shots is not None:
        keywords["total_shots"] = options.shots
    if options.fragments == "low-rank":
        if options.circuits is not None:
            raise fragkit.InputError(
                f"--circuits must be left out with --fragments low-rank, whose number is given (got {options.circuits})"
            )
        return fragkit.plan(hamiltonian, state, fragments=fragkit.fragment(hamiltonian, fragkit.LowRank()), **keywords)
    if options.circuits is not None:
        named = options.circuits in ("auto", "minimal")
        if not named and not options.circuits.isdigit():
            raise fragkit.InputError(
                f'--circuits must be a whole number, "auto" or "minimal" (got {options.circuits!r})'
            )
        keywords["circuits"] = options.circuits if named else int(options.circuits)
    return fragkit.plan(hamiltonian, state, progress=options.progress, **keywords)


def _show(options: argparse.Namespace) -> int:
    from fragkit.report import plan_table

    print(plan_table(fragkit.load_plan(options.plan), rows=not options.summary))
    return EXIT_OK


def _export(options: argparse.Namespace) -> int:
    from fragkit.circuits import export_angles, write_circuits

    plan = fragkit.load_plan(options.plan)
    if options.format == "json":
        export_angles(
            options.output,
            plan.fragments,
            constant=plan.constant,
            electrons=plan.electrons,
            shots=plan.shots,
            hamiltonian_digest=plan.hamiltonian_digest,
            plan_digest=plan.digest,
            sector_exact=plan.sector_exact,
            layout=options.layout,
            overwrite=options.overwrite,
        )
        print(f"angles and coefficients of {len(plan)} circuits written to {options.output}")
        return EXIT_OK
    circuits = plan.circuits(layout=options.layout)
    write_circuits(options.output, circuits, language=options.format, overwrite=options.overwrite)
    gates = sum(circuit.givens_count for circuit in circuits)
    depth = max(circuit.depth for circuit in circuits)
    print(f"{len(circuits)} circuits written to {options.output}: {gates} Givens rotations in at most {depth} layers")
    return EXIT_OK


def _simulate(options: argparse.Namespace) -> int:
    from fragkit.files import save_counts

    _refuse_existing(options.output, options.overwrite)
    plan = fragkit.load_plan(options.plan)
    hamiltonian, state = _load_state(options)
    plan.check_belongs_to(hamiltonian)
    counts = fragkit.simulate(plan, state, rng=options.seed)
    save_counts(counts, options.output, overwrite=options.overwrite)
    print(f"{plan.total_shots:,} shots of {len(plan)} circuits written to {options.output}")
    return EXIT_OK


def _estimate(options: argparse.Namespace) -> int:
    from fragkit.report import estimate_table

    plan = fragkit.load_plan(options.plan)
    estimate = plan.estimate(_read_counts(options, plan))
    print(estimate_table(estimate))
    return EXIT_OK


def _read_counts(options: argparse.Namespace, plan: "Plan") -> "Counts":
    from fragkit.files import load_counts

    if options.bit_order is None and options.spin_order is None:
        return load_counts(options.counts, plan=plan)
    if options.bit_order is None or options.spin_order is None:
        raise fragkit.InputError("--bit-order and --spin-order must be given together (got one of them)")
    try:
        tables = json.loads(Path(options.counts).read_text(encoding="utf-8"))
    except OSError as error:
        raise fragkit.InputError(f"{options.counts} must be a file that can be read (got {error.strerror})") from error
    except ValueError as error:
        raise fragkit.InputError(f"{options.counts} must be complete JSON (got: {error})") from error
    if not isinstance(tables, list) or not all(isinstance(table, dict) for table in tables):
        raise fragkit.InputError(
            f"{options.counts} must be a list with one object of bit strings and counts for each circuit "
            '(got something else); for example [{"0101": 12, "0110": 8}, {"1001": 20}]'
        )
    return fragkit.Counts.from_strings(
        plan, dict(enumerate(tables)), bit_order=options.bit_order, spin_order=options.spin_order
    )


def _compare(options: argparse.Namespace) -> int:
    from fragkit.pauli import pauli_costs
    from fragkit.planning import CHEMICAL_ACCURACY
    from fragkit.report import comparison_table

    hamiltonian, state = _load_state(options)
    low_rank = fragkit.fragment(hamiltonian)
    ways = {
        "Pauli, qubit-wise groups": pauli_costs(hamiltonian, state, "qubit-wise"),
        "Pauli, commuting groups": pauli_costs(hamiltonian, state, "commuting"),
        "Pauli, overlapping groups": pauli_costs(hamiltonian, state, "overlapping"),
        "low rank": fragkit.plan(hamiltonian, state, fragments=low_rank, reweight=False),
        "low rank, best coefficients": fragkit.plan(hamiltonian, state, fragments=low_rank),
        "optimised": fragkit.plan(hamiltonian, state, circuits=options.circuits, rng=options.seed),
    }
    target = CHEMICAL_ACCURACY if options.error is None else options.error
    print(f"{hamiltonian}\nstate: {state.description}, error {1e3 * target:.4g} mHa\n")
    print(comparison_table(ways, target_error=target))
    return EXIT_OK


def _example(options: argparse.Namespace) -> int:
    """Lithium hydride stretched to 2.0 angstrom on a device with 1 % depolarisation; a setting of our own."""
    from pyscf import gto, scf

    from fragkit.planning import CHEMICAL_ACCURACY
    from fragkit.report import comparison_table, estimate_summary, plan_table, summary_lines

    print("Lithium hydride at 2.0 angstrom in the STO-3G basis, 12 qubits. The device is simulated here: it holds the")
    print("exact ground state with 1 % depolarisation. The plan knows only the CISD state and the 1 %.\n")
    mean_field = scf.RHF(gto.M(atom="Li 0 0 0; H 0 0 2.0", basis="sto-3g", verbose=0)).run()
    hamiltonian = fragkit.from_pyscf(mean_field)
    expected = fragkit.reference_state(hamiltonian, "cisd", noise=0.01)
    low_rank = fragkit.plan(hamiltonian, expected, fragments=fragkit.fragment(hamiltonian), reweight=False)
    plan = fragkit.plan(hamiltonian, expected, rng=options.seed)
    print("The plan:\n")
    print(plan_table(plan))
    print("\nAgainst the low-rank fragments as they are, for the same error:\n")
    print(comparison_table({"low rank": low_rank, "optimised": plan}, target_error=CHEMICAL_ACCURACY))

    circuits = plan.circuits()
    gates = max(circuit.givens_count for circuit in circuits)
    depth = max(circuit.depth for circuit in circuits)
    print(f"\nCircuits to append: {len(circuits)}, at most {gates} Givens rotations in {depth} layers each.")

    device = fragkit.reference_state(hamiltonian, "fci", noise=0.01)
    counts = fragkit.simulate(plan, device, rng=options.seed)
    estimate = plan.estimate(counts)
    exact = device.energy(hamiltonian)
    print("\nThe estimate from the simulated counts:\n")
    print(summary_lines(estimate_summary(estimate)))
    deviation = (estimate.energy - exact) / estimate.standard_error
    print(
        f"\nExact energy of the device's state: {exact:.6f} Ha; the estimate is {deviation:+.2f} standard errors off."
    )
    return EXIT_OK
