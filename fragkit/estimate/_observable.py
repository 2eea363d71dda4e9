"""Operators besides the energy that the same shots can measure."""

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from fragkit.core import Hamiltonian, InputError, OperatorTensors, as_real_array, frozen, pair_indices
from fragkit.planning import OperatorSpace

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False, repr=False)
class Observable:
    """A one- or two-body operator: constant + Σ h_pq E_pq + two-body parts, in any unit.

    Parameters
    ----------
    name
        For tables and messages.
    constant
        Number that needs no measurement, for example the nuclear dipole.
    one_body
        (n, n) symmetric, the same for both spins.
    opposite_spin
        (n, n, n, n) or None: Σ O_pqrs a†_pα a_qα a†_rβ a_sβ.
    same_spin
        (n, n, n, n) or None: ½ Σ_σ Σ S_pqrs a†_pσ a†_rσ a_sσ a_qσ.

    A spin-free two-body operator ½ Σ (pq|rs) (E_pq E_rs − δ_qr E_ps) has O = S = (pq|rs); `of` takes one from a
    Hamiltonian, for example one made of derivative integrals.

    Examples
    --------
    >>> import numpy as np
    >>> Observable("x", 0.0, np.array([[0.0, 1.0], [1.0, 0.0]]))
    Observable('x', one-body, orbitals=2)
    """

    name: str
    constant: float
    one_body: Array
    opposite_spin: Array | None = None
    same_spin: Array | None = None

    def __post_init__(self) -> None:
        matrix = as_real_array(self.one_body, "one_body", (None, None))
        n = len(matrix)
        if matrix.shape != (n, n) or np.max(np.abs(matrix - matrix.T), initial=0.0) > 1e-8:
            raise InputError(
                f"`one_body` must be a symmetric matrix (got shape {matrix.shape}, a violation of "
                f"{np.max(np.abs(matrix - matrix.T)) if matrix.shape == (n, n) else np.nan:.3g}); operators that are "
                "not Hermitian have two observables, their real and imaginary parts"
            )
        object.__setattr__(self, "one_body", frozen(0.5 * (matrix + matrix.T)))
        object.__setattr__(self, "constant", float(as_real_array(self.constant, "constant", ())))
        for part in ("opposite_spin", "same_spin"):
            value = getattr(self, part)
            if value is not None:
                object.__setattr__(self, part, frozen(as_real_array(value, part, (n, n, n, n))))

    @classmethod
    def of(cls, hamiltonian: Hamiltonian, name: str = "energy") -> "Observable":
        """The operator of a Hamiltonian, or of any integrals in the form of one."""
        return cls(name, hamiltonian.constant, hamiltonian.one_body, hamiltonian.two_body, hamiltonian.two_body)

    @classmethod
    def spin_squared(cls, orbitals: int, electrons: tuple[int, int]) -> "Observable":
        """Total spin S² in the sector of these electron numbers.

        S² = S_z(S_z + 1) + N_β − Σ_pq a†_pα a_qα a†_qβ a_pβ (Helgaker, Jørgensen & Olsen, Molecular
        Electronic-Structure Theory, section 2.2). From two orbitals on it has a part, antisymmetric in p and q of
        each spin, that no circuit with one real rotation for both spins shows: `measure` then refuses it.
        """
        half = 0.5 * (electrons[0] - electrons[1])
        unit = np.eye(orbitals)
        exchange = -np.einsum("ps,qr->pqrs", unit, unit)
        return cls("S^2", half * (half + 1.0) + electrons[1], np.zeros((orbitals, orbitals)), exchange, None)

    @property
    def orbitals(self) -> int:
        """Number of spatial orbitals n."""
        return len(self.one_body)

    def rows(self, space: OperatorSpace) -> Array:
        """Rows of the operator space.

        Raises `InputError` if a two-body part is not of the kind that occupations of real rotated orbitals, the same
        for both spins, can show: symmetric in each pair of one spin.
        """
        n, size = self.orbitals, space.pairs
        p, q = pair_indices(n)
        weights = np.where(p == q, 1.0, np.sqrt(2.0))
        zero = np.zeros((n, n, n, n))
        opposite = zero if self.opposite_spin is None else self.opposite_spin
        same = zero if self.same_spin is None else self.same_spin
        symmetric = 0.25 * sum(
            (opposite.transpose(axes) for axes in ((0, 1, 2, 3), (1, 0, 2, 3), (0, 1, 3, 2), (1, 0, 3, 2))), zero
        )
        symmetric = 0.5 * (symmetric + symmetric.transpose(2, 3, 0, 1))
        packed = [0.5 * (t + t.transpose(2, 3, 0, 1))[p, q][:, p, q] for t in (symmetric, _symmetrised(same))]
        scaled = [matrix * weights[:, None] * weights for matrix in packed]
        rows = space.pack(scaled[0].reshape(size, size), scaled[1].reshape(size, size), self.one_body)
        seen = space.tensors(rows)
        given = OperatorTensors(self.one_body, 0.5 * (opposite + opposite.transpose(2, 3, 0, 1)), same)
        scale = max(1.0, float(np.max(np.abs(opposite))), float(np.max(np.abs(same))))
        for kind, lost in (
            ("opposite-spin", given.opposite_spin - seen.opposite_spin),
            ("same-spin", _acting(given) - _acting(seen)),
        ):
            worst = float(np.max(np.abs(lost)))
            if worst > 1e-8 * scale:
                index = tuple(int(k) for k in np.unravel_index(int(np.argmax(np.abs(lost))), lost.shape))
                raise InputError(
                    f"the {kind} part of {self.name!r} must be symmetric in the orbitals of each spin to be measurable "
                    f"(got a part of {worst:.3g} at {index} that is not); occupations of real orbitals, the same for "
                    "both spins, do not contain products of currents i(a†_p a_q − a†_q a_p), which it needs"
                )
        return rows

    def __repr__(self) -> str:
        kind = "one-body" if self.opposite_spin is None and self.same_spin is None else "two-body"
        return f"Observable({self.name!r}, {kind}, orbitals={self.orbitals})"


def _symmetrised(tensor: Array) -> Array:
    """Average over p ↔ q and r ↔ s; the antisymmetrised part is compared with the original afterwards."""
    tensor = 0.5 * (tensor + tensor.transpose(1, 0, 2, 3))
    return 0.5 * (tensor + tensor.transpose(0, 1, 3, 2))


def _acting(tensors: OperatorTensors) -> Array:
    """What acts of a same-spin tensor: odd under exchange, Hermitian, particles alike."""
    odd = tensors.exchange_odd
    odd = 0.5 * (odd + odd.transpose(2, 3, 0, 1))
    return 0.5 * (odd + odd.transpose(1, 0, 3, 2))
