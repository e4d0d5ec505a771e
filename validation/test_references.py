"""The references themselves: closed forms against each other, quadrature in mpmath, and print."""

from __future__ import annotations

import tomllib
from itertools import pairwise
from math import pi
from pathlib import Path

import mpmath
import numpy as np
import pytest
from numpy.polynomial.legendre import leggauss
from numpy.testing import assert_allclose
from scipy import special

import references as ref
import references_array as array
from elbowroom.base.constants import IMPEDANCE_OF_VACUUM, VACUUM_PERMEABILITY

pytestmark = pytest.mark.validation

K = 2.0 * pi  # all lengths below are in wavelengths
CASES = Path(__file__).parent / "cases"

PAIRS = [
    # half-lengths, distance, offset
    (0.25, 0.25, 0.3, 0.0),
    (0.25, 0.25, 0.3, 0.77),
    (0.31, 0.17, 0.3, -0.4),
    (0.62, 0.11, 0.05, 0.2),
    (0.05, 0.4, 2.5, 1.3),
]


def panels(*cuts, n=40):
    """Return Gauss points and weights over consecutive intervals."""
    x, w = leggauss(n)
    points = [0.5 * (b - a) * x + 0.5 * (a + b) for a, b in pairwise(cuts)]
    weights = [0.5 * (b - a) * w for a, b in pairwise(cuts)]
    return np.concatenate(points), np.concatenate(weights)


def far_field_resistance(h, h2, distance, offset, radius, radius2):
    """Return Re Z from the power through the far sphere: bilinear overlap of the two patterns.

    A tube's pattern is its filament's times J0(k a sin psi); displacement in azimuth gives another J0.
    """
    psi, w = panels(0.0, pi / 4, pi / 2, 3 * pi / 4, pi, n=60)
    sine, cosine = np.sin(psi), np.cos(psi)
    length = [ref.sinusoid_effective_length(x, psi, K) for x in (h, h2)]
    rings = [special.j0(K * a * sine) for a in (radius, radius2, distance)]
    pattern = length[0] * length[1] * rings[0] * rings[1] * rings[2] * np.cos(K * offset * cosine)
    return K**2 * IMPEDANCE_OF_VACUUM / (8.0 * pi) * np.sum(w * sine * pattern)


# --- sine and cosine integrals


@pytest.mark.parametrize("x", [0.3, 2 * pi, 40.0])
def test_sine_and_cosine_integrals__equal_their_definitions(x):
    steps = list(np.linspace(0.0, x, 12))
    si = mpmath.quad(mpmath.sinc, steps)
    cin = mpmath.quad(lambda t: (1 - mpmath.cos(t)) / t if t else mpmath.mpf(0), steps)
    assert_allclose(ref.sine_integral(x), float(si), rtol=4e-15)
    assert_allclose(ref.entire_cosine_integral(x), float(cin), rtol=2e-14)
    assert_allclose(ref.cosine_integral(x), float(mpmath.ci(x)), atol=1e-15, rtol=4e-15)


# --- filaments


@pytest.mark.parametrize("pair", PAIRS)
def test_mutual_impedance__equals_quadrature_of_the_field(pair):
    assert_allclose(ref.mutual_impedance(*pair, K), ref.mutual_impedance_by_quadrature(*pair, K), atol=1e-10)


@pytest.mark.parametrize("pair", PAIRS[:3])
def test_mutual_impedance__equals_the_mixed_potential_double_integral(pair):
    # No three spherical waves here: vector and scalar potential of the two sinusoids, arm by arm.
    h, h2, d, z0 = pair
    z, w = panels(-h, 0.0, h)
    t, w2 = panels(-h2, 0.0, h2)
    r = np.sqrt(d**2 + (z[:, None] - z0 - t[None, :]) ** 2)
    kernel = np.exp(-1j * K * r) / r
    vector = (w * np.sin(K * (h - abs(z)))) @ kernel @ (w2 * np.sin(K * (h2 - abs(t))))
    slope, slope2 = (-np.sign(x) * K * np.cos(K * (y - abs(x))) for x, y in ((z, h), (t, h2)))
    scalar = (w * slope) @ kernel @ (w2 * slope2)
    expected = 1j * K * IMPEDANCE_OF_VACUUM / (4 * pi) * (vector - scalar / K**2)
    found = ref.mutual_impedance(*pair, K)
    assert_allclose(found, expected, atol=2e-11)
    assert abs(found - ref.mutual_impedance(h, h2, d + 1e-9, z0, K)) > 2e-11


