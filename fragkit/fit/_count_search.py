"""The smallest number of fragments that reaches a tolerance: a bracket, then bisection, with warm starts."""

from typing import Protocol

from fragkit.fit._point import Point
from fragkit.fit._wording import counted


class CountedFit(Protocol):
    """A fit that can be repeated with another number of fragments."""

    @property
    def out_of_time(self) -> bool:
        """Whether the search must end."""
        ...

    def best_with(self, count: int, *, warm: Point | None = None) -> Point:
        """The best point found with `count` fragments."""
        ...

    def reached(self, point: Point) -> bool:
        """Whether a point is good enough."""
        ...

    def resumed(self) -> Point | None:
        """A point to begin with."""
        ...


def counting_bound(orbitals: int) -> int:
    """Fragments that have as many numbers as the tensor has: P(P+1)/2 over n², P = n(n+1)/2, rounded up.

    >>> [counting_bound(n) for n in (2, 6, 7, 8, 10)]
    [2, 7, 9, 11, 16]
    """
    pairs = orbitals * (orbitals + 1) // 2
    return -(-pairs * (pairs + 1) // (2 * orbitals**2))


def smallest_count(run: CountedFit, *, guess: int) -> tuple[Point, str]:
    """The point with the fewest fragments found, and a sentence about it.

    Up or down from the guess in doubling steps until one number reaches the tolerance and a smaller one does not,
    then bisection between them. Each fit starts from the nearest one that is known. A number that fails is one for
    which no start reached the tolerance, so the answer is an upper bound of the true smallest number.
    """
    tried: dict[int, Point] = {}

    def reaches(count: int) -> bool:
        nearest = min(tried, key=lambda known: (abs(known - count), known)) if tried else None
        warm = run.resumed() if nearest is None else tried[nearest]
        tried[count] = run.best_with(count, warm=warm)
        return run.reached(tried[count])

    failing, reaching = 0, None
    count, step = guess, 1
    while not run.out_of_time and (reaching is None or reaching - failing > 1):
        if reaches(count):
            reaching = count
            count = (failing + reaching) // 2 if failing else max(1, reaching - step)
        else:
            failing = count
            count = failing + step if reaching is None else (failing + reaching) // 2
        if reaching is None or not failing:
            step *= 2
    if reaching is None:
        last = max(tried)
        return tried[last], (
            f"The time limit ended the search at {counted(last, 'fragment')}, with a residual of "
            f"{tried[last].norm:.2g} Ha; raise `seconds` or `tol`."
        )
    point = tried[reaching]
    message = f"A residual of {point.norm:.2g} Ha was reached with {counted(reaching, 'fragment')}"
    if failing:
        message += f"; with {failing} the best of all starts was {tried[failing].norm:.2g} Ha"
    if run.out_of_time and reaching - failing > 1:
        message += "; the time limit ended the search for fewer, raise `seconds` to go on"
    return point, message + "."
