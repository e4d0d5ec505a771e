"""The reduced solver and log-periodic antennas: promised figures as ratios in one run.

Run ``python validation/benchmarks/measure_reduced.py`` for all, or name some: ``dipoles log-periodics cluster scaling whole groups
clusters identities``.
U is one complex64 matrix product of order 5120 in the same run; every time is given in it, because machines differ.
"""

from __future__ import annotations

import argparse
import multiprocessing
import resource
import subprocess
import sys
import time

import numpy as np
from stations import benchmark_antenna, benchmark_station, log_periodic_antenna, unit_seconds

from elbowroom.geometry.antennas import Antenna
from elbowroom.geometry.directions import hemisphere_grid, sphere_quadrature
from elbowroom.geometry.grounds import PerfectGround
from elbowroom.geometry.stations import Placed, Station
from elbowroom.job.solve import solve
from elbowroom.radiation.solution import Solution
from elbowroom.store import Hdf5Store


def peak_gib() -> float:
    """Return the largest memory that this process has held [GiB]."""
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 2**20


def timed(station: Station, frequency_hz: float, **options: object) -> tuple[Solution, float]:
    """Return the solution and the wall time [s]."""
    start = time.perf_counter()
    solution = solve(station, frequency_hz, **options)  # type: ignore[arg-type]
    return solution, time.perf_counter() - start


def describe(solution: Solution) -> str:
    """Return functions an antenna, unknowns and the share of each stage."""
    s = solution.statistics
    total = sum(s.seconds.values())
    shares = ", ".join(f"{stage} {seconds / total:.0%}" for stage, seconds in s.seconds.items())
    return (
        f"{s.n_functions / len(solution.station):.1f} functions an antenna, {s.n_unknowns} unknowns, stated error "
        f"{20 * np.log10(max(s.pattern_error, 1e-15)):.0f} dB; {shares}"
    )


def warm(antenna: Antenna) -> None:
    """Compile everything on a small station first."""
    solve(benchmark_station(3, antenna), 150e6, solver="reduced")


def dipoles() -> None:
    """256 crossed dipoles at 350 MHz, -80 dB, from geometry to solution with its error: 1.3 U, 1.5 GiB; store and beam: 0.7 U."""
    warm(benchmark_antenna())
    unit = unit_seconds()
    for frequency in (350e6, 150e6, 50e6):
        station = benchmark_station()
        solution, seconds = timed(station, frequency, solver="reduced", tolerance=1e-4)
        target = "target 1.3" if frequency == 350e6 else "no target"
        print(f"dipoles, {frequency / 1e6:g} MHz: {seconds:.1f} s = {seconds / unit:.2f} U ({target}), U {unit:.2f} s, "
              f"{peak_gib():.2f} GiB (target 1.5); {describe(solution)}")  # fmt: skip
    sky, folder = hemisphere_grid(1.0), "/tmp/elbowroom-benchmark-store"
    subprocess.run(["rm", "-rf", folder], check=True)
    solution, _ = timed(benchmark_station(), 350e6, solver="reduced", tolerance=1e-4)
    start = time.perf_counter()
    from elbowroom.job.solve import SOLUTION_SCHEMA, to_record

    Hdf5Store(folder, SOLUTION_SCHEMA).put("0" * 64, to_record(solution, {}))
    solution.beam(solution.pointing_weights(0.3, 0.2, port="x"), sky.theta_rad, sky.phi_rad)
    seconds = time.perf_counter() - start
    print(f"storing it and one beam on a 1-degree hemisphere: {seconds:.2f} s = {seconds / unit:.2f} U (target 0.7)")
    subprocess.run(["rm", "-rf", folder], check=True)
    sky = hemisphere_grid(2.0)
    start = time.perf_counter()
    solution.embedded_patterns(sky.theta_rad, sky.phi_rad)
    print(f"512 embedded patterns on a 2-degree hemisphere: {time.perf_counter() - start:.1f} s (target 5)")


def log_periodics() -> None:
    """256 log-periodic antennas, -60 dB: 5 U at 150 MHz, 15 U at 350 MHz, 4 GiB."""
    antenna = log_periodic_antenna()
    warm(antenna)
    unit = unit_seconds()
    for frequency, target in ((150e6, 5.0), (350e6, 15.0)):
        solution, seconds = timed(benchmark_station(256, antenna), frequency, solver="reduced", tolerance=1e-3)
        print(f"log-periodics, {frequency / 1e6:g} MHz: {seconds:.1f} s = {seconds / unit:.2f} U (target {target:g}), U {unit:.2f} s, "
              f"{peak_gib():.2f} GiB (target 4); {describe(solution)}")  # fmt: skip


