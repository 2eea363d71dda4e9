"""The state a plan is made for: the reference with a little noise, so that coefficients stay bounded."""

from typing import Any

from fragkit.core import InputError
from fragkit.states import DeterminantState, GaussianState, MaximallyMixedState, MixedState, ReferenceState

PLANNING_NOISE = 1e-3
"""Default weight of the maximally mixed state in the state that coefficients and rotations are chosen for."""

DETERMINANT_NOISE = 2e-2
"""The same for a single determinant or a Gaussian state, which know nothing of correlation."""

SHARE_FRACTION = 0.1
"""Part of the planning noise that also goes into the shot shares: 3 % more shots on the reference, 5 % fewer off it."""


def noise_of(state: ReferenceState) -> float:
    """Weight of the maximally mixed state in `state`."""
    if isinstance(state, MaximallyMixedState):
        return 1.0
    if isinstance(state, MixedState):
        return sum(w for w, part in zip(state.weights, state.states, strict=True) if noise_of(part) == 1.0)
    return 0.0


def is_uncorrelated(state: ReferenceState) -> bool:
    """Whether `state` is a single determinant or a Gaussian state, with or without noise."""
    if isinstance(state, MixedState):
        parts = [part for part in state.states if not isinstance(part, MaximallyMixedState)]
        return len(parts) == 1 and is_uncorrelated(parts[0])
    return isinstance(state, DeterminantState | GaussianState)


def robust_state(state: ReferenceState, planning_noise: Any = None) -> ReferenceState:
    """`state` with at least `planning_noise` of the maximally mixed state of its sector.

    The variance of a fragment in the maximally mixed state is a norm of its coefficients, so the noise is a penalty
    that is scaled right for every coefficient: without it a plan can be arbitrarily bad on a state that differs a
    little from the reference. None is the default, 1e-3, or 2e-2 for a determinant or Gaussian state.

    Raises
    ------
    InputError
        If `planning_noise` is not in 0 … 1, or is 0 for a single determinant, in whose orbitals nothing fluctuates:
        such a plan would leave circuits without shots that every correlated state needs.
    """
    try:
        wanted = _default_noise(state) if planning_noise is None else float(planning_noise)
    except (TypeError, ValueError):
        wanted = -1.0
    if not 0.0 <= wanted <= 1.0:
        raise InputError(f"`planning_noise` must be a number from 0 to 1 (got {planning_noise!r})")
    present = noise_of(state)
    if wanted == 0.0 and isinstance(state, DeterminantState):
        raise InputError(
            "`planning_noise` must be above 0 for a single determinant (got 0); leave it at its default, or use a "
            'correlated reference such as reference_state(ham, "cisd")'
        )
    if wanted <= present:
        return state
    # (1 − extra) (1 − present) = 1 − wanted
    return state.with_noise(1.0 - (1.0 - wanted) / (1.0 - present))


def share_state(state: ReferenceState, planning_noise: Any = None) -> ReferenceState:
    """The state whose deviations decide how shots are shared: `state` with a tenth of the planning noise.

    A determinant or Gaussian state gets all of it, since its own deviations are small where those of the true state
    are not.
    """
    wanted = _default_noise(state) if planning_noise is None else float(planning_noise)
    return robust_state(state, wanted if is_uncorrelated(state) else SHARE_FRACTION * wanted)


def _default_noise(state: ReferenceState) -> float:
    return DETERMINANT_NOISE if is_uncorrelated(state) else PLANNING_NOISE
