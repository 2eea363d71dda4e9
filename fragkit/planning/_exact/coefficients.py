"""Coefficients and shares of least variance at fixed rotations that reproduce the Hamiltonian exactly."""

from collections.abc import Callable, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fragkit.core import Hamiltonian, InputError, as_real_array, energy_bound, feature_count, residual_norm
from fragkit.planning._exact.cone import cone_weights
from fragkit.planning._exact.multiplicative import constants_for, multiplicative_weights
from fragkit.planning._exact.newton import Weights, newton_weights
from fragkit.planning._exact.whitened import WhitenedDesign
from fragkit.planning._memory import MEMORY, require_memory
from fragkit.planning._operators.design_map import DesignMap
from fragkit.planning._operators.factor import is_factorised
from fragkit.planning._operators.shifts import Shifts, no_shifts, sector_shifts
from fragkit.planning._operators.space import OperatorSpace

Array = NDArray[np.float64]

EXACT = 1e-9
"""Largest residual, relative to the Hamiltonian's rows, of coefficients that count as exact."""


@dataclass(frozen=True, eq=False)
class Weighting:
    """Least-variance coefficients of K circuits.

    Parameters
    ----------
    coefficients
        (K, n² + n) packed features, hartree; zero for circuits that are not needed.
    shares
        (K,) fractions of the shots, σ/Σσ.
    constant
        Energy that needs no measurement, hartree: the Hamiltonian's constant and what the shifts are worth.
    deviations
        (K,) σ of one shot under the covariances given, hartree.
    residual_norm, energy_bound
        What the circuits cannot reproduce, as in `fragkit.core.Fragmentation`, and the bias it can cause, hartree.
    relative_residual
        Norm of that residual over the norm of the Hamiltonian, both as operator rows.
    lower_bound
        No coefficients on these rotations have a lower cost (Ha²) under these covariances.
    dual
        (rows,) ν of `OperatorSpace` with |C_m^{-1/2} A_mᵀ ν| ≤ 1 up to the tolerance and hᵀν = √cost.
    sector_exact
        Whether operators that vanish at the electron numbers were used.
    converged, message
        Whether the coefficients are exact and the cost is within the tolerance of the lower bound.
    """

    coefficients: Array
    shares: Array
    constant: float
    deviations: Array
    residual_norm: float
    energy_bound: float
    relative_residual: float
    lower_bound: float
    dual: Array
    sector_exact: bool
    converged: bool
    message: str

    @property
    def cost(self) -> float:
        """(Σ σ)² in hartree²."""
        return float(np.sum(self.deviations) ** 2)


def exact_coefficients(
    hamiltonian: Hamiltonian,
    rotations: Array,
    covariances: Sequence[Array] | Array,
    *,
    shifts: bool = True,
    start: Array | None = None,
    tolerance: float = 1e-6,
    iterations: int = 60,
    method: str = "newton",
    report: Callable[[float], None] | None = None,
    memory: float = MEMORY,
) -> Weighting:
    """The globally least-variance exact coefficients and shot shares for given rotations.

    Minimises (Σ_m √(c_mᵀ C_m c_m))² over coefficients with Σ_m A_m c_m equal to the Hamiltonian: a second-order cone
    programme, solved in its weights (`newton_weights`).

    Parameters
    ----------
    hamiltonian
        What the fragments must sum to.
    rotations
        (K, n, n) orthogonal.
    covariances
        (K, n² + n, n² + n) of the features in each rotated basis, from `ReferenceState.moments`, from measurements
        or from anywhere else. Combinations of features without variance cost nothing.
    shifts
        Use operators that vanish at the Hamiltonian's electron numbers; the result is then exact only there.
    start
        (K,) first guess of the shares.
    tolerance
        Largest relative distance of the cost from its lower bound.
    iterations
        Most Newton steps; each factorises a matrix of about n⁴/5 rows.
    method
        "newton", or "cone" for the cone programme as it stands, by a general solver: slow, for checks.
    report
        Called with the cost in each Newton step.
    memory
        Bytes that may be used; more are refused before the work begins.

    Raises
    ------
    InputError
        If a shape is wrong or an entry is not finite, if more `memory` is needed, or if, beyond 12 orbitals, a
        covariance is singular apart from features that are constant in the sector.

    Examples
    --------
    >>> import numpy as np
    >>> import fragkit
    >>> from fragkit.states import reference_state
    >>> ham = fragkit.hubbard(2, repulsion=4.0, electrons=(1, 1), periodic=False)
    >>> turn = np.array([[1.0, -1.0], [1.0, 1.0]]) / np.sqrt(2)
    >>> state = reference_state(ham, "hf")
    >>> rotations = np.stack([np.eye(2), turn])
    >>> found = exact_coefficients(ham, rotations, [state.moments(u)[1] for u in rotations])
    >>> found.converged, bool(found.relative_residual < 1e-12)
    (True, True)
    """
    n = hamiltonian.orbitals
    rotations = as_real_array(rotations, "rotations", (None, n, n))
    features = feature_count(n)
    require_memory(n, len(rotations), memory)
    if len(covariances) != len(rotations):
        raise InputError(f"`covariances` must be {len(rotations)}, one for each rotation (got {len(covariances)})")
    checked = [as_real_array(c, f"covariances[{m}]", (features, features)) for m, c in enumerate(covariances)]
    if start is not None:
        start = as_real_array(start, "start", (len(rotations),))
    if method not in ("newton", "cone"):
        raise InputError(f"`method` must be 'newton' or 'cone' (got {method!r})")
    space = OperatorSpace(n)
    if method == "newton" and not is_factorised(space.size):
        # The multiplicative iteration is slow at the end; the cost is settled long before its bound is.
        whole = DesignMap(hamiltonian)
        weights = multiplicative_weights(
            whole,
            rotations,
            checked,
            start=start,
            tolerance=max(tolerance, 1e-2),
            rounds=iterations,
            report=report,
        )
        free, complete = _with_constants(whole, hamiltonian, rotations, weights.coefficients, shifts)
        return _weighting(
            hamiltonian,
            rotations,
            complete,
            checked,
            free,
            dual=weights.dual,
            lower_bound=weights.lower_bound,
            tolerance=max(tolerance, 1e-2),
            iterations=weights.rounds,
        )
    free = sector_shifts(space, hamiltonian.electrons) if shifts else no_shifts(space)
    design = WhitenedDesign(space, rotations, checked, space.hamiltonian_rows(hamiltonian), free)
    if method == "cone":
        found = cone_weights(design.unit, tolerance=0.1 * tolerance)
    else:
        found = newton_weights(design.unit, start=start, tolerance=tolerance, iterations=iterations, report=report)
    return _weighting(
        hamiltonian,
        rotations,
        _refined(design, found),
        checked,
        free,
        dual=design.unit.to_rows(found.dual),
        lower_bound=found.lower_bound,
        tolerance=tolerance,
        iterations=found.iterations,
    )


