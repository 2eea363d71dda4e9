"""The Hamiltonian as a sum of Pauli strings under Jordan-Wigner, held as bit masks."""

from dataclasses import dataclass
from itertools import product

import numpy as np
from numpy.typing import NDArray

from fragkit.core import Hamiltonian, InputError, as_real_array, frozen

Array = NDArray[np.float64]
Masks = NDArray[np.uint64]

_LONGEST = 62  # qubits that fit the bits of a mask


@dataclass(frozen=True, eq=False, repr=False)
class PauliTerms:
    """Σ_a coefficients[a] P_a + constant, with P_a = i^|x∧z| Xˣ Zᶻ: bit j of a mask belongs to qubit j.

    A string has X on the qubits of x only, Z on those of z only, and Y on those of both.

    Parameters
    ----------
    x, z
        (terms,) masks, the identity left out.
    coefficients
        (terms,) real, hartree.
    constant
        Coefficient of the identity, hartree.
    orbitals
        Number of spatial orbitals n; there are 2n qubits.
    order
        "blocked" (alpha orbitals on qubits 0 … n−1, then beta) or "interleaved" (2p alpha, 2p+1 beta).
    dropped
        Sum of the sizes of the coefficients that were left out as too small, hartree: the largest error it can make.
    """

    x: Masks
    z: Masks
    coefficients: Array
    constant: float
    orbitals: int
    order: str
    dropped: float

    @property
    def qubits(self) -> int:
        """Number of qubits."""
        return 2 * self.orbitals

    @property
    def one_norm(self) -> float:
        """Sum of the sizes of the coefficients without the identity, hartree."""
        return float(np.sum(np.abs(self.coefficients)))

    def label(self, index: int) -> str:
        """The string as letters, qubit 0 first.

        >>> terms = jordan_wigner(Hamiltonian(0.0, [[0.0, 1.0], [1.0, 0.0]], np.zeros((2,) * 4), electrons=(1, 0)))
        >>> [terms.label(k) for k in range(len(terms))]
        ['XXII', 'YYII', 'IIXX', 'IIYY']
        """
        x, z = int(self.x[index]), int(self.z[index])
        return "".join("IXZY"[(x >> j & 1) + 2 * (z >> j & 1)] for j in range(self.qubits))

    def __len__(self) -> int:
        """Number of terms, the identity not counted."""
        return len(self.coefficients)

    def __repr__(self) -> str:
        return f"PauliTerms({len(self)} terms and the identity, qubits={self.qubits}, order={self.order!r})"


def jordan_wigner(hamiltonian: Hamiltonian, *, order: str = "blocked", tolerance: float = 1e-8) -> PauliTerms:
    """The Pauli strings of a Hamiltonian under the Jordan-Wigner transformation (Jordan & Wigner, Z. Phys. 47 (1928)).

    Qubit j is 1 where spin-orbital j is filled. Terms are sorted by x mask, then z mask.

    Parameters
    ----------
    hamiltonian
        At most 31 orbitals.
    order
        "blocked" or "interleaved" spin-orbitals. The number of terms and which of them commute do not depend on it, the
        number of qubit-wise commuting groups does.
    tolerance
        Strings with a coefficient of at most this size in hartree are left out, and their sum is stated.

    Raises
    ------
    InputError
        If there are more than 31 orbitals or `order` is not known.

    Examples
    --------
    >>> ham = Hamiltonian(0.5, [[1.0]], [[[[2.0]]]], electrons=(1, 1))  # 0.5 + n + 2 n_alpha n_beta
    >>> terms = jordan_wigner(ham)
    >>> terms.constant, terms.coefficients.tolist()
    (2.0, [-1.0, -1.0, 0.5])
    """
    n = hamiltonian.orbitals
    if 2 * n > _LONGEST:
        raise InputError(f"`hamiltonian` must have at most {_LONGEST // 2} orbitals for Pauli strings (got {n})")
    places = qubit_places(n, order)
    smallest = float(as_real_array(tolerance, "tolerance", ()))
    pieces = [_one_body_products(hamiltonian.one_body, places)]
    two_body = hamiltonian.two_body
    p, q, r, s = (index.ravel() for index in np.indices((n,) * 4))
    values = two_body.ravel()
    for spin in (0, 1):
        # (pq|rs) a†_p a†_r a_s a_q of one spin, each pair once: p > r and s < q collected from all signs.
        pick = (p > r) & (q > s)
        exchange = two_body[p[pick], s[pick], r[pick], q[pick]]
        modes = places[spin]
        pieces.append(_products(values[pick] - exchange, [modes[p], modes[r], modes[s], modes[q]], pick))
    pick = np.ones(len(values), dtype=bool)
    alpha, beta = places
    pieces.append(_products(values, [alpha[p], beta[r], beta[s], alpha[q]], pick))
    x, z, coefficients = _collect(pieces)
    # From Xˣ Zᶻ to the Hermitian string: i^−|x∧z|, real since each term of a real symmetric operator has an even |x∧z|.
    coefficients = np.where(np.bitwise_count(x & z) % 4 == 2, -coefficients, coefficients)
    identity = (x == 0) & (z == 0)
    keep = (np.abs(coefficients) > smallest) & ~identity
    small = ~keep & ~identity
    return PauliTerms(
        x=_frozen(x[keep]),
        z=_frozen(z[keep]),
        coefficients=frozen(coefficients[keep]),
        constant=hamiltonian.constant + float(np.sum(coefficients[identity])),
        orbitals=n,
        order=order,
        dropped=float(np.sum(np.abs(coefficients[small]))),
    )


