"""Channels by need: what matrices and currents interpolated along frequency cost, and how far they are from solving in full.

Run ``python validation/benchmarks/measure_band.py`` for both stations at full size, or ``dipoles`` or ``log-periodics`` alone;
``--antennas 16 --stop 80e6 --random 5`` make it small.  For each it prints

- the time of all channels in segments against that of solving them one by one (the mean of those at random, solved in full);
- assemblies, factorisations, residuals worked out, channels of each origin;
- worst and median error of every embedded pattern (100-ohm terminations) on random channels against solving these for
  themselves: on the segment's mesh at a tenth of the tolerance, which shows what interpolation and functions cost, and on their
  own mesh, which shows what holding a mesh costs beside;
- the same for channels in between, from the band in memory, with how many of them asked for a solve;
- resonances narrower than the step.
"""

from __future__ import annotations

import argparse
import resource
import time
from collections import Counter
from collections.abc import Callable

import numpy as np
from stations import benchmark_antenna, benchmark_station, log_periodic_antenna

from elbowroom.base.arrays import FloatArray
from elbowroom.geometry.antennas import Antenna
from elbowroom.geometry.directions import hemisphere_grid
from elbowroom.geometry.shapes import log_periodic
from elbowroom.geometry.stations import Station
from elbowroom.job.band import SegmentChannels, plan_segments
from elbowroom.job.solve import solve
from elbowroom.radiation.solution import Solution
from elbowroom.system.discretisation import discretise
from elbowroom.system.reduction import ReductionSettings
from elbowroom.system.solving import REFERENCE_OHM, solve_isolated
from elbowroom.system.solving_reduced import solve_reduced

ALUMINIUM_S_PER_M = 3.5e7
"""Conductivity of the log-periodic antennas' wires; common practice, no source."""


def lossy_log_periodic() -> Antenna:
    """Return the log-periodic antenna of the benchmarks with wires that conduct as aluminium does."""
    lossless = log_periodic_antenna()
    return log_periodic(
        name=lossless.name, height_m=1.4, wire_radius_m=0.002, tau=0.82, sigma=0.07, longest_half_length_m=0.62, elements=10,
        feeder_impedance_ohm=200.0, conductivity_s_per_m=ALUMINIUM_S_PER_M,
    )  # fmt: skip


def pattern_errors(exact: Solution, other: Solution, step_deg: float) -> FloatArray:
    """Return the largest difference of every embedded pattern over its peak, (P,)."""
    sky = hemisphere_grid(step_deg)
    errors = []
    for first in range(0, len(exact.port_names), 64):
        ports = np.arange(first, min(first + 64, len(exact.port_names)))
        a, b = (s.embedded_patterns(sky.theta_rad, sky.phi_rad, ports=ports) for s in (exact, other))
        errors.append(np.linalg.norm(a - b, axis=-1).max(axis=1) / np.linalg.norm(a, axis=-1).max(axis=1))
    return np.concatenate(errors)


def solved_on_mesh(station: Station, frequency_hz: float, mesh_hz: float, tolerance: float) -> Solution:
    """Return the station assembled and solved at a frequency on the mesh of another, without stating a mesh error."""
    d = discretise(station, frequency_hz, mesh_hz=mesh_hz)
    per_kind = solve_isolated(d)
    coupled, space, statistics = solve_reduced(d, ReductionSettings(tolerance))
    return Solution(d, coupled, tuple(per_kind[k] for k in d.kind_of), REFERENCE_OHM, statistics, space)


def decibels(value: float) -> str:
    """Return 20 log10 of a ratio as text."""
    return f"{20.0 * np.log10(max(value, 1e-15)):.1f} dB"


class Errors:
    """Worst and median over the channels of the worst pattern of each, with what was stated."""

    def __init__(self) -> None:
        self.worst: list[float] = []
        self.typical: list[float] = []
        self.stated: list[float] = []

    def add(self, errors: FloatArray, stated: float) -> None:
        """Take the errors of all ports at one channel."""
        self.worst.append(float(errors.max()))
        self.typical.append(float(np.median(errors)))
        self.stated.append(stated)

    def __str__(self) -> str:
        if not self.worst:
            return "none looked at"
        above = sum(w > s for w, s in zip(self.worst, self.stated, strict=True))
        return (
            f"{len(self.worst)} channels, worst pattern {decibels(max(self.worst))}, median of the worst "
            f"{decibels(float(np.median(self.worst)))}, median pattern {decibels(float(np.median(self.typical)))}; stated at most "
            f"{decibels(max(self.stated))}, above its statement {above}"
        )


