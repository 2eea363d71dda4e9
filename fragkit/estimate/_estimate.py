"""The data of an estimate."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False, repr=False)
class Estimate:
    """An energy with its error bar, and what it is made of. Energies and deviations in hartree.

    Parameters
    ----------
    energy
        The estimate: the constant plus the sum of `means`.
    standard_error
        Its standard error, from the data; see `fragkit.estimate.estimate` for what happens with few shots.
    interval
        (low, high), which holds the true energy with probability `confidence`.
    confidence
        Probability of the interval.
    degrees_of_freedom
        Of Student's t distribution that the interval is made with.
    constant
        Energy that was not measured.
    means
        (circuits,) mean value of each fragment.
    deviations
        (circuits,) observed standard deviation of one shot.
    predicted_deviations
        (circuits,) deviation that the plan predicted.
    shots
        (circuits,) shots that were used.
    post_selected
        Whether only shots with the plan's electron numbers were used.
    discarded
        Fraction of all shots with other electron numbers; they were left out if `post_selected`.
    discarded_by_circuit
        (circuits,) the same for each circuit.
    without_post_selection
        (energy, standard error) of the same counts with all shots, or None if nothing was discarded.
    calibration_error
        Part of `standard_error` that comes from the uncertain readout calibration; None without readout correction.
    sector_leak
        (mean, standard error) of (N̂ − N)² after readout correction, zero for a state with the right number of
        electrons; None without readout correction.
    consistency
        p-value of "all circuits saw one state", from their occupations; None if there are too few circuits to test,
        and with readout correction.
    agrees
        False when observed and predicted deviations differ beyond chance, or the circuits do not fit one state.
    message
        What `agrees` is about, in a sentence for each finding.
    """

    energy: float
    standard_error: float
    interval: tuple[float, float]
    confidence: float
    degrees_of_freedom: float
    constant: float
    means: Array
    deviations: Array
    predicted_deviations: Array
    shots: NDArray[np.int64]
    post_selected: bool
    discarded: float
    discarded_by_circuit: Array
    without_post_selection: tuple[float, float] | None
    calibration_error: float | None
    sector_leak: tuple[float, float] | None
    consistency: float | None
    agrees: bool
    message: str

    @property
    def total_shots(self) -> int:
        """Shots that were used."""
        return int(np.sum(self.shots))

    def table(self) -> str:
        """The estimate as a text table, one row per circuit."""
        from fragkit.report import estimate_table

        return estimate_table(self)

    def _repr_html_(self) -> str:
        from fragkit.report import estimate_html

        return estimate_html(self)

    def __repr__(self) -> str:
        doubt = "" if self.agrees else ", in doubt: see message"
        return (
            f"Estimate(energy={self.energy:.6f} Ha, standard_error={self.standard_error:.2g} Ha, "
            f"{self.confidence:.0%} interval {self.interval[0]:.6f} to {self.interval[1]:.6f}, "
            f"{self.total_shots} shots, {self.discarded:.2%} discarded{doubt})"
        )
