"""Counts in; energies and other observables with error bars out."""

from fragkit.estimate._adaptive import AdaptiveRun as AdaptiveRun
from fragkit.estimate._adaptive import run_adaptively as run_adaptively
from fragkit.estimate._counts import Counts as Counts
from fragkit.estimate._estimate import Estimate as Estimate
from fragkit.estimate._readout import ReadoutErrors as ReadoutErrors
from fragkit.estimate._simulate import simulate as simulate
from fragkit.estimate._verb import estimate as estimate
