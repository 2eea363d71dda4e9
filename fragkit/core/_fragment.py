"""One measurable fragment: a polynomial of occupation numbers in rotated orbitals."""

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fragkit.core._errors import InputError
from fragkit.core._features import evaluate_polynomial, feature_count, pack_features, unpack_features
from fragkit.core._validate import as_real_array, as_rotation, frozen

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Fragment:
    """A polynomial, quadratic in occupation numbers, of the orbitals that are the columns of `rotation`.

    The operator is Σ_{i≤j} opposite_spin[i, j] o_ij + Σ_{i<j} same_spin[i, j] s_ij + Σ_i linear[i] n_i, in
    hartree, with the features of `fragkit.core.evaluate_features`. Each pair is counted once.

    Parameters
    ----------
    rotation
        (n, n) orthogonal; column i is the new orbital i in the orbitals of the Hamiltonian, both spins alike.
    opposite_spin
        (n, n) symmetric, hartree; entry ij multiplies n_iα n_jβ + n_jα n_iβ, entry ii multiplies n_iα n_iβ.
    same_spin
        (n, n) symmetric with zero diagonal, hartree; entry ij multiplies n_iα n_jα + n_iβ n_jβ.
    linear
        (n,), hartree; entry i multiplies n_iα + n_iβ.

    Raises
    ------
    InputError
        If a shape is wrong, an entry is not finite, `rotation` is not orthogonal, or a matrix is not symmetric.

    Examples
    --------
    >>> import numpy as np
    >>> fragment = Fragment.plain(np.eye(2), np.array([[1.0, 0.5], [0.5, 1.0]]))
    >>> fragment.linear
    array([0.5, 0.5])
    >>> fragment.values(np.array([[1, 0, 1, 0]]))  # both electrons in orbital 0: ½ · 1 · 2 · 2
    array([2.])
    """

    rotation: Array
    opposite_spin: Array
    same_spin: Array
    linear: Array

    def __post_init__(self) -> None:
        rotation = as_rotation(self.rotation)
        n = len(rotation)
        opposite = _symmetric(self.opposite_spin, "opposite_spin", n)
        same = _symmetric(self.same_spin, "same_spin", n)
        if np.any(np.diag(same) != 0.0):
            raise InputError(
                "`same_spin` must have a zero diagonal, since n_iσ n_iσ = n_iσ "
                f"(got {np.max(np.abs(np.diag(same))):.3g}); move the diagonal into `linear`"
            )
        for name, value in (
            ("rotation", rotation),
            ("opposite_spin", opposite),
            ("same_spin", same),
            ("linear", as_real_array(self.linear, "linear", (n,))),
        ):
            object.__setattr__(self, name, frozen(value))

    @classmethod
    def plain(cls, rotation: Any, coefficients: Any) -> "Fragment":
        """The fragment ½ Σ_ij coefficients[i, j] n_i n_j (i and j both run over all orbitals)."""
        matrix = _symmetric(coefficients, "coefficients", len(np.asarray(rotation)))
        return cls(rotation, matrix, matrix - np.diag(np.diag(matrix)), 0.5 * np.diag(matrix))

    @classmethod
    def one_body(cls, rotation: Any, linear: Any) -> "Fragment":
        """The fragment Σ_i linear[i] n_i."""
        zero = np.zeros((len(np.asarray(rotation)),) * 2)
        return cls(rotation, zero, zero, linear)

    @classmethod
    def from_coefficients(cls, rotation: Any, coefficients: Any) -> "Fragment":
        """The fragment with the given packed coefficients, shape (n² + n,)."""
        n = len(np.asarray(rotation))
        vector = as_real_array(coefficients, "coefficients", (feature_count(n),))
        return cls(rotation, *unpack_features(vector, n))

    @property
    def orbitals(self) -> int:
        """Number of spatial orbitals n."""
        return len(self.linear)

    @property
    def coefficients(self) -> Array:
        """Packed coefficients, shape (n² + n,), in the order of the features."""
        return pack_features(self.opposite_spin, self.same_spin, self.linear)

    @property
    def is_one_body(self) -> bool:
        """Whether only the linear part is present."""
        return not (np.any(self.opposite_spin) or np.any(self.same_spin))

    def values(self, occupations: NDArray[np.integer]) -> Array:
        """Value in hartree for each row of occupations (shots, 2n), alpha orbitals first, shape (shots,)."""
        return evaluate_polynomial(occupations, self.opposite_spin, self.same_spin, self.linear)

    def reordered(self, order: Any, signs: Any = None) -> "Fragment":
        """The same operator with its orbitals listed in another order and, if given, with signs changed.

        New orbital k is `signs[k]` times old orbital `order[k]`.
        """
        order = np.asarray(order)
        if sorted(order.tolist()) != list(range(self.orbitals)):
            raise InputError(f"`order` must be a permutation of 0 … {self.orbitals - 1} (got {order.tolist()})")
        rotation = self.rotation[:, order]
        if signs is not None:
            rotation = rotation * np.sign(as_real_array(signs, "signs", (self.orbitals,)))
        pick = np.ix_(order, order)
        return Fragment(rotation, self.opposite_spin[pick], self.same_spin[pick], self.linear[order])

    def __repr__(self) -> str:
        kind = "one-body" if self.is_one_body else "two-body"
        return f"Fragment({kind}, orbitals={self.orbitals}, largest={np.max(np.abs(self.coefficients), initial=0):.3g})"


def _symmetric(value: Any, name: str, n: int) -> Array:
    matrix = as_real_array(value, name, (n, n))
    error = float(np.max(np.abs(matrix - matrix.T), initial=0.0))
    scale = max(1.0, float(np.max(np.abs(matrix), initial=0.0)))
    if error > 1e-10 * scale:
        raise InputError(f"`{name}` must be symmetric (got a difference of {error:.3g} from its transpose)")
    return 0.5 * (matrix + matrix.T)
