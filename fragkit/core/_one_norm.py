"""The 1-norm of fragments: the sum of coefficients when each occupation number is written with a reflection."""

from collections.abc import Sequence

import numpy as np

from fragkit.core._fragment import Fragment


def one_norm(fragments: Sequence[Fragment]) -> float:
    """Sum of |coefficients| over reflections, hartree: what block encoding of the sum of fragments pays.

    In each fragment's orbitals n_iσ = (1 − Z_iσ)/2 with reflections Z_iσ (Pauli Z under Jordan-Wigner). Products
    Z Z count with their own |coefficient|: ¼ Σ_ij |opposite_spin[i, j]| + ½ Σ_{i<j} |same_spin[i, j]|. Terms with a
    single Z are one-body operators, so those of all fragments are collected into one matrix T and count as the sum
    of its |eigenvalues|, T = Σ_m U_m diag(½ linear + ¼ Σ_j opposite_spin[:, j] + ¼ Σ_j same_spin[:, j]) U_mᵀ, once
    for each spin, as Lee et al., PRX Quantum 2, 030305 (2021), collect them. Constants are left out.

    Parameters
    ----------
    fragments
        Fragments of the same orbitals, at least one.

    Examples
    --------
    >>> one_norm([Fragment.one_body(np.eye(2), np.array([1.0, -2.0]))])  # (1 + 2)/2 for each spin
    3.0
    """
    products = 0.0
    n = fragments[0].orbitals
    single = np.zeros((n, n))
    for fragment in fragments:
        products += 0.25 * float(np.sum(np.abs(fragment.opposite_spin)))
        products += 0.25 * float(np.sum(np.abs(fragment.same_spin)))
        weights = 0.5 * fragment.linear + 0.25 * (fragment.opposite_spin.sum(axis=1) + fragment.same_spin.sum(axis=1))
        single += (fragment.rotation * weights) @ fragment.rotation.T
    return products + 2.0 * float(np.sum(np.abs(np.linalg.eigvalsh(single))))
