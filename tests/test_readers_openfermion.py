"""Operators exchanged with OpenFermion, checked with OpenFermion's own matrices and stored results."""

import os
from typing import Any

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from molecules import FULL_CI, energy_of, molecule_hamiltonian

import fragkit
from fragkit.core import Hamiltonian, InputError

openfermion = pytest.importorskip("openfermion")
DATA = os.path.join(os.path.dirname(openfermion.__file__), "testing", "data")
LIH = os.path.join(DATA, "H1-Li1_sto-3g_singlet_1.45.hdf5")


def lowest(operator: Any, electrons: int) -> float:
    """Lowest eigenvalue among states of this electron number, by OpenFermion alone."""
    from openfermion.linalg import get_sparse_operator, jw_number_restrict_operator

    sparse = get_sparse_operator(operator)
    matrix = jw_number_restrict_operator(sparse, electrons, int(np.log2(sparse.shape[0])))
    return float(np.linalg.eigvalsh(matrix.toarray())[0])


def molecular_data(name: str, *, spin: int = 0) -> Any:
    """A `MolecularData` with integrals in OpenFermion's order, (ps|qr) at [p, q, r, s]."""
    ham = molecule_hamiltonian(name)
    geometry = [("H", (0.0, 0.0, float(k))) for k in range(sum(ham.electrons))]
    molecule = openfermion.MolecularData(geometry, "sto-3g", spin + 1, filename="unused")
    molecule.one_body_integrals = np.array(ham.one_body)
    molecule.two_body_integrals = np.array(ham.two_body.transpose(0, 2, 3, 1))
    molecule.nuclear_repulsion = ham.constant
    return molecule


@pytest.mark.parametrize("name", ["H2", "H4"])
def test_exported_operator_has_the_right_energy_there(name: str) -> None:
    ham = molecule_hamiltonian(name)
    assert lowest(ham.to_openfermion(), sum(ham.electrons)) == pytest.approx(FULL_CI[name], abs=1e-6)


@pytest.mark.parametrize(
    ("scale", "axes", "energy"),
    # H2/STO-3G at 0.74 Å, measured with pyscf 2.14 and OpenFermion 1.8: right, chemists' order, ½ forgotten.
    [(0.5, (0, 2, 3, 1), -1.137284), (0.5, (0, 1, 2, 3), -1.410618), (1.0, (0, 2, 3, 1), -0.538205)],
)
def test_order_and_factor_of_the_tensor(scale: float, axes: tuple[int, ...], energy: float) -> None:
    """The first row is what fragkit writes; the wrong ones have the energies that such mistakes give."""
    from openfermion.chem.molecular_data import spinorb_from_spatial
    from pyscf import gto, scf

    ham = fragkit.from_pyscf(scf.RHF(gto.M(atom="H 0 0 0; H 0 0 0.74", basis="sto-3g", verbose=0)).run())
    one, two = spinorb_from_spatial(np.array(ham.one_body), np.array(ham.two_body.transpose(axes)))
    operator = openfermion.InteractionOperator(ham.constant, one, scale * two)
    lowest_of_all = np.linalg.eigvalsh(openfermion.get_sparse_operator(operator).toarray())[0]
    assert lowest_of_all == pytest.approx(energy, abs=1e-5)
    ours = ham.to_openfermion()
    same = np.max(np.abs(ours.two_body_tensor - operator.two_body_tensor)) < 1e-7
    assert same == (energy == -1.137284)


@given(n=st.integers(1, 4), seed=st.integers(0, 2**32))
@settings(max_examples=15)
def test_there_and_back(n: int, seed: int) -> None:
    rng = np.random.default_rng(seed)
    factors = rng.normal(size=(3, n, n))
    factors = factors + factors.transpose(0, 2, 1)
    one_body = rng.normal(size=(n, n))
    ham = Hamiltonian(0.7, one_body + one_body.T, factors=factors, factor_signs=[1, -1, 1], electrons=(1, 1))
    back = fragkit.from_openfermion(ham.to_openfermion(), electrons=(1, 1))
    assert back.constant == ham.constant
    assert np.max(np.abs(back.one_body - ham.one_body)) < 1e-12
    assert np.max(np.abs(back.two_body - ham.two_body)) < 1e-11


