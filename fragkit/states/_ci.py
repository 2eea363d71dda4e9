"""Pure states given by a full-CI vector: rotate the vector, weight the determinants."""

import hashlib
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from fragkit.core import Hamiltonian, InputError, as_hamiltonian, as_real_array
from fragkit.states._assembly import SpinMoments, feature_moments
from fragkit.states._base import Array, Bits, Expectations, ReferenceState, as_shots, as_weight, seeded
from fragkit.states._ci_expectations import CIExpectations
from fragkit.states._factored import SMALL, FactoredVector, factor_vector
from fragkit.states._hamiltonian_action import energy_and_variance
from fragkit.states._strings import compound_matrix, strings


class CIState(ReferenceState):
    """A pure state with a real full-CI vector, alpha strings × beta strings in pyscf's order.

    Use `CIState.from_ci_vector` (checked) or `reference_state`. `vector` is read-only, shape
    (C(n, n_alpha), C(n, n_beta)). `converged` and `message` tell how an iterative solution ended.
    """

    def __init__(
        self,
        vector: Array,
        orbitals: int,
        electrons: tuple[int, int],
        *,
        description: str = "CI vector",
        hamiltonian_digest: str | None = None,
        converged: bool = True,
        message: str = "",
    ) -> None:
        self.orbitals = orbitals
        self.electrons = electrons
        self.vector = np.array(vector, dtype=np.float64)
        self.vector.setflags(write=False)
        self.description = description
        self.hamiltonian_digest = hamiltonian_digest
        self.converged = converged
        self.message = message
        chain = hashlib.sha256(f"ci {orbitals} {electrons}".encode())
        chain.update(np.ascontiguousarray(np.round(self.vector, 10) + 0.0).tobytes())
        self.digest = chain.hexdigest()

    @classmethod
    def from_ci_vector(
        cls, hamiltonian: Hamiltonian, vector: Any, *, description: str = "given CI vector"
    ) -> "CIState":
        """The state with the given coefficients, normalised to 1e-6; see `ReferenceState.from_ci_vector`."""
        as_hamiltonian(hamiltonian)
        n, (a, b) = hamiltonian.orbitals, hamiltonian.electrons
        shape = (strings(n, a).count, strings(n, b).count)
        got = np.shape(vector)
        if got != shape:
            raise InputError(
                f"`vector` must have shape {shape}, alpha strings × beta strings of {n} orbitals with electrons "
                f"({a}, {b}) (got {got}); check the active space and the electron numbers"
            )
        array = as_real_array(vector, "vector", shape)
        norm = float(np.linalg.norm(array))
        if abs(norm - 1.0) > 1e-6:
            raise InputError(f"`vector` must be normalised to 1e-6 (got norm {norm:.8g}); divide it by its norm")
        return cls(array / norm, n, (a, b), description=description, hamiltonian_digest=hamiltonian.digest)

    def rotated_vector(self, rotation: Any) -> Array:
        """The CI vector in the orbitals that are the columns of `rotation`, same shape and order as `vector`."""
        u = self._rotation(rotation)
        a, b = self.electrons
        left = compound_matrix(u, a)
        right = left if a == b else compound_matrix(u, b)
        return left @ self.vector @ right.T

    def compressed(self, weight: float = 1e-10) -> "CIState":
        """The nearest state of lower rank (alpha strings × beta strings) that loses at most `weight` of the norm.

        Evaluations for planning get faster in proportion to the rank. It is a slightly different state, whose
        amplitudes are off by up to the square root of `weight`. Plan with it, then judge the plan on the full state.

        Raises
        ------
        InputError
            If `weight` is not in 0 … 1.

        Examples
        --------
        >>> import numpy as np
        >>> state = CIState(np.diag([0.8, 0.6]), 2, (1, 1))
        >>> state.compressed(0.5).vector
        array([[1., 0.],
               [0., 0.]])
        """
        limit = as_weight(weight, "weight")
        factored = self._factored
        order = np.argsort(np.abs(factored.scale))
        lost = np.cumsum(factored.scale[order] ** 2)
        dropped = min(int(np.searchsorted(lost, limit * lost[-1], side="right")), len(order) - 1)
        kept = np.sort(order[dropped:])
        vector = (factored.left.matrix[:, kept] * factored.scale[kept]) @ factored.right.matrix[:, kept].T
        return CIState(
            vector / np.linalg.norm(vector),
            self.orbitals,
            self.electrons,
            description=f"{self.description}, rank {len(kept)}",
            hamiltonian_digest=self.hamiltonian_digest,
            converged=self.converged,
            message=self.message,
        )

    def _probabilities(self, rotation: Any) -> Array:
        """Probability of each determinant in the rotated orbitals, alpha strings × beta strings."""
        if max(self.vector.shape) > SMALL:
            return self.rotated_vector(rotation) ** 2
        factored = self._factored
        rotations = self._rotation(rotation)[None]
        left = factored.left.rotated(rotations, factored.workspace)[0]
        right = left if factored.symmetric else factored.right.rotated(rotations, factored.workspace)[0]
        return ((left * factored.scale) @ right.T) ** 2

    def moments(self, rotation: Any) -> tuple[Array, Array]:
        """Mean and covariance of all features; see `ReferenceState.moments`."""
        return weighted_moments(self._probabilities(rotation), self.orbitals, self.electrons)

    def sample(self, rotation: Any, shots: int, rng: np.random.Generator | int | None = None) -> Bits:
        """Ideal measurement results; see `ReferenceState.sample`."""
        generator = seeded(rng)
        weights = np.cumsum(self._probabilities(rotation).ravel())
        drawn = np.searchsorted(weights, generator.random(as_shots(shots)) * weights[-1], side="right")
        alpha, beta = (strings(self.orbitals, k) for k in self.electrons)
        rows, columns = np.divmod(np.minimum(drawn, len(weights) - 1), beta.count)
        return np.hstack([alpha.occupations[rows], beta.occupations[columns]]).astype(np.uint8)

    def energy(self, hamiltonian: Hamiltonian) -> float:
        """Expectation value of the Hamiltonian, hartree."""
        self._check_hamiltonian(hamiltonian)
        return energy_and_variance(hamiltonian, self.vector)[0]

    def variance(self, hamiltonian: Hamiltonian) -> float:
        """Variance of the Hamiltonian, hartree²; 0 for an exact eigenstate."""
        self._check_hamiltonian(hamiltonian)
        return energy_and_variance(hamiltonian, self.vector)[1]

    def _expectations(self, rotations: Array, coefficients: Array) -> Expectations:
        return CIExpectations(self._factored, self.electrons, rotations, coefficients)

    def _batch(self) -> int:
        return max(1, 100_000 // self.vector.size)

    @cached_property
    def _factored(self) -> FactoredVector:
        return factor_vector(self.vector, self.orbitals, self.electrons)


def weighted_moments(weights: NDArray[np.float64], orbitals: int, electrons: tuple[int, int]) -> tuple[Array, Array]:
    """Feature means and covariance for determinant probabilities `weights`, alpha strings × beta strings.

    Only string tables enter, never a table of determinants × features.
    """
    alpha, beta = (strings(orbitals, k) for k in electrons)
    at_alpha, at_beta = weights.sum(axis=1), weights.sum(axis=0)
    beta_given_alpha = weights @ beta.occupations  # E[y_j; string a]
    alpha_given_beta = weights.T @ alpha.occupations
    n, s = orbitals, alpha.features.shape[1]
    alpha_cross = np.einsum("ai,aj->aij", alpha.occupations, beta_given_alpha).reshape(alpha.count, n * n)
    beta_cross = np.einsum("bi,bj->bij", alpha_given_beta, beta.occupations).reshape(beta.count, n * n)
    moments = SpinMoments(
        alpha=at_alpha @ alpha.features,
        beta=at_beta @ beta.features,
        alpha_alpha=alpha.features.T @ (at_alpha[:, None] * alpha.features),
        beta_beta=beta.features.T @ (at_beta[:, None] * beta.features),
        alpha_beta=alpha.features.T @ (weights @ beta.features),
        alpha_cross=(alpha_cross.T @ alpha.features).reshape(n, n, s),
        beta_cross=(beta_cross.T @ beta.features).reshape(n, n, s),
        products=alpha.products.T @ (weights @ beta.products),
    )
    return feature_moments(moments, orbitals)
