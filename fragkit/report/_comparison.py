"""Several plans for one Hamiltonian, side by side."""

from collections.abc import Mapping
from typing import TYPE_CHECKING

from fragkit.report._text import text_table

if TYPE_CHECKING:
    from fragkit.planning import Plan


def comparison_table(plans: "Mapping[str, Plan]") -> str:
    """Circuits, cost and shots of each plan; shots also as a ratio to those of the last one."""
    last = list(plans.values())[-1]
    rows = [
        [
            name,
            str(len(plan)),
            f"{plan.cost:.4g}",
            f"{plan.total_shots:,}",
            f"{1e3 * plan.predicted_error:.4g}",
            f"{plan.total_shots / last.total_shots:.3g}",
        ]
        for name, plan in plans.items()
    ]
    return text_table(("plan", "circuits", "cost / Ha^2", "shots", "error / mHa", "shots, ratio"), rows)
