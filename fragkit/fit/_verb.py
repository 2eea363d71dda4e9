"""The verb `fragment`: check, run a strategy, add the one-body part, report how it ended."""

import os
import time
from pathlib import Path
from typing import Literal, get_args

import numpy as np
from threadpoolctl import threadpool_limits

from fragkit.core import Fragment, Fragmentation, Hamiltonian, InputError, as_hamiltonian
from fragkit.fit._checkpoint import Checkpoint, CheckpointFile
from fragkit.fit._controls import Controls
from fragkit.fit._fit import Fit, Strategy
from fragkit.fit._low_rank import LowRank
from fragkit.fit._one_body import absorb_one_body

OneBody = Literal["separate", "absorbed"]
OnInterrupt = Literal["raise", "return"]


def fragment(
    hamiltonian: Hamiltonian,
    strategy: Strategy | None = None,
    *,
    one_body: OneBody = "separate",
    rng: np.random.Generator | int | None = 0,
    progress: bool = False,
    on_interrupt: OnInterrupt = "raise",
    checkpoint: str | os.PathLike[str] | None = None,
    resume: bool = False,
) -> Fragmentation:
    """Split a Hamiltonian into fragments that one orbital rotation makes diagonal in occupation numbers.

    The two-electron tensor becomes fragments ½ Σ_ij λ_ij n_i n_j, as many as the strategy needs. What is left is
    one-body, h_pq − ½ Σ_r (pr|rq), since the products n_i n_j of the fragments are not normal ordered.

    Parameters
    ----------
    hamiltonian
        What to split.
    strategy
        The algorithm: `LowRank`, `Greedy`, `Joint`, or any object with their method `fit`; None is `LowRank()`.
    one_body
        "separate" adds one fragment with the one-body part in its eigenbasis. "absorbed" puts it into linear
        terms of the other fragments, exactly, when their diagonals span it, which they do for about (n + 1)/2 of
        them or more; what cannot be absorbed stays a fragment, and the message says so.
    rng
        Seed or generator for strategies that start at random. The default is fixed: the same call gives the same
        fragments on the same machine. None draws a new seed.
    progress
        Show a bar with the number of fragments and the residual.
    on_interrupt
        What Ctrl-C does: "raise" lets KeyboardInterrupt through, "return" gives the best fragments so far, not
        converged.
    checkpoint
        File (.npz) that keeps the best fragments so far, written about twice a minute and at the end.
    resume
        Go on from `checkpoint`, which must belong to this Hamiltonian.

    Returns
    -------
    Fragmentation
        With `residual_norm` (Frobenius norm of the tensor not reproduced, hartree), `energy_bound`, `converged`,
        `message`, `method`, `iterations` and `seconds`.

    Raises
    ------
    InputError
        If an argument is not what it must be, or a checkpoint file would be overwritten.
    MismatchError
        If the checkpoint belongs to another Hamiltonian.

    Examples
    --------
    >>> import fragkit
    >>> ham = fragkit.hubbard(2, repulsion=4.0, electrons=(1, 1), periodic=False)
    >>> fragments = fragment(ham)
    >>> fragments.converged, bool(fragments.residual_norm < 1e-12)
    (True, True)
    """
    as_hamiltonian(hamiltonian)
    chosen: Strategy = LowRank() if strategy is None else strategy
    if isinstance(chosen, type) or not callable(getattr(chosen, "fit", None)):
        raise InputError(
            f"`strategy` must be a strategy object such as LowRank() or Joint(count=12) (got {strategy!r})"
        )
    for name, value, allowed in (("one_body", one_body, OneBody), ("on_interrupt", on_interrupt, OnInterrupt)):
        if value not in get_args(allowed):
            raise InputError(f"`{name}` must be one of {', '.join(map(repr, get_args(allowed)))} (got {value!r})")
    file = None if checkpoint is None else CheckpointFile(checkpoint, hamiltonian.digest)
    if resume and file is None:
        raise InputError("`checkpoint` must be given when `resume` is True (got None)")
    if checkpoint is not None and not resume and Path(checkpoint).exists():
        raise InputError(
            f"`checkpoint` must not exist yet (got {str(checkpoint)!r}); go on from it with resume=True, or remove it"
        )
    start = file.read(hamiltonian.orbitals) if file is not None and resume else None

    began = time.perf_counter()
    controls = Controls(rng=np.random.default_rng(rng), progress=progress, file=file, start=start)
    try:
        # One thread: the same numbers whatever the machine is busy with, and small products are faster so.
        with threadpool_limits(1, user_api="blas"):
            fit = chosen.fit(hamiltonian, controls)
        controls.update(fit.rotations, fit.coefficients, fit.residual, fit.iterations)
    except KeyboardInterrupt:
        if on_interrupt == "raise" or controls.best is None:
            raise
        fit = _interrupted(controls.best, controls.seconds, resumable=file is not None)
    finally:
        controls.close()

    pieces = [Fragment.plain(u, c) for u, c in zip(fit.rotations, fit.coefficients, strict=True)]
    message = fit.message
    if one_body == "absorbed":
        pieces, note = absorb_one_body(pieces, hamiltonian.one_body_of_products)
        message = f"{message} {note}"
    else:
        energies, orbitals = np.linalg.eigh(hamiltonian.one_body_of_products)
        pieces.append(Fragment.one_body(orbitals, energies))
    return Fragmentation.of(
        hamiltonian,
        pieces,
        converged=fit.converged,
        message=message,
        method=fit.method,
        iterations=fit.iterations,
        seconds=time.perf_counter() - began,
    )


def _interrupted(best: Checkpoint, seconds: float, *, resumable: bool) -> Fit:
    """The best fragments so far, labelled as such."""
    advice = "go on with resume=True" if resumable else "give `checkpoint` next time to be able to go on"
    return Fit(
        best.rotations,
        best.coefficients,
        best.residual,
        converged=False,
        message=f"Interrupted after {seconds:.0f} s at a residual of {best.residual:.3g} Ha; {advice}.",
        method="interrupted",
        iterations=best.iterations,
    )
