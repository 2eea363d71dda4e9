"""The README's Python example runs as written and gives the energy that pyscf gives."""

import re
from pathlib import Path
from typing import Any

import pytest

README = Path(__file__).parents[1] / "README.md"


def test_the_python_example_runs(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture
) -> None:
    from pyscf import fci

    monkeypatch.chdir(tmp_path)
    example = re.search(r"```python\n(.*?)```", README.read_text(encoding="utf-8"), re.DOTALL)
    assert example is not None
    names: dict[str, Any] = {}
    exec(example.group(1), names)
    shown = capsys.readouterr().out
    assert "quantum limit" in shown
    assert "OPENQASM 3.0;" in shown
    assert (tmp_path / "lih.plan.json").exists()
    ham, estimate = names["ham"], names["estimate"]
    exact = fci.direct_spin1.kernel(
        ham.one_body.copy(), ham.two_body.copy(), ham.orbitals, ham.electrons, ecore=ham.constant
    )[0]
    # 1 % of the maximally mixed state lifts the energy by about 1 % of some hartree.
    assert 0.0 < names["state"].energy(ham) - exact < 0.05
    assert abs(estimate.energy - names["state"].energy(ham)) < 4 * estimate.standard_error
