"""Campaign: how often the reduced solver's stated error bounds the true one, and by how much it exceeds it.

Run ``python validation/benchmarks/reduced_campaign.py`` (some minutes).  Clusters of drooping dipoles and of log-periodic antennas,
turned and not, closest pairs 1.3 to 1.5 m, 50 to 350 MHz, tolerances 1e-3 and 1e-4; the truth is a direct solve in double precision
with quadrature between antennas good to 1e-9.
"""

from __future__ import annotations

import argparse
import sys
from pathlib import Path

import numpy as np

from elbowroom.geometry.grounds import FreeSpace, PerfectGround
from elbowroom.job.solve import solve

sys.path[:0] = [str(Path(__file__).parents[1]), str(Path(__file__).parents[2] / "tests")]
from reduced_cases import cluster_of, difference, true_solution  # noqa: E402  (the path is set just above)

FREQUENCIES_HZ = (50e6, 110e6, 150e6, 230e6, 350e6)
TOLERANCES = (1e-3, 1e-4)
CLUSTERS = (
    ("dipoles", 24, 1.3, False, PerfectGround()),
    ("dipoles", 16, 1.4, True, PerfectGround()),
    ("dipoles", 12, 1.5, True, FreeSpace()),
    ("log-periodics 2x10", 8, 1.4, False, PerfectGround()),
    ("log-periodics 2x9", 7, 1.5, True, PerfectGround()),
    ("log-periodics 2x8", 6, 1.3, True, PerfectGround()),
    ("log-periodics 2x8", 6, 1.3, False, FreeSpace()),
)


def decibels(error: float) -> str:
    """Return an error of a field in decibels."""
    return f"{20.0 * np.log10(max(error, 1e-16)):7.1f}"


def main() -> None:
    """Print one line a case and the summary."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--seed", type=int, default=1, help="first seed of the layouts")
    seed = parser.parse_args().seed
    print("cluster, MHz, tolerance: functions an antenna; true and stated pattern error [dB], ratio; Z over its norm; "
          "loaded admittance, true and stated, ratio")  # fmt: skip
    found = []
    for number, (name, count, closest, turned, ground) in enumerate(CLUSTERS):
        for frequency in FREQUENCIES_HZ:
            station = cluster_of(name, count, closest, seed + number, turned=turned, ground=ground)
            truth = true_solution(station, frequency)
            for tolerance in TOLERANCES:
                case = difference(truth, solve(station, frequency, solver="reduced", tolerance=tolerance))
                found.append((tolerance, case))
                print(
                    f"{count:3d} {name:19s} {'turned' if turned else 'level '} {ground.name:14s} {frequency / 1e6:4.0f} {tolerance:.0e}: "
                    f"{case.functions:5.1f}; {decibels(case.pattern)} {decibels(case.stated_pattern)} "
                    f"{case.stated_pattern / case.pattern:6.1f}; {case.impedance:.1e}; {case.admittance:.1e} {case.stated_admittance:.1e} "
                    f"{case.stated_admittance / case.admittance:6.1f}",
                    flush=True,
                )  # fmt: skip
    pattern = np.array([c.stated_pattern / c.pattern for _, c in found])
    matrix = np.array([c.stated_admittance / c.admittance for _, c in found])
    print(f"{len(found)} cases")
    for label, ratio in (("patterns", pattern), ("loaded admittance", matrix)):
        print(f"{label}: stated bounds true in {np.mean(ratio >= 1.0):.1%}; stated over true: least {ratio.min():.2f}, median "
              f"{np.median(ratio):.1f}, 90 % {np.quantile(ratio, 0.9):.1f}, most {ratio.max():.0f}")  # fmt: skip
    for tolerance in TOLERANCES:
        worst = max(c.pattern for t, c in found if t == tolerance)
        impedance = max(c.impedance for t, c in found if t == tolerance)
        stated = max(c.stated_pattern for t, c in found if t == tolerance)
        print(
            f"tolerance {tolerance:.0e}: worst pattern {decibels(worst)} dB, stated at most {decibels(stated)} dB, worst Z {impedance:.1e}"
        )


if __name__ == "__main__":
    main()
