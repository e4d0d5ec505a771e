"""Parasitic arrays of dipoles against theory, worked examples and measurements.

All lengths are in wavelengths (1 m at c hertz).  Printed values here are from memory unless a check says otherwise.
"""

from __future__ import annotations

import tomllib
from functools import cache
from math import pi
from pathlib import Path

import numpy as np
import pytest
from scipy.optimize import brentq, minimize_scalar

import references as ref
from dipole_models import FREQUENCY_HZ, LIGHT, SLENDER, K, decibels, directivity, limits, solve_alone
from elbowroom.geometry.antennas import Antenna, Load, Port
from elbowroom.geometry.shapes import dipole
from elbowroom.geometry.wires import Wire
from elbowroom.radiation.patterns import station_patterns
from elbowroom.system.plane_waves import direction_frame
from parasitic_theory import parasitic_pair, three_term_array

pytestmark = pytest.mark.validation

TABLE = tomllib.loads((Path(__file__).parent / "cases" / "stutzman_thiele_yagi_uda.toml").read_text(encoding="utf-8"))


def array(lengths, places, radius, *, fed=1, gap=None, loads=()):
    """Return a row of parallel dipoles, along x, places along z, one of them fed in its middle."""
    wires = [Wire((-0.5 * q, 0.0, z), (0.5 * q, 0.0, z), radius) for q, z in zip(lengths, places, strict=True)]
    return Antenna("array", wires, [Port("p", fed, gap=gap)], list(loads))


def back_over_front(solved):
    """Return the field against the row over that along it, both with their phases referred to the origin."""
    frame = direction_frame(np.array([0.0, pi]), np.zeros(2))
    front, back = station_patterns(solved.discretisation, solved.currents[:, :1], frame)[0, :, 0]
    # theta_hat turns round from zenith to nadir
    return -back / front


# --- one parasite


@pytest.mark.parametrize("distance", [0.1, 0.15, 0.25])
@pytest.mark.parametrize("reactance", [-25.0, 0.0, 42.5])
def test_one_parasite__impedance_directivity_and_front_to_back(record, distance, reactance):
    """Half-wave dipoles of vanishing thickness, the parasite tuned by a reactance in its middle: director, resonant, reflector.

    The limit is that of radii from 1e-4 to 3e-9 in powers of 1/Omega; tolerance: the spread of three fits.
    """
    exact, towards, away, ratio = parasitic_pair(distance, reactance)
    own = ref.thin_dipole_impedance(0.25, K)
    tuning = reactance - own.imag
    omega = 2.0 * pi * FREQUENCY_HZ
    part = {"inductance_h": tuning / omega} if tuning > 0.0 else {"capacitance_f": -1.0 / (tuning * omega)}
    impedance, front, turn = [], [], []
    for radius in SLENDER:
        solved = solve_alone(array([0.5, 0.5], [0.0, distance], radius, fed=0, loads=[Load(1, 0.5, **part)]))
        impedance.append(1.0 / solved.admittance[0, 0])
        front.append(directivity(solved))
        turn.append(back_over_front(solved))
    thin = 2.0 * np.log(0.5 / SLENDER)
    name = f"parasite {distance:g} away, X22 {reactance:g}"
    source = "Brown 1937, Carter 1932"
    for what, values, expected, wrong in (
        ("input impedance [ohm]", impedance, exact, [own, 2.0 * own - exact, exact.conjugate()]),
        ("directivity over it", front, towards, [away, 1.64]),
        ("field behind over field over it", turn, ratio, [1.0 / ratio, 1.0]),
    ):
        limit, uncertainty = limits(thin, values, 0)
        record(f"{name}: {what}", limit, expected, absolute=uncertainty, source=source, wrong=wrong)


# --- equally spaced arrays


@cache
def shortening():
    """Return by how much a half-length on a filament exceeds that of a tube with the same resonance, and how uncertain that is.

    From one dipole of the table's radius: three terms of current on a filament against the program; two terms against three.
    """
    radius = TABLE["radius"]
    three, two = (brentq(lambda q, n=n: three_term_array([q], [0.0], radius, fed=0, terms=n)[0].imag, 0.45, 0.49) for n in (3, 2))
    tube = brentq(lambda q: (1.0 / solve_alone(array([q], [0.0], radius, fed=0)).admittance[0, 0]).imag, 0.45, 0.49)
    return 0.5 * (three - tube), 0.5 * abs(two - three)


