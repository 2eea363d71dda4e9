"""What every reference state offers, and the checks they share."""

from abc import ABC, abstractmethod
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fragkit.core import (
    Hamiltonian,
    InputError,
    MismatchError,
    as_count,
    as_hamiltonian,
    as_real_array,
    as_rotation,
    feature_count,
)
from fragkit.states._parallel import available_threads, in_parallel

Array = NDArray[np.float64]
Bits = NDArray[np.uint8]


class Expectations(ABC):
    """Expectation values of K fragments on one state, opened once and finished about a chosen centre.

    A mixture needs the means of all its parts before it knows the centre, hence the two steps.
    """

    mean: Array  # (K,) expectation of each fragment's value f, hartree

    @abstractmethod
    def about(self, center: Array) -> tuple[Array, Array, Array]:
        """E[(f − center)²] (K,), E[F (f − center)] (K, n² + n), and the gradient (K, n, n) of the first.

        The centre is held fixed in the gradient.
        """


class ReferenceState(ABC):
    """The state that the device is expected to prepare: occupation statistics in any rotated basis.

    Plans use it only to decide how many shots each circuit needs; it never enters the energy estimate. Orbitals
    are those of the Hamiltonian; a `rotation` is an (n, n) orthogonal matrix whose columns are the new orbitals.
    Concrete states come from `reference_state`, `ReferenceState.from_ci_vector` and `mixture`.

    Attributes
    ----------
    orbitals
        Number of spatial orbitals n.
    electrons
        (alpha, beta) electron numbers.
    description
        A short sentence for tables.
    digest
        Hexadecimal SHA-256 of the state, to tell whether two states are the same.
    hamiltonian_digest
        `digest` of the Hamiltonian the state was made for, or None when it belongs to no particular one.
    """

    orbitals: int
    electrons: tuple[int, int]
    description: str
    digest: str
    hamiltonian_digest: str | None

    @staticmethod
    def from_ci_vector(hamiltonian: Hamiltonian, vector: Any, *, noise: float = 0.0) -> "ReferenceState":
        """The pure state with the given full-CI coefficients, optionally depolarised.

        Parameters
        ----------
        hamiltonian
            Gives the orbitals, the electron numbers and the digest.
        vector
            (C(n, n_alpha), C(n, n_beta)) real, normalised to 1e-6; rows are alpha strings and columns beta strings in
            pyscf's order: strings sorted as binary numbers whose bit 0 is the lowest orbital.
        noise
            Weight p of the maximally mixed state of the electron-number sector, 0 … 1.

        Raises
        ------
        InputError
            If the shape is wrong, an entry is not finite, or the vector is not normalised.

        Examples
        --------
        >>> import numpy as np
        >>> from fragkit.core import Hamiltonian
        >>> ham = Hamiltonian(0.0, np.diag([-1.0, 1.0]), np.zeros((2, 2, 2, 2)), electrons=(1, 1))
        >>> state = ReferenceState.from_ci_vector(ham, [[0.6, 0.0], [0.0, -0.8]])
        >>> round(state.energy(ham), 12)
        0.56
        """
        from fragkit.states._ci import CIState

        return CIState.from_ci_vector(hamiltonian, vector).with_noise(noise)

    @abstractmethod
    def moments(self, rotation: Any) -> tuple[Array, Array]:
        """Mean (n² + n,) and covariance (n² + n, n² + n) of all features in the rotated basis, exactly.

        The order of the features is that of `fragkit.core.evaluate_features`.

        Raises
        ------
        InputError
            If `rotation` is not an orthogonal (n, n) matrix.
        """

    @abstractmethod
    def sample(self, rotation: Any, shots: int, rng: np.random.Generator | int | None = None) -> Bits:
        """Ideal measurement results in the rotated basis, uint8 (shots, 2n): n alpha orbitals, then n beta."""

    @abstractmethod
    def energy(self, hamiltonian: Hamiltonian) -> float:
        """Expectation value of the Hamiltonian, hartree."""

    @abstractmethod
    def variance(self, hamiltonian: Hamiltonian) -> float:
        """Tr ρH² − (Tr ρH)², hartree²: the fewest shots per error⁻² that any unbiased measurement needs."""

    @abstractmethod
    def _expectations(self, rotations: Array, coefficients: Array) -> Expectations:
        """Open K checked rotations and packed coefficients; see `Expectations`."""

    def _batch(self) -> int:
        """How many rotations to evaluate at a time, so that temporaries stay in cache."""
        return 64

    def variance_and_gradient(
        self, rotations: Any, coefficients: Any, *, precision: str = "double", threads: int | None = None
    ) -> tuple[Array, Array, Array]:
        """Single-shot variances of K fragments, and their derivatives by coefficients and rotations.

        Parameters
        ----------
        rotations
            (K, n, n) orthogonal.
        coefficients
            (K, n² + n) packed, hartree.
        precision
            "double", or "single" to evaluate CI vectors in half the time with about six digits.
        threads
            Threads over the rotations; by default OMP_NUM_THREADS or the number of cores for large states, else 1.

        Returns
        -------
        variances
            (K,) Var_m = c_mᵀ C_m c_m, hartree².
        covariance_times_coefficients
            (K, n² + n) C_m c_m, hartree: half of the derivative of Var_m by c_m.
        gradient
            (K, n, n) antisymmetric G with d Var_m = Σ_{p<q} G[m, p, q] X[p, q] to first order when U_m becomes
            U_m exp(X), X antisymmetric. (Equivalently d Var_m = ½ Σ_pq G[m, p, q] X[p, q].) hartree².

        Raises
        ------
        InputError
            If a shape is wrong, an entry is not finite or a rotation is not orthogonal.
        """
        n = self.orbitals
        turns: NDArray[Any] = as_real_array(rotations, "rotations", (None, n, n))
        values = as_real_array(coefficients, "coefficients", (len(turns), feature_count(n)))
        error = float(np.max(np.abs(turns.transpose(0, 2, 1) @ turns - np.eye(n)), initial=0.0))
        if error > 1e-6:
            raise InputError(
                f"`rotations` must be orthogonal to 1e-6 (got a deviation of {error:.3g}); orthonormalise the columns"
            )
        if precision not in ("double", "single"):
            raise InputError(f'`precision` must be "double" or "single" (got {precision!r})')
        if precision == "single":
            turns = turns.astype(np.float32)
        variances, products = np.empty(len(turns)), np.empty_like(values)
        gradient = np.empty((len(turns), n, n))

        def evaluate(part: slice) -> None:
            opened = self._expectations(turns[part], values[part])
            variances[part], products[part], gradient[part] = opened.about(opened.mean)

        step = self._batch()
        parts = [slice(start, start + step) for start in range(0, len(turns), step)]
        if threads is not None:
            workers = as_count(threads, "threads", minimum=1)
        else:
            # Pieces of several small rotations are too short to share between threads.
            workers = available_threads() if step == 1 else 1
        in_parallel(evaluate, parts, workers)
        return variances, products, gradient

    def with_noise(self, noise: float) -> "ReferenceState":
        """This state depolarised within its electron-number sector: (1 − noise) ρ + noise · 1/D, D the sector's size.

        Raises
        ------
        InputError
            If `noise` is not in 0 … 1.
        """
        from fragkit.states._maximally_mixed import MaximallyMixedState
        from fragkit.states._mixed import mixture

        p = as_weight(noise, "noise")
        if p == 0.0:
            return self
        return mixture([(1.0 - p, self), (p, MaximallyMixedState(self.orbitals, self.electrons))])

    def _rotation(self, rotation: Any) -> Array:
        return as_rotation(rotation, self.orbitals)

    def _check_hamiltonian(self, hamiltonian: Hamiltonian) -> None:
        as_hamiltonian(hamiltonian)
        if hamiltonian.orbitals != self.orbitals or hamiltonian.electrons != self.electrons:
            raise MismatchError(
                f"`hamiltonian` must have {self.orbitals} orbitals and electrons {self.electrons} like the state "
                f"(got {hamiltonian.orbitals} orbitals, {hamiltonian.electrons})"
            )

    def __repr__(self) -> str:
        return f"{type(self).__name__}({self.description}, orbitals={self.orbitals}, electrons={self.electrons})"


def as_weight(value: Any, name: str) -> float:
    """Return `value` as a float in 0 … 1."""
    try:
        weight = float(value)
    except (TypeError, ValueError):
        raise InputError(f"`{name}` must be a number from 0 to 1 (got {value!r})") from None
    if not 0.0 <= weight <= 1.0:
        raise InputError(f"`{name}` must be from 0 to 1 (got {weight})")
    return weight


def as_shots(value: Any) -> int:
    """Return `value` as a number of shots."""
    return as_count(value, "shots")


def seeded(rng: np.random.Generator | int | None) -> np.random.Generator:
    """A generator from a seed, an existing generator (used as it is), or fresh entropy."""
    try:
        return np.random.default_rng(rng)
    except (TypeError, ValueError) as error:
        raise InputError(f"`rng` must be a numpy Generator, a seed or None (got {rng!r})") from error
