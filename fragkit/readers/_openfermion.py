"""Hamiltonians from OpenFermion's objects, recognised by their attributes so that OpenFermion stays unimported."""

from typing import Any

from fragkit.core import Hamiltonian, InputError, as_count, as_real_array, spatial_integrals


def from_openfermion(source: Any, *, electrons: Any = None) -> Hamiltonian:
    """The Hamiltonian of an `openfermion.InteractionOperator` or `openfermion.MolecularData`.

    OpenFermion's two-body tensor multiplies a†_p a†_q a_r a_s without a factor ½ and its spin-orbitals interleave
    (2p alpha, 2p+1 beta); both are taken care of. Integrals of `MolecularData` are read directly, since its own
    conversion sets those below 1e-8 to zero.

    Parameters
    ----------
    source
        A spin-free `InteractionOperator`, or a `MolecularData` with its integrals loaded.
    electrons
        (alpha, beta). Needed for an operator; for `MolecularData` they follow from its charge and multiplicity
        when left out.

    Raises
    ------
    InputError
        If the operator is not spin-free, real and of 8-fold symmetry, if the integrals are not loaded, or if
        `electrons` is missing.

    Examples
    --------
    >>> import numpy as np
    >>> ham = Hamiltonian(0.1, np.diag([-1.0, 0.0]), np.zeros((2, 2, 2, 2)), electrons=(1, 1))
    >>> from_openfermion(ham.to_openfermion(), electrons=(1, 1)).determinant_energy()
    -1.9
    """
    if hasattr(source, "get_molecular_hamiltonian") and hasattr(source, "multiplicity"):
        return _from_molecular_data(source, electrons)
    if hasattr(source, "one_body_tensor") and hasattr(source, "two_body_tensor") and hasattr(source, "constant"):
        if electrons is None:
            raise InputError(
                "`electrons` must be given with an InteractionOperator, which does not know them (got None); "
                "for example electrons=(5, 5)"
            )
        constant, one_body, two_body = spatial_integrals(source)
        return Hamiltonian(constant, one_body, two_body, electrons=electrons)
    hint = ""
    if type(source).__name__ == "FermionOperator":
        hint = "; convert it with openfermion.get_interaction_operator first"
    raise InputError(
        f"`source` must be an openfermion InteractionOperator or MolecularData (got {type(source).__name__}){hint}"
    )


def _from_molecular_data(molecule: Any, electrons: Any) -> Hamiltonian:
    # Unset integrals are read from the molecule's file, and a file without them gives None or an error.
    try:
        one_body, two_body = molecule.one_body_integrals, molecule.two_body_integrals
        constant = molecule.nuclear_repulsion
    except (OSError, KeyError) as error:
        raise _not_loaded() from error
    if one_body is None or two_body is None or constant is None:
        raise _not_loaded()
    one_body = as_real_array(one_body, "one_body_integrals", (None, None))
    stored = as_real_array(two_body, "two_body_integrals", (len(one_body),) * 4)
    if electrons is None:
        electrons = _molecular_electrons(molecule)
    # OpenFermion stores (ps|qr) at [p, q, r, s].
    return Hamiltonian(float(constant), one_body, stored.transpose(0, 3, 1, 2), electrons=electrons)


def _molecular_electrons(molecule: Any) -> tuple[int, int]:
    total = as_count(molecule.n_electrons, "n_electrons")
    unpaired = as_count(molecule.multiplicity, "multiplicity", minimum=1) - 1
    if unpaired > total or (total - unpaired) % 2:
        raise InputError(
            f"`multiplicity` must be possible for {total} electrons (got {molecule.multiplicity}); "
            "correct the MolecularData or pass electrons=(alpha, beta)"
        )
    return (total + unpaired) // 2, (total - unpaired) // 2


def _not_loaded() -> InputError:
    return InputError(
        "`source` must be a MolecularData with integrals and nuclear repulsion (got one without); run the "
        "electronic-structure calculation, or load() the molecule from its file, first"
    )
