"""The electronic Hamiltonian in real orthonormal orbitals."""

import hashlib
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fragkit.core._errors import InputError
from fragkit.core._openfermion import interaction_operator
from fragkit.core._tensors import (
    factorise_two_body,
    rotate_one_body,
    rotate_two_body,
    symmetrise_two_body,
    symmetry_violation,
)
from fragkit.core._validate import as_electrons, as_real_array, as_rotation, frozen

Array = NDArray[np.float64]


class Hamiltonian:
    """A spin-free electronic Hamiltonian: constant, one-body and two-body integrals, and electron numbers.

    H = constant + Σ_pq one_body[p, q] E_pq + ½ Σ_pqrs (pq|rs) (E_pq E_rs − δ_qr E_ps), with
    E_pq = Σ_σ a†_pσ a_qσ and chemists' notation (pq|rs) = two_body[p, q, r, s]
    (Helgaker, Jørgensen & Olsen, Molecular Electronic-Structure Theory, Wiley 2000, eq. 2.2.18).
    Immutable; every energy is in hartree.

    Parameters
    ----------
    constant
        Nuclear repulsion and frozen-core energy, hartree.
    one_body
        (n, n) symmetric, hartree.
    two_body
        (n, n, n, n) with 8-fold symmetry, hartree, chemists' notation. Leave out when `factors` are given.
    factors
        (R, n, n), each symmetric, with (pq|rs) = Σ_Q factor_signs[Q] factors[Q, p, q] factors[Q, r, s].
    factor_signs
        (R,) of ±1; all +1 when left out.
    electrons
        (alpha, beta) electron numbers.
    tolerance
        Largest symmetry violation that is taken for rounding noise and averaged away, hartree.

    Raises
    ------
    InputError
        If a shape is wrong, an entry is not finite or not real, a permutation symmetry is violated (the message
        names it and its size), or the electron numbers are impossible.

    Examples
    --------
    >>> import numpy as np
    >>> ham = Hamiltonian(0.5, np.diag([-1.0, 0.0]), np.zeros((2, 2, 2, 2)), electrons=(1, 1))
    >>> ham.determinant_energy()
    -1.5
    """

    constant: float
    one_body: Array
    electrons: tuple[int, int]
    from_factors: bool

    def __init__(
        self,
        constant: float,
        one_body: Any,
        two_body: Any = None,
        *,
        electrons: Any,
        factors: Any = None,
        factor_signs: Any = None,
        tolerance: float = 1e-8,
    ) -> None:
        matrix = as_real_array(one_body, "one_body", (None, None))
        n = matrix.shape[0]
        if n == 0 or matrix.shape != (n, n):
            raise InputError(f"`one_body` must be a square matrix with at least one orbital (got {matrix.shape})")
        error = float(np.max(np.abs(matrix - matrix.T)))
        if error > tolerance:
            raise InputError(
                f"`one_body` must be symmetric to {tolerance:g} (got a violation of {error:.3g}); "
                "complex or non-Hermitian integrals are not supported"
            )
        if (two_body is None) == (factors is None):
            got = "both" if factors is not None else "neither"
            raise InputError(f"exactly one of `two_body` and `factors` must be given (got {got})")
        if factors is None and factor_signs is not None:
            raise InputError("`factor_signs` must be left out when `two_body` is given (got signs without factors)")
        set_once = self.__dict__
        set_once["constant"] = float(as_real_array(constant, "constant", ()))
        set_once["one_body"] = frozen(0.5 * (matrix + matrix.T))
        set_once["electrons"] = as_electrons(electrons, n)
        if factors is None:
            tensor = as_real_array(two_body, "two_body", (n, n, n, n))
            permutation, size = symmetry_violation(tensor)
            if size > tolerance:
                raise InputError(
                    f"`two_body` must have 8-fold symmetry to {tolerance:g} (got a violation of {permutation} by "
                    f"{size:.3g}); chemists' notation (pq|rs) is expected, physicists' <pr|qs> must be transposed"
                )
            set_once["two_body"] = frozen(symmetrise_two_body(tensor))
            set_once["from_factors"] = False
        else:
            stack = as_real_array(factors, "factors", (None, n, n))
            error = float(np.max(np.abs(stack - stack.transpose(0, 2, 1)), initial=0.0))
            if error > tolerance:
                raise InputError(
                    f"`factors` must be symmetric matrices to {tolerance:g} (got a violation of {error:.3g})"
                )
            signs = (
                np.ones(len(stack))
                if factor_signs is None
                else as_real_array(factor_signs, "factor_signs", (len(stack),))
            )
            if np.any(np.abs(signs) != 1.0):
                raise InputError("`factor_signs` must be +1 or -1 (got another value)")
            set_once["factors"] = frozen(0.5 * (stack + stack.transpose(0, 2, 1)))
            set_once["factor_signs"] = frozen(signs)
            set_once["from_factors"] = True

    def __setattr__(self, name: str, value: Any) -> None:
        raise AttributeError(f"a Hamiltonian is immutable (tried to set `{name}`); make a new one instead")

    @cached_property
    def two_body(self) -> Array:
        """(n, n, n, n) two-electron integrals (pq|rs), hartree; built on first use when given by factors."""
        return frozen(np.einsum("Q,Qpq,Qrs->pqrs", self.factor_signs, self.factors, self.factors, optimize=True))

    @cached_property
    def _factorisation(self) -> tuple[Array, Array]:
        factors, signs = factorise_two_body(self.two_body)
        return frozen(factors), frozen(signs)

    @cached_property
    def factors(self) -> Array:
        """(R, n, n) two-electron factors L^Q; by pivoted Cholesky on first use when given by `two_body`."""
        return self._factorisation[0]

    @cached_property
    def factor_signs(self) -> Array:
        """(R,) signs of the factors, all +1 for Coulomb integrals."""
        return self._factorisation[1]

    @property
    def orbitals(self) -> int:
        """Number of spatial orbitals n."""
        return len(self.one_body)

    @cached_property
    def one_body_of_products(self) -> Array:
        """(n, n) one-body part when the two-body part is written as products ½ Σ (pq|rs) E_pq E_rs."""
        if self.from_factors:
            exchange = np.einsum("Q,Qpr,Qrq->pq", self.factor_signs, self.factors, self.factors, optimize=True)
        else:
            exchange = np.einsum("prrq->pq", self.two_body)
        return frozen(self.one_body - 0.5 * exchange)

    @cached_property
    def digest(self) -> str:
        """Hexadecimal SHA-256 of the integrals and electron numbers, to tell whether two objects belong together.

        Integrals are rounded to 1e-10 hartree first, so that saving and loading does not change it.
        """
        chain = hashlib.sha256(f"{self.orbitals} {self.electrons} {self.constant:z.10f}".encode())
        two_electron = self.factors if self.from_factors else self.two_body
        for array in (self.one_body, two_electron):
            # Adding 0.0 turns -0.0 into 0.0, which has other bytes.
            chain.update((np.round(array, 10) + 0.0).tobytes())
        if self.from_factors:
            chain.update(self.factor_signs.tobytes())
        return chain.hexdigest()

    def rotated(self, rotation: Any) -> "Hamiltonian":
        """The same Hamiltonian in the orbitals that are the columns of `rotation`, shape (n, n)."""
        u = as_rotation(rotation, self.orbitals)
        one_body = rotate_one_body(self.one_body, u)
        if self.from_factors:
            factors = u.T @ self.factors @ u
            return Hamiltonian(
                self.constant, one_body, factors=factors, factor_signs=self.factor_signs, electrons=self.electrons
            )
        return Hamiltonian(self.constant, one_body, rotate_two_body(self.two_body, u), electrons=self.electrons)

    def determinant_energy(self, alpha: Any = None, beta: Any = None) -> float:
        """Energy in hartree of one Slater determinant, from the Slater-Condon rules.

        `alpha` and `beta` list the occupied orbitals of each spin; the lowest ones when left out. Source:
        Szabo & Ostlund, Modern Quantum Chemistry, Dover 1996, section 2.3.
        """
        occupied = []
        for name, listed, count in (("alpha", alpha, self.electrons[0]), ("beta", beta, self.electrons[1])):
            orbitals = list(range(count)) if listed is None else [int(k) for k in listed]
            if len(set(orbitals)) != len(orbitals) or any(not 0 <= k < self.orbitals for k in orbitals):
                raise InputError(f"`{name}` must list different orbitals in 0 … {self.orbitals - 1} (got {orbitals})")
            occupied.append(orbitals)
        density_alpha, density_beta = (np.zeros(self.orbitals) for _ in range(2))
        density_alpha[occupied[0]] = 1.0
        density_beta[occupied[1]] = 1.0
        total = density_alpha + density_beta
        if self.from_factors:
            diagonal = np.einsum("Qpp->Qp", self.factors)
            coulomb = np.einsum("Q,Qp,Qr->pr", self.factor_signs, diagonal, diagonal, optimize=True)
            exchange = np.einsum("Q,Qpr,Qpr->pr", self.factor_signs, self.factors, self.factors, optimize=True)
        else:
            coulomb = np.einsum("pprr->pr", self.two_body)
            exchange = np.einsum("prrp->pr", self.two_body)
        energy = self.constant + np.diag(self.one_body) @ total + 0.5 * total @ coulomb @ total
        energy -= 0.5 * (density_alpha @ exchange @ density_alpha + density_beta @ exchange @ density_beta)
        return float(energy)

    def to_openfermion(self) -> Any:
        """The `openfermion.InteractionOperator` of this Hamiltonian; spin-orbitals interleave (2p alpha, 2p+1 beta)."""
        return interaction_operator(self.constant, self.one_body, self.two_body)

    def __repr__(self) -> str:
        form = f"{len(self.factors)} factors" if self.from_factors else "full tensor"
        return (
            f"Hamiltonian(orbitals={self.orbitals}, electrons={self.electrons}, constant={self.constant:.6f}, {form})"
        )


def as_hamiltonian(value: Any) -> Hamiltonian:
    """Return `value`, an argument named `hamiltonian`, if it is a Hamiltonian; raise `InputError` otherwise."""
    if not isinstance(value, Hamiltonian):
        raise InputError(
            f"`hamiltonian` must be a Hamiltonian (got {type(value).__name__}); make one with fragkit.from_pyscf, "
            "fragkit.from_fcidump or fragkit.Hamiltonian"
        )
    return value
