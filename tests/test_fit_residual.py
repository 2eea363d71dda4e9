"""The JAX residual: right values and derivatives against written-out sums, and no needless compilation."""

import jax
import jax.numpy as jnp
import numpy as np
import pytest
from molecules import molecule_hamiltonian

from fragkit.core import Hamiltonian, InputError
from fragkit.fit import (
    gauss_newton_product,
    padded_count,
    residual_and_gradient,
    residual_matrix,
    residual_target,
    squared_residual,
    target_of,
)


def random_fragments(count: int, n: int, seed: int = 0) -> tuple[np.ndarray, np.ndarray]:
    rng = np.random.default_rng(seed)
    rotations = np.linalg.qr(rng.normal(size=(count, n, n)))[0]
    coefficients = rng.normal(size=(count, n, n))
    return rotations, coefficients + coefficients.transpose(0, 2, 1)


def tangents(count: int, n: int, seed: int = 1) -> tuple[np.ndarray, np.ndarray]:
    rng = np.random.default_rng(seed)
    turn, change = rng.normal(size=(2, count, n, n))
    return turn - turn.transpose(0, 2, 1), change + change.transpose(0, 2, 1)


def written_out(rotations: np.ndarray, coefficients: np.ndarray) -> np.ndarray:
    return np.einsum("mij,mpi,mqi,mrj,msj->pqrs", coefficients, *[rotations] * 4, optimize=True)


def signed_hamiltonian(n: int) -> Hamiltonian:
    rng = np.random.default_rng(7)
    factors = rng.normal(size=(5, n, n))
    return Hamiltonian(
        0.0, np.zeros((n, n)), factors=factors + factors.transpose(0, 2, 1), factor_signs=[1, -1, 1, 1, -1],
        electrons=(1, 1),
    )  # fmt: skip


@pytest.mark.parametrize("count", [1, 3, 5])
def test_value_is_the_norm_of_the_full_tensor(count: int) -> None:
    hamiltonian = signed_hamiltonian(4)
    rotations, coefficients = random_fragments(count, 4)
    expected = np.linalg.norm(hamiltonian.two_body - written_out(rotations, coefficients))
    target = target_of(hamiltonian)
    assert np.sqrt(residual_and_gradient(target, rotations, coefficients)[0]) == pytest.approx(expected, rel=1e-10)
    with jax.enable_x64(True):
        matrix = residual_matrix(target, rotations, coefficients)
        assert float(jnp.linalg.norm(matrix)) == pytest.approx(expected, rel=1e-12)


def test_gradient_equals_that_of_the_plain_tensor_objective() -> None:
    """Reference: JAX through the written-out n⁴ sum and the matrix exponential."""
    hamiltonian = signed_hamiltonian(4)
    rotations, coefficients = random_fragments(2, 4)

    def plain(turn, change):
        turned = rotations @ jax.vmap(jax.scipy.linalg.expm)(turn)
        full = jnp.einsum("mij,mpi,mqi,mrj,msj->pqrs", coefficients + change, turned, turned, turned, turned)
        return jnp.sum((hamiltonian.two_body - full) ** 2)

    with jax.enable_x64(True):
        zero = jnp.zeros((2, 4, 4))
        by_turn, by_change = (np.asarray(g) for g in jax.grad(plain, argnums=(0, 1))(zero, zero))
    _, turn, change = residual_and_gradient(target_of(hamiltonian), rotations, coefficients)
    # X_ba = −X_ab: the derivative with respect to the one number of a pair is the difference.
    assert np.allclose(turn, by_turn - by_turn.transpose(0, 2, 1), atol=1e-9)
    assert np.allclose(change, by_change, atol=1e-9)


