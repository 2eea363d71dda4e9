"""Hamiltonians from pyscf objects, checked against the energies that pyscf itself finds."""

import tracemalloc
from typing import Any

import numpy as np
import pytest
from molecules import FULL_CI, energy_of, geometry, mean_field

import fragkit
from fragkit.core import InputError, NotConvergedError

pyscf = pytest.importorskip("pyscf")
from pyscf import ao2mo, cc, dft, fci, gto, mcscf, qmmm, scf  # noqa: E402
from pyscf.pbc import gto as cell_gto  # noqa: E402
from pyscf.pbc import scf as cell_scf  # noqa: E402


def water(basis: str = "sto-3g") -> Any:
    return gto.M(atom=geometry("H2O"), basis=basis, verbose=0)


def methylene() -> Any:
    """Triplet CH2, so that alpha and beta electron numbers differ."""
    return gto.M(atom="C 0 0 0; H 0 0.98 0.4; H 0 -0.98 0.4", basis="sto-3g", spin=2, verbose=0)


@pytest.mark.parametrize("name", sorted(FULL_CI))
def test_restricted_mean_field_gives_its_own_energy_and_full_ci(name: str) -> None:
    ham = fragkit.from_pyscf(mean_field(name))
    assert ham.electrons == mean_field(name).mol.nelec
    assert ham.determinant_energy() == pytest.approx(mean_field(name).e_tot, abs=1e-9)
    assert energy_of(ham) == pytest.approx(FULL_CI[name], abs=1e-6)


def test_open_shell_mean_field() -> None:
    mf = scf.ROHF(methylene()).run(conv_tol=1e-12)
    ham = fragkit.from_pyscf(mf)
    assert ham.electrons == (5, 3)
    assert ham.determinant_energy() == pytest.approx(mf.e_tot, abs=1e-9)
    assert energy_of(ham) == pytest.approx(fci.FCI(mf).kernel()[0], abs=1e-9)


@pytest.mark.parametrize("kind", ["CASCI", "CASSCF"])
def test_active_space_objects_give_the_energy_that_pyscf_finds(kind: str) -> None:
    mc = getattr(mcscf, kind)(scf.RHF(water("6-31g")).run(), 5, 6)
    mc.kernel()
    ham = fragkit.from_pyscf(mc)
    assert (ham.orbitals, ham.electrons) == (5, (3, 3))
    assert energy_of(ham) == pytest.approx(mc.e_tot, abs=1e-8)


def test_active_space_object_is_accepted_before_it_ran() -> None:
    mf = scf.RHF(water()).run()
    ham = fragkit.from_pyscf(mcscf.CASCI(mf, 4, 4))
    assert energy_of(ham) == pytest.approx(mcscf.CASCI(mf, 4, 4).kernel()[0], abs=1e-8)


def test_active_space_with_unequal_spins() -> None:
    mc = mcscf.CASCI(scf.ROHF(methylene()).run(), 5, (4, 2))
    mc.kernel()
    ham = fragkit.from_pyscf(mc)
    assert ham.electrons == (4, 2)
    assert energy_of(ham) == pytest.approx(mc.e_tot, abs=1e-8)


def test_only_active_orbitals_are_transformed() -> None:
    mf = scf.RHF(water("cc-pvdz")).run()
    mc = mcscf.CASCI(mf, 4, 4)
    fragkit.from_pyscf(mc)  # modules are loaded outside the measurement
    tracemalloc.start()
    fragkit.from_pyscf(mc)
    peak = tracemalloc.get_traced_memory()[1]
    tracemalloc.stop()
    assert peak < 0.25 * 8 * mf.mo_coeff.shape[1] ** 4


@pytest.mark.parametrize("treatment", ["core potential", "x2c", "point charges"])
def test_what_lives_in_the_core_hamiltonian_is_kept(treatment: str) -> None:
    if treatment == "core potential":
        molecule = gto.M(atom="Na 0 0 0; H 0 0 1.9", basis="lanl2dz", ecp={"Na": "lanl2dz"}, verbose=0)
        mf = scf.RHF(molecule).run()
    elif treatment == "x2c":
        mf = scf.RHF(water()).x2c().run()
    else:
        mf = qmmm.mm_charge(scf.RHF(water()), [(0.0, 0.0, -2.0), (1.0, 1.0, 3.0)], [0.7, -0.4]).run()
    ham = fragkit.from_pyscf(mf)
    assert ham.determinant_energy() == pytest.approx(mf.e_tot, abs=1e-7)
    bare = mf.mol.intor("int1e_kin") + mf.mol.intor("int1e_nuc")
    assert np.max(np.abs(ham.one_body - mf.mo_coeff.T @ bare @ mf.mo_coeff)) > 1e-3
    mc = mcscf.CASCI(mf, 3, 2)
    mc.kernel()
    assert energy_of(fragkit.from_pyscf(mc)) == pytest.approx(mc.e_tot, abs=1e-8)


def test_density_fitting_gives_factors() -> None:
    mf = scf.RHF(water("cc-pvdz")).density_fit().run()
    ham = fragkit.from_pyscf(mf)
    assert ham.from_factors
    assert ham.determinant_energy() == pytest.approx(mf.e_tot, abs=1e-7)
    mc = mcscf.CASCI(mf, 4, 4)
    mc.kernel()
    assert energy_of(fragkit.from_pyscf(mc)) == pytest.approx(mc.e_tot, abs=1e-8)


def test_density_fitting_with_more_auxiliaries_than_pairs_gives_the_tensor() -> None:
    mf = scf.RHF(water()).density_fit().run()
    ham = fragkit.from_pyscf(mf)
    assert not ham.from_factors
    assert ham.determinant_energy() == pytest.approx(mf.e_tot, abs=1e-7)


