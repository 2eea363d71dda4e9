"""Hamiltonians from pyscf's mean-field and active-space objects, by their public calls only."""

from typing import Any

import numpy as np
from numpy.typing import NDArray

from fragkit.core import Hamiltonian, InputError, NotConvergedError, as_real_array

Array = NDArray[np.float64]

_ENERGY_TOLERANCE = 1e-5  # hartree; loose SCF settings leave about 1e-6, a missing term of the Hamiltonian far more


def from_pyscf(source: Any, *, allow_unconverged: bool = False, check_energy: bool = True) -> Hamiltonian:
    """The Hamiltonian in the orbitals of a pyscf RHF, ROHF, RKS, ROKS, CASCI or CASSCF object.

    A mean-field object gives all its orbitals, all electrons active. An active-space object gives its active
    orbitals: only these are transformed, and the core's energy and field are folded in. The one-body part comes
    from the object's `get_hcore`, so effective core potentials, X2C and point charges are included. Orbitals of
    a Kohn-Sham object are used with the full electronic Hamiltonian, not with its functional.

    A density-fitted mean field gives factors of the two-electron integrals rather than the full tensor, unless it
    has more auxiliary functions than orbital pairs.

    Parameters
    ----------
    source
        The object, with orbitals (that is, after its `kernel()`; a CASCI object may be used before).
    allow_unconverged
        Take the orbitals of an iteration that did not converge. The Hamiltonian is exact in them, too.
    check_energy
        Compare the energy of the Hartree-Fock determinant with the object's own and refuse a difference above
        1e-5 hartree, which shows a part that this Hamiltonian lacks (dispersion, for example). Switch off if the
        orbitals were changed after the calculation. Not done for Kohn-Sham and active-space objects.

    Raises
    ------
    InputError
        If the object is unrestricted, generalised, relativistic with spinors, periodic, solvated or complex, has no
        orbitals yet, or fails the energy check.
    NotConvergedError
        If its iteration did not converge and `allow_unconverged` is false.

    Examples
    --------
    >>> from pyscf import gto
    >>> mf = gto.M(atom="H 0 0 0; H 0 0 0.74", basis="sto-3g", verbose=0).RHF().run()
    >>> ham = from_pyscf(mf)
    >>> ham.orbitals, ham.electrons, round(ham.determinant_energy(), 6)
    (2, (1, 1), -1.116759)
    """
    if all(hasattr(source, name) for name in ("ncas", "nelecas", "get_h1eff", "get_h2eff")):
        return _from_active_space(source, allow_unconverged)
    if not all(hasattr(source, name) for name in ("get_hcore", "get_ovlp", "energy_nuc", "mo_coeff", "mol")):
        hint = "; run a calculation first, for example mol.RHF().run()" if hasattr(source, "atom_coords") else ""
        raise InputError(
            f"`source` must be a pyscf RHF, ROHF, CASCI or CASSCF object (got {type(source).__name__}){hint}"
        )
    return _from_mean_field(source, allow_unconverged, check_energy)


def _from_mean_field(mf: Any, allow_unconverged: bool, check_energy: bool) -> Hamiltonian:
    from pyscf import scf

    _refuse_foreign_physics(mf, mf)
    if isinstance(mf, scf.uhf.UHF):
        raise InputError(
            f"`source` must be spin-restricted (got unrestricted {type(mf).__name__}); use RHF or ROHF, or "
            "mf.to_rhf() to take over orbitals of a closed shell"
        )
    if not isinstance(mf, scf.hf.RHF):
        raise InputError(f"`source` must be a real, restricted RHF or ROHF object (got {type(mf).__name__})")
    orbitals = _orbitals(mf, mf)
    _require_convergence(mf, "SCF", allow_unconverged)
    one_body = orbitals.T @ _real(mf.get_hcore(), "get_hcore()") @ orbitals
    n = len(one_body)
    electrons = tuple(int(k) for k in getattr(mf, "nelec", mf.mol.nelec))
    constant = float(mf.energy_nuc())
    if getattr(mf, "with_df", None) is not None:
        factors = _density_fitting_factors(mf, orbitals)
        if len(factors) >= n * (n + 1) // 2:
            # More auxiliary functions than pairs: the tensor is smaller than its factors.
            two_body = np.einsum("Qpq,Qrs->pqrs", factors, factors, optimize=True)
            hamiltonian = Hamiltonian(constant, one_body, two_body, electrons=electrons)
        else:
            hamiltonian = Hamiltonian(constant, one_body, factors=factors, electrons=electrons)
    else:
        hamiltonian = Hamiltonian(constant, one_body, _two_body(mf, orbitals), electrons=electrons)
    if check_energy and mf.converged and not hasattr(mf, "xc"):
        _compare_energy(mf, hamiltonian)
    return hamiltonian


