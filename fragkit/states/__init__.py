"""Reference states: occupation statistics in rotated bases, sampling, energies and variances."""

from fragkit.states._base import ReferenceState as ReferenceState
from fragkit.states._ci import CIState as CIState
from fragkit.states._determinant import DeterminantState as DeterminantState
from fragkit.states._gaussian import GaussianState as GaussianState
from fragkit.states._maximally_mixed import MaximallyMixedState as MaximallyMixedState
from fragkit.states._mixed import MixedState as MixedState
from fragkit.states._mixed import mixture as mixture
from fragkit.states._reference import reference_state as reference_state
from fragkit.states._strings import compound_matrix as compound_matrix
from fragkit.states._strings import string_ranks as string_ranks
