"""A writer of FCIDUMP files (Knowles & Handy, Comput. Phys. Commun. 54, 75 (1989))."""

from pathlib import Path
from typing import Any

import numpy as np

from fragkit.core import Hamiltonian, as_real_array, pack_pairs, write_atomically


def to_fcidump(hamiltonian: Hamiltonian, path: Any, *, overwrite: bool = False, threshold: float = 0.0) -> Path:
    """Write the integrals as an FCIDUMP file and return its path: 8-fold unique, one-based, chemists', hartree.

    Values have 17 significant digits, so that reading the file gives the same Hamiltonian to the last bit. All
    orbitals are put into symmetry 1. The file is written to a temporary name and then moved.

    Parameters
    ----------
    hamiltonian
        The Hamiltonian; if it is held by factors, the full tensor is built.
    path
        The file to make.
    overwrite
        Whether a file of that name may be replaced.
    threshold
        Integrals of at most this size in hartree are left out; zero leaves out exact zeros only. One-body integrals
        and the constant are kept.

    Raises
    ------
    InputError
        If the file exists and `overwrite` is false, or its folder cannot be written to.

    Examples
    --------
    >>> import tempfile
    >>> ham = Hamiltonian(0.25, [[-1.25]], [[[[0.5]]]], electrons=(1, 1))
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     print(to_fcidump(ham, folder + "/atom.fcidump").read_text())
     &FCI NORB=1,NELEC=2,MS2=0,
      ORBSYM=1,
      ISYM=1,
     &END
      5.0000000000000000e-01    1    1    1    1
     -1.2500000000000000e+00    1    1    0    0
      2.5000000000000000e-01    0    0    0    0
    <BLANKLINE>
    """
    smallest = float(as_real_array(threshold, "threshold", ()))
    n = hamiltonian.orbitals
    alpha, beta = hamiltonian.electrons
    lines = [
        f" &FCI NORB={n},NELEC={alpha + beta},MS2={alpha - beta},",
        f"  ORBSYM={'1,' * n}",
        "  ISYM=1,",
        " &END",
    ]
    rows, columns = np.tril_indices(n)
    # The order of numpy.tril_indices lists (i, j) with i ≥ j by growing i, as readers of the format expect.
    matrix = pack_pairs(hamiltonian.two_body)
    order = np.zeros((n, n), dtype=np.intp)
    order[np.triu_indices(n)] = np.arange(len(matrix))
    place = order[columns, rows]
    matrix = matrix[np.ix_(place, place)]
    bra, ket = np.nonzero(np.tril(np.abs(matrix) > smallest))
    for value, i, j, k, l in zip(
        matrix[bra, ket].tolist(),
        (rows[bra] + 1).tolist(),
        (columns[bra] + 1).tolist(),
        (rows[ket] + 1).tolist(),
        (columns[ket] + 1).tolist(),
        strict=True,
    ):
        lines.append(_row(value, i, j, k, l))
    for i, j in zip(rows.tolist(), columns.tolist(), strict=True):
        value = float(hamiltonian.one_body[i, j])
        if value != 0.0:
            lines.append(_row(value, i + 1, j + 1, 0, 0))
    lines.append(_row(hamiltonian.constant, 0, 0, 0, 0))
    return write_atomically(path, "\n".join(lines) + "\n", overwrite=overwrite)


def _row(value: float, i: int, j: int, k: int, l: int) -> str:
    return f" {value: .16e} {i:4d} {j:4d} {k:4d} {l:4d}"
