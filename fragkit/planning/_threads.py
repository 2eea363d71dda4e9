"""BLAS threads: one for small problems, where a second one costs more than it brings."""

from collections.abc import Callable
from functools import wraps
from typing import ParamSpec, TypeVar

from threadpoolctl import threadpool_limits

Parameters = ParamSpec("Parameters")
Result = TypeVar("Result")

SINGLE_THREAD_ORBITALS = 8
"""Up to this size matrices are so small that waiting for a second thread takes ten times as long on a busy machine."""


def sized_blas_threads(function: Callable[Parameters, Result]) -> Callable[Parameters, Result]:
    """Run `function`, whose first argument has `orbitals`, on one BLAS thread if they are few."""

    @wraps(function)
    def limited(*args: Parameters.args, **kwargs: Parameters.kwargs) -> Result:
        orbitals = getattr(args[0] if args else next(iter(kwargs.values()), None), "orbitals", 0)
        if not isinstance(orbitals, int) or orbitals > SINGLE_THREAD_ORBITALS:
            return function(*args, **kwargs)
        with threadpool_limits(1, user_api="blas"):
            return function(*args, **kwargs)

    return limited