def test_operator_in_another_but_equal_form_is_accepted() -> None:
    """get_interaction_operator writes the normal-ordered form, whose tensor looks different."""
    ham = molecule_hamiltonian("H2")
    fermion = openfermion.get_fermion_operator(ham.to_openfermion())
    operator = openfermion.get_interaction_operator(openfermion.normal_ordered(fermion))
    assert np.max(np.abs(operator.two_body_tensor - ham.to_openfermion().two_body_tensor)) > 0.1
    back = fragkit.from_openfermion(operator, electrons=ham.electrons)
    assert energy_of(back) == pytest.approx(FULL_CI["H2"], abs=1e-6)


def test_molecular_data_with_stored_reference_energy() -> None:
    """LiH/STO-3G at 1.45 Å: integrals and full CI energy shipped with OpenFermion."""
    molecule = openfermion.MolecularData(filename=LIH)
    ham = fragkit.from_openfermion(molecule)
    assert ham.electrons == (2, 2)
    assert ham.determinant_energy() == pytest.approx(float(molecule.hf_energy), abs=1e-8)
    assert energy_of(ham) == pytest.approx(float(molecule.fci_energy), abs=1e-8)


def test_molecular_data_keeps_small_integrals_that_its_own_conversion_drops() -> None:
    molecule = molecular_data("H4")
    molecule.one_body_integrals[0, 3] = molecule.one_body_integrals[3, 0] = 3e-9
    assert molecule.get_molecular_hamiltonian().one_body_tensor[0, 6] == 0.0
    assert fragkit.from_openfermion(molecule).one_body[0, 3] == 3e-9


def test_electrons_follow_from_multiplicity_or_are_given() -> None:
    assert fragkit.from_openfermion(molecular_data("H4")).electrons == (2, 2)
    assert fragkit.from_openfermion(molecular_data("H4", spin=2)).electrons == (3, 1)
    assert fragkit.from_openfermion(molecular_data("H4"), electrons=(2, 1)).electrons == (2, 1)


def _spin_broken(one: bool) -> Any:
    operator = molecule_hamiltonian("H2").to_openfermion()
    if one:
        operator.one_body_tensor[0, 0] += 0.1
    else:
        operator.two_body_tensor[0::2, 0::2, 0::2, 0::2] *= 1.1
        operator.two_body_tensor[1::2, 1::2, 1::2, 1::2] *= 1.1
    return operator


def _changed(index: tuple[int, ...], value: complex) -> Any:
    operator = molecule_hamiltonian("H2").to_openfermion()
    one = operator.one_body_tensor.astype(complex)
    one[index] += value
    return openfermion.InteractionOperator(operator.constant, one, operator.two_body_tensor)


WRONG = {
    "no electrons": (lambda: molecule_hamiltonian("H2").to_openfermion(), {}, "`electrons` must be given"),
    "fermion operator": (lambda: openfermion.FermionOperator("1^ 1"), {}, "get_interaction_operator first"),
    "qubit operator": (lambda: openfermion.QubitOperator("Z0"), {}, "must be an openfermion .*QubitOperator"),
    "alpha and beta differ": (lambda: _spin_broken(True), {"electrons": (1, 1)}, "spin-free"),
    "same-spin part differs": (lambda: _spin_broken(False), {"electrons": (1, 1)}, "spin-free|same-spin"),
    "spin flip": (lambda: _changed((0, 1), 0.1), {"electrons": (1, 1)}, "conserve spin"),
    "complex": (lambda: _changed((0, 2), 0.1j), {"electrons": (1, 1)}, "must be real"),
    "no integrals": (
        lambda: openfermion.MolecularData([("H", (0, 0, 0))], "sto-3g", 2, filename="absent"),
        {},
        "run the electronic-structure calculation",
    ),
    "impossible multiplicity": (lambda: molecular_data("H4", spin=1), {}, "multiplicity"),
}


@pytest.mark.parametrize("name", sorted(WRONG))
def test_what_is_refused(name: str) -> None:
    make, options, message = WRONG[name]
    with pytest.raises(InputError, match=message):
        fragkit.from_openfermion(make(), **options)
