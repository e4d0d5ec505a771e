"""The reduced solver against the direct one, its stated error against the true one, and identities it must keep within that.

Truth is a direct solve in double precision with quadrature between antennas good to 1e-9 (`reduced_cases.TRUTH`).  The clusters are
those of the campaign in `benchmarks/reduced_campaign.py`, fewer and some smaller, so that every run can afford them.

References
----------
.. [1] W. K. Kahn, H. Kurss, "Minimum-scattering antennas", IEEE Trans. Antennas Propag. 13(5), 1965, 671-675: the real part of
   the impedances of a lossless array is the overlap of its open-circuit patterns.  From memory; derived in `independent.overlap`.
.. [2] R. F. Harrington, Time-Harmonic Electromagnetic Fields, 1961, section 1-10: complex power.  From memory.
"""

from functools import cache

import numpy as np
import pytest

import independent
from elbowroom.base.constants import IMPEDANCE_OF_VACUUM, wavenumber_of
from elbowroom.geometry.directions import Directions, sphere_quadrature
from elbowroom.geometry.grounds import FreeSpace, PerfectGround
from elbowroom.geometry.stations import Placed, Station, orientation_matrix
from elbowroom.job.solve import solve
from elbowroom.system import reduction, solving_reduced
from helpers import crossed
from reduced_cases import cluster_of, difference, norm_error, pattern_errors, reduced_beside, true_solution

pytestmark = pytest.mark.validation

DIRECT = "direct solution of all unknowns on the same mesh, double precision"
OVERLAP = "power of superposed patterns (Kahn and Kurss 1965; from memory)"
POYNTING = "complex power (Harrington 1961, 1-10; from memory)"
INVARIANCE = "isotropy and homogeneity of space"
TRADE = "common practice, no source"

PERFECT = PerfectGround()
CASES = {
    # name, antennas, closest pair [m], seed, turned, ground, frequency [Hz]
    "24 dipoles, 350 MHz": ("dipoles", 24, 1.3, 11, False, PERFECT, 350e6),
    "20 turned dipoles, 230 MHz": ("dipoles", 20, 1.3, 12, True, PERFECT, 230e6),
    "16 turned dipoles, 150 MHz": ("dipoles", 16, 1.4, 13, True, PERFECT, 150e6),
    "12 dipoles in free space, 110 MHz": ("dipoles", 12, 1.5, 14, True, FreeSpace(), 110e6),
    "24 dipoles, 50 MHz": ("dipoles", 24, 1.3, 15, False, PERFECT, 50e6),
    "6 log-periodics 2x8, 150 MHz": ("log-periodics 2x8", 6, 1.4, 16, False, PERFECT, 150e6),
    "4 turned log-periodics 2x8, 50 MHz": ("log-periodics 2x8", 4, 1.3, 17, True, PERFECT, 50e6),
    "4 turned log-periodics 2x8, 350 MHz": ("log-periodics 2x8", 4, 1.3, 18, True, PERFECT, 350e6),
}


def station_of(case):
    name, count, closest, seed, turned, ground, _ = CASES[case]
    return cluster_of(name, count, closest, seed, turned=turned, ground=ground)


@cache
def truth_of(case):
    return true_solution(station_of(case), CASES[case][-1])


@cache
def reduced_of(case, tolerance):
    return reduced_beside(truth_of(case), reduction.ReductionSettings(tolerance))


@pytest.mark.parametrize("tolerance", [1e-3, 1e-4])
@pytest.mark.parametrize("case", CASES)
def test_reduced__every_embedded_pattern_and_the_impedances_are_within_the_tolerance(record, case, tolerance):
    truth, reduced = truth_of(case), reduced_of(case, tolerance)
    # Wrong: antennas without coupling.
    isolated = pattern_errors(truth, truth, found=truth.isolated_patterns)
    record(
        f"worst embedded pattern over its peak, {case}, tolerance {tolerance:g}", pattern_errors(truth, reduced).max(), 0.0,
        absolute=tolerance, wrong=isolated.max(), source=DIRECT,
    )  # fmt: skip
    z = truth.impedance_matrix()
    record(
        f"impedance matrix over its norm, {case}, tolerance {tolerance:g}", norm_error(reduced.impedance_matrix(), z), 0.0,
        absolute=tolerance, wrong=norm_error(np.diag(np.diagonal(z)), z), source=DIRECT,
    )  # fmt: skip


def test_stated_error__bounds_the_true_one_and_not_by_much(record):
    pattern, matrix = [], []
    for case in CASES:
        for tolerance in (1e-3, 1e-4):
            found = difference(truth_of(case), reduced_of(case, tolerance))
            assert found.stated_pattern <= tolerance
            pattern.append(found.stated_pattern / found.pattern)
            matrix.append(found.stated_admittance / found.admittance)
    # 95 % are asked for in the campaign; of these 16, at most one may miss.  Wrong: stated errors ten times smaller or larger.
    for label, ratio in (("patterns", np.array(pattern)), ("loaded admittance", np.array(matrix))):
        record(f"cases of 16 with stated below true, {label}", int((ratio < 1.0).sum()), 0, absolute=1.0,
               wrong=int((0.1 * ratio < 1.0).sum()), source=DIRECT)  # fmt: skip
        record(f"decades of stated over true, median, {label}", float(np.log10(np.median(ratio))), 0.0, absolute=1.0,
               wrong=[float(np.log10(np.median(10.0 * ratio)))], source=DIRECT)  # fmt: skip


