"""How the cores of a machine are split: how many workers, and how many threads for each.

One thread never waits for another, so that many workers of one thread do most in a given time; but the last units of a run
leave cores idle, and every worker needs memory for a unit of its own.  The rule weighs these.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from elbowroom.base.errors import ModelRangeError
from elbowroom.job.plan import Prediction

PARALLEL_SHARE = 0.75
"""Part of what threads can share that they do share; the rest waits.  By ``validation/benchmarks/measure_engine.py`` with
one and two threads, 80 antennas solved directly; more are reckoned from that."""

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


def seconds_with(prediction: Prediction, threads: int, cores: int) -> float:
    """Return the time of a unit with some threads [s], from its prediction with all cores."""
    return prediction.serial_seconds + (prediction.seconds - prediction.serial_seconds) * _gain(cores) / _gain(threads)


def _gain(threads: int) -> float:
    return 1.0 / (1.0 - PARALLEL_SHARE + PARALLEL_SHARE / threads)


def choose_split(n_units: int, largest: Prediction, *, cores: int, memory_bytes: int) -> Split:
    """Return the split with which some units of one size are done first.

    What goes in is the same for a run and its continuation on one machine (all units of the jobs count, stored or not; the
    prediction is for a nominal rate; memory is what the machine has, not what happens to be free), so that a unit gets the same
    threads, and the same rounding, in both.

    Parameters
    ----------
    n_units : int
        Units in all.
    largest : Prediction
        Of the largest, with all cores.
    cores : int
        Cores of the machine.
    memory_bytes : int
        Memory of the machine [byte].

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
    if n_units * largest.seconds <= SMALL_SECONDS:
        return Split(1, cores)
    best, shortest = Split(1, cores), math.inf
    for workers in range(1, min(cores, n_units) + 1):
        threads = cores // workers
        if workers > 1 and workers * largest.memory_bytes > memory_bytes:
            break
        seconds = math.ceil(n_units / workers) * seconds_with(largest, threads, cores)
        # Between equals the one with fewer workers: less memory.
        if seconds < shortest * (1.0 - 1e-9):
            best, shortest = Split(workers, threads), seconds
    return best
