"""Threads over independent pieces of work, each of which spends its time in numpy."""

import os
from collections.abc import Callable, Sequence
from concurrent.futures import ThreadPoolExecutor
from functools import cache
from typing import TypeVar

from threadpoolctl import ThreadpoolController

T = TypeVar("T")


def available_threads() -> int:
    """OMP_NUM_THREADS if it is set, else the number of cores this process may use."""
    wanted = os.environ.get("OMP_NUM_THREADS", "")
    if wanted.isdigit() and int(wanted) > 0:
        return int(wanted)
    return len(os.sched_getaffinity(0)) if hasattr(os, "sched_getaffinity") else os.cpu_count() or 1


@cache
def _controller() -> ThreadpoolController:
    return ThreadpoolController()


def in_parallel(work: Callable[[T], None], pieces: Sequence[T], threads: int) -> None:
    """Call `work` on every piece, on up to `threads` threads with single-threaded BLAS; errors are raised.

    BLAS threads of their own would slow the many small products down several-fold.
    """
    workers = min(threads, len(pieces))
    with _controller().limit(limits=1, user_api="blas"):
        if workers <= 1:
            for piece in pieces:
                work(piece)
            return
        with ThreadPoolExecutor(workers) as pool:
            for future in [pool.submit(work, piece) for piece in pieces]:
                future.result()