def measure(name: str, antenna: Antenna, count: int, options: argparse.Namespace) -> None:
    """Measure one station."""
    station, tolerance = benchmark_station(count, antenna), options.tolerance
    channels = np.arange(options.start, options.stop + 1.0, options.step)
    fine = np.arange(options.start, options.stop + 1.0, options.fine)
    rng = np.random.default_rng(options.seed)
    checked = set(map(float, rng.choice(channels, min(options.random, len(channels)), replace=False)))
    between = np.setdiff1d(fine, channels)
    asked = np.sort(rng.choice(between, min(options.random, len(between)), replace=False)) if len(between) else between
    solve(benchmark_station(3, antenna), options.start, solver="reduced")  # compiles everything first
    plans = plan_segments(station, tuple(channels), tolerance)
    print(f"{name}: {count} antennas, {len(channels)} channels of {options.step / 1e6:g} MHz from {options.start / 1e6:g} to "
          f"{options.stop / 1e6:g} MHz, tolerance {decibels(tolerance)}, {len(plans)} segments", flush=True)  # fmt: skip
    seconds = single_seconds = fine_seconds = 0.0
    solved, single = 0, 0
    totals: Counter[str] = Counter()
    coarse, own_mesh, finer, estimates = Errors(), Errors(), Errors(), Errors()
    features, stages = [], Counter()
    asked_for, solved_between = 0, 0
    covered: set[float] = set()

    def timed(action: Callable[[], Solution]) -> tuple[Solution, float]:
        start = time.perf_counter()
        made = action()
        return made, time.perf_counter() - start

    for plan in plans:
        part = SegmentChannels(station, plan, tolerance)
        here = {}
        for f in plan.solved:
            # The end of one segment is the beginning of the next; its channel counts once, its time wherever it is spent.
            found, spent = timed(lambda f=f, part=part: part.solved(f))  # type: ignore[misc]
            seconds += spent
            if f in covered:
                continue
            covered.add(f)
            solved += 1
            totals[found.statistics.origin] += 1
            if f in checked:
                here[f] = found
        for f, found in here.items():
            reference = solved_on_mesh(station, f, plan.high_hz, 0.1 * tolerance)
            coarse.add(pattern_errors(reference, found, options.sky), found.statistics.pattern_error)
            alone, spent = timed(lambda f=f: solve(station, f, solver="reduced", tolerance=tolerance))  # type: ignore[misc]
            single_seconds, single = single_seconds + spent, single + 1
            own_mesh.add(pattern_errors(alone, found, options.sky), found.statistics.pattern_error)
        part.features = part.segment.features(0.5 * options.step)
        features += part.features or []
        for f in asked[(asked > plan.low_hz) & (asked < plan.high_hz)]:
            before = part.counts
            made, spent = timed(lambda f=float(f), part=part: part.solution(f))  # type: ignore[misc]
            fine_seconds, asked_for = fine_seconds + spent, asked_for + 1
            solved_between += part.counts.interpolated == before.interpolated
            reference = solved_on_mesh(station, float(f), plan.high_hz, 0.1 * tolerance)
            finer.add(pattern_errors(reference, made, options.sky), made.statistics.pattern_error)
            if made.statistics.origin == "interpolated currents":
                estimates.add(pattern_errors(part.segment_solution(float(f)), made, options.sky), made.statistics.pattern_error)
        c = part.counts
        totals.update(assemblies=c.assemblies, factorisations=c.factorisations, checks=c.checks)
        stages.update(part.segment.seconds)
        print(f"  {plan.low_hz / 1e6:g} to {plan.high_hz / 1e6:g} MHz: {len(part.segment.nodes)} assembled frequencies, "
              f"{part.segment.space.size / count:.1f} functions an antenna, samples {part.segment.samples.nbytes / 2**20:.0f} MiB, "
              f"process {resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 2**20:.2f} GiB at its peak", flush=True)  # fmt: skip
    mean = single_seconds / max(single, 1)
    print(f"  all {solved} channels in segments: {seconds:.1f} s; one by one {mean * solved:.1f} s ({mean:.2f} s the mean of {single}): "
          f"ratio {seconds / max(mean * solved, 1e-9):.2f} (target 0.6)")  # fmt: skip
    total = sum(stages.values())
    print(
        "  time of segments, checks of this program included: "
        + ", ".join(f"{k} {v / total:.0%}" for k, v in stages.most_common())
    )
    print(f"  {totals['assemblies']} assemblies, {totals['factorisations']} factorisations, {totals['checks']} residuals worked out; "
          f"channels from interpolated matrices {totals['interpolated matrix']}, assembled for themselves {totals['assembled']}")  # fmt: skip
    print(f"  against solving at a tenth of the tolerance on the segment's mesh (target -60 dB): {coarse}")
    print(f"  against solving at the tolerance on the channel's own mesh: {own_mesh}")
    print(f"  {options.fine / 1e3:g} kHz channels from the stored band: {asked_for} asked for, {solved_between} of them solved, "
          f"{fine_seconds / max(asked_for, 1):.2f} s each, estimates of their segments included")  # fmt: skip
    print(f"  these against solving at a tenth of the tolerance on the segment's mesh (target -60 dB): {finer}")
    print(f"  what interpolation of currents alone leaves: {estimates}")
    narrow = ", ".join(f"{f.frequency_hz / 1e6:.6f} MHz +- {f.half_width_hz / 1e3:.3g} kHz ({f.where})" for f in features)
    print(f"  resonances of half-widths below {0.5 * options.step / 1e3:g} kHz: {narrow or 'none'}", flush=True)


def main() -> None:
    """Measure the stations that were named, or both."""
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("names", nargs="*", choices=[[], "dipoles", "log-periodics"], help="which to run; both by default")
    parser.add_argument("--antennas", type=int, help="number of antennas; 256 dipoles, 16 log-periodics by default")
    parser.add_argument("--start", type=float, default=50e6, help="[Hz]")
    parser.add_argument("--stop", type=float, default=350e6, help="[Hz]")
    parser.add_argument("--step", type=float, default=1e6, help="step of the channels that are solved [Hz]")
    parser.add_argument("--fine", type=float, default=1e4, help="step of the channels in between [Hz]")
    parser.add_argument("--random", type=int, default=40, help="channels of each kind that are held against solving in full")
    parser.add_argument("--tolerance", type=float, default=1e-3)
    parser.add_argument("--sky", type=float, default=7.5, help="step of the directions of patterns, dividing 90 [deg]")
    parser.add_argument("--seed", type=int, default=1)
    options = parser.parse_args()
    names = options.names or ["dipoles", "log-periodics"]
    if "dipoles" in names:
        measure("dipoles", benchmark_antenna(), options.antennas or 256, options)
    if "log-periodics" in names:
        measure("log-periodics with loss", lossy_log_periodic(), options.antennas or 16, options)


if __name__ == "__main__":
    main()
