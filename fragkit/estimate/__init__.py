"""Counts in; energies and other observables with error bars out."""

from fragkit.estimate._adaptive import AdaptiveRun as AdaptiveRun
from fragkit.estimate._adaptive import run_adaptively as run_adaptively
from fragkit.estimate._counts import Counts as Counts
from fragkit.estimate._estimate import Estimate as Estimate
from fragkit.estimate._joint import JointPlan as JointPlan
from fragkit.estimate._joint import joint_plan as joint_plan
from fragkit.estimate._measure import Measurement as Measurement
from fragkit.estimate._measure import measure as measure
from fragkit.estimate._measure import measure_density as measure_density
from fragkit.estimate._moments import measured_state as measured_state
from fragkit.estimate._observable import Observable as Observable
from fragkit.estimate._readout import ReadoutErrors as ReadoutErrors
from fragkit.estimate._simulate import simulate as simulate
from fragkit.estimate._verb import estimate as estimate