@pytest.mark.parametrize("missing", ["neighbours", "plane waves", "nearly everything"])
def test_stated_error__catches_a_poor_basis(record, monkeypatch, missing):
    # Nothing may be added afterwards: the first solution is stated as it is.
    monkeypatch.setattr(solving_reduced, "MOST_ATTEMPTS", 1)
    tolerance, cut_factor = 1e-4, 0.3
    if missing == "neighbours":
        monkeypatch.setattr(reduction, "_neighbour_answers", lambda *a, **k: [])
        cut_factor = 3.0
    elif missing == "plane waves":
        monkeypatch.setattr(reduction, "sky_samples", lambda *a: (np.zeros(1), np.zeros(1)))
        monkeypatch.setattr(reduction, "_neighbour_answers", lambda *a, **k: [])
    else:
        cut_factor = 60.0
    case = "4 turned log-periodics 2x8, 350 MHz"
    truth = truth_of(case)
    poor = reduced_beside(truth, reduction.ReductionSettings(tolerance, cut_factor=cut_factor))
    statistics = poor.statistics
    true = pattern_errors(truth, poor).max()
    # Poor indeed, said to be, and by about as much.
    assert true > 2.0 * tolerance
    assert statistics.pattern_error > tolerance
    record(
        f"decades of stated over true, basis without {missing}", float(np.log10(statistics.pattern_error / true)), 0.5, absolute=0.5,
        wrong=float(np.log10(tolerance / true)), source=DIRECT,
    )  # fmt: skip


# --- identities


@cache
def identity_solution(over_ground, tolerance):
    station = cluster_of("dipoles", 6, 1.3, 3, turned=True, ground=PERFECT if over_ground else FreeSpace())
    thin = crossed(wire_radius_m=2e-4)
    station = Station([Placed(thin, p.position, p.rotation_deg) for p in station], station.ground)
    return solve(station, 150e6, solver="reduced", tolerance=tolerance)


@pytest.mark.parametrize("over_ground", [False, True], ids=["free space", "perfect ground"])
@pytest.mark.parametrize("tolerance", [1e-2, 1e-3, 1e-4])
def test_power_and_overlap__are_kept_within_the_stated_error(record, over_ground, tolerance):
    solution = identity_solution(over_ground, tolerance)
    d, reference = solution.discretisation, solution.reference_ohm
    sky = sphere_quadrature(56, hemisphere=over_ground)
    # Patterns err by the stated error of their peaks, twice in a product; filaments leave 0.75 (ka)^2 (test_identities.py), rules 1e-6.
    allowance = 2.0 * solution.statistics.pattern_error + 0.75 * (d.wavenumber * 2e-4) ** 2 + 1e-6
    rng = np.random.default_rng(8)
    sources = rng.normal(size=d.n_ports) + 1j * rng.normal(size=d.n_ports)
    current = solution.coupled.loaded_admittance @ sources
    power = 0.5 * np.real(np.vdot(current, sources - reference * current))
    beam = solution.beam(-sources / reference, sky.theta_rad, sky.phi_rad, termination=reference)
    radiated = d.wavenumber**2 * IMPEDANCE_OF_VACUUM / (32.0 * np.pi**2) * sky.integrate((np.abs(beam) ** 2).sum(axis=-1))
    where = solution.station.ground.name
    # Many ports add up in a beam: what they err by adds in power, at random phases.
    record(
        f"radiated power [W], tolerance {tolerance:g}, {where}", radiated, power, relative=allowance * np.sqrt(d.n_ports),
        wrong=power * (1.0 + 4.0 * allowance * np.sqrt(d.n_ports)), source=POYNTING,
    )  # fmt: skip
    lengths = solution.embedded_patterns(sky.theta_rad, sky.phi_rad, termination="open")
    found = independent.overlap(lengths, sky.weights_sr, d.wavenumber)
    z = solution.impedance_matrix().real
    loaded = solution.embedded_patterns(sky.theta_rad, sky.phi_rad, termination=100.0)
    wrong = np.abs(independent.overlap(loaded, sky.weights_sr, d.wavenumber) - z).max() / np.abs(z).max()
    record(
        f"overlap of open-circuit patterns - Re Z, tolerance {tolerance:g}, {where}",
        float(np.abs(found - z).max() / np.abs(z).max()), 0.0, absolute=allowance, wrong=float(wrong), source=OVERLAP,
    )  # fmt: skip


MOVES = {
    "shift": (np.eye(3), (7.3, -4.1, 0.0)),
    "turn": (orientation_matrix(37.0), (0.0, 0.0, 0.0)),
    "mirror image": (np.diag([-1.0, 1.0, 1.0]), (0.0, 0.0, 0.0)),
}


