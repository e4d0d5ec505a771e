"""What the engine for many units costs and gains, measured in one run and printed as ratios.

Run ``python validation/benchmarks/measure_engine.py`` for all, or name some: ``throughput split idle``.  Absolute times on a shared
machine are not evidence; the two sides of a ratio are timed one after another in the same run.
"""

from __future__ import annotations

import argparse
import math
import subprocess
import sys
import tempfile
import time
from pathlib import Path

from stations import benchmark_station

from elbowroom.base.machine import available_cores, available_memory_bytes
from elbowroom.base.threads import threads
from elbowroom.geometry.arrangements import random_disc
from elbowroom.geometry.layouts import write_layout
from elbowroom.job.engine.campaign import Campaign
from elbowroom.job.engine.items import UnitFailure, run_item
from elbowroom.job.engine.local import ProcessWorkers
from elbowroom.job.engine.runner import run_items
from elbowroom.job.jobfile import read_job
from elbowroom.job.pipeline import JobRun
from elbowroom.job.solve import SOLUTION_SCHEMA, solve
from elbowroom.store import Hdf5Store, MemoryStore

ANTENNA = """
name = "crossed drooping dipoles"
shape = "crossed-dipoles"
arm_length_m = 0.6
height_m = 0.9
wire_radius_m = 0.003
droop_deg = 40.0
feed_length_m = 0.1
separation_m = 0.04
"""

JOB = """
schema = 1
title = "benchmark"
[station]
layout = "layout.csv"
antenna = "antenna.toml"
[band]
start_hz = {start:.6f}
stop_hz = {stop:.6f}
step_hz = {step:.6f}
segments = "{segments}"
[solver]
method = "{method}"
"""


def write_job(folder: Path, antennas: int, units: int, method: str, step_hz: float, segments: str = "none") -> Path:
    """Write a job of some antennas at so many frequencies around 150 MHz and return its path."""
    folder.mkdir(parents=True)
    layout = random_disc(antennas, 17.5 * math.sqrt(antennas / 256), 1.4, 1)
    write_layout(layout, folder / "layout.csv")
    (folder / "antenna.toml").write_text(ANTENNA)
    start = 150e6
    path = folder / "job.toml"
    path.write_text(JOB.format(start=start, stop=start + (units - 1) * step_hz, step=step_hz, segments=segments, method=method))
    return path


def engine_seconds(job: Path, store: Path, workers: int | None, threads_each: int | None) -> tuple[float, str]:
    """Return the wall time of all units of a job by worker processes, their start included [s], and the split."""
    job.write_text(job.read_text().partition("[store]")[0] + f'[store]\nfolder = "{store}"\n')
    campaign = Campaign([JobRun(read_job(job))])
    campaign.predict()
    campaign.check()
    split = campaign.split(workers, threads_each)
    start = time.perf_counter()
    for event in run_items(campaign.items(split.threads), ProcessWorkers(split.workers, available_memory_bytes())):
        if event.kind == "ended" and event.result is not None:
            bad = [o for o in event.result.outcomes if isinstance(o, UnitFailure)]
            assert not bad, bad
    return time.perf_counter() - start, f"{split.workers} x {split.threads}"


def sequence_seconds(job: Path, store: Path) -> list[float]:
    """Return the wall times of a job's units one after another in this process with all cores [s], compiled beforehand."""
    job.write_text(job.read_text().partition("[store]")[0] + f'[store]\nfolder = "{store}"\n')
    campaign = Campaign([JobRun(read_job(job))])
    campaign.predict()
    found = []
    for item in campaign.items(available_cores(), longest_first=False):
        result = run_item(item)
        assert not any(isinstance(o, UnitFailure) for o in result.outcomes), result.outcomes
        found.append(result.seconds)
    return found


