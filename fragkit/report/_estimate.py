"""An estimate as text, as HTML and as a figure."""

from typing import TYPE_CHECKING

import numpy as np

from fragkit.report._plan import new_axes
from fragkit.report._text import html_table, summary_lines, text_table

if TYPE_CHECKING:
    from matplotlib.axes import Axes

    from fragkit.estimate import Estimate

_HEADERS = ("circuit", "shots", "discarded", "mean / Ha", "error / mHa", "deviation / mHa", "predicted / mHa")


def estimate_table(estimate: "Estimate", *, rows: bool = True) -> str:
    """The estimate as text: energy and error bar and, with `rows`, one line per circuit.

    "deviation" is the standard deviation of one shot that was observed, "predicted" that of the plan.
    """
    text = summary_lines(estimate_summary(estimate))
    return text + "\n\n" + text_table(_HEADERS, _rows(estimate)) if rows else text


def estimate_html(estimate: "Estimate") -> str:
    """The estimate as an HTML table for notebooks."""
    return html_table(_HEADERS, _rows(estimate), caption=repr(estimate))


def estimate_summary(estimate: "Estimate") -> list[tuple[str, str]]:
    """Names and values of the result, in reading order."""
    low, high = estimate.interval
    pairs = [
        ("energy", f"{estimate.energy:.6f} Ha"),
        ("standard error", f"{1e3 * estimate.standard_error:.4g} mHa"),
        (f"{estimate.confidence:.0%} interval", f"{low:.6f} to {high:.6f} Ha"),
        ("shots used", f"{estimate.total_shots:,}"),
        (
            "impossible shots",
            f"{estimate.discarded:.3%}, {'discarded' if estimate.post_selected else 'kept'} (wrong electron numbers)",
        ),
    ]
    if estimate.without_post_selection is not None:
        energy, error = estimate.without_post_selection
        pairs.append(("without discarding", f"{energy:.6f} Ha, standard error {1e3 * error:.4g} mHa"))
    if estimate.calibration_error is not None:
        pairs.append(("readout", f"corrected; the calibration adds {1e3 * estimate.calibration_error:.4g} mHa"))
    if estimate.sector_leak is not None:
        mean, error = estimate.sector_leak
        pairs.append(("(N - electrons)^2", f"{mean:.3g} +- {error:.2g} after correction, 0 expected"))
    if estimate.consistency is not None:
        pairs.append(("one state for all circuits", f"p = {estimate.consistency:.2g}"))
    pairs.append(("agrees with the plan", "yes" if estimate.agrees else f"NO. {estimate.message}"))
    return pairs


def plot_estimate(estimate: "Estimate", ax: "Axes | None" = None) -> "Axes":
    """Observed deviations of the circuits against the predicted ones, on the given axes or new ones."""
    axes = ax if ax is not None else new_axes()
    circuits = np.arange(len(estimate.means))
    axes.plot(circuits, 1e3 * estimate.predicted_deviations, "o", fillstyle="none", label="predicted")
    axes.plot(circuits, 1e3 * estimate.deviations, ".", label="observed")
    axes.set_xlabel("circuit")
    axes.set_ylabel("deviation of one shot / mHa")
    axes.legend()
    return axes


def _rows(estimate: "Estimate") -> list[list[str]]:
    return [
        [
            str(m),
            f"{shots:,}",
            f"{discarded:.2%}",
            f"{mean:.6f}",
            f"{1e3 * deviation / np.sqrt(shots):.4f}",
            f"{1e3 * deviation:.2f}",
            f"{1e3 * predicted:.2f}",
        ]
        for m, (shots, discarded, mean, deviation, predicted) in enumerate(
            zip(
                estimate.shots,
                estimate.discarded_by_circuit,
                estimate.means,
                estimate.deviations,
                estimate.predicted_deviations,
                strict=True,
            )
        )
    ]
