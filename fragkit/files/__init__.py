"""Saving and loading: plans and fragmentations as JSON, Hamiltonians as npz."""

from fragkit.files._adaptive import load_adaptive_run as load_adaptive_run
from fragkit.files._adaptive import save_adaptive_run as save_adaptive_run
from fragkit.files._counts import load_counts as load_counts
from fragkit.files._counts import save_counts as save_counts
from fragkit.files._hamiltonian import load_hamiltonian as load_hamiltonian
from fragkit.files._hamiltonian import save_hamiltonian as save_hamiltonian
from fragkit.files._plan import load_fragmentation as load_fragmentation
from fragkit.files._plan import load_plan as load_plan
from fragkit.files._plan import save_fragmentation as save_fragmentation
from fragkit.files._plan import save_plan as save_plan