def qubit_places(orbitals: int, order: str) -> NDArray[np.int64]:
    """(2, n) qubit of each orbital with alpha and with beta spin."""
    if order == "blocked":
        return np.arange(2 * orbitals).reshape(2, orbitals)
    if order == "interleaved":
        return np.ascontiguousarray(np.arange(2 * orbitals).reshape(orbitals, 2).T)
    raise InputError(f'`order` must be "blocked" or "interleaved" (got {order!r})')


def _one_body_products(one_body: Array, places: NDArray[np.int64]) -> tuple[Masks, Masks, Array]:
    n = len(one_body)
    p, q = (index.ravel() for index in np.indices((n, n)))
    pieces = [_ladder_products(one_body.ravel(), [modes[p], modes[q]], [True, False]) for modes in places]
    return _collect(pieces)


def _products(values: Array, modes: list[NDArray[np.int64]], pick: NDArray[np.bool_]) -> tuple[Masks, Masks, Array]:
    return _collect([_ladder_products(values, [m[pick] for m in modes], [True, True, False, False])])


def _ladder_products(values: Array, modes: list[NDArray[np.int64]], created: list[bool]) -> tuple[Masks, Masks, Array]:
    """Masks and coefficients in Xˣ Zᶻ of values times a product of ladder operators.

    With Z_< on the qubits below, a†_j = Z_< X_j (1 + Z_j)/2 and a_j = Z_< X_j (1 − Z_j)/2, and
    (Xˣ Zᶻ)(Xˣ' Zᶻ') = (−1)^|z∧x'| X^{x⊕x'} Z^{z⊕z'}: everything stays real.
    """
    one = np.uint64(1)
    single = [one << m.astype(np.uint64) for m in modes]
    below = [bit - one for bit in single]
    xs, zs, weights = [], [], []
    for choice in product((False, True), repeat=len(modes)):
        x = np.zeros(len(values), dtype=np.uint64)
        z = np.zeros(len(values), dtype=np.uint64)
        weight = values * 0.5 ** len(modes)
        for bit, low, with_z, creates in zip(single, below, choice, created, strict=True):
            weight = np.where(np.bitwise_count(z & bit) & 1, -weight, weight)
            x = x ^ bit
            z = z ^ (low | bit if with_z else low)
            if with_z and not creates:
                weight = -weight
        xs.append(x)
        zs.append(z)
        weights.append(weight)
    return np.concatenate(xs), np.concatenate(zs), np.concatenate(weights)


def _collect(pieces: list[tuple[Masks, Masks, Array]]) -> tuple[Masks, Masks, Array]:
    """Sum of the coefficients of equal strings."""
    x, z, weights = (np.concatenate(parts) for parts in zip(*pieces, strict=True))
    rank = np.lexsort((z, x))
    x, z, weights = x[rank], z[rank], weights[rank]
    new = np.ones(len(x), dtype=bool)
    new[1:] = (x[1:] != x[:-1]) | (z[1:] != z[:-1])
    starts = np.flatnonzero(new)
    return x[starts], z[starts], np.add.reduceat(weights, starts)


def _frozen(masks: Masks) -> Masks:
    masks.setflags(write=False)
    return masks