def test_mutual_impedance__is_exact_in_high_precision():
    with mpmath.workdps(30):
        h, h2, d, z0, k = (mpmath.mpf(x) for x in ("0.31", "0.17", "0.01", "-0.4", "6.25"))

        def reaction(t):
            wave = mpmath.mpc(0)
            for source, weight in ((h, 1), (-h, 1), (0, -2 * mpmath.cos(k * h))):
                r = mpmath.sqrt(d * d + (z0 + t - source) ** 2)
                wave += weight * mpmath.expj(-k * r) / r
            return wave * mpmath.sin(k * (h2 - abs(t)))

        cuts = sorted([-h2, 0, h2, -h - z0])
        expected = 1j * IMPEDANCE_OF_VACUUM / (4 * mpmath.pi) * mpmath.quad(reaction, cuts, maxdegree=9)
        found = ref.mutual_impedance_mp(h, h2, d, z0, k)
        assert abs(found - expected) < mpmath.mpf("1e-24")
        assert_allclose(ref.mutual_impedance(0.31, 0.17, 0.01, -0.4, 6.25), complex(found), atol=2e-13)


@pytest.mark.parametrize("pair", PAIRS)
def test_mutual_impedance__is_reciprocal_and_blind_to_side(pair):
    h, h2, d, z0 = pair
    found = ref.mutual_impedance(h, h2, d, z0, K)
    assert_allclose(ref.mutual_impedance(h2, h, d, z0, K), found, atol=2e-13)
    assert_allclose(ref.mutual_impedance(h, h2, -d, -z0, K), found, atol=2e-13)


def test_mutual_impedance__at_the_feed_differs_by_both_feed_currents():
    at_maximum = ref.mutual_impedance(0.31, 0.17, 0.3, -0.4, K)
    feed_currents = np.sin(K * 0.31) * np.sin(K * 0.17)
    at_feed = ref.mutual_impedance(0.31, 0.17, 0.3, -0.4, K, reference="feed")
    assert_allclose(at_feed * feed_currents, at_maximum, rtol=1e-15)
    with pytest.raises(ValueError, match="reference must be"):
        ref.mutual_impedance(0.31, 0.17, 0.3, -0.4, K, reference="peak")


def test_mutual_impedance__collinear_is_the_limit_of_small_distance():
    for h2, offset in ((0.25, 0.77), (0.1, -0.4), (0.25, 0.5)):
        on_axis = ref.mutual_impedance(0.25, h2, 0.0, offset, K)
        with mpmath.workdps(30):
            nearby = complex(ref.mutual_impedance_mp(0.25, h2, "1e-16", offset, K))
        # End to end the deviation is linear in the distance, otherwise quadratic.
        assert_allclose(on_axis, nearby, atol=1e-13)
    with pytest.raises(ValueError, match="overlap"):
        ref.mutual_impedance(0.25, 0.25, 0.0, 0.49, K)


def test_mutual_impedance__equals_the_printed_forms_of_carter():
    for d in (0.02, 0.4, 1.7):
        expected = ref.half_wave_side_by_side_impedance(d, K)
        assert_allclose(ref.mutual_impedance(0.25, 0.25, d, 0.0, K), expected, atol=1e-13)
        for offset in (-0.3, 0.0, 0.9):
            expected = ref.half_wave_echelon_impedance(d, offset, K)
            assert_allclose(ref.mutual_impedance(0.25, 0.25, d, offset, K), expected, atol=2e-13)
    for offset in (0.55, 1.3, 4.0):
        expected = ref.half_wave_collinear_impedance(offset, K)
        assert_allclose(ref.mutual_impedance(0.25, 0.25, 0.0, offset, K), expected, atol=2e-13)


