"""Reactions of sinusoidal currents, expanded in the program's own basis, against closed forms.

The sinusoid sin(k(h - |z|)) is projected onto the polynomials of the mesh (order 8, graded ends, a node at the kink), and
u^T Z u of the program's matrices is held against the induced-EMF closed forms of `references` (Carter 1932, sine and cosine
integrals), which share no code with it.  All lengths are in wavelengths.

The projection is no part of the error: an element of length L leaves at most 2 (kL/4)^9 / 9! of the amplitude (Chebyshev's
bound), 1e-13 for L = 0.1; the tolerances are those of the quadrature the program promises (`FarSettings`, `NearSettings`).
"""

from __future__ import annotations

from math import pi

import mpmath
import numpy as np
import pytest
from numpy.polynomial.legendre import leggauss

import references as ref
from dipole_models import FREQUENCY_HZ, K, sinusoid
from elbowroom.base.constants import IMPEDANCE_OF_VACUUM
from elbowroom.geometry.antennas import Antenna, Port
from elbowroom.geometry.grounds import FreeSpace, PerfectGround
from elbowroom.geometry.mesh import Mesh, MeshSettings
from elbowroom.geometry.stations import Placed, Station
from elbowroom.geometry.wires import Wire
from elbowroom.kernels.quadrature import gauss_table
from elbowroom.kernels.reactions_numba import coaxial_moments
from elbowroom.system.assembly import PairFiller, antenna_distances
from elbowroom.system.discretisation import discretise
from elbowroom.system.self_block import expand_moments_between

pytestmark = pytest.mark.validation

FINE = MeshSettings(order=8, end_radii=1.5, gap_radii=3.0, floor_wavelengths=0.01, growth=4.0, longest_wavelengths=0.1)

CARTER = "Carter 1932, closed form in Si and Ci"
TUBE = "Carter's form averaged round the tubes"
TUBE_MP = "the same by mpmath quadrature"


def arms(centre, direction, half_length, radius):
    """Return two wires that meet at the centre: a node stands where the sinusoid has its kink."""
    c, t = np.asarray(centre, dtype=float), np.asarray(direction, dtype=float)
    return [Wire(c - half_length * t, c, radius), Wire(c, c + half_length * t, radius)]


def antenna(*dipoles):
    """Return an antenna of dipoles, each (centre, direction, half-length, radius); its port stands aside on an arm."""
    wires = [w for dipole in dipoles for w in arms(*dipole)]
    return Antenna("sinusoids", wires, [Port("p", 0, position=0.4)])


def first_sinusoid(mesh, half_length, centre=(0.0, 0.0, 0.0), direction=(0.0, 0.0, 1.0)):
    """Return the sinusoid on the first two wires."""
    return sinusoid(mesh, centre, half_length, [0, 1], np.asarray(direction))


Z_AXIS = (0.0, 0.0, 1.0)


def coupled(h, h2, distance, offset, *, radius=1e-5, ground=None, height=0.0, direction=Z_AXIS, direction2=None):
    """Return the reaction of two antennas in a station, one sinusoid each, by the program's assembly, and the rules' level."""
    direction2 = direction if direction2 is None else direction2
    designs = [antenna(((0, 0, 0), t, x, radius)) for x, t in ((h, direction), (h2, direction2))]
    placed = [Placed(designs[0], (0.0, 0.0, height)), Placed(designs[1], (distance, 0.0, height + offset))]
    d = discretise(Station(placed, ground or FreeSpace()), FREQUENCY_HZ, mesh=FINE, self_blocks=False)
    filler = PairFiller(d)
    level = filler.level_of(antenna_distances(d)[0, 1])
    block = filler.close_block(0, 1) if level < 0 else filler.sampled_blocks(0, np.array([1]), level)[0]
    u, u2 = (
        first_sinusoid(d.kinds[d.kind_of[i]].mesh, x, direction=t) for i, (x, t) in enumerate(((h, direction), (h2, direction2)))
    )
    return complex(u2 @ block @ u), level


# --- between antennas: filaments at Gauss points

PAIRS = {
    "side by side": (0.25, 0.25, 0.3, 0.0),
    "side by side, close": (0.25, 0.25, 0.05, 0.0),
    "side by side, far": (0.25, 0.25, 12.0, 0.0),
    "collinear": (0.25, 0.25, 0.0, 0.55),
    "collinear, unequal": (0.31, 0.17, 0.0, -0.6),
    "echelon": (0.25, 0.25, 0.3, 0.77),
    "echelon, unequal": (0.31, 0.17, 0.3, -0.4),
    "echelon, long and short": (0.62, 0.05, 0.1, 0.2),
}


