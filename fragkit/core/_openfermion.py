"""Conversion to and from OpenFermion, which is imported only when a function here is called."""

from typing import Any

import numpy as np
from numpy.typing import NDArray

from fragkit.core._errors import InputError
from fragkit.core._tensors import symmetry_violation
from fragkit.core._validate import as_real_array

Array = NDArray[np.float64]


def interaction_operator(constant: float, one_body: Array, two_body: Array) -> Any:
    """`openfermion.InteractionOperator` from spatial integrals in chemists' notation.

    OpenFermion's tensor multiplies a†_p a†_q a_r a_s without a factor ½, so it is ½ (ps|qr) spread over
    interleaved spin-orbitals.
    """
    from openfermion.ops.representations.interaction_operator import InteractionOperator

    n = len(one_body)
    spin_one = np.zeros((2 * n, 2 * n))
    spin_two = np.zeros((2 * n,) * 4)
    half = 0.5 * two_body.transpose(0, 2, 3, 1)
    for s in (0, 1):
        spin_one[s::2, s::2] = one_body
        for t in (0, 1):
            spin_two[s::2, t::2, t::2, s::2] = half
    return InteractionOperator(float(constant), spin_one, spin_two)


def spatial_integrals(operator: Any, *, tolerance: float = 1e-8) -> tuple[float, Array, Array]:
    """Constant, one-body and two-body integrals (chemists') of a spin-free `InteractionOperator`.

    Parts of the tensor that change the operator's form but not the operator are accepted: the tensor is
    brought to its antisymmetrised form first, and the opposite-spin block decides. Raises `InputError` if the
    operator is not spin-free, not real, or not of an electronic Hamiltonian's symmetry.
    """
    one = as_real_array(operator.one_body_tensor, "one_body_tensor", (None, None))
    modes = one.shape[0]
    if modes % 2 or modes == 0:
        raise InputError(f"the operator must have an even number of spin-orbitals (got {modes})")
    two = as_real_array(operator.two_body_tensor, "two_body_tensor", (modes,) * 4)
    if float(np.max(np.abs(one[0::2, 1::2]))) > tolerance or float(np.max(np.abs(one[1::2, 0::2]))) > tolerance:
        raise InputError("the operator must conserve spin (got one-body terms between alpha and beta orbitals)")
    spin_error = float(np.max(np.abs(one[0::2, 0::2] - one[1::2, 1::2])))
    if spin_error > tolerance:
        raise InputError(
            f"the operator must be spin-free (got alpha and beta one-body integrals that differ by {spin_error:.3g}); "
            "unrestricted Hamiltonians are not supported"
        )
    acting = _antisymmetrised(two)
    # The operator a†_pα a†_qβ a_rβ a_sα occurs as four images in the sum, and its coefficient is (ps|qr).
    two_body = np.ascontiguousarray(4.0 * acting[0::2, 1::2, 1::2, 0::2].transpose(0, 3, 1, 2))
    permutation, size = symmetry_violation(two_body)
    if size > tolerance:
        raise InputError(
            f"the operator's two-body part must have 8-fold symmetry to {tolerance:g} "
            f"(got a violation of {permutation} by {size:.3g})"
        )
    rebuilt = _antisymmetrised(interaction_operator(0.0, one[0::2, 0::2], two_body).two_body_tensor)
    error = float(np.max(np.abs(rebuilt - acting), initial=0.0))
    if error > tolerance:
        raise InputError(
            f"the operator's two-body part must be spin-free (got same-spin terms that differ by {error:.3g} from "
            "those that its opposite-spin terms imply); OpenFermion stores ½ (ps|qr), check order and factor"
        )
    constant = complex(operator.constant)
    if abs(constant.imag) > tolerance:
        raise InputError(f"the operator's constant must be real (got {constant})")
    return constant.real, one[0::2, 0::2], two_body


def _antisymmetrised(tensor: Array) -> Array:
    """The part of a tensor that multiplies a†_p a†_q a_r a_s and acts: odd under p ↔ q and under r ↔ s."""
    tensor = 0.5 * (tensor - tensor.transpose(1, 0, 2, 3))
    return 0.5 * (tensor - tensor.transpose(0, 1, 3, 2))
