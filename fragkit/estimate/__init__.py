"""Counts in; energies and other observables with error bars out."""

from fragkit.estimate._counts import Counts as Counts
from fragkit.estimate._estimate import Estimate as Estimate
from fragkit.estimate._estimate import estimate as estimate
from fragkit.estimate._readout import ReadoutErrors as ReadoutErrors
from fragkit.estimate._simulate import simulate as simulate
