"""The squared residual of a set of fragments, its gradient and Gauss-Newton products, in JAX.

With two-electron factors L^Q, (pq|rs) = Σ_Q s_Q L^Q_pq L^Q_rs, no array of n⁴ numbers is needed:

‖G − Σ_m F_m‖² = ‖G‖² − 2 Σ_m Σ_ij λ^m_ij Σ_Q s_Q d^{mQ}_i d^{mQ}_j + Σ_{mm'} ⟨λ^m, S λ^{m'} Sᵀ⟩,

d^{mQ}_i = (U_mᵀ L^Q U_m)_ii and S = (U_mᵀ U_m')∘², the square taken entry by entry. One evaluation costs
O(M R n³ + M² n³). The difference of large numbers loses digits: below about 1e-7 ‖G‖ take `residual_matrix`.

`residual_target`, `squared_residual` and `residual_matrix` are ordinary JAX functions, to be traced, jitted and
differentiated with respect to rotations, coefficients and integrals inside any program that has 64-bit numbers on.
`residual_and_gradient` and `gauss_newton_product` take and return numpy arrays; they pad the number of fragments,
so that a few more or fewer do not make XLA compile again.
"""

from functools import partial
from typing import Any, NamedTuple

import jax
import jax.numpy as jnp
import numpy as np
from numpy.typing import NDArray

from fragkit.core import Hamiltonian, InputError, pair_indices
from fragkit.fit._pairs import pair_weights

Array = NDArray[np.float64]


class ResidualTarget(NamedTuple):
    """Two-electron integrals in the form that the residual needs; a JAX pytree.

    `rows` (R, P) are the factors over weighted pairs, P = n(n+1)/2; `signs` (R,) are ±1; `squared_norm` is ‖G‖².
    """

    rows: Any
    signs: Any
    squared_norm: Any


def residual_target(factors: Any, factor_signs: Any = None) -> ResidualTarget:
    """Prepare two-electron factors (R, n, n), hartree^½, and their signs (R,), all +1 when left out.

    Differentiable with respect to `factors`, so that derivatives of a fit with respect to integrals can be taken.

    >>> import jax
    >>> with jax.enable_x64(True):
    ...     float(residual_target(np.eye(2)[None]).squared_norm)
    4.0
    """
    factors = _traced(factors, "factors")
    rows, columns = pair_indices(factors.shape[-1])
    packed = factors[:, rows, columns] * pair_weights(factors.shape[-1])
    signs = jnp.ones(len(packed)) if factor_signs is None else _traced(factor_signs, "factor_signs")
    gram = packed @ packed.T
    return ResidualTarget(packed, signs, signs @ (gram * gram) @ signs)


def squared_residual(target: ResidualTarget, rotations: Any, coefficients: Any, mask: Any = None) -> Any:
    """‖G − Σ_m F_m‖² in hartree² for fragments ½ Σ λ_ij n_i n_j, without an n⁴ array.

    Parameters
    ----------
    target
        From `residual_target`.
    rotations
        (M, n, n), orthogonal, new orbitals in the columns. The formula holds for any matrices U, so derivatives
        with respect to U are those of F = Σ λ_ij U_pi U_qi U_rj U_sj; project them for steps U exp(X).
    coefficients
        (M, n, n) λ, hartree; only the symmetric part counts.
    mask
        (M,) of 1 for fragments that count and 0 for padding; all count when left out.

    Raises
    ------
    InputError
        If 64-bit numbers are off in JAX.

    Examples
    --------
    >>> import jax
    >>> with jax.enable_x64(True):
    ...     target = residual_target(np.eye(2)[None])
    ...     float(squared_residual(target, np.eye(2)[None], 0.5 * np.ones((1, 2, 2))))
    1.0
    """
    rotations = _traced(rotations, "rotations")
    coefficients = _traced(coefficients, "coefficients")
    return (
        target.squared_norm
        + _attraction(target, rotations, coefficients, mask)
        + _repulsion(target, rotations, coefficients, mask)
    )


