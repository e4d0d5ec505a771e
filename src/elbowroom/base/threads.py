"""How many threads a solve may use: BLAS's own, and ours that run compiled loops."""

from __future__ import annotations

from collections.abc import Iterator
from contextlib import contextmanager

from elbowroom.base.machine import available_cores

_limit: int | None = None


def loop_threads() -> int:
    """Return the number of threads that compiled loops run in: all cores of this process, or what `threads` allows."""
    return available_cores() if _limit is None else _limit


def blas_threads() -> int:
    """Return the number of threads that BLAS takes now; 1 where there is no BLAS that says."""
    from threadpoolctl import threadpool_info

    return max((int(pool["num_threads"]) for pool in threadpool_info() if pool["user_api"] == "blas"), default=1)


@contextmanager
def threads(count: int) -> Iterator[None]:
    """Hold BLAS and compiled loops of this process to a number of threads, also within one another.

    The setting is the whole process's: two solves with different numbers do not run in one process at a time.

    Parameters
    ----------
    count : int
        Threads of each; at least 1.

    Raises
    ------
    ValueError
        If the number is not positive.
    """
    if count < 1:
        msg = f"{count} threads: expected 1 or more"
        raise ValueError(msg)
    # Libraries that are loaded later would not be held.
    import scipy.linalg  # noqa: F401
    from threadpoolctl import threadpool_limits

    global _limit
    before, _limit = _limit, count
    try:
        with threadpool_limits(count):
            yield
    finally:
        _limit = before
