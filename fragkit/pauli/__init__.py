"""The qubit-side alternative, for comparison: Pauli strings measured in commuting groups."""

from fragkit.pauli._costs import PauliCosts as PauliCosts
from fragkit.pauli._costs import pauli_costs as pauli_costs
from fragkit.pauli._diagonalise import GroupCircuit as GroupCircuit
from fragkit.pauli._diagonalise import diagonalising_circuit as diagonalising_circuit
from fragkit.pauli._groups import measurement_settings as measurement_settings
from fragkit.pauli._groups import overlapping as overlapping
from fragkit.pauli._groups import sorted_insertion as sorted_insertion
from fragkit.pauli._moments import group_covariances as group_covariances
from fragkit.pauli._moments import group_variance as group_variance
from fragkit.pauli._split import Split as Split
from fragkit.pauli._split import least_cost_split as least_cost_split
from fragkit.pauli._state import QubitState as QubitState
from fragkit.pauli._state import qubit_state as qubit_state
from fragkit.pauli._terms import PauliTerms as PauliTerms
from fragkit.pauli._terms import jordan_wigner as jordan_wigner