def _from_active_space(mc: Any, allow_unconverged: bool) -> Hamiltonian:
    from pyscf import ao2mo, mcscf

    # The mean field below an active-space object has no public name.
    mean_field = mc._scf
    _refuse_foreign_physics(mc, mean_field)
    if isinstance(mc, mcscf.ucasci.UCASBase):
        raise InputError(
            f"`source` must be spin-restricted (got unrestricted {type(mc).__name__}); use mcscf.CASCI or "
            "mcscf.CASSCF on an RHF or ROHF object"
        )
    orbitals = _orbitals(mc, mean_field)
    _require_convergence(mean_field, "SCF", allow_unconverged)
    if isinstance(mc, mcscf.mc1step.CASSCF):
        _require_convergence(mc, "CASSCF", allow_unconverged)
    n = int(mc.ncas)
    if orbitals.shape[1] < int(mc.ncore) + n:
        raise InputError(
            f"`source` must have at least {mc.ncore} core and {n} active orbitals (got {orbitals.shape[1]} in all)"
        )
    one_body, constant = mc.get_h1eff()
    two_body = ao2mo.restore(1, _real(mc.get_h2eff(), "two-electron integrals"), n)
    electrons = tuple(int(k) for k in mc.nelecas)
    return Hamiltonian(constant, one_body, two_body, electrons=electrons)


def _refuse_foreign_physics(source: Any, mean_field: Any) -> None:
    if hasattr(source.mol, "lattice_vectors"):
        raise InputError(
            f"`source` must be a molecule's (got periodic {type(source).__name__}); write the integrals of a "
            "real Gamma-point calculation to arrays and make a fragkit.Hamiltonian of them"
        )
    for item in (source, mean_field):
        if getattr(item, "with_solvent", None) is not None:
            raise InputError(
                f"`source` must be without a solvent model (got {type(item).__name__}), whose energy is not "
                "linear in the density and so is no part of a Hamiltonian; use the object in vacuum, or point charges"
            )


def _orbitals(source: Any, mean_field: Any) -> Array:
    coefficients = source.mo_coeff
    if coefficients is None:
        raise InputError("`source` must have orbitals (got mo_coeff None); call its kernel() first")
    if isinstance(coefficients, tuple) or np.ndim(coefficients) == 3:
        raise InputError("`source` must be spin-restricted (got separate alpha and beta orbitals); use RHF or ROHF")
    orbitals = as_real_array(coefficients, "mo_coeff", (None, None))
    overlap = orbitals.T @ np.asarray(mean_field.get_ovlp()) @ orbitals
    error = float(np.max(np.abs(overlap - np.eye(len(overlap)))))
    if error > 1e-6:
        raise InputError(
            f"`source` must have orthonormal orbitals (got an overlap that deviates by {error:.3g}); "
            "orthonormalise mo_coeff in the metric mf.get_ovlp()"
        )
    return orbitals


def _real(value: Any, name: str) -> Array:
    """Real array of any number of axes from pyscf."""
    return as_real_array(value, name, (None,) * np.ndim(value))


def _require_convergence(source: Any, kind: str, allow_unconverged: bool) -> None:
    if not (source.converged or allow_unconverged):
        raise NotConvergedError(
            f"`source` must have a converged {kind} (got converged=False on {type(source).__name__}); run it, run it "
            "on with more cycles or with newton(), or pass allow_unconverged=True to take its orbitals as they are"
        )


def _two_body(mf: Any, orbitals: Array) -> Array:
    from pyscf import ao2mo

    # Integrals held by the object come first: model systems put their own there, with an empty molecule.
    source = mf.mol if mf._eri is None else mf._eri
    return ao2mo.restore(1, ao2mo.kernel(source, orbitals), orbitals.shape[1])


def _density_fitting_factors(mf: Any, orbitals: Array) -> Array:
    """(R, n, n) with (pq|rs) = Σ_Q L^Q_pq L^Q_rs, one block of auxiliary functions at a time."""
    from pyscf import df, lib

    if not isinstance(mf.with_df, df.DF) or getattr(mf, "only_dfj", False):
        raise InputError(
            f"`source` must use plain density fitting or none (got {type(mf.with_df).__name__}"
            f"{', for Coulomb only' if getattr(mf, 'only_dfj', False) else ''}), for which the two-electron "
            "integrals are defined; use mf.density_fit() or no fitting"
        )
    blocks = [orbitals.T @ lib.unpack_tril(block) @ orbitals for block in mf.with_df.loop()]
    return np.concatenate(blocks)


def _compare_energy(mf: Any, hamiltonian: Hamiltonian) -> None:
    occupied = np.asarray(mf.mo_occ)
    alpha, beta = np.flatnonzero(occupied > 0), np.flatnonzero(occupied == 2)
    if (len(alpha), len(beta)) != hamiltonian.electrons or not np.all(np.isin(occupied, (0, 1, 2))):
        raise InputError(
            f"`source` must occupy its orbitals with whole electrons (got mo_occ {occupied.tolist()} for electrons "
            f"{hamiltonian.electrons}); pass check_energy=False to use its orbitals all the same"
        )
    difference = hamiltonian.determinant_energy(alpha, beta) - float(mf.e_tot)
    if abs(difference) > _ENERGY_TOLERANCE:
        raise InputError(
            f"`source` must have the energy of its Hartree-Fock determinant (got a difference of {difference:.3g} "
            "hartree); its energy has a part that the integrals lack (dispersion, for example), or its orbitals were "
            "changed after the calculation: if that is meant, pass check_energy=False"
        )
