"""The cost as a function that jax differentiates."""

import jax
import numpy as np
import pytest
from molecules import full_ci, molecule_hamiltonian

from fragkit.core import Hamiltonian, InputError
from fragkit.planning import differentiable_cost, exact_coefficients
from fragkit.states import ReferenceState, reference_state


def random_rotations(count: int, n: int) -> np.ndarray:
    rng = np.random.default_rng(2)
    return np.stack([np.linalg.qr(rng.normal(size=(n, n)))[0] for _ in range(count)])


@pytest.mark.parametrize("name", ["H2", "H4"])
def test_value_is_the_cost_of_the_least_variance_coefficients(name: str) -> None:
    hamiltonian, vector = molecule_hamiltonian(name), full_ci(name)[1]
    n = hamiltonian.orbitals
    rotations = random_rotations(9, n)
    state = ReferenceState.from_ci_vector(hamiltonian, vector, noise=1e-2)
    found = exact_coefficients(hamiltonian, rotations, [state.moments(u)[1] for u in rotations], tolerance=1e-9)
    cost = differentiable_cost(hamiltonian, vector, noise=1e-2)
    with jax.enable_x64(True):
        best = float(cost(rotations, found.shares))
        equal = float(cost(rotations))
    assert best == pytest.approx(found.cost, rel=1e-7)
    assert equal > best


def test_gradient_by_finite_differences_for_open_shells_too() -> None:
    # Three sites with energies and repulsions of our own.
    one_body = np.array([[0.1, -1.0, 0.0], [-1.0, -0.3, -0.8], [0.0, -0.8, 0.4]])
    on_site = np.zeros((3, 3, 3, 3))
    on_site[range(3), range(3), range(3), range(3)] = [3.0, 4.0, 5.0]
    hamiltonian = Hamiltonian(0.0, one_body, on_site, electrons=(2, 1))
    vector = reference_state(hamiltonian, "fci").vector  # pyright: ignore[reportAttributeAccessIssue]
    rotations = random_rotations(6, 3)
    shares = np.linspace(1.0, 2.0, 6)
    rng = np.random.default_rng(0)
    generator = rng.normal(size=rotations.shape)
    generator -= generator.transpose(0, 2, 1)
    change = rng.normal(size=6)
    cost = differentiable_cost(hamiltonian, vector, noise=1e-2)
    with jax.enable_x64(True):
        by_rotations, by_shares = (np.asarray(g) for g in jax.grad(cost, argnums=(0, 1))(rotations, shares))

        def along(step: float) -> float:
            half = 0.5 * step * generator
            turned = rotations @ np.linalg.solve(np.eye(3) - half, np.eye(3) + half)
            return float(cost(turned, shares + step * change))

        slope = (along(1e-5) - along(-1e-5)) / 2e-5
    assert slope == pytest.approx(np.sum(by_rotations * (rotations @ generator)) + by_shares @ change, rel=1e-5)


def test_single_precision_is_refused_with_the_line_to_add() -> None:
    cost = differentiable_cost(molecule_hamiltonian("H2"), full_ci("H2")[1])
    with jax.enable_x64(False), pytest.raises(InputError, match=r"jax\.config\.update"):
        cost(random_rotations(3, 2))


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        ({"vector": np.ones((2, 2))}, "`vector` must be normalised"),
        ({"vector": np.ones(4) / 2}, "`vector` must have shape"),
        ({"vector": np.full((2, 2), 0.5), "noise": 0.0}, "`noise` must be a finite number above zero"),
        ({"vector": np.full((2, 2), 0.5), "noise": 1.5}, "`noise` must be at most 1"),
    ],
)
def test_impossible_arguments_are_named(arguments: dict, message: str) -> None:
    with pytest.raises(InputError, match=message):
        differentiable_cost(molecule_hamiltonian("H2"), **arguments)


def test_shapes_are_checked_at_the_call() -> None:
    cost = differentiable_cost(molecule_hamiltonian("H2"), full_ci("H2")[1])
    with jax.enable_x64(True):
        with pytest.raises(InputError, match="`rotations` must have shape"):
            cost(np.eye(2))
        with pytest.raises(InputError, match="`shares` must have shape"):
            cost(random_rotations(3, 2), np.ones(2))