def cluster() -> None:
    """16 log-periodic antennas, direct: assembly within 3x of the factorisation; memory beyond the program 1.5x the matrix."""
    antenna = log_periodic_antenna()
    solve(benchmark_station(2, antenna), 150e6, solver="direct")
    before = peak_gib()
    solution, seconds = timed(benchmark_station(16, antenna), 150e6, solver="direct")
    s = solution.statistics
    matrix = s.n_unknowns**2 * 16.0 / 2**30
    print(f"cluster of 16 log-periodics, direct, {s.n_unknowns} unknowns: {seconds:.1f} s, assembly over factorisation "
          f"{s.seconds['assemble'] / s.seconds['factorise']:.2f} (target 3), memory beyond the program "
          f"{(peak_gib() - before) / matrix:.2f} of the complex128 matrix (target 1.5)")  # fmt: skip


def scaling() -> None:
    """Time of each stage against the number of antennas, with the fitted exponent."""
    warm(benchmark_antenna())
    counts = (32, 64, 128, 256, 512)
    table: dict[str, list[float]] = {}
    for count in counts:
        solution, seconds = timed(benchmark_station(count), 350e6, solver="reduced", tolerance=1e-4)
        for stage, value in {**solution.statistics.seconds, "all": seconds}.items():
            table.setdefault(stage, []).append(value)
    print("antennas: " + ", ".join(map(str, counts)))
    for stage, values in table.items():
        exponent = np.polyfit(np.log(counts[1:]), np.log(np.maximum(values[1:], 1e-4)), 1)[0]
        print(f"{stage}: " + ", ".join(f"{v:.2f} s" for v in values) + f"; exponent from 64 on {exponent:.2f}")


def whole() -> None:
    """The whole dipole job at 350 MHz, reduced against direct at the same mesh: at most 1/25 of the time, errors -80 dB."""
    station, sky = benchmark_station(), hemisphere_grid(3.75)
    warm(benchmark_antenna())
    reduced, fast = timed(station, 350e6, solver="reduced", tolerance=1e-4)
    direct, slow = timed(station, 350e6, solver="direct")
    worst = 0.0
    for first in range(0, len(direct.port_names), 64):
        ports = np.arange(first, min(first + 64, len(direct.port_names)))
        a = direct.embedded_patterns(sky.theta_rad, sky.phi_rad, ports=ports)
        b = reduced.embedded_patterns(sky.theta_rad, sky.phi_rad, ports=ports)
        peak = np.sqrt(np.sum(np.abs(a) ** 2, axis=-1)).max(axis=1)
        worst = max(worst, float(np.max(np.sqrt(np.sum(np.abs(a - b) ** 2, axis=-1)).max(axis=1) / peak)))
    za, zb = direct.impedance_matrix(), reduced.impedance_matrix()
    print(f"whole station: direct {slow:.1f} s, reduced {fast:.1f} s, ratio 1/{slow / fast:.0f} (target 1/25); worst embedded pattern "
          f"{20 * np.log10(worst):.1f} dB (stated {20 * np.log10(reduced.statistics.pattern_error):.1f} dB), port Z "
          f"{np.linalg.norm(za - zb) / np.linalg.norm(za):.1e} of its norm; direct {direct.statistics.n_unknowns} unknowns, "
          f"residual {direct.statistics.relative_residual:.0e}")  # fmt: skip