def test_symmetry_adapted_objects_are_restricted_ones() -> None:
    molecule = gto.M(atom=geometry("H2O"), basis="sto-3g", symmetry=True, verbose=0)
    mf = scf.RHF(molecule).run()
    assert energy_of(fragkit.from_pyscf(mf)) == pytest.approx(FULL_CI["H2O"], abs=1e-6)


def test_model_integrals_held_by_the_object_are_used() -> None:
    sites, repulsion = 6, 2.0
    model = fragkit.hubbard(sites, electrons=(3, 3), repulsion=repulsion)
    molecule = gto.M(verbose=0)
    molecule.nelectron = sites
    molecule.incore_anyway = True
    mf = scf.RHF(molecule)
    mf.get_hcore = lambda *_: np.array(model.one_body)
    mf.get_ovlp = lambda *_: np.eye(sites)
    mf._eri = ao2mo.restore(8, np.array(model.two_body), sites)
    mf.kernel(dm0=np.eye(sites))
    ham = fragkit.from_pyscf(mf, allow_unconverged=True)
    assert energy_of(ham) == pytest.approx(energy_of(model), abs=1e-8)


def test_kohn_sham_orbitals_carry_the_electronic_hamiltonian() -> None:
    mf = dft.RKS(water(), xc="pbe").run()
    assert energy_of(fragkit.from_pyscf(mf)) == pytest.approx(FULL_CI["H2O"], abs=1e-6)


def test_result_does_not_depend_on_signs_of_orbitals() -> None:
    mf = scf.RHF(water()).run(conv_tol=1e-12)
    before = energy_of(fragkit.from_pyscf(mf))
    mf.mo_coeff = mf.mo_coeff * np.array([1, -1, 1, -1, -1, 1, -1])
    assert energy_of(fragkit.from_pyscf(mf)) == pytest.approx(before, abs=1e-10)


def _refused() -> dict[str, tuple[Any, str]]:
    mol = water()
    complex_orbitals = scf.RHF(mol).run()
    complex_orbitals.mo_coeff = complex_orbitals.mo_coeff * np.exp(0.3j)
    skewed = scf.RHF(mol).run()
    skewed.mo_coeff = 1.01 * skewed.mo_coeff
    uhf = scf.UHF(mol).run()
    cell = cell_gto.M(atom="He 0 0 0", a=np.eye(3) * 4, basis="sto-3g", verbose=0)
    return {
        "unrestricted": (uhf, "spin-restricted .*unrestricted UHF"),
        "unrestricted Kohn-Sham": (dft.UKS(mol), "unrestricted UKS"),
        "unrestricted active space": (mcscf.UCASCI(uhf, 4, 4), "unrestricted UCASCI"),
        "generalised": (scf.GHF(mol), "restricted RHF or ROHF object .*GHF"),
        "spinors": (scf.DHF(mol), "restricted RHF or ROHF object .*DHF"),
        "periodic": (cell_scf.RHF(cell), "periodic"),
        "solvent": (scf.RHF(mol).PCM(), "solvent"),
        "active space in solvent": (mcscf.CASCI(scf.RHF(mol).PCM().run(), 4, 4), "solvent"),
        "complex": (complex_orbitals, "`mo_coeff` must be real"),
        "not orthonormal": (skewed, "orthonormal orbitals"),
        "no orbitals": (scf.RHF(mol), "must have orbitals .*kernel"),
        "molecule": (mol, "run a calculation first"),
        "coupled cluster": (cc.CCSD(scf.RHF(mol).run()), "must be a pyscf RHF"),
        "no pyscf object": (3.0, "must be a pyscf RHF"),
    }


@pytest.mark.filterwarnings("ignore::UserWarning:pyscf")  # pyscf warns that some of these are under testing
def test_unsupported_objects_are_refused_by_name() -> None:
    for source, message in _refused().values():
        with pytest.raises(InputError, match=message):
            fragkit.from_pyscf(source)


def test_unconverged_objects_need_an_explicit_word() -> None:
    mf = scf.RHF(water())
    mf.max_cycle = 1
    mf.kernel()
    with pytest.raises(NotConvergedError, match="converged SCF"):
        fragkit.from_pyscf(mf)
    assert energy_of(fragkit.from_pyscf(mf, allow_unconverged=True)) == pytest.approx(FULL_CI["H2O"], abs=1e-6)
    with pytest.raises(NotConvergedError, match="converged SCF"):
        fragkit.from_pyscf(mcscf.CASCI(mf, 4, 4))
    mc = mcscf.CASSCF(scf.RHF(water()).run(), 4, 4)
    with pytest.raises(NotConvergedError, match="converged CASSCF"):
        fragkit.from_pyscf(mc)
    assert fragkit.from_pyscf(mc, allow_unconverged=True).orbitals == 4


def test_energy_check_finds_what_the_integrals_lack() -> None:
    mf = scf.RHF(water()).run()
    mf.e_tot -= 0.003  # as a dispersion correction does
    with pytest.raises(InputError, match=r"difference of 0.003 .*check_energy=False"):
        fragkit.from_pyscf(mf)
    assert energy_of(fragkit.from_pyscf(mf, check_energy=False)) == pytest.approx(FULL_CI["H2O"], abs=1e-6)
    smeared = scf.addons.smearing_(scf.RHF(water()), sigma=0.3).run()
    with pytest.raises(InputError, match="whole electrons"):
        fragkit.from_pyscf(smeared)
    assert fragkit.from_pyscf(smeared, check_energy=False).electrons == (5, 5)


def test_coulomb_only_fitting_is_refused() -> None:
    mf = scf.RHF(water()).density_fit(only_dfj=True).run()
    with pytest.raises(InputError, match="for Coulomb only"):
        fragkit.from_pyscf(mf)
