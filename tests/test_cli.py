"""The command line, from integrals to an energy, in a folder of its own."""

import json
import subprocess
import sys
from pathlib import Path

import pytest
from molecules import molecule_hamiltonian

import fragkit
from fragkit.cli import EXIT_INPUT, EXIT_OK, main
from fragkit.files import load_counts


@pytest.fixture(scope="module")
def job(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder with the integrals of linear H4 and an optimised plan for it, made by the command line."""
    folder = tmp_path_factory.mktemp("job")
    fragkit.to_fcidump(molecule_hamiltonian("H4"), folder / "h4.fcidump")
    arguments = [
        "plan",
        str(folder / "h4.fcidump"),
        "-o",
        str(folder / "plan.json"),
        "--state",
        "fci",
        "--noise",
        "0.01",
    ]
    assert main(arguments) == EXIT_OK
    return folder


def test_plan_to_energy(job: Path, capsys: pytest.CaptureFixture[str]) -> None:
    """plan, show, export, simulate, estimate: the energy is that of full CI within its error bar.

    −2.166387 Ha: full CI of linear H4, 1 angstrom, STO-3G, by pyscf.
    """
    state = ["--state", "fci", "--seed", "11"]
    plan, counts = str(job / "plan.json"), str(job / "counts.json")
    assert main(["show", plan]) == EXIT_OK
    assert "quantum limit" in capsys.readouterr().out
    assert main(["export", plan, "-o", str(job / "circuits")]) == EXIT_OK
    loaded = fragkit.load_plan(plan)
    assert len(list((job / "circuits").glob("*.qasm"))) == len(loaded)
    assert main(["simulate", plan, str(job / "h4.fcidump"), "-o", counts, *state]) == EXIT_OK
    capsys.readouterr()
    assert main(["estimate", plan, counts]) == EXIT_OK
    shown = capsys.readouterr().out
    energy = float(shown.split("energy")[1].split()[0])
    assert abs(energy + 2.166387) < 5 * 1.6e-3


def test_plain_list_of_counts_needs_both_orders(job: Path, capsys: pytest.CaptureFixture[str]) -> None:
    plan = fragkit.load_plan(job / "plan.json")
    state = fragkit.reference_state(molecule_hamiltonian("H4"), "fci")
    counts = fragkit.simulate(plan, state, rng=3)
    reversed_bits = [{bits[::-1]: int(n) for bits, n in counts.strings(k).items()} for k in range(len(plan))]
    (job / "plain.json").write_text(json.dumps(reversed_bits))
    arguments = ["estimate", str(job / "plan.json"), str(job / "plain.json")]
    assert main([*arguments, "--bit-order", "first-qubit-right"]) == EXIT_INPUT
    assert "--spin-order" in capsys.readouterr().err
    assert main([*arguments, "--bit-order", "first-qubit-right", "--spin-order", "blocked"]) == EXIT_OK
    assert f"{plan.estimate(counts).energy:.6f}" in capsys.readouterr().out


def test_json_export_is_complete(job: Path) -> None:
    target = job / "angles.json"
    assert main(["export", str(job / "plan.json"), "-o", str(target), "--format", "json"]) == EXIT_OK
    assert json.loads(target.read_text())["plan_digest"] == fragkit.load_plan(job / "plan.json").digest


def test_existing_output_is_left_alone(job: Path, capsys: pytest.CaptureFixture[str]) -> None:
    before = (job / "plan.json").read_bytes()
    assert main(["plan", str(job / "h4.fcidump"), "-o", str(job / "plan.json")]) == EXIT_INPUT
    assert "--overwrite" in capsys.readouterr().err
    assert (job / "plan.json").read_bytes() == before


def test_counts_of_another_plan_are_refused(job: Path, capsys: pytest.CaptureFixture[str]) -> None:
    other = str(job / "low_rank.json")
    assert main(["plan", str(job / "h4.fcidump"), "-o", other, "--fragments", "low-rank"]) == EXIT_OK
    counts = job / "other_counts.json"
    arguments = ["simulate", other, str(job / "h4.fcidump"), "-o", str(counts), "--seed", "1"]
    assert main(arguments) == EXIT_OK
    assert len(load_counts(counts)) == len(fragkit.load_plan(other))
    capsys.readouterr()
    assert main(["estimate", str(job / "plan.json"), str(counts)]) == EXIT_INPUT
    assert "plan" in capsys.readouterr().err


def test_compare_puts_the_optimised_plan_last_and_lowest(job: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["compare", str(job / "h4.fcidump"), "--state", "fci", "--noise", "0.01"]) == EXIT_OK
    rows = [
        line for line in capsys.readouterr().out.splitlines() if line.startswith(("Pauli", "low rank", "optimised"))
    ]
    costs = [float(row.rsplit(maxsplit=3)[1]) for row in rows]
    assert len(costs) == 6
    assert costs[-1] == min(costs)


@pytest.mark.parametrize(
    ("arguments", "word"),
    [
        (["plan", "missing.fcidump", "-o", "out.json"], "missing.fcidump"),
        (["show", "missing.json"], "missing.json"),
        (["plan", "missing.fcidump", "-o", "nowhere/out.json"], "folder"),
    ],
)
def test_wrong_input_is_one_line_and_exit_code_2(
    arguments: list[str],
    word: str,
    tmp_path: Path,
    monkeypatch: pytest.MonkeyPatch,
    capsys: pytest.CaptureFixture[str],
) -> None:
    monkeypatch.chdir(tmp_path)
    assert main(arguments) == EXIT_INPUT
    shown = capsys.readouterr()
    assert shown.out == ""
    assert word in shown.err
    assert shown.err.startswith("fragkit: ")
    assert list(tmp_path.iterdir()) == []


def test_python_dash_m_runs_the_same_command() -> None:
    done = subprocess.run([sys.executable, "-m", "fragkit", "--version"], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == f"fragkit {fragkit.__version__}"