def given_coefficients(
    hamiltonian: Hamiltonian, rotations: Array, coefficients: Array, covariances: Sequence[Array], *, shifts: bool
) -> Weighting:
    """Coefficients (K, F) that equal the Hamiltonian up to operators constant in the sector, as they are.

    Nothing is known of how near they are to the least cost on these rotations: the lower bound is zero.
    """
    free, complete = _with_constants(DesignMap(hamiltonian), hamiltonian, rotations, coefficients, shifts)
    zero = np.zeros(OperatorSpace(hamiltonian.orbitals).size)
    return _weighting(
        hamiltonian, rotations, complete, covariances, free, dual=zero, lower_bound=0.0, tolerance=1.0, iterations=0
    )


def _with_constants(
    design: DesignMap, hamiltonian: Hamiltonian, rotations: Array, coefficients: Array, shifts: bool
) -> tuple[Shifts, Array]:
    """The shifts allowed, and coefficients that are exact up to these and no longer up to other constants."""
    space = design.space
    free = design.sector_shifts if shifts else no_shifts(space)
    left = space.hamiltonian_rows(hamiltonian) - space.apply(space.pair_columns(rotations), rotations, coefficients)
    return free, coefficients + constants_for(design, rotations, left, free)


def _weighting(
    hamiltonian: Hamiltonian,
    rotations: Array,
    coefficients: Array,
    covariances: Sequence[Array],
    free: Shifts,
    *,
    dual: Array,
    lower_bound: float,
    tolerance: float,
    iterations: int,
) -> Weighting:
    """The result for coefficients that equal the Hamiltonian up to the shifts `free`."""
    space = OperatorSpace(hamiltonian.orbitals)
    target = space.hamiltonian_rows(hamiltonian)
    covariance_products = np.stack([c @ x for c, x in zip(covariances, coefficients, strict=True)])
    deviations = np.sqrt(np.maximum(np.einsum("kf,kf->k", coefficients, covariance_products), 0.0))
    left, constant = free.split(target - space.apply(space.pair_columns(rotations), rotations, coefficients))
    tensors = space.tensors(left)
    size = float(np.linalg.norm(target))
    relative = float(np.linalg.norm(left)) / size if size else 0.0
    total = float(np.sum(deviations))
    gap = total**2 - lower_bound
    exact = relative <= EXACT
    settled = gap <= 2.0 * tolerance * total**2 or total**2 <= 1e-18
    return Weighting(
        coefficients=coefficients,
        shares=deviations / total if total else np.full(len(rotations), 1.0 / len(rotations)),
        constant=hamiltonian.constant + constant,
        deviations=deviations,
        residual_norm=residual_norm(tensors),
        energy_bound=energy_bound(tensors, hamiltonian.electrons),
        relative_residual=relative,
        lower_bound=lower_bound,
        dual=dual,
        sector_exact=len(free.values) > 0,
        converged=bool(exact and settled),
        message=_message(relative, exact, settled, gap, total**2, iterations),
    )


def _refined(design: WhitenedDesign, found: Weights) -> Array:
    """Coefficients (K, F) of the weights, corrected until what is left is rounding noise."""
    coefficients = design.coefficients(found.weights, found.dual)
    information = found.information
    wanted = float(np.linalg.norm(design.unit.wanted))
    size = np.inf
    for _ in range(6):
        left = design.from_rows(design.residual(coefficients))
        now = float(np.linalg.norm(left))
        if now <= 1e-15 * wanted or now > 0.5 * size:
            break
        size = now
        if information is None:
            break
        coefficients = coefficients + design.coefficients(information.weights, information.inverse(left))
    return coefficients + design.free_part(design.residual(coefficients))


def _message(relative: float, exact: bool, settled: bool, gap: float, cost: float, iterations: int) -> str:
    parts = []
    if not exact:
        parts.append(
            f"These rotations cannot reproduce the Hamiltonian: a relative residual of {relative:.2g} is left; "
            "use more circuits, or other rotations."
        )
    if not settled:
        parts.append(
            f"The cost is within {gap / cost:.2g} (relative) of its least value for these rotations after {iterations} "
            "iterations."
        )
    if not parts:
        parts.append(f"Least-variance coefficients found in {iterations} iterations.")
    return " ".join(parts)