def test_ends_of_filaments_and_tubes__differ_by_a_radius_or_less():
    """0.6 radii, uncertain by 0.5."""
    by, uncertain = shortening()
    assert 0.0 < uncertain < by < TABLE["radius"]


def printed(row):
    """Return gain [dB], front-to-back ratio [dB] and impedance [ohm] of a row of the table."""
    return np.array([row[5], row[6], complex(row[7], row[8])])


def solved_row(row, less, gap=None):
    """Return the same three of the row's array with half-lengths shortened."""
    count, spacing, reflector, driven, director = row[:5]
    lengths = np.array([reflector, driven, *[director] * (count - 2)]) - 2.0 * less
    solved = solve_alone(array(lengths, spacing * np.arange(count), TABLE["radius"], gap=gap), mesh=LIGHT)
    front, back = directivity(solved), directivity(solved, theta=pi)
    return np.array([decibels(front), decibels(front / back), 1.0 / solved.admittance[0, 0]])


@pytest.mark.parametrize("row", TABLE["row"], ids=lambda row: f"{row[0]}-{row[1]:g}")
def test_yagi_uda__equally_spaced__gain_front_to_back_and_impedance(record, row):
    """Half-lengths are shortened for what their ends differ by; see the case's own file.

    Tolerance: what the uncertainty of that makes of each number, what half the width of the gap does, and the last printed
    digit.  It is wide where arrays are sensitive: taken literally, four elements 0.2 apart have 1.3 dB front to back for 7.5.
    """
    by, uncertain = shortening()
    here = solved_row(row, by)
    slack = np.maximum(abs(solved_row(row, by + uncertain) - here), abs(solved_row(row, by - uncertain) - here))
    slack += abs(solved_row(row, by, gap=TABLE["radius"]) - here) + 0.05 * np.array([1.0, 1.0, np.sqrt(2.0)])
    gain, ratio, impedance = printed(row)
    wrongs = ([2.15, gain + 10.0], [-ratio, 2.0 * ratio + 10.0], [complex(73.1, 42.5), -impedance])
    names = ("gain [dB]", "front to back [dB]", "input impedance [ohm]")
    for name, value, expected, tolerance, wrong in zip(names, here, printed(row), slack, wrongs, strict=True):
        record(
            f"{row[0]} elements {row[1]:.2f} apart: {name}", value, expected, absolute=float(abs(tolerance)),
            source="Stutzman & Thiele 1981 (memory)", wrong=wrong,
        )  # fmt: skip


def test_yagi_uda__equally_spaced__one_shortening_fits_the_whole_table(record):
    """Sixty numbers, one unknown: the shortening that fits them best is the one of a single dipole, within its uncertainty.

    Weights only balance the three kinds of number.  What is left then: see the printed medians.
    """
    scale = np.array([0.1, 0.3, 1.5])

    def misfit(less):
        return np.concatenate([np.abs((solved_row(row, less) - printed(row)) / scale) for row in TABLE["row"]])

    radius = TABLE["radius"]
    best = minimize_scalar(
        lambda x: np.sum(misfit(x * radius) ** 2), bounds=(-1.0, 3.0), method="bounded", options={"xatol": 0.02}
    ).x
    left = np.median(misfit(best * radius).reshape(-1, 3), axis=0) * scale
    print(f"median deviations: gain {left[0]:.2f} dB, front to back {left[1]:.2f} dB, impedance {left[2]:.1f} ohm")
    by, uncertain = shortening()
    record(
        "shortening that fits the whole table [radii]", best, by / radius, absolute=uncertain / radius,
        source="Stutzman & Thiele 1981 (memory)", wrong=[0.0, -by / radius, 2.0],
    )  # fmt: skip


# --- arrays of the handbooks and the range