def residual_matrix(target: ResidualTarget, rotations: Any, coefficients: Any, mask: Any = None) -> Any:
    """G − Σ_m F_m as a matrix (P, P) over weighted pairs; its Frobenius norm is that of the n⁴ tensor, digits kept.

    For small residuals and for `jax.jvp` or `jax.vjp` with the residual itself; P² = n⁴/4 numbers.
    """
    rotations = _traced(rotations, "rotations")
    coefficients = _masked(_traced(coefficients, "coefficients"), mask)
    pairs = _pairs(rotations)
    tensor = (target.rows.T * target.signs) @ target.rows
    return tensor - _flat(coefficients @ pairs).T @ _flat(pairs)


def residual_and_gradient(target: ResidualTarget, rotations: Array, coefficients: Array) -> tuple[float, Array, Array]:
    """Squared residual and its gradient with respect to X (U → U exp(X)) and λ, as numpy arrays.

    The first gradient (M, n, n) is antisymmetric and holds dE/dX_ab for a < b, where X_ba = −X_ab; the second
    (M, n, n) is symmetric and holds the derivative with respect to each entry of λ on its own.
    """
    count = len(rotations)
    rotations, coefficients, mask = _padded(rotations, coefficients)
    with jax.enable_x64(True):
        # Two programs: in one the independent halves get into each other's way on a few CPU cores.
        first = _gradient(target, rotations, coefficients, mask, part=_attraction)
        second = _gradient(target, rotations, coefficients, mask, part=_repulsion)
        turn, slope = (np.asarray(first[k]) + np.asarray(second[k]) for k in (0, 1))
        # The halves are of first and second degree in λ, so their slopes tell their values (Euler).
        value = float(target.squared_norm)
        value += float(np.sum(coefficients * (np.asarray(first[1]) + 0.5 * np.asarray(second[1]))))
        return value, turn[:count], slope[:count]


def gauss_newton_product(rotations: Array, coefficients: Array, turns: Array, changes: Array) -> tuple[Array, Array]:
    """JᵀJ (turns, changes), J the derivative of the residual tensor with respect to X and λ, as numpy arrays.

    `turns` (M, n, n) is antisymmetric, `changes` (M, n, n) symmetric. The results have the same form and the
    convention of `residual_and_gradient`: ½ of its gradient is −Jᵀ residual. The integrals do not enter.
    """
    count = len(rotations)
    rotations, coefficients, mask = _padded(rotations, coefficients)
    turns, changes = _grown(turns, len(mask)), _grown(changes, len(mask))
    with jax.enable_x64(True):
        turn, slope = _normal_product(rotations, coefficients, mask, turns, changes)
        return np.asarray(turn)[:count], np.asarray(slope)[:count]


def target_of(hamiltonian: Hamiltonian) -> ResidualTarget:
    """The `ResidualTarget` of a Hamiltonian, as numpy arrays.

    >>> on_site = np.zeros((2, 2, 2, 2))
    >>> on_site[0, 0, 0, 0] = on_site[1, 1, 1, 1] = 3.0
    >>> ham = Hamiltonian(0.0, np.zeros((2, 2)), on_site, electrons=(1, 1))
    >>> round(float(target_of(ham).squared_norm), 12)
    18.0
    """
    with jax.enable_x64(True):
        target = residual_target(hamiltonian.factors, hamiltonian.factor_signs)
        return ResidualTarget(*(np.asarray(part) for part in target))