@pytest.mark.parametrize("pair", PAIRS)
def test_mutual_impedance__resistance_is_the_overlap_of_far_fields(pair):
    h, h2, d, z0 = pair
    expected = far_field_resistance(h, h2, d, z0, 0.0, 0.0)
    assert_allclose(ref.mutual_impedance(*pair, K).real, expected, atol=3e-12)


def test_mutual_impedance__far_away_is_two_effective_lengths():
    distances = np.array([20.0, 40.0, 80.0])
    lengths = ref.sinusoid_effective_length(0.3, pi / 2, K) * ref.sinusoid_effective_length(0.2, pi / 2, K)
    leading = 1j * K * IMPEDANCE_OF_VACUUM * lengths * np.exp(-1j * K * distances) / (4 * pi * distances)
    deviation = ref.mutual_impedance(0.3, 0.2, distances, 0.0, K) / leading - 1.0
    # Next order: -j/(k d) of the radial derivative and -j k <s^2>/(2 d) of the path, s^2 = z^2 + z'^2.
    spread = 0.0
    for h in (0.3, 0.2):
        z, w = panels(0.0, h)
        spread += np.sum(w * z**2 * np.sin(K * (h - z))) / np.sum(w * np.sin(K * (h - z)))
    predicted = -1j * (1 / K + K * spread / 2) / distances
    relative = abs(deviation / predicted - 1.0)
    assert_allclose(relative[:-1] / relative[1:], 2.0, rtol=0.02)
    assert relative[-1] < 0.01


def test_self_impedance__is_the_thin_half_wave_of_design():
    with mpmath.workdps(25):
        cin = mpmath.euler + mpmath.log(2 * mpmath.pi) - mpmath.ci(2 * mpmath.pi)
        exact = complex(IMPEDANCE_OF_VACUUM / (4 * mpmath.pi) * mpmath.mpc(cin, mpmath.si(2 * mpmath.pi)))
    assert_allclose(ref.thin_dipole_impedance(0.25, K), exact, rtol=1e-14)
    # Half a unit of both last digits; 120 pi would miss by 0.05.
    assert_allclose(exact, 73.08 + 42.52j, atol=0.007)
    assert_allclose(ref.self_impedance(0.25, 1e-12, K), exact, atol=1e-8)


def test_self_impedance__tends_to_the_printed_thin_form_with_the_radius():
    radii = np.array([4e-3, 2e-3, 1e-3])
    for h in (0.2, 0.37, 0.63):
        error = [abs(ref.self_impedance(h, a, K) - ref.thin_dipole_impedance(h, K, a)) for a in radii]
        # Linear in the radius: the end charge sees the far side of a tube that is not there.
        assert_allclose(np.array(error[:-1]) / error[1:], 2.0, rtol=0.1)
        assert_allclose(ref.self_impedance(h, 1e-10, K), ref.thin_dipole_impedance(h, K, 1e-10), atol=2e-6)


def test_self_impedance__resistance_is_power_with_one_ring_factor():
    # Axis to surface: one J0(k a sin psi), where two tubes have its square.
    found = ref.self_impedance(0.37, 0.02, K).real
    assert_allclose(found, far_field_resistance(0.37, 0.37, 0.0, 0.0, 0.02, 0.0), rtol=1e-13)
    assert abs(found / far_field_resistance(0.37, 0.37, 0.0, 0.0, 0.02, 0.02) - 1.0) > 1e-3


# --- tubes