@pytest.mark.parametrize("name", PAIRS)
def test_mutual__of_filaments_is_carters(record, name):
    """Tolerance: the 1e-6 of the kernel that `FarSettings` promises, relative to the reaction."""
    h, h2, d, z0 = PAIRS[name]
    found, level = coupled(h, h2, d, z0)
    assert level >= 0
    expected = ref.mutual_impedance(h, h2, d, z0, K)
    # Wrong: the second a ten-thousandth of a wavelength aside and higher, or the other time factor.
    wrong = [ref.mutual_impedance(h, h2, d + 1e-4, z0 + np.copysign(1e-4, z0), K), np.conj(expected)]
    record(f"mutual, {name} [ohm]", found, expected, relative=1e-6, source=CARTER, wrong=wrong)


def filament_fields(h, rho, z):
    """Return E_rho and E_z of a sinusoidal filament per ampere at the maximum (Schelkunoff and Friis 1952, chapter 12)."""
    waves = [
        (z - source, weight * np.exp(-1j * K * np.hypot(rho, z - source)) / np.hypot(rho, z - source))
        for source, weight in ((h, 1.0), (-h, 1.0), (0.0, -2.0 * np.cos(K * h)))
    ]
    radial = 1j * IMPEDANCE_OF_VACUUM / (4.0 * pi) / rho * sum(along * wave for along, wave in waves)
    return radial, ref.filament_field(h, rho, z, K)


@pytest.mark.parametrize("tilt", [0.4, pi / 2, 2.0])
def test_mutual__of_skew_filaments_is_the_field_along_the_second(record, tilt):
    """The published field of one sinusoid integrated along another that leans; off the plane of both axes, hence skew."""
    h, h2, d, z0 = 0.25, 0.3, 0.35, 0.15
    t = np.array([0.6 * np.sin(tilt), 0.8 * np.sin(tilt), np.cos(tilt)])
    found, level = coupled(h, h2, d, z0, direction2=t)
    assert level >= 0
    x, w = leggauss(60)
    s = np.concatenate([0.5 * h2 * (x - 1.0), 0.5 * h2 * (x + 1.0)])
    w = 0.5 * h2 * np.concatenate([w, w])
    point = np.array([d, 0.0, z0]) + s[:, None] * t
    rho = np.hypot(point[:, 0], point[:, 1])
    e_rho, e_z = filament_fields(h, rho, point[:, 2])
    across = (point[:, 0] * t[0] + point[:, 1] * t[1]) / rho
    parts = [-np.sum(w * np.sin(K * (h2 - abs(s))) * part) for part in (e_rho * across, e_z * t[2])]
    source = "Schelkunoff and Friis 1952, fields of a sinusoidal current"
    # Wrong: the component across the first axis left out.
    record(f"mutual, skew by {tilt:.2f} rad [ohm]", found, sum(parts), relative=1e-6, source=source, wrong=parts[1])


def test_mutual__of_antennas_that_nearly_touch_spreads_round_the_tubes(record):
    """Nearer than 0.15 elements both circumferences count.  Tolerance 1e-7: the near rules' 1e-8 for some ten panels each."""
    h, h2, radius = 0.25, 0.2, 1e-3
    found, level = coupled(h, h2, 0.008, 0.1, radius=radius)
    assert level == -1
    # ((a + a')/d)^16 = 2e-10: the reference's own rule has settled.
    expected = ref.ring_averaged_impedance(h, h2, 0.008, 0.1, radius, radius, K, n_ring=16)
    wrong = ref.mutual_impedance(h, h2, 0.008, 0.1, K)
    record("mutual, tubes nearly touching [ohm]", found, expected, relative=1e-7, source=TUBE, wrong=wrong)


# --- inside an antenna


def filament_block(mesh: Mesh, radius):
    """Return the matrix (N, N) of one straight wire with its current on the axis and its field taken at the radius."""
    nodes, weights = gauss_table()
    n, p = mesh.n_elements, mesh.order
    moments = np.empty((n, n, p + 1, p + 1), dtype=complex)
    along = mesh.start[:, 2], mesh.end[:, 2]
    for i in range(n):
        for j in range(n):
            coaxial_moments(
                along[0][i], along[1][i], along[0][j], along[1][j], 0.0, radius, K, p, p, nodes, weights, 6, moments[i, j]
            )
    return expand_moments_between(mesh, mesh, moments, np.ones((n, n)), 1.0, K)


def alone(design, ground=None, height=0.0):
    """Return mesh and self block of one antenna."""
    d = discretise(Station([Placed(design, (0.0, 0.0, height))], ground or FreeSpace()), FREQUENCY_HZ, mesh=FINE)
    return d.kinds[0].mesh, d.kinds[0].self_block


