"""How many circuits it takes."""


def least_count(orbitals: int) -> int:
    """Fewest generic rotations that reproduce every Hamiltonian of n orbitals, ⌈(n+1)(n+2)/4⌉.

    Modulo operators that are constant in the sector each brings n(n−1)/2 new opposite-spin rows.

    >>> [least_count(n) for n in (2, 6, 7, 8, 10, 12)]
    [3, 14, 18, 23, 33, 46]
    """
    return -(-(orbitals + 1) * (orbitals + 2) // 4)