@pytest.mark.parametrize(("height", "radius"), [("1e-12", 1e-3), ("1e-3", 1e-3), ("0.5", 1e-2), ("1", 0.05)])
def test_ring_kernel__equals_its_integral(height, radius):
    with mpmath.workdps(30):
        z, a = mpmath.mpf(height), mpmath.mpf(radius)

        def kernel(phi):
            r = mpmath.sqrt(z * z + 4 * a * a * mpmath.sin(phi / 2) ** 2)
            return mpmath.expj(-K * r) / r

        cuts = [0, z / a / 4, z / a, 10 * z / a, 1e-6, 1e-3, mpmath.pi]
        expected = mpmath.quad(kernel, sorted(c for c in cuts if c <= mpmath.pi)) / mpmath.pi
        found = ref.ring_kernel_mp(z, a, K)
        assert abs(found / expected - 1) < mpmath.mpf("1e-19")


@pytest.mark.parametrize(("half_length", "radius"), [(0.25, 1e-3), (0.37, 4e-3)])
def test_tube_self_impedance__three_roads_agree(half_length, radius):
    with mpmath.workdps(20):
        mean_of_closed_forms = ref.tube_self_impedance_mp(half_length, radius, K)
        mixed_potential = ref.tube_self_impedance_mixed_potential_mp(half_length, radius, K)
        assert abs(mean_of_closed_forms - mixed_potential) < mpmath.mpf("1e-15")
    found = ref.tube_self_impedance(half_length, radius, K)
    assert_allclose(found, complex(mixed_potential), atol=2e-12)
    # The filament observed at the radius is another quantity, by far more than that.
    assert abs(found - ref.self_impedance(half_length, radius, K)) > 0.01


def test_tube_self_impedance__holds_for_long_short_and_thick():
    with mpmath.workdps(20):
        for half_length, radius in ((0.05, 1e-3), (0.5, 1e-2)):
            expected = complex(ref.tube_self_impedance_mp(half_length, radius, K))
            assert_allclose(ref.tube_self_impedance(half_length, radius, K), expected, atol=2e-12)


def test_coaxial_tube_impedance__resistance_is_power_with_both_ring_factors():
    found = ref.coaxial_tube_impedance(0.25, 0.15, 0.5, 0.01, 0.02, K)
    assert_allclose(found.real, far_field_resistance(0.25, 0.15, 0.0, 0.5, 0.01, 0.02), atol=1e-12)
    finer = ref.coaxial_tube_impedance(0.25, 0.15, 0.5, 0.01, 0.02, K, n_points=160)
    assert_allclose(found, finer, atol=1e-12)


def test_ring_averaged_impedance__resistance_is_power_with_both_ring_factors():
    found = ref.ring_averaged_impedance(0.25, 0.15, 0.2, 0.1, 0.01, 0.02, K)
    expected = far_field_resistance(0.25, 0.15, 0.2, 0.1, 0.01, 0.02)
    assert_allclose(found.real, expected, atol=1e-10)
    assert abs(expected - far_field_resistance(0.25, 0.15, 0.2, 0.1, 0.0, 0.0)) > 1e-3
    finer = ref.ring_averaged_impedance(0.25, 0.15, 0.2, 0.1, 0.01, 0.02, K, n_ring=16)
    # ((a + a')/distance)^8 = 3e-7 of the impedance
    assert_allclose(found, finer, atol=3e-7 * abs(found))


# --- power


def test_short_dipole__is_the_limit_of_the_sinusoid():
    half_lengths = np.array([0.02, 0.01, 0.005])
    feed = [ref.thin_dipole_impedance(h, K).real / np.sin(K * h) ** 2 for h in half_lengths]
    deviation = np.array(feed) / ref.short_dipole_resistance(half_lengths, K) - 1.0
    assert_allclose(deviation[:-1] / deviation[1:], 4.0, rtol=0.01)
    assert_allclose(ref.short_dipole_resistance(0.01, K), 20 * (K * 0.01) ** 2, rtol=1e-3)  # 120 pi: 0.07 %