LENGTHS = [(0.25, 1e-3), (0.25, 1e-5), (0.1, 1e-3), (0.37, 4e-3), (0.625, 5e-4)]


@pytest.mark.parametrize(("h", "radius"), LENGTHS)
def test_self__with_both_kernels_is_its_closed_form(record, h, radius):
    """The tube's averaged kernel to the 1e-8 of the near rules, the filament at the radius to 1e-6; each rejects the other."""
    mesh, block = alone(antenna(((0, 0, 0), Z_AXIS, h, radius)))
    u = first_sinusoid(mesh, h)
    with mpmath.workdps(20):
        tube = complex(ref.tube_self_impedance_mp(h, radius, K))
    filament = ref.self_impedance(h, radius, K)
    name = f"h = {h}, a = {radius:g}"
    record(f"self, exact kernel, {name} [ohm]", u @ block @ u, tube, relative=1e-8, source=TUBE_MP, wrong=filament)
    kept = u @ filament_block(mesh, radius) @ u
    record(f"self, filament at the radius, {name} [ohm]", kept, filament, relative=1e-6, source=CARTER, wrong=tube)


def test_self__the_two_kernels_of_a_half_wave_differ_by_1_2_radii(record):
    """Why the exact kernel: a filament at the radius is off by about 1.2 a/wavelength of the half wave's impedance.

    Both kernels integrate to the same logarithm, for the mean of ln(2 sin(phi/2)) is zero; what is left comes from the jumps k
    of the slope at the two ends.  The slope's correlation falls there as |s| k^2, and the integral of s over the difference of
    the kernels is the mean distance on the ring less the radius, a (4/pi - 1).  So the reactions differ by
    (eta/4 pi) 2 k a (4/pi - 1), 103 ohm a/wavelength of 84.5 ohm; the next term is of the order of (k a) times a logarithm of it.
    """
    coefficients = []
    for radius in (4e-3, 1e-3, 2.5e-4):
        mesh, block = alone(antenna(((0, 0, 0), Z_AXIS, 0.25, radius)))
        u = first_sinusoid(mesh, 0.25)
        exact, filament = u @ block @ u, u @ filament_block(mesh, radius) @ u
        coefficient = abs(exact - filament) / abs(exact) / radius
        coefficients.append(coefficient)
        print(f"a = {radius:g} wavelengths: exact and filament kernel differ by {coefficient:.4f} a of |Z|")
        assert 1.0 < coefficient < 1.4
    expected = IMPEDANCE_OF_VACUUM / (4.0 * pi) * 2.0 * K * (4.0 / pi - 1.0) / abs(ref.thin_dipole_impedance(0.25, K))
    # k a ln(1/(k a)) = 0.01 at the smallest radius; wrong: one end only, or a point at the diameter instead of the ring.
    record(
        "kernels of a half wave apart by, in a/wavelength", coefficients[-1], expected, relative=0.01,
        source="charge at the two ends, derived in the test", wrong=[0.5 * expected, expected / (4.0 / pi - 1.0)],
    )  # fmt: skip
    deviations = abs(np.array(coefficients) - expected)
    assert deviations[0] > deviations[1] > deviations[2]


STEPS = [(1e-3, 4e-3, 0.0), (2e-3, 1e-4, 0.0), (1e-3, 4e-3, 0.05)]


@pytest.mark.parametrize(("radius", "radius2", "gap"), STEPS)
def test_coaxial__tubes_of_unequal_radii(record, radius, radius2, gap):
    """A radius step: two tubes on one axis, end to end or a gap apart, one sinusoid each.

    Tolerance 1e-8 of the two self reactions, of the order of 100 ohm: their panels are the same.
    """
    h, h2 = 0.25, 0.15
    offset = h + h2 + gap
    mesh, block = alone(antenna(((0, 0, 0), Z_AXIS, h, radius), ((0, 0, offset), Z_AXIS, h2, radius2)))
    u = first_sinusoid(mesh, h)
    u2 = sinusoid(mesh, (0, 0, offset), h2, [2, 3], np.array(Z_AXIS))
    expected = ref.coaxial_tube_impedance(h, h2, offset, radius, radius2, K)
    wrong = [
        ref.coaxial_tube_impedance(h, h2, offset, radius, radius, K),
        ref.mutual_impedance(h, h2, 0.0, offset, K),
    ]
    name = f"radii {radius:g} and {radius2:g}, {gap:g} apart"
    record(f"coaxial, {name} [ohm]", u @ block @ u2, expected, absolute=1e-6, source=TUBE, wrong=wrong)
    own = ref.coaxial_tube_impedance(h2, h2, 0.0, radius2, radius2, K)
    record(f"self beside a radius step, {radius2:g} [ohm]", u2 @ block @ u2, own, relative=1e-8, source=TUBE, wrong=expected)


