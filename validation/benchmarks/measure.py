"""Figures that are promised, measured in one run and printed as ratios.

Run ``python validation/benchmarks/measure.py`` for all, or name some: ``kernel mesh station patterns commands``; the reduced
solver and log-periodic antennas have ``measure_reduced.py``.  Absolute
times on a shared machine are not evidence; the two sides of each ratio are timed in turn in the same process.
"""

from __future__ import annotations

import argparse
import math
import shutil
import subprocess
import sys
import time

import numpy as np
from numba import njit
from stations import benchmark_antenna, benchmark_station, best_of

from elbowroom.base.constants import SPEED_OF_LIGHT
from elbowroom.geometry.antennas import Antenna, Port
from elbowroom.geometry.directions import hemisphere_grid
from elbowroom.geometry.grounds import PerfectGround
from elbowroom.geometry.mesh import MeshSettings, build_mesh, mesh_settings
from elbowroom.geometry.stations import Placed, Station
from elbowroom.geometry.wires import Wire
from elbowroom.kernels.points import free_kernel
from elbowroom.kernels.points_numba import fill_free
from elbowroom.system.self_block import NearSettings, free_self_block


@njit(error_model="numpy", nogil=True)
def _plain_loop(x, y, z, x2, y2, z2, wavenumber, out):
    for i in range(x.size):
        for j in range(x2.size):
            dx, dy, dz = x[i] - x2[j], y[i] - y2[j], z[i] - z2[j]
            r = math.sqrt(dx * dx + dy * dy + dz * dz)
            out[i, j] = complex(math.cos(wavenumber * r) / r, -math.sin(wavenumber * r) / r)