@pytest.mark.parametrize("move", MOVES)
def test_moved_stations__have_moved_solutions(record, move):
    matrix, shift = MOVES[move]
    station = cluster_of("dipoles", 6, 1.3, 4, turned=True)
    # Functions and skeletons are chosen anew from samples in other directions: equality is within the stated errors of both.
    here, there = (
        solve(s, 230e6, solver="reduced", tolerance=1e-3) for s in (station, independent.carried(station, matrix, shift))
    )
    theta, phi = np.meshgrid(np.linspace(0.0, 1.5, 9), np.linspace(-3.0, 3.0, 15), indexing="ij")
    theta, phi = theta.ravel(), phi.ravel()
    unit = Directions(theta, phi).unit_vectors()
    vectors = independent.as_vectors(here.embedded_patterns(theta, phi), theta, phi)
    carried = unit @ matrix.T
    theta2, phi2 = np.arccos(np.clip(carried[:, 2], -1.0, 1.0)), np.arctan2(carried[:, 1], carried[:, 0])
    found = independent.as_vectors(there.embedded_patterns(theta2, phi2), theta2, phi2)
    phase = np.exp(1j * here.discretisation.wavenumber * carried @ shift)
    expected = (vectors @ matrix.T) * phase[None, :, None]
    peak = np.linalg.norm(expected, axis=-1).max(axis=1)
    allowance = here.statistics.pattern_error + there.statistics.pattern_error + 1e-7
    assert allowance < 2.1e-3
    record(
        f"change of patterns, {move}", float((np.linalg.norm(found - expected, axis=-1).max(axis=1) / peak).max()), 0.0,
        absolute=allowance, wrong=float((np.linalg.norm(found - vectors, axis=-1).max(axis=1) / peak).max()), source=INVARIANCE,
    )  # fmt: skip
    record(
        f"change of loaded admittance, {move}", norm_error(there.coupled.loaded_admittance, here.coupled.loaded_admittance), 0.0,
        absolute=here.statistics.port_matrix_error + there.statistics.port_matrix_error + 1e-7,
        wrong=norm_error(here.coupled.loaded_admittance[::-1, ::-1], here.coupled.loaded_admittance), source=INVARIANCE,
    )  # fmt: skip


# --- facts of the trade


def sidelobe_region(wavelength, extent):
    """Directions of a sphere rule over the sky, more than 1.5 beam widths from the zenith and above 20 degrees."""
    sky = sphere_quadrature(90, hemisphere=True)
    far = (np.sin(sky.theta_rad) > 1.5 * wavelength / extent) & (sky.theta_rad < np.deg2rad(70.0))
    return sky, far


@cache
def zenith_beam(seed, count=24):
    station = cluster_of("dipoles", count, 1.3, seed, turned=False)
    solution = solve(station, 350e6, solver="reduced", tolerance=1e-3)
    extent = 2.0 * float(np.hypot(*station.positions[:, :2].T).max())
    sky, far = sidelobe_region(2.0 * np.pi / wavenumber_of(350e6), extent)
    weights = solution.pointing_weights(0.0, 0.0, port="x")
    fields = solution.beam(weights, sky.theta_rad, sky.phi_rad)
    # Relative to one antenna's own pattern, so that the array's part is left: mean over the station's embedded patterns.
    element = solution.embedded_patterns(sky.theta_rad, sky.phi_rad)[0::2]
    mean = (np.abs(element) ** 2).sum(axis=-1).mean(axis=0)
    power = (np.abs(fields) ** 2).sum(axis=-1) / (count**2 * mean)
    return power, sky.weights_sr, far, fields, mean


def test_one_random_station__has_mean_sidelobes_of_one_over_its_antennas(record):
    count, found = 24, []
    for seed in range(20, 26):
        power, weights, far, _, _ = zenith_beam(seed)
        found.append(float(np.sum(power[far] * weights[far]) / np.sum(weights[far])))
    # Antennas at random add in power outside the beam.  A smallest distance of 1.5 wavelengths and six layouts leave about a
    # third either way: antennas in step, or in opposition, would be a factor of 24 off.
    record("mean sidelobe of one station times antennas", float(np.mean(found)) * count, 1.0, absolute=0.4,
           wrong=[float(count), 1.0 / count, 2.0], source=TRADE)  # fmt: skip


def test_beams_of_differently_laid_out_stations__average_to_lower_sidelobes(record):
    beams = [zenith_beam(seed) for seed in range(20, 26)]
    _, weights, far, _, mean = beams[0]
    # Fields of six stations, each relative to its own zenith as an observer calibrates them, averaged.
    fields = np.array([b[3] for b in beams]) / 24.0
    one = (np.abs(fields) ** 2).sum(axis=-1).mean(axis=0) / mean
    averaged = (np.abs(fields.mean(axis=0)) ** 2).sum(axis=-1) / mean
    ratio = np.sum(averaged[far] * weights[far]) / np.sum(one[far] * weights[far])
    record("far sidelobes of six averaged stations over those of one", float(ratio), 1.0 / 6.0, absolute=0.08,
           wrong=[1.0, 1.0 / np.sqrt(6.0), 1.0 / 36.0], source=TRADE)  # fmt: skip