def throughput(antennas: int, units: int) -> None:
    """Time of units in sequence over time of the engine, worker start included; target 0.9 with units of 3 s and more."""
    for method, count in (("direct", antennas), ("reduced", 3 * antennas)):
        with tempfile.TemporaryDirectory() as place:
            folder = Path(place)
            warm = write_job(folder / "warm", 8, 1, method, 1e6)
            sequence_seconds(warm, folder / "warm-store")
            job = write_job(folder / "job", count, units, method, 5e6)
            alone = sequence_seconds(job, folder / "sequence")
            seconds, split = engine_seconds(job, folder / "engine", None, None)
        print(
            f"throughput, {method}, {count} antennas: {len(alone)} units of {min(alone):.1f} to {max(alone):.1f} s "
            f"in sequence {sum(alone):.1f} s, engine ({split}) {seconds:.1f} s, ratio {sum(alone) / seconds:.2f} (target 0.9)",
            flush=True,
        )


def split(antennas: int, units: int) -> None:
    """Time of the engine with each way to split the cores, and what the rule takes."""
    cores = available_cores()
    with tempfile.TemporaryDirectory() as place:
        folder = Path(place)
        job = write_job(folder / "job", antennas, units, "direct", 5e6)
        chosen = Campaign([JobRun(read_job(job))]).split()
        for workers in sorted({1, cores // 2 or 1, cores}):
            seconds, name = engine_seconds(job, folder / f"with-{workers}", workers, max(1, cores // workers))
            mark = "  <- the rule's" if workers == chosen.workers else ""
            print(f"split {name}: {seconds:.1f} s for {units} units{mark}", flush=True)
    station = benchmark_station(antennas)
    one, every = [], []
    for count, kept in ((1, one), (cores, every)):
        best = (math.inf, 0.0)
        with threads(count):
            for _ in range(3):
                start = time.perf_counter()
                statistics = solve(station, 150e6, solver="direct").statistics
                whole = time.perf_counter() - start
                shared = sum(statistics.seconds.values())
                best = min(best, (shared, whole - shared))
        kept += best
    share = (one[0] / every[0] - 1.0) / (1.0 - 1.0 / cores) / (one[0] / every[0]) if cores > 1 else float("nan")
    print(
        f"one unit: {one[0]:.2f} s with 1 thread, {every[0]:.2f} s with {cores}, parallel share {share:.2f}; "
        f"beside it {one[1]:.2f} and {every[1]:.2f} s that are not shared"
    )


def idle(antennas: int, units: int) -> None:
    """Time of a run that finds everything in its store; target 5 s for 1,000 units, start of the program included."""
    with tempfile.TemporaryDirectory() as place:
        folder = Path(place)
        job = write_job(folder / "job", 240, 1000, "auto", 0.05e6, "auto")
        run = JobRun(read_job(job))
        small = MemoryStore(SOLUTION_SCHEMA)
        solve(benchmark_station(1), 150e6, store=small)
        record = small.get(small.keys()[0])
        assert record is not None
        store = Hdf5Store(run.job.store_folder, SOLUTION_SCHEMA)
        for frequency in run.frequencies_hz:
            store.put(run.key(frequency), record)
        seconds = []
        for _ in range(3):
            start = time.perf_counter()
            done = subprocess.run(
                [sys.executable, "-m", "elbowroom", "solve", str(job)], check=True, capture_output=True, text=True
            )
            seconds.append(time.perf_counter() - start)
            assert "1000 frequencies, 1000 in the store already, 0 to solve" in done.stdout
    print(f"idle: 1000 units of 240 antennas recognised in {min(seconds):.2f} s (target 5), of {seconds}", flush=True)


def main() -> None:
    """Measure what is named."""
    known = {"throughput": throughput, "split": split, "idle": idle}
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("names", nargs="*", help=f"any of {', '.join(known)}")
    parser.add_argument("--antennas", type=int, default=80, help="of a directly solved station")
    parser.add_argument("--units", type=int, default=16)
    options = parser.parse_args()
    for name in options.names or known:
        known[name](options.antennas, options.units)


if __name__ == "__main__":
    main()
