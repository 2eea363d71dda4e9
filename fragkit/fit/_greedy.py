"""The strategy `Greedy`: one fragment after the other, each the best for what is left."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fragkit.core import Hamiltonian, as_count, as_positive
from fragkit.fit._controls import Controls
from fragkit.fit._fit import Fit
from fragkit.fit._jacobi import diagonalise
from fragkit.fit._pairs import pair_matrix
from fragkit.fit._point import point_at
from fragkit.fit._starts import orbital_starts, refitted
from fragkit.fit._wording import counted

Array = NDArray[np.float64]


@dataclass(frozen=True)
class Greedy:
    """One fragment at a time, in the orbitals in which the tensor that is left is most diagonal.

    The orbitals maximise Σ_ij (ii|jj)², which is what the best fragment in them removes from the squared residual;
    Jacobi plane rotations find them from several starts. After each new fragment the coefficients of all are fitted
    again. The residual never rises.

    Parameters
    ----------
    tol
        Residual to reach: fraction of the two-electron tensor's norm, or hartree unless `relative`.
    count
        Most two-electron fragments; None sets no limit.
    relative
        What `tol` means.
    starts
        Starting orbitals for each fragment: eigenvectors of the largest eigenvalues of what is left, and as many
        random ones.
    refit
        Whether the coefficients of earlier fragments are fitted again with each new one.

    Examples
    --------
    >>> import numpy as np
    >>> from fragkit.core import Hamiltonian
    >>> from fragkit.fit import fragment
    >>> factor = np.array([[1.0, 0.2], [0.2, 0.5]])
    >>> ham = Hamiltonian(0.0, factor, np.einsum("pq,rs->pqrs", factor, factor), electrons=(1, 1))
    >>> len(fragment(ham, Greedy(tol=1e-6)))
    2
    """

    tol: float = 1e-3
    count: int | None = None
    relative: bool = True
    starts: int = 8
    refit: bool = True

    def __post_init__(self) -> None:
        as_positive(self.tol, "tol")
        if self.count is not None:
            as_count(self.count, "count", minimum=1)
        as_count(self.starts, "starts", minimum=1)

    def fit(self, hamiltonian: Hamiltonian, controls: Controls) -> Fit:
        """Add fragments until the tolerance or the count is reached."""
        n = hamiltonian.orbitals
        target = pair_matrix(hamiltonian)
        tol = self.tol * (float(np.linalg.norm(target)) if self.relative else 1.0)
        start = controls.start
        empty = np.zeros((0, n, n))
        point = point_at(target, *((empty, empty) if start is None else (start.rotations, start.coefficients)))
        sweeps = 0
        standstill = False
        while point.norm > tol and (self.count is None or len(point.rotations) < self.count):
            residual = point.residual
            rotation, coefficients, used = diagonalise(residual, orbital_starts(residual, self.starts, n, controls.rng))
            sweeps += used
            longer = point_at(
                target,
                np.concatenate([point.rotations, rotation[None]]),
                np.concatenate([point.coefficients, coefficients[None]]),
            )
            if longer.squared >= point.squared:
                # Only rounding is left: nothing that more fragments could remove.
                standstill = True
                break
            point = refitted(target, longer) if self.refit else longer
            controls.update(point.rotations, point.coefficients, point.norm, sweeps)
        made = counted(len(point.rotations), "fragment")
        if point.norm <= tol:
            message = f"A residual of {point.norm:.2g} Ha was reached with {made} (tolerance {tol:.2g} Ha)."
        elif standstill:
            message = (
                f"After {made} a further one removes nothing from the residual of {point.norm:.2g} Ha "
                f"(tolerance {tol:.2g}); raise `tol`."
            )
        else:
            message = (
                f"A residual of {point.norm:.2g} Ha was left by {made} (tolerance {tol:.2g} Ha); raise `count`, or use "
                "Joint, which needs fewer fragments."
            )
        return Fit(
            point.rotations,
            point.coefficients,
            point.norm,
            converged=point.norm <= tol,
            message=message,
            method="Jacobi plane rotations, one fragment at a time",
            iterations=sweeps,
        )