def kernel() -> None:
    """Rate of the point kernel against a loop that calls sin, cos and sqrt for every sample; target 20x at 1e-9."""
    rng = np.random.default_rng(0)
    # The shape of an assembly's fills: one antenna's points against those of a tile of antennas.
    points, points2 = rng.random((3, 110)), rng.random((3, 1760)) + 2.0
    out = np.empty((110, 1760), dtype=complex)
    real, imag = np.empty((2, *out.shape))

    def plain() -> None:
        for _ in range(5):
            _plain_loop(*points, *points2, 7.3, out)

    def ours() -> None:
        for _ in range(50):
            fill_free(*points, *points2, 7.3, real, imag)

    plain(), ours()
    ratios = []
    for _ in range(7):
        slow, fast = best_of(plain, 1) / 5, best_of(ours, 1) / 50
        ratios.append((slow / fast, out.size / slow / 1e6, out.size / fast / 1e6))
    ratios.sort()
    ratio, slow_rate, fast_rate = ratios[len(ratios) // 2]
    expected = free_kernel(points, points2, 7.3)
    error = np.max(np.abs(real + 1j * imag - expected) / np.abs(expected))
    print(f"kernel: plain loop {slow_rate:.0f} M/s, ours {fast_rate:.0f} M/s, ratio {ratio:.1f} (target 20), error {error:.1e}")


def _admittance(antenna: Antenna, frequency_hz: float, mesh: str | MeshSettings) -> tuple[complex, int]:
    made = build_mesh(antenna, SPEED_OF_LIGHT / frequency_hz, mesh_settings(mesh))
    z = free_self_block(made, frequency_hz, NearSettings())
    return complex((made.gap_vectors @ np.linalg.solve(z, made.gap_vectors.T))[0, 0]), made.n_unknowns


def mesh() -> None:
    """Error of the input admittance of dipoles with the named meshes; targets 1e-2 and 1e-3."""
    reference = MeshSettings(
        order=7, end_radii=1 / 128, gap_radii=1 / 128, floor_wavelengths=0.0, growth=4.0, longest_wavelengths=0.12
    )
    worst = {"default": (0.0, 0.0, 0.0, 0), "refined": (0.0, 0.0, 0.0, 0)}
    for length in (0.3, 0.4, 0.47, 0.5, 0.6, 0.75, 0.9, 1.0, 1.1, 1.25):
        for radius in (1e-5, 1e-4, 3e-4, 1e-3, 2.5e-3, 5e-3):
            antenna = Antenna("d", [Wire((0, 0, -length / 2), (0, 0, length / 2), radius)], [Port("p", 0)])
            exact, _ = _admittance(antenna, SPEED_OF_LIGHT, reference)
            for name in worst:
                y, n = _admittance(antenna, SPEED_OF_LIGHT, name)
                worst[name] = max(worst[name], (abs(y / exact - 1.0), length, radius, n))
    for name, target in (("default", 1e-2), ("refined", 1e-3)):
        error, length, radius, n = worst[name]
        print(
            f"mesh {name}: worst error of Y {error:.1e} (target {target:g}) at {length} wavelengths, radius {radius:g}, "
            f"{n} unknowns"
        )
    from elbowroom.job.solve import solve

    for frequency in (60e6, 165e6, 300e6):
        station = Station([Placed(benchmark_antenna())], PerfectGround())
        for name in ("default", "refined"):
            s = solve(station, frequency, mesh=name).statistics
            print(f"mesh {name}: benchmark antenna at {frequency / 1e6:g} MHz, {s.n_unknowns} unknowns, error {s.mesh_error:.1e}")


def station(count: int = 256, frequency_hz: float = 150e6) -> None:
    """Whole direct solve with beams against an in-place LAPACK factorisation of the same order; target 2.5."""
    from scipy.linalg import get_lapack_funcs

    from elbowroom.job.solve import solve

    made = benchmark_station(count)
    solve(benchmark_station(4), frequency_hz, solver="direct")
    sky = hemisphere_grid(1.0)
    start = time.perf_counter()
    solution = solve(made, frequency_hz, solver="direct")
    solved = time.perf_counter()
    weights = solution.pointing_weights(0.0, 0.0, port="x")
    solution.beam(weights, sky.theta_rad, sky.phi_rad)
    solution.isolated_beam(weights, sky.theta_rad, sky.phi_rad)
    total = time.perf_counter() - start
    n = solution.statistics.n_unknowns
    del solution
    matrix = np.empty((n, n), dtype=np.complex64, order="F")
    rng = np.random.default_rng(0)
    for column in range(n):
        matrix[:, column] = rng.normal(size=n) + 1j * rng.normal(size=n)
    (getrf,) = get_lapack_funcs(("getrf",), (matrix,))
    lapack = best_of(lambda: getrf(matrix, overwrite_a=True), 1)
    print(
        f"station: {count} antennas, {n} unknowns: solve {solved - start:.1f} s, with beams {total:.1f} s, "
        f"LAPACK factorisation (complex64, as ours) {lapack:.1f} s, ratio {total / lapack:.2f} (target 2.5)"
    )


def patterns(count: int = 256, frequency_hz: float = 150e6) -> None:
    """Embedded patterns against the matrix-product rate (target 50 %), one beam against its phase factors (target 3)."""
    from elbowroom.radiation.solution import Solution
    from elbowroom.system.discretisation import discretise
    from elbowroom.system.solving import REFERENCE_OHM, PortCurrents, SolveStatistics

    # The cost does not depend on the currents' values: random ones spare the solve.
    d = discretise(benchmark_station(count), frequency_hz, self_blocks=False)
    rng = np.random.default_rng(0)
    currents = rng.normal(size=(d.n_unknowns, d.n_ports)) + 1j * rng.normal(size=(d.n_unknowns, d.n_ports))
    admittance = np.eye(d.n_ports) * (0.005 + 0.001j)
    statistics = SolveStatistics("none", "none", d.n_unknowns, d.n_ports, 0.0)
    solution = Solution(d, PortCurrents(currents, admittance), (), REFERENCE_OHM, statistics)
    sky = hemisphere_grid(2.0)
    square = rng.normal(size=(2048, 2048)) + 0j
    solution.embedded_patterns(sky.theta_rad[:64], sky.phi_rad[:64])
    rate = 8 * 2048**3 / best_of(lambda: square @ square)
    elapsed = best_of(lambda: solution.embedded_patterns(sky.theta_rad, sky.phi_rad), 1)
    rate = max(rate, 8 * 2048**3 / best_of(lambda: square @ square))
    work = 8.0 * d.n_ports * count * (d.n_unknowns / count) * 2 * len(sky)
    print(
        f"patterns: {d.n_ports} patterns on {len(sky)} directions {elapsed:.1f} s, {work / elapsed / rate:.0%} of the "
        f"complex matrix-product rate of {rate / 1e9:.0f} GFLOP/s (target 50 %)"
    )
    sky = hemisphere_grid(1.0)
    unit, weights = sky.unit_vectors(), solution.pointing_weights(0.3, 0.2, port="x")
    ratios = []
    for _ in range(5):
        phases = best_of(lambda: np.exp(1j * d.wavenumber * (d.station.positions @ unit.T)), 1)
        beam = best_of(lambda: solution.beam(weights, sky.theta_rad, sky.phi_rad), 1)
        ratios.append((beam / phases, beam, phases))
    ratio, beam, phases = sorted(ratios)[2]
    print(f"beam: {len(sky)} directions {beam:.2f} s, phase factors {phases:.2f} s, ratio {ratio:.2f} (target 3)")


def commands() -> None:
    """Start of the command line; target 0.4 s."""
    program = shutil.which("elbowroom") or f"{sys.prefix}/bin/elbowroom"

    def help_text() -> None:
        subprocess.run([program, "--help"], check=True, capture_output=True)

    times = [best_of(help_text, 1) for _ in range(7)]
    bare = min(best_of(lambda: subprocess.run([sys.executable, "-c", "pass"], check=True), 1) for _ in range(7))
    print(f"commands: --help {sorted(times)[3]:.2f} s (target 0.4), bare interpreter {bare:.2f} s")


MEASUREMENTS = {"kernel": kernel, "mesh": mesh, "patterns": patterns, "commands": commands, "station": station}


def main() -> None:
    """Run the measurements that were named, or all."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("names", nargs="*", choices=[[], *MEASUREMENTS], help="which to run; all by default")
    for name in parser.parse_args().names or MEASUREMENTS:
        MEASUREMENTS[name]()


if __name__ == "__main__":
    main()
