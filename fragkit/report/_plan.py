"""A plan as text, as HTML and as a figure."""

from typing import TYPE_CHECKING, Any

import numpy as np

from fragkit.report._text import html_table, summary_lines, text_table

if TYPE_CHECKING:
    from matplotlib.axes import Axes

    from fragkit.planning import Plan

_HEADERS = ("circuit", "kind", "shots", "share", "deviation / mHa", "error / mHa", "largest coefficient / Ha")


def plan_table(plan: "Plan", *, rows: bool = True) -> str:
    """The plan as text: what it promises and, with `rows`, one line per circuit.

    "deviation" is the standard deviation of one shot in the reference state, "error" what the circuit
    adds (in squares) to the predicted standard error.
    """
    text = summary_lines(plan_summary(plan))
    return text + "\n\n" + text_table(_HEADERS, _rows(plan)) if rows else text


def plan_html(plan: "Plan") -> str:
    """The plan as an HTML table for notebooks."""
    return html_table(_HEADERS, _rows(plan), caption=repr(plan))


def plan_summary(plan: "Plan") -> list[tuple[str, str]]:
    """Names and values of what the plan promises, in reading order."""
    pairs = [
        ("circuits", str(len(plan))),
        ("shots", f"{plan.total_shots:,}"),
        ("predicted error", f"{1e3 * plan.predicted_error:.4g} mHa ({plan.reference})"),
    ]
    if plan.target_error is not None:
        pairs.append(("target error", f"{1e3 * plan.target_error:.4g} mHa"))
    pairs.append(("cost", f"{plan.cost:.4g} Ha^2 (shots x error^2)"))
    if plan.bound is not None:
        pairs.append(("quantum limit", f"{plan.bound.quantum_limit:.4g} Ha^2 (variance of H in the reference)"))
        if plan.bound.design_limit is not None:
            pairs.append(("limit of rotations", f"{plan.bound.design_limit:.4g} Ha^2; {plan.bound.note}"))
    pairs += [(f"cost, {name}", f"{value:.4g} Ha^2") for name, value in plan.diagnostics.items()]
    exact = (
        f"states with {plan.electrons[0]} alpha and {plan.electrons[1]} beta electrons"
        if plan.sector_exact
        else "all states"
    )
    pairs.append(
        ("exact for", f"{exact}, to {plan.energy_bound:.2g} Ha at most (residual {plan.residual_norm:.2g} Ha)")
    )
    if plan.method:
        pairs.append(("method", plan.method))
    if not plan.converged:
        pairs.append(("NOT converged", plan.message))
    elif plan.message:
        pairs.append(("end", plan.message))
    return pairs


def plot_plan(plan: "Plan", ax: "Axes | None" = None) -> "Axes":
    """Bars of the shots of each circuit, on the given matplotlib axes or new ones; returns the axes."""
    axes = ax if ax is not None else new_axes()
    axes.bar(np.arange(len(plan)), plan.shots)
    axes.set_xlabel("circuit")
    axes.set_ylabel("shots")
    axes.set_title(f"{plan.total_shots:,} shots for {1e3 * plan.predicted_error:.3g} mHa")
    return axes


def new_axes() -> Any:
    """New matplotlib axes; matplotlib is imported here and only here."""
    import matplotlib.pyplot as plt

    return plt.subplots(figsize=(6.0, 3.5), layout="constrained")[1]


def _rows(plan: "Plan") -> list[list[str]]:
    errors = plan.deviations / np.sqrt(plan.shots)
    return [
        [
            str(k),
            "one-body" if fragment.is_one_body else "two-body",
            f"{shots:,}",
            f"{share:.3f}",
            f"{1e3 * deviation:.2f}",
            f"{1e3 * error:.4f}",
            f"{np.max(np.abs(fragment.coefficients)):.3f}",
        ]
        for k, (fragment, shots, share, deviation, error) in enumerate(
            zip(plan.fragments, plan.shots, plan.shares, plan.deviations, errors, strict=True)
        )
    ]