MEASURED = {
    "3 elements, 0.4 wavelengths": ([0.482, 0.442], 0.2, 7.1),
    "5 elements, 0.8 wavelengths": ([0.482, 0.428, 0.424, 0.428], 0.2, 9.2),
    "6 elements, 1.2 wavelengths": ([0.482, 0.428, 0.420, 0.420, 0.428], 0.25, 10.2),
    "12 elements, 2.2 wavelengths": (
        [0.482, 0.432, 0.415, 0.407, 0.398, 0.390, 0.390, 0.390, 0.390, 0.398, 0.407], 0.2, 12.25,
    ),
}  # fmt: skip
"""Lengths of reflector and directors, spacing of directors and gain over a half-wave dipole [dB]; rods of diameter 0.0085, the
reflector 0.2 behind the driven element.  P. P. Viezbicke, Yagi Antenna Design, NBS Technical Note 688, 1976, table 1 (from memory, as
reprinted by handbooks)."""


@pytest.mark.parametrize("name", MEASURED)
def test_yagi_uda__gain_over_a_dipole_is_the_measured_one(record, name):
    """Tolerance: half a decibel, which gains measured on an outdoor range are good to (common practice, no source)."""
    (reflector, *directors), spacing, published = MEASURED[name]
    lengths = [reflector, 0.47, *directors]
    places = [-0.2, 0.0, *(spacing * (1 + np.arange(len(directors))))]
    radius = 0.5 * 0.0085
    solved = solve_alone(array(lengths, places, radius), mesh="default")
    half_wave = directivity(solve_alone(dipole(half_length_m=0.235, height_m=1.0, wire_radius_m=radius), mesh="default"))
    gain = directivity(solved)
    back = directivity(solved, theta=pi)
    record(
        f"{name}: gain over a half-wave dipole [dB]", decibels(gain / half_wave), published, absolute=0.5,
        source="Viezbicke 1976 (memory)", wrong=[published + 2.15, published - 2.15, decibels(back / half_wave), 0.0],
    )  # fmt: skip


def test_yagi_uda__fifteen_elements__the_worked_example(record):
    """A 15-element design solved by moments in C. A. Balanis, Antenna Theory, section 10.3 (Thiele's method; from memory).

    Reflector 0.5, driven element 0.47, thirteen directors 0.406 wavelengths long, radius 0.003, reflector at 0.25, directors 0.34
    apart: 14.64 dB, half-power widths 26.79 deg (E) and 27.85 deg (H).  That solution has filaments, whose ends differ from those
    of tubes by about a radius: elements 1.5 % longer change the optimised arrays above by a few tenths of a decibel, hence 0.3 dB,
    and the widths by half as much in proportion, hence 1 deg.  The front-to-back ratio, 36.4 dB, is compared as the magnitude of
    the field behind over that in front, 0.015, to which ends of 0.6 radii (see above) matter more: tolerance is what they change.
    """
    lengths = np.array([0.5, 0.47] + [0.406] * 13)
    places = [-0.25, *(0.34 * i for i in range(14))]
    solved = solve_alone(array(lengths, places, 0.003), mesh=LIGHT)
    source = "Balanis, section 10.3 (memory)"
    forwards = directivity(solved)
    back = directivity(solved, theta=pi)
    record(
        "15-element Yagi-Uda: directivity [dB]", decibels(forwards), 14.64, absolute=0.3, source=source,
        wrong=[decibels(back), 14.64 - 2.15, 14.0],
    )  # fmt: skip
    for plane, phi, published in (("E", 0.0, 26.79), ("H", 0.5 * pi, 27.85)):
        half = brentq(lambda t, at=phi: directivity(solved, theta=t, phi=at) - 0.5 * forwards, 0.05, 0.4)
        record(
            f"15-element Yagi-Uda: width in the {plane} plane [deg]", 2.0 * np.degrees(half), published, absolute=1.0,
            source=source, wrong=[78.0, published + 3.0],
        )  # fmt: skip
    found, longer, shorter = (
        back_over_front(solve_alone(array(lengths + change, places, 0.003), mesh=LIGHT)) for change in (0.0, 0.0036, -0.0036)
    )
    record(
        "15-element Yagi-Uda: magnitude of field behind over field in front", abs(found), 10.0 ** (-36.4 / 20.0),
        absolute=max(abs(longer - found), abs(shorter - found)), source=source, wrong=[10.0 ** (-18.2 / 20.0), 1.0],
    )  # fmt: skip