def test_short_dipole_reactance__is_the_first_order_of_the_sinusoid():
    for radius in (1e-5, 1e-7):
        expected = ref.self_impedance(0.01, radius, K, reference="feed").imag
        # Left out: terms of order (k h)^2 = 0.004 and a/h against ln(h/a) - 1.
        assert_allclose(ref.short_dipole_reactance(0.01, radius, K), expected, rtol=2e-3)


def test_uniform_loop_resistance__tends_to_the_small_loop():
    radii = np.array([0.02, 0.01])
    ratio = ref.uniform_loop_resistance(radii, K) / ref.small_loop_resistance(pi * radii**2, K)
    # integral of J2 is x^3/24 (1 - x^2/20 + ...), x = 2 k b
    assert_allclose(1.0 - ratio, (K * radii) ** 2 / 5.0, rtol=0.01)


def test_uniform_loop_resistance__equals_the_power_of_its_far_field():
    psi, w = panels(0.0, pi / 2, pi)
    b = 0.3
    pattern = special.j1(K * b * np.sin(psi)) ** 2 * np.sin(psi)
    expected = IMPEDANCE_OF_VACUUM * pi * (K * b) ** 2 / 2.0 * np.sum(w * pattern)
    assert_allclose(ref.uniform_loop_resistance(b, K), expected, rtol=1e-13)


def test_sinusoid_directivity__is_power_density_over_mean():
    assert_allclose(ref.sinusoid_directivity(0.25, K), 4.0 / ref.entire_cosine_integral(2 * pi), rtol=1e-14)
    psi, w = panels(0.0, pi / 2, pi, n=60)
    for h in (0.1, 0.25, 0.5, 0.8):
        mean = 0.5 * np.sum(w * np.sin(psi) * ref.sinusoid_effective_length(h, psi, K) ** 2)
        expected = ref.sinusoid_effective_length(h, pi / 2, K) ** 2 / mean
        assert_allclose(ref.sinusoid_directivity(h, K), expected, rtol=1e-12)
    assert_allclose(ref.sinusoid_directivity(1e-3, K), 1.5, rtol=1e-5)


# --- internal impedance


@pytest.mark.parametrize("frequency_hz", [10.0, 1e4, 1e6, 350e6])
def test_internal_impedance__equals_its_twin_in_high_precision(frequency_hz):
    radius, conductivity = 1e-3, 3.5e7
    with mpmath.workdps(40):
        omega = 2 * mpmath.pi * mpmath.mpf(frequency_hz)
        t = mpmath.sqrt(-1j * omega * VACUUM_PERMEABILITY * conductivity)
        a = mpmath.mpf(radius)
        ratio = mpmath.besselj(0, t * a) / mpmath.besselj(1, t * a)
        expected = t / (2 * mpmath.pi * a * conductivity) * ratio
    assert_allclose(ref.internal_impedance(frequency_hz, radius, conductivity), complex(expected), rtol=3e-14)


def test_internal_impedance__resistance_is_the_heat_of_its_current_density():
    radius, conductivity, frequency = 1e-3, 3.5e7, 3e4
    r, w = panels(0.0, radius / 2, radius)
    g = (1 + 1j) / ref.skin_depth(frequency, conductivity)
    density = special.iv(0, g * r)
    current = np.sum(w * 2 * pi * r * density)
    heat = np.sum(w * 2 * pi * r * abs(density) ** 2) / conductivity
    found = ref.internal_impedance(frequency, radius, conductivity).real
    assert_allclose(found, heat / abs(current) ** 2, rtol=1e-12)


