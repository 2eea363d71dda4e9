"""Data of the package: Hamiltonians, fragments, and the tensor operations they share."""

from fragkit.core._errors import FragkitError as FragkitError
from fragkit.core._errors import InputError as InputError
from fragkit.core._errors import MismatchError as MismatchError
from fragkit.core._errors import MissingDependencyError as MissingDependencyError
from fragkit.core._errors import NotConvergedError as NotConvergedError
from fragkit.core._features import evaluate_features as evaluate_features
from fragkit.core._features import evaluate_polynomial as evaluate_polynomial
from fragkit.core._features import feature_count as feature_count
from fragkit.core._features import pack_features as pack_features
from fragkit.core._features import pair_indices as pair_indices
from fragkit.core._features import unpack_features as unpack_features
from fragkit.core._fragment import Fragment as Fragment
from fragkit.core._validate import as_count as as_count
from fragkit.core._validate import as_electrons as as_electrons
from fragkit.core._validate import as_positive as as_positive
from fragkit.core._validate import as_real_array as as_real_array
from fragkit.core._validate import as_rotation as as_rotation
from fragkit.core._validate import frozen as frozen
