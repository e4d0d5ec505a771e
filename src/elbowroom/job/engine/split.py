"""How the cores of a machine are split: how many workers, and how many threads for each.

One thread never waits for another, so that many workers of one thread do most in a given time; but the last units of a run
leave cores idle, and every worker needs memory for a unit of its own.  The rule weighs these with two measured numbers.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from elbowroom.base.errors import ModelRangeError

PARALLEL_SHARE = {"direct": 0.95, "reduced": 0.80}
"""Part of a unit's time with one thread that more threads divide among them; measured by
``validation/benchmarks/measure_engine.py``."""

SMALL_SECONDS = 10.0
"""Predicted time of a whole job up to which it is solved in this process with all cores [s]: a worker takes about two seconds
to start, and a user who waits for ten wants to see each stage."""


@dataclass(frozen=True)
class Split:
    """Workers and threads.

    Attributes
    ----------
    workers : int
        Units at a time.
    threads : int
        Threads of BLAS and of compiled loops in each.
    """

    workers: int
    threads: int


def thread_gain(threads: int, solver: str = "direct") -> float:
    """Return how many times faster a unit is with some threads than with one."""
    share = PARALLEL_SHARE[solver]
    return 1.0 / (1.0 - share + share / threads)


def choose_split(
    n_units: int,
    seconds_each: float,
    memory_each: int,
    *,
    cores: int,
    memory_bytes: int,
    solver: str = "direct",
) -> Split:
    """Return the split with which some units of one size are done first.

    What goes in is the same for a run and its continuation on one machine (all units of the jobs count, stored or not; memory is
    what the machine has, not what happens to be free), so that a unit gets the same threads, and the same rounding, in both.

    Parameters
    ----------
    n_units : int
        Units in all.
    seconds_each : float
        Nominal time of the largest with all cores [s].
    memory_each : int
        Memory of the largest [byte].
    cores : int
        Cores of the machine.
    memory_bytes : int
        Memory of the machine [byte].
    solver : str, optional
        Of the largest unit.

    Returns
    -------
    Split

    Raises
    ------
    ModelRangeError
        If there are no units or cores.
    """
    if n_units < 1 or cores < 1:
        msg = f"{n_units} units on {cores} cores: expected one or more of each"
        raise ModelRangeError(msg)
    if n_units * seconds_each <= SMALL_SECONDS:
        return Split(1, cores)
    best, shortest = Split(1, cores), math.inf
    for workers in range(1, min(cores, n_units) + 1):
        threads = cores // workers
        if workers > 1 and workers * memory_each > memory_bytes:
            break
        rounds = math.ceil(n_units / workers)
        seconds = rounds / thread_gain(threads, solver)
        # Between equals the one with fewer workers: less memory.
        if seconds < shortest * (1.0 - 1e-9):
            best, shortest = Split(workers, threads), seconds
    return best