@pytest.mark.parametrize(("distance", "n_ring"), [(0.2, 8), (0.03, 16), (0.0125, 64)])
def test_parallel__tubes_are_averaged_over_both_rings(record, distance, n_ring):
    """Parallel wires of one antenna, down to 1.25 times the sum of the radii.

    Tolerance 1e-7 of the impedance: the near rules' 1e-8 for each of about ten panels, and for the nearest pair what is left of
    the reference's trapezoidal rule, (0.8)^64 = 6e-7 times a ring average that itself changes the reaction by 1e-2.
    """
    h, h2, a, a2, z0 = 0.25, 0.2, 4e-3, 6e-3, 0.05
    mesh, block = alone(antenna(((0, 0, 0), Z_AXIS, h, a), ((distance, 0, z0), Z_AXIS, h2, a2)))
    u = first_sinusoid(mesh, h)
    u2 = sinusoid(mesh, (distance, 0, z0), h2, [2, 3], np.array(Z_AXIS))
    expected = ref.ring_averaged_impedance(h, h2, distance, z0, a, a2, K, n_ring=n_ring)
    wrong = ref.mutual_impedance(h, h2, distance, z0, K)
    record(f"parallel tubes {distance:g} apart [ohm]", u @ block @ u2, expected, relative=1e-7, source=TUBE, wrong=wrong)


# --- images

IMAGES = "image theory with " + CARTER


def test_image__of_a_vertical_dipole_runs_along(record):
    """Over a perfect plane at height z0 a vertical dipole meets an equal current at 2 z0 on its own axis."""
    h, a, z0 = 0.25, 1e-3, 0.4
    mesh, block = alone(antenna(((0, 0, 0), Z_AXIS, h, a)), PerfectGround(), z0)
    u = first_sinusoid(mesh, h)
    own, image = ref.tube_self_impedance(h, a, K), ref.coaxial_tube_impedance(h, h, 2 * z0, a, a, K)
    record(
        "vertical dipole over ground [ohm]", u @ block @ u, own + image, relative=1e-8, source=IMAGES, wrong=[own - image, own]
    )


def test_image__of_a_horizontal_dipole_runs_against_it(record):
    """Tolerance 1e-7 as for parallel tubes."""
    h, a, z0 = 0.25, 1e-3, 0.15
    mesh, block = alone(antenna(((0, 0, 0), (1.0, 0.0, 0.0), h, a)), PerfectGround(), z0)
    u = first_sinusoid(mesh, h, direction=(1.0, 0.0, 0.0))
    own, image = ref.tube_self_impedance(h, a, K), ref.ring_averaged_impedance(h, h, 2 * z0, 0.0, a, a, K)
    record(
        "horizontal dipole over ground [ohm]", u @ block @ u, own - image, relative=1e-7, source=IMAGES, wrong=[own + image, own]
    )


@pytest.mark.parametrize("h", [0.25, 0.11])
def test_image__of_a_monopole_on_the_ground_completes_the_dipole(record, h):
    """Half the current gives half the reaction: the stored energy and the power of the upper half space."""
    a = 1e-3
    design = Antenna("monopole", [Wire((0, 0, 0), (0, 0, h), a)], [Port("p", 0, position=0.4)])
    mesh, block = alone(design, PerfectGround())
    u = sinusoid(mesh, (0, 0, 0), h, [0], np.array(Z_AXIS))
    whole = ref.tube_self_impedance(h, a, K)
    record(f"monopole on ground, h = {h} [ohm]", u @ block @ u, 0.5 * whole, relative=1e-8, source=IMAGES, wrong=whole)


@pytest.mark.parametrize("upright", [True, False])
def test_image__between_two_antennas(record, upright):
    """Direct and mirrored filament, side by side at heights z0 and z0 + dz."""
    h, h2, d, z0, dz = 0.25, 0.17, 0.6, 0.35, 0.2
    direction = Z_AXIS if upright else (0.0, 1.0, 0.0)
    found, level = coupled(h, h2, d, dz, ground=PerfectGround(), height=z0, direction=direction)
    assert level >= 0
    if upright:
        direct, image = ref.mutual_impedance(h, h2, d, dz, K), ref.mutual_impedance(h, h2, d, 2 * z0 + dz, K)
        expected, wrong = direct + image, direct - image
    else:
        direct, image = (ref.mutual_impedance(h, h2, np.hypot(d, x), 0.0, K) for x in (dz, 2 * z0 + dz))
        expected, wrong = direct - image, direct + image
    name = "vertical" if upright else "horizontal"
    record(f"mutual over ground, {name} [ohm]", found, expected, relative=1e-6, source=IMAGES, wrong=[wrong, direct])
