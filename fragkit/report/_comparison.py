"""Several ways of measuring one Hamiltonian, side by side."""

from collections.abc import Mapping

import numpy as np

from fragkit.pauli import PauliCosts
from fragkit.planning import Plan
from fragkit.report._text import text_table


def comparison_table(ways: Mapping[str, Plan | PauliCosts], *, target_error: float) -> str:
    """Circuits, cost and shots for a standard error in hartree; shots also as a ratio to those of the last way.

    Shots are cost over error squared, rounded up, which leaves out the minimum of shots per circuit.
    """
    shots = [int(np.ceil(way.cost / target_error**2)) for way in ways.values()]
    rows = [
        [
            name,
            str(way.groups if isinstance(way, PauliCosts) else len(way)),
            f"{way.cost:.4g}",
            f"{number:,}",
            f"{number / shots[-1]:.3g}",
            "" if way.converged else "not converged",
        ]
        for (name, way), number in zip(ways.items(), shots, strict=True)
    ]
    return text_table(("way of measuring", "circuits", "cost / Ha^2", "shots", "ratio", ""), rows)