def test_gauss_newton_product_is_the_jacobian_twice() -> None:
    rotations, coefficients = random_fragments(3, 4)
    (turn, change), (other_turn, other_change) = tangents(3, 4, 1), tangents(3, 4, 2)
    step = 1e-5

    def slope(x: np.ndarray, l: np.ndarray) -> np.ndarray:
        def at(h: float) -> np.ndarray:
            cayley = np.linalg.solve(np.eye(4) - h / 2 * x, np.eye(4) + h / 2 * x)
            return written_out(rotations @ cayley, coefficients + h * l)

        return (at(step) - at(-step)) / (2 * step)

    product = gauss_newton_product(rotations, coefficients, turn, change)
    through_product = 0.5 * np.sum(product[0] * other_turn) + np.sum(product[1] * other_change)
    expected = np.sum(slope(turn, change) * slope(other_turn, other_change))
    assert through_product == pytest.approx(expected, rel=1e-7)


def test_jvp_and_vjp_of_the_residual_agree_with_each_other() -> None:
    hamiltonian = signed_hamiltonian(4)
    rotations, coefficients = random_fragments(2, 4)
    turn, change = tangents(2, 4)
    rng = np.random.default_rng(3)
    with jax.enable_x64(True):
        target = target_of(hamiltonian)

        def residual(u, l):
            return residual_matrix(target, u, l)

        direction = (jnp.asarray(rotations @ turn), jnp.asarray(change))
        value, along = jax.jvp(residual, (jnp.asarray(rotations), jnp.asarray(coefficients)), direction)
        weights = jnp.asarray(rng.normal(size=value.shape))
        back = jax.vjp(residual, jnp.asarray(rotations), jnp.asarray(coefficients))[1](weights)
        assert float(jnp.vdot(weights, along)) == pytest.approx(
            float(sum(jnp.vdot(a, b) for a, b in zip(back, direction, strict=True))), rel=1e-10
        )


def test_derivative_with_respect_to_the_integrals() -> None:
    """A user's objective: the residual as a function of a parameter of the factors, against finite differences."""
    rotations, coefficients = random_fragments(2, 4)
    rng = np.random.default_rng(5)
    factors, change = rng.normal(size=(2, 6, 4, 4))
    factors, change = (a + a.transpose(0, 2, 1) for a in (factors, change))

    def objective(parameter):
        return squared_residual(residual_target(factors + parameter * change), rotations, coefficients)

    with jax.enable_x64(True):
        slope = float(jax.jit(jax.grad(objective))(0.3))
        ahead, behind = float(objective(0.3 + 1e-5)), float(objective(0.3 - 1e-5))
    assert slope == pytest.approx((ahead - behind) / 2e-5, rel=1e-7)


def test_masked_fragments_do_not_count() -> None:
    hamiltonian = signed_hamiltonian(4)
    rotations, coefficients = random_fragments(3, 4)
    with jax.enable_x64(True):
        target = target_of(hamiltonian)
        two = squared_residual(target, rotations[:2], coefficients[:2])
        masked = squared_residual(target, rotations, coefficients, mask=np.array([1.0, 1.0, 0.0]))
        assert float(masked) == pytest.approx(float(two), rel=1e-12)


def test_more_fragments_within_the_padding_and_other_integrals_compile_nothing() -> None:
    compiled = []

    def listen(event: str, duration: float, **_: object) -> None:
        if "backend_compile" in event:
            compiled.append((event, duration))

    first, second = target_of(molecule_hamiltonian("BeH2")), target_of(molecule_hamiltonian("H2O"))
    assert padded_count(5) == padded_count(8) == 8
    jax.monitoring.register_event_duration_secs_listener(listen)
    try:
        jax.clear_caches()
        rotations, coefficients = random_fragments(5, 7)
        residual_and_gradient(first, rotations, coefficients)
        gauss_newton_product(rotations, coefficients, *tangents(5, 7))
        assert compiled  # the listener works
        compiled.clear()
        for count in (6, 7, 8):
            rotations, coefficients = random_fragments(count, 7)
            residual_and_gradient(second, rotations, coefficients)
            gauss_newton_product(rotations, coefficients, *tangents(count, 7))
        assert compiled == []
    finally:
        jax.monitoring.unregister_event_duration_listener(listen)


def test_single_precision_is_refused_with_the_line_to_add() -> None:
    with pytest.raises(InputError, match="enable_x64"):
        residual_target(np.eye(2)[None])