def test_internal_impedance__tends_to_both_limits_at_their_orders():
    radius, conductivity = 1e-3, 3.5e7
    depth_equals_radius = 1.0 / (pi * VACUUM_PERMEABILITY * conductivity * radius**2)
    low = depth_equals_radius * np.array([0.4, 0.2])
    exact, form = (f(low, radius, conductivity) for f in (ref.internal_impedance, ref.internal_impedance_low))
    for part in (np.real, np.imag):
        error = abs(part(form) / part(exact) - 1.0)
        assert_allclose(error[0] / error[1], 16.0, rtol=0.2)  # (a/depth)^8 is the fourth power of frequency
    high = depth_equals_radius * np.array([1e4, 4e4])
    forms = (ref.internal_impedance, ref.internal_impedance_high)
    exact, form = (f(high, radius, conductivity) for f in forms)
    error = abs(form / exact - 1.0)
    assert_allclose(error[0] / error[1], 4.0, rtol=0.1)  # next term falls with the square of depth/a
    assert error[1] < 1e-4


# --- infinite array


@pytest.mark.parametrize("transverse", [-0.5, -1.5, -3.0, -20.0])
def test_row_sum__mode_sum_equals_direct_sum(transverse):
    direct = array.row_sum(transverse, 1.0, 0.4, method="direct")
    assert_allclose(array.row_sum(transverse, 1.0, 0.4, method="poisson"), direct, atol=1e-12)


def test_row_sum__travelling_row_is_the_limit_of_a_tapered_sum():
    transverse, gradient = 12.0, 0.4
    expected = array.row_sum(transverse, 1.0, gradient)
    deviations = []
    for n in (2000, 4000):
        m = np.arange(1, n)
        terms = special.hankel2(0, np.sqrt(transverse) * m) * np.cos(gradient * m)
        deviations.append(abs(2.0 * np.sum(np.cos(0.5 * pi * m / n) ** 4 * terms) - expected))
    assert_allclose(deviations[0] / deviations[1], 4.0, rtol=0.02)
    assert deviations[1] < 1e-6


LATTICE = {"half_length": 0.2, "radius": 5e-3, "spacing_x": 0.55, "spacing_z": 0.5, "wavenumber": K}
SCANS = {"broadside": {}, "scanned": {"scan_kx": 0.3 * K, "scan_kz": 0.25 * K}}


@pytest.mark.parametrize("scan", SCANS.values(), ids=SCANS.keys())
def test_floquet_scan_impedance__resistance_is_the_power_of_its_only_beam(scan):
    # eta l^2/(2 dx dz) at broadside (Wheeler 1965, current sheet); off it wave impedance and area turn.
    kx, kz = scan.get("scan_kx", 0.0), scan.get("scan_kz", 0.0)
    normal = np.sqrt(K**2 - kx**2 - kz**2)
    length = ref.sinusoid_effective_length(0.2, np.arccos(kz / K), K)
    beam = IMPEDANCE_OF_VACUUM * length**2 * K / normal / (2 * 0.55 * 0.5)
    kappa_a = np.sqrt(K**2 - kz**2) * 5e-3
    one_ring = special.j0(kappa_a)
    found = array.floquet_scan_impedance(**LATTICE, **scan)
    # Axis-to-axis coupling and a self term at the radius differ by the own column's (1 - J0) in the balance.
    own = K * length**2 * IMPEDANCE_OF_VACUUM / (4 * 0.5) * (1.0 - one_ring)
    assert_allclose(found.real, beam - own, rtol=1e-12)
    exact = array.floquet_scan_impedance(**LATTICE, **scan, self_kernel="exact", coupling="ring")
    assert_allclose(exact.real, beam * one_ring**2, rtol=1e-12)


