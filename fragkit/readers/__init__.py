"""Hamiltonians from quantum-chemistry objects, files and lattice models."""

from fragkit.readers._fcidump_read import from_fcidump as from_fcidump
from fragkit.readers._fcidump_write import to_fcidump as to_fcidump
from fragkit.readers._lattice import hubbard as hubbard
from fragkit.readers._openfermion import from_openfermion as from_openfermion
from fragkit.readers._pyscf import from_pyscf as from_pyscf