def padded_count(count: int) -> int:
    """Number of fragments that `count` is padded to: the next multiple of 4, or of 8 above 16.

    >>> [padded_count(k) for k in (1, 4, 5, 17, 30)]
    [4, 4, 8, 24, 32]
    """
    step = 4 if count <= 16 else 8
    return max(step, -(-count // step) * step)


@partial(jax.jit, static_argnames="part")
def _gradient(target, rotations, coefficients, mask, part):
    by_rotation, by_coefficient = jax.grad(part, argnums=(1, 2))(target, rotations, coefficients, mask)
    return _tangent(rotations, jax.lax.optimization_barrier(by_rotation)), by_coefficient


@jax.jit
def _normal_product(rotations, coefficients, mask, turns, changes):
    def tensors_with(u, l):
        # ⟨F(U, λ), F(u, l)⟩ as a function of both; its mixed derivative is JᵀJ.
        return lambda a, b: _inner(_overlap(a, u) ** 2, _masked(b, mask), _masked(l, mask))

    def along(a, b):
        return jax.jvp(lambda u, l: tensors_with(u, l)(a, b), (rotations, coefficients), (rotations @ turns, changes))[
            1
        ]

    by_rotation, by_coefficient = jax.grad(along, argnums=(0, 1))(rotations, coefficients)
    return _tangent(rotations, by_rotation), by_coefficient


def _tangent(rotations, gradient):
    """Derivative with respect to the antisymmetric X of U exp(X), from that with respect to U."""
    local = jnp.swapaxes(rotations, 1, 2) @ gradient
    return local - jnp.swapaxes(local, 1, 2)


def _pairs(rotations):
    """Weighted pair vectors of the occupation operators as rows, (M, n, P)."""
    n = rotations.shape[-1]
    rows, columns = pair_indices(n)
    orbitals = jnp.swapaxes(rotations, 1, 2)
    # Products with 0/1 matrices instead of indexing: the derivative of indexing is a scatter, slow on CPUs.
    identity = np.eye(n)
    return (orbitals @ (identity[:, rows] * pair_weights(n))) * (orbitals @ identity[:, columns])


def _flat(blocks):
    """(M, n, K) as one matrix (M n, K), so that one large product replaces M small ones."""
    return blocks.reshape(-1, blocks.shape[-1])


def _overlap(left, right):
    """U_mᵀ U_m' of all pairs of fragments, (M n, M n)."""
    return _flat(jnp.swapaxes(left, 1, 2)) @ _flat(jnp.swapaxes(right, 1, 2)).T


def _attraction(target, rotations, coefficients, mask):
    """−2 ⟨G, Σ_m F_m⟩."""
    pairs = jax.lax.optimization_barrier(_pairs(rotations))
    diagonals = jax.lax.optimization_barrier(_flat(pairs) @ target.rows.T).reshape(*pairs.shape[:2], -1)
    best = (diagonals * target.signs) @ jnp.swapaxes(diagonals, 1, 2)
    return -2.0 * jnp.sum(_masked(coefficients, mask) * best)


def _repulsion(target, rotations, coefficients, mask):
    """‖Σ_m F_m‖²."""
    del target
    overlap = _overlap(rotations, rotations)
    coefficients = _masked(coefficients, mask)
    return _inner(overlap * overlap, coefficients, coefficients)


def _inner(squares, left, right):
    """Σ_{mm'} ⟨λ^m, S λ^{m'} Sᵀ⟩ for S (M n, M n): the trace of λ S λ' Sᵀ with block-diagonal λ and λ'."""
    count, n, _ = left.shape
    # Barriers: without them XLA repeats the products inside the transposed sum, several times the work.
    squares = jax.lax.optimization_barrier(squares)
    one = jax.lax.optimization_barrier(left @ squares.reshape(count, n, count * n))
    two = jax.lax.optimization_barrier(right @ squares.T.reshape(count, n, count * n))
    return jnp.sum(_flat(one) * _flat(two).T)


def _masked(coefficients, mask):
    symmetric = 0.5 * (coefficients + jnp.swapaxes(coefficients, 1, 2))
    return symmetric if mask is None else symmetric * jnp.asarray(mask)[:, None, None]


def _traced(value, name):
    array = jnp.asarray(value)
    if array.dtype != jnp.float64:
        raise InputError(
            f"`{name}` must be 64-bit (got {array.dtype}): the residual is a difference of large numbers; put the "
            'call into `with jax.enable_x64(True):`, or run jax.config.update("jax_enable_x64", True) at the start'
        )
    return array


def _padded(rotations, coefficients):
    count, n, _ = rotations.shape
    size = padded_count(count)
    mask = np.zeros(size)
    mask[:count] = 1.0
    grown = np.broadcast_to(np.eye(n), (size, n, n)).copy()
    grown[:count] = rotations
    return grown, _grown(coefficients, size), mask


def _grown(blocks, size):
    grown = np.zeros((size, *blocks.shape[1:]))
    grown[: len(blocks)] = blocks
    return grown
