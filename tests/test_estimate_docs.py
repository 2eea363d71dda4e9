"""The example of docs/variational.md, run as it stands there."""

import re
from pathlib import Path

from molecules import FULL_CI


def test_variational_example_reaches_full_ci_within_its_error_bar() -> None:
    page = (Path(__file__).parents[1] / "docs" / "variational.md").read_text(encoding="utf-8")
    [block] = re.findall(r"```python\n(.*?)```", page, flags=re.DOTALL)
    names: dict = {}
    exec(compile(block, "docs/variational.md", "exec"), names)
    final = names["final"]
    assert abs(final.energy - FULL_CI["H2"]) < 4 * final.standard_error
    assert final.standard_error < 3e-3
    # Full CI by hand: tan 2θ from the 2 × 2 matrix; the estimate of θ moves the energy in second order only.
    assert 0.05 < names["best"] < 0.3