def groups() -> None:
    """Six adjoining dipole stations, 1,536 antennas and 3,072 ports, at 350 MHz, tolerance 1e-3: 90 U, 12 GiB."""
    warm(benchmark_antenna())
    unit = unit_seconds()
    placed: list[Placed] = []
    for number in range(6):
        shift = np.array([36.0 * (number % 3), 36.0 * (number // 3), 0.0])
        one = benchmark_station(seed=number + 1)
        placed += [Placed(p.antenna, tuple(np.asarray(p.position) + shift)) for p in one]
    solution, seconds = timed(Station(placed, PerfectGround()), 350e6, solver="reduced", tolerance=1e-3)
    print(f"six stations, {len(placed)} antennas: {seconds:.0f} s = {seconds / unit:.1f} U (target 90), U {unit:.2f} s, "
          f"{peak_gib():.2f} GiB (target 12); {describe(solution)}")  # fmt: skip


def clusters() -> None:
    """Direct against reduced on clusters of dipoles and log-periodics, as many as are quick: every pattern, and port Z."""
    sky = hemisphere_grid(5.0)
    cases = [(benchmark_antenna(), n, f) for n in (16, 32, 64) for f in (50e6, 110e6, 150e6, 230e6, 350e6)]
    cases += [(log_periodic_antenna(), n, f) for n in (16, 32) for f in (50e6, 110e6, 150e6, 230e6, 350e6)]
    for antenna, count, frequency in cases:
        station = benchmark_station(count, antenna, turned=count != 32)
        direct = solve(station, frequency, solver="direct")
        exact, z = direct.embedded_patterns(sky.theta_rad, sky.phi_rad), direct.impedance_matrix()
        peak = np.linalg.norm(exact, axis=-1).max(axis=1)
        line = (
            f"{count} {antenna.name}, {frequency / 1e6:g} MHz, {'turned' if count != 32 else 'parallel'}, {len(sky)} directions:"
        )
        for tolerance in (1e-3, 1e-4):
            reduced = solve(station, frequency, solver="reduced", tolerance=tolerance)
            off = np.linalg.norm(exact - reduced.embedded_patterns(sky.theta_rad, sky.phi_rad), axis=-1).max(axis=1) / peak
            line += (
                f" tolerance {tolerance:g}: worst pattern {20 * np.log10(off.max()):.1f} dB, stated "
                f"{20 * np.log10(reduced.statistics.pattern_error):.1f} dB, Z "
                f"{np.linalg.norm(reduced.impedance_matrix() - z) / np.linalg.norm(z):.0e};"
            )
        print(line, flush=True)


def identities() -> None:
    """Power at full size: what 256 lossless dipoles radiate against what their ports accept, for random waves at all ports."""
    station = benchmark_station()
    solution, _ = timed(station, 150e6, solver="reduced", tolerance=1e-4)
    rng = np.random.default_rng(0)
    waves = rng.normal(size=(4, 512)) + 1j * rng.normal(size=(4, 512))
    s = solution.scattering_matrix(100.0)
    accepted = np.sum(np.abs(waves) ** 2, axis=1) - np.sum(np.abs(waves @ s.T) ** 2, axis=1)
    reach = 2.0 * np.pi * 150e6 / 299_792_458.0 * 19.0
    sphere = sphere_quadrature(2 * int(reach + 30.0), hemisphere=True)
    # A wave of sqrt(100) times its amplitude behind each port; receiving and transmitting patterns are one by reciprocity.
    field = solution.beam(waves, sphere.theta_rad, sphere.phi_rad, termination=100.0)
    wavelength = 299_792_458.0 / 150e6
    gain = 4.0 * np.pi * 376.730313412 / 100.0 / wavelength**2 * np.sum(np.abs(field) ** 2, axis=-1)
    radiated = sphere.integrate(gain) / (4.0 * np.pi)
    print(f"power of 256 antennas at 150 MHz, {solution.statistics.n_functions} functions, four random excitations: radiated over "
          f"accepted - 1 = {np.max(np.abs(radiated / accepted - 1.0)):.1e}, stated pattern error "
          f"{solution.statistics.pattern_error:.1e}; (ka)^2 = {(reach / 19.0 * 0.003) ** 2:.1e} is lost at bends")  # fmt: skip


MEASUREMENTS = {
    "dipoles": dipoles, "log-periodics": log_periodics, "cluster": cluster, "scaling": scaling, "whole": whole, "groups": groups,
    "clusters": clusters, "identities": identities,
}  # fmt: skip


def main() -> None:
    """Run the measurements that were named, or all, each in a process of its own so that memory is its own."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("names", nargs="*", choices=[[], *MEASUREMENTS], help="which to run; all by default")
    names = parser.parse_args().names or list(MEASUREMENTS)
    context = multiprocessing.get_context("spawn")
    for name in names:
        process = context.Process(target=MEASUREMENTS[name])
        process.start()
        process.join()
        if process.exitcode:
            sys.exit(process.exitcode)


if __name__ == "__main__":
    main()