@pytest.mark.parametrize("scan", SCANS.values(), ids=SCANS.keys())
def test_windowed_array_sum__tends_to_floquet_with_the_second_order_it_must(scan):
    sizes = np.array([8, 16, 32, 64])
    target = array.floquet_scan_impedance(**LATTICE, **scan)
    deviations = np.array([array.windowed_array_sum(n, **LATTICE, **scan) - target for n in sizes])
    assert np.all(np.diff(abs(deviations)) < 0.0)
    # cos^4 is 1 - (pi t)^2/2 near the centre: the deviation is half pi^2/(n+1)^2 times the second derivatives
    # of the scan impedance by the two phases per cell.
    step = 1e-3
    curvature = 0.0
    for key, spacing in (("scan_kx", 0.55), ("scan_kz", 0.5)):
        moved = [
            array.floquet_scan_impedance(**LATTICE, **{**scan, key: scan.get(key, 0.0) + sign * step / spacing})
            for sign in (1, -1)
        ]
        curvature += (moved[0] - 2 * target + moved[1]) / step**2
    predicted = 0.5 * pi**2 / (sizes + 1.0) ** 2 * curvature
    relative = abs(deviations / predicted - 1.0)
    assert relative[-1] < 0.02
    assert np.all(np.diff(relative) < 0.0)
    # With the predicted term taken away two sizes leave the next order; a radius wrong by 1 % would show.
    weights = 1.0 / (sizes + 1.0) ** 2
    best = target + (deviations[3] * weights[2] - deviations[2] * weights[3]) / (weights[2] - weights[3])
    wrong = array.floquet_scan_impedance(**{**LATTICE, "radius": 5.05e-3}, **scan)
    assert abs(best - target) < 1e-4 < abs(best - wrong)


def test_windowed_array_sum__of_tubes_tends_to_floquet_of_tubes():
    options = {**SCANS["scanned"], "self_kernel": "exact", "coupling": "ring"}
    target = array.floquet_scan_impedance(**LATTICE, **options)
    sums = [array.windowed_array_sum(n, **LATTICE, **options) for n in (16, 32)]
    best = (33**2 * sums[1] - 17**2 * sums[0]) / (33**2 - 17**2)
    assert abs(best - target) < 1e-3 < abs(best - array.floquet_scan_impedance(**LATTICE, **SCANS["scanned"]))
    fewer = array.floquet_scan_impedance(**LATTICE, **options, n_modes=50_000)
    assert_allclose(fewer, target, atol=1e-8)


# --- print


def resistance_ratio(x):
    """Return R/R(direct current) of a round wire at x = a sqrt(omega mu sigma)."""
    radius, conductivity = 1e-3, 5.8e7
    frequency = x**2 / (2 * pi * VACUUM_PERMEABILITY * conductivity * radius**2)
    return ref.internal_impedance(frequency, radius, conductivity).real * pi * radius**2 * conductivity


def printed_values():
    for path in sorted(CASES.glob("*.toml")):
        case = tomllib.loads(path.read_text(encoding="utf-8"))
        if case["subject"] == "reference":
            for number, value in enumerate(case["value"], start=1):
                yield pytest.param(case, value, id=f"{path.stem}-{number}")


@pytest.mark.parametrize(("case", "value"), list(printed_values()))
def test_references__match_print(case, value):
    inputs = {name.removesuffix("_wavelengths"): x for name, x in value["inputs"].items()}
    if inputs.keys() != value["inputs"].keys():
        inputs["wavenumber"] = K
    local = {"resistance_ratio": resistance_ratio}
    function = local.get(value["quantity"]) or getattr(ref, value["quantity"])
    found = complex(function(**inputs))
    if case.get("impedance_of_vacuum") == "120 pi":
        found *= 120 * pi / IMPEDANCE_OF_VACUUM
    printed = value["printed"] if isinstance(value["printed"], list) else [value["printed"]]
    for part, text in zip((found.real, found.imag), printed, strict=False):
        decimals = len(text.partition(".")[2])
        unit = 10.0**-decimals
        print(f"{value['quantity']}: found {part:.{decimals + 3}f}, printed {text}")
        assert abs(part - float(text)) <= 0.5 * unit * (1 + 1e-9)


def test_cases__name_source_and_reason():
    paths = sorted(CASES.glob("*.toml"))
    assert len(paths) >= 5
    for path in paths:
        case = tomllib.loads(path.read_text(encoding="utf-8"))
        assert {"source", "from_memory", "subject", "unit", "why"} <= case.keys(), path.name
        assert case["subject"] in {"reference", "solver"}, path.name
