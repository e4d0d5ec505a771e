"""Stations over soil and over wire mesh on soil, against the theory of the half space written out a second time.

References
----------
.. [1] A. Sommerfeld, "Ueber die Ausbreitung der Wellen in der drahtlosen Telegraphie", Ann. Phys. 386 (1926) 1135-1153; J. R. Wait,
   Electromagnetic Waves in Stratified Media, 1970, chapter 2: fields over a half space as spectra of plane waves, their
   reflection by admittances.  From memory; derived in the functions below.
.. [2] C. A. Balanis, Antenna Theory, chapter 4: Fresnel coefficients in far fields, radiation resistance of short dipoles over a
   perfect plane.  From memory.
.. [3] M. Kontorovich 1963; J. R. Wait 1962: averaged boundary conditions of a bonded square mesh.  From memory.
"""

from dataclasses import replace

import numpy as np
import pytest

import references
from elbowroom.base.constants import IMPEDANCE_OF_VACUUM, VACUUM_PERMITTIVITY, wavenumber_of
from elbowroom.geometry.antennas import Antenna, Port
from elbowroom.geometry.grounds import FreeSpace, MeshOnSoil, PerfectGround
from elbowroom.geometry.soils import LayeredSoil, Soil
from elbowroom.geometry.stations import Placed, Station
from elbowroom.geometry.wires import Wire
from elbowroom.job.solve import solve
from elbowroom.kernels.quadrature import sample_mesh
from elbowroom.radiation.patterns import station_patterns
from elbowroom.system.assembly import PairFiller
from elbowroom.system.discretisation import discretise
from elbowroom.system.plane_waves import direction_frame, kind_vectors
from elbowroom.system.reduction import ReductionSettings
from elbowroom.system.solving import solve_direct, solve_isolated
from elbowroom.system.solving_reduced import solve_reduced
from helpers import FREQUENCY_HZ, crossed

pytestmark = pytest.mark.validation

K = wavenumber_of(FREQUENCY_HZ)
SOIL = Soil(10.0, 0.01)
MESH = MeshOnSoil(Soil(8.0, 0.02), 0.1, 1e-3, 5e6)
WET = Soil(30.0, 0.05)
LAYERED = LayeredSoil(((0.3, Soil(4.0, 0.003)), (0.8, Soil(12.0, 0.01))), WET)
EVERY_SOIL = pytest.mark.parametrize(
    "ground", [SOIL, WET, MESH, LAYERED], ids=["soil", "wet soil", "mesh on soil", "layers of soil"]
)
HALF_SPACE = "plane-wave spectrum over a half space (Sommerfeld 1926, Wait 1970; from memory)"


def finer(ground, tolerance):
    """The same ground with better tables."""
    if isinstance(ground, MeshOnSoil):
        return replace(ground, soil=finer(ground.soil, tolerance))
    return replace(ground, tolerance=tolerance)


def permittivity(ground):
    """Of the surface, in which a mesh lies."""
    soil = ground.soil if isinstance(ground, MeshOnSoil) else ground
    return soil_permittivity(soil.layers[0][1] if isinstance(soil, LayeredSoil) else soil)


def soil_permittivity(soil):
    return soil.relative_permittivity - 1j * soil.conductivity_s_per_m / (2.0 * np.pi * FREQUENCY_HZ * VACUUM_PERMITTIVITY)


def half_space(level, eps):
    """TE and TM admittances of a half space."""
    omega = 2.0 * np.pi * FREQUENCY_HZ
    u1 = np.sqrt(level**2 - K**2 * eps)
    return u1 / (1j * K * IMPEDANCE_OF_VACUUM), 1j * omega * VACUUM_PERMITTIVITY * eps / u1


def reflections(ground, level):
    """Gh, Ge and u0 at horizontal wavenumbers, from admittances: half space, layers above it, a shunt sheet on top."""
    eps, omega = permittivity(ground), 2.0 * np.pi * FREQUENCY_HZ
    mu0 = IMPEDANCE_OF_VACUUM * K / omega
    level = np.asarray(level, dtype=complex)
    u0 = np.where(level.real < K, 1j * np.sqrt(K**2 - level**2), np.sqrt(level**2 - K**2))
    soil = ground.soil if isinstance(ground, MeshOnSoil) else ground
    layered = isinstance(soil, LayeredSoil)
    te, tm = half_space(level, soil_permittivity(soil.bottom if layered else soil))
    for thickness, above in reversed(soil.layers if layered else ()):
        own_te, own_tm = half_space(level, soil_permittivity(above))
        t = np.tanh(np.sqrt(level**2 - K**2 * soil_permittivity(above)) * thickness)
        te, tm = own_te * (te + own_te * t) / (own_te + te * t), own_tm * (tm + own_tm * t) / (own_tm + tm * t)
    if isinstance(ground, MeshOnSoil):
        pitch, radius = ground.pitch_m, ground.wire_radius_m
        metal = references.internal_impedance(FREQUENCY_HZ, radius, ground.wire_conductivity_s_per_m)
        sheet = 1j * omega * mu0 * pitch / (2.0 * np.pi) * np.log(pitch / (2.0 * np.pi * radius))
        effective = K**2 * (eps + 1.0) / 2.0
        te = te + 1.0 / (pitch * metal + sheet)
        tm = tm + 1.0 / (pitch * metal + sheet * (1.0 - level**2 / (2.0 * effective)))
    te0, tm0 = u0 / (1j * omega * mu0), 1j * omega * VACUUM_PERMITTIVITY / u0
    return (te0 - te) / (te0 + te), (tm - tm0) / (tm + tm0), u0


def gauss(n, low, high):
    nodes, weights = np.polynomial.legendre.leggauss(n)
    return 0.5 * (low + high) + 0.5 * (high - low) * nodes, 0.5 * (high - low) * weights


def spectrum_nodes(height, n=36):
    """Horizontal wavenumbers and weights of dL: by an angle below k, by a hyperbolic one above, until exp(-2 u0 z) is gone."""
    most = np.arccosh(1.0 + 34.0 / (2.0 * height * K))
    level, weight = [], []
    for low, high in zip(*[np.linspace(0, np.pi / 2, 5)[i : i + 4] for i in (0, 1)], strict=True):
        t, w = gauss(n, low, high)
        level.append(K * np.sin(t))
        weight.append(K * np.cos(t) * w)
    edges = np.concatenate([[0.0], np.geomspace(1e-2, most, 9)])
    for low, high in zip(edges[:-1], edges[1:], strict=True):
        t, w = gauss(n, low, high)
        level.append(K * np.cosh(t))
        weight.append(K * np.sinh(t) * w)
    return np.concatenate(level), np.concatenate(weight)


# --- reciprocity of plane-wave drive and far field


@EVERY_SOIL
def test_far_field__is_what_a_plane_wave_drives(record, ground):
    """A wave and its Fresnel reflection integrated along the wires, against the receive pattern, which is the far field."""
    station = Station([Placed(crossed(), (0, 0, 0)), Placed(crossed(), (1.6, 0.4, 0.2), 30.0, 5.0, -8.0)], ground)
    d = discretise(station, FREQUENCY_HZ)
    currents, _ = solve_direct(d, precision="double")
    theta, phi = np.array([0.3, 1.0, 1.45]), np.array([0.4, 2.5, 4.0])
    gh, ge, _ = reflections(ground, K * np.sin(theta))
    expected = np.zeros((3, 2, d.n_unknowns), dtype=complex)
    for a, place in enumerate(station):
        mesh = d.kinds[d.kind_of[a]].mesh
        sampled = sample_mesh(mesh, np.full(mesh.n_elements, 20))
        points = place.to_station(sampled.points)
        along = np.einsum("ij,jqn->qin", place.orientation, sampled.current_weights)
        for i, (t, p) in enumerate(zip(theta, phi, strict=True)):
            arriving = np.array([np.sin(t) * np.cos(p), np.sin(t) * np.sin(p), np.cos(t)])
            mirrored = arriving * [1, 1, -1]
            down = np.exp(1j * K * points @ arriving)[:, None]
            up = np.exp(1j * K * points @ mirrored)[:, None]
            level = np.array([np.cos(p), np.sin(p), 0.0])
            # E along theta_hat coming down; its reflection has the magnetic field times Ge, so that level parts change sign
            along_theta = np.cos(t) * level * (down - ge[i] * up) - np.sin(t) * np.array([0, 0, 1.0]) * (down + ge[i] * up)
            along_phi = np.array([-np.sin(p), np.cos(p), 0.0]) * (down + gh[i] * up)
            for c, field in enumerate((along_theta, along_phi)):
                expected[i, c, d.unknowns_of(a)] = np.einsum("qi,qin->n", field, along)
    drive = np.einsum("icn,np->pic", expected, currents.currents)
    found = station_patterns(d, currents.currents, direction_frame(theta, phi), circumference=False)
    wrong = np.abs(found.conj() - drive).max() / np.abs(drive).max()
    record(
        f"far field and plane-wave drive, {ground.name}", np.abs(found - drive).max() / np.abs(drive).max(), 0.0,
        absolute=1e-10, wrong=wrong, source="reciprocity (Harrington 1961, 3-8), Fresnel coefficients (Balanis, chapter 4)",
    )  # fmt: skip


@pytest.mark.parametrize("ground", [SOIL, MESH], ids=["soil", "mesh on soil"])
@pytest.mark.parametrize("upright", [True, False], ids=["theta", "phi"])
def test_far_field__is_the_limit_of_coupling_at_long_range(record, ground, upright):
    """Reaction of a rod with one far away, from the tables, against its far field: apart by a term of order 1/r.

    Finer tables than by default: charges of a rod cancel at long range, and the tables' errors do not.
    """
    ground = replace(ground, tolerance=1e-6) if isinstance(ground, Soil) else replace(ground, soil=Soil(8.0, 0.02, 1e-6))
    theta, height = np.deg2rad(60.0), 0.9
    own = np.array([0.0, 0.0, 1.0]) if upright else np.array([0.0, 1.0, 0.0])
    theirs = np.array([np.cos(theta), 0.0, -np.sin(theta)]) if upright else own

    def rod(u, z):
        middle = np.array([0.0, 0.0, z])
        return Antenna("rod", [Wire(middle - 0.3 * u, middle + 0.3 * u, 1e-4)], [Port("p", 0)])

    apart = []
    for distance in (100.0, 200.0, 400.0):
        place = (distance * np.sin(theta), 0.0, distance * np.cos(theta))
        d = discretise(
            Station([Placed(rod(own, height), (0, 0, 0)), Placed(rod(theirs, 0.0), place)], ground),
            FREQUENCY_HZ,
            self_blocks=False,
        )
        found = PairFiller(d).sampled_blocks(0, np.array([1]), 3)[0]
        vectors = kind_vectors(d.kinds[0], d.ground, direction_frame([theta], [0.0]), K, circumference=False)[:, 0]
        sampled = d.kinds[1].samples(distance, K, 1e-8)
        moments = theirs @ np.moveaxis(sampled.currents, 0, 1).sum(axis=0)
        wave = -1j * K * IMPEDANCE_OF_VACUUM * np.exp(-1j * K * distance) / (4.0 * np.pi * distance)
        last = -np.outer(moments, wave * vectors[:, 0 if upright else 1])
        strongest = np.unravel_index(np.argmax(np.abs(last)), last.shape)
        apart.append(complex(found[strongest] / last[strongest] - 1.0))
    # doubling the range halves what they are apart by; taking it off leaves the second order
    second = abs(2.0 * apart[1] - apart[0])
    assert abs(apart[2]) < abs(apart[1]) < abs(apart[0]) < 0.1
    record(
        f"coupling at long range over the far field, {ground.name}", 1.0 + 2.0 * apart[2] - apart[1], 1.0,
        absolute=0.5 * second + 1e-5, wrong=1.0 + apart[2], source=HALF_SPACE,
    )  # fmt: skip


# --- power


def ground_flux(solution, coordinates):
    """Power [W] that effective currents send down through z = 0, from their plane-wave spectrum and the ground's reflection alone.

    Below its sources a current sends waves exp(-jL.rho + u0 z); for each, E across L is -j omega mu0 J_t/(2 u0) and H across L is
    (u0 J_l + jL J_z)/(2 u0).  The kernels P, N, K and V take no part.
    """
    d = solution.discretisation
    lowest = min(float(k.samples(np.inf, K, 1e-8).points[2].min()) for k in d.kinds)
    level, weight = spectrum_nodes(lowest)
    gh, ge, u0 = reflections(solution.station.ground, level)
    omega = 2.0 * np.pi * FREQUENCY_HZ
    mu0 = IMPEDANCE_OF_VACUUM * K / omega
    psi = 2.0 * np.pi * np.arange(72) / 72
    unknowns = solution.space.unknowns(d, coordinates)
    total = 0.0
    for angle in psi:
        c, s = np.cos(angle), np.sin(angle)
        moments = np.zeros((3, level.size), dtype=complex)
        for a, kind in enumerate(d.kind_of):
            sampled = d.kinds[kind].samples(0.5, K, 1e-10)
            x, y = sampled.points[0] + d.station.positions[a, 0], sampled.points[1] + d.station.positions[a, 1]
            wave = np.exp(1j * np.outer(level, c * x + s * y) - np.outer(u0, sampled.points[2]))
            moments += np.einsum("lq,iq->il", wave, sampled.currents @ unknowns[d.unknowns_of(a), 0])
        across = -s * moments[0] + c * moments[1]
        along = c * moments[0] + s * moments[1]
        electric = -1j * omega * mu0 * across / (2.0 * u0)
        magnetic = (u0 * along + 1j * level * moments[2]) / (2.0 * u0)
        te, z_tm = u0 / (1j * omega * mu0), u0 / (1j * omega * VACUUM_PERMITTIVITY)
        down = np.abs(electric) ** 2 * (np.conj(te * (1.0 - gh)) * (1.0 + gh)).real
        down = down + np.abs(magnetic) ** 2 * (z_tm * (1.0 - ge) * np.conj(1.0 + ge)).real
        total += float(np.sum(down * level * weight)) / psi.size
    return total / (2.0 * np.pi)


@EVERY_SOIL
def test_power__accepted_is_radiated_and_lost_in_wires_and_ground(record, ground):
    metal = 1e4
    wires = [Wire(w.start, w.end, w.radius, conductivity=metal) for w in crossed().wires]
    lossy = Antenna("lossy", wires, crossed().ports)
    station = Station([Placed(lossy, (0, 0, 0)), Placed(lossy, (1.6, 0.4, 0.2), 30.0, 5.0, -8.0)], ground)
    solution = solve(station, FREQUENCY_HZ, precision="double")
    weights = np.array([1.0, 0.5j, -0.3, 0.2])
    parts = solution.power_parts(weights)
    voltage, current, _ = solution._driven(weights, 100.0)
    coordinates = solution.coupled.currents @ (voltage + 100.0 * current).T
    flux = ground_flux(solution, coordinates)
    accepted = float(parts.accepted[0])
    # tubes against filaments: (ka)^2/2 of each part, and 1e-5 of the kernels' tables
    tolerance = 0.5 * (K * 0.003) ** 2 * 2.0 + 2e-5
    total = (parts.radiated[0] + parts.wires[0] + flux) / accepted
    without = (parts.radiated[0] + parts.wires[0]) / accepted
    record(
        f"radiated, wires and flux into the ground over accepted, {ground.describe()[:24]}", total, 1.0,
        absolute=tolerance, wrong=[without, total - parts.wires[0] / accepted],
        source=HALF_SPACE,
    )  # fmt: skip
    record(
        f"ground's part and flux into it over accepted, {ground.describe()[:24]}", parts.ground[0] / accepted, flux / accepted,
        absolute=tolerance, wrong=0.98 * flux / accepted, source=HALF_SPACE,
    )  # fmt: skip


# --- impedances


def short_dipole_change(ground, height, upright):
    """Change of a short dipole's impedance over its free-space radiation resistance: Sommerfeld's integral on the axis.

    (3/2)(j/k^3) integral L^3/u0 Ge exp(-2 u0 h) dL upright, (3/4)(j/k) integral L/u0 (Gh + Ge u0^2/k^2) exp(-2 u0 h) dL level.
    """
    level, weight = spectrum_nodes(height)
    if isinstance(ground, PerfectGround):
        gh, ge = -np.ones_like(level), np.ones_like(level)
        _, _, u0 = reflections(SOIL, level)
    else:
        gh, ge, u0 = reflections(ground, level)
    decay = np.exp(-2.0 * u0 * height) * weight
    if upright:
        return 1.5j / K**3 * np.sum(level**3 / u0 * ge * decay)
    return 0.75j / K * np.sum(level / u0 * (gh + ge * u0**2 / K**2) * decay)


def test_short_dipole_integral__over_a_perfect_plane_is_the_closed_form(record):
    """Balanis, chapter 4 (from memory): 3 (sin x/x^3 - cos x/x^2) upright, -(3/2)(sin x/x + cos x/x^2 - sin x/x^3) level."""
    x = 2.0 * K * 0.4
    upright = 3.0 * (np.sin(x) / x**3 - np.cos(x) / x**2)
    flat = -1.5 * (np.sin(x) / x + np.cos(x) / x**2 - np.sin(x) / x**3)
    for name, up, expected in (("upright", True, upright), ("level", False, flat)):
        found = short_dipole_change(PerfectGround(), 0.4, up).real
        record(
            f"short {name} dipole over a perfect plane, change of resistance", found, expected,
            absolute=1e-9, wrong=1.001 * expected, source="Balanis, chapter 4 (from memory)",
        )  # fmt: skip


def impedance(ground, design):
    d = discretise(Station([Placed(design, (0, 0, 0))], ground), FREQUENCY_HZ)
    return solve_isolated(d)[0].loaded_admittance[0, 0], d


@EVERY_SOIL
@pytest.mark.parametrize("upright", [True, False], ids=["upright", "level"])
@pytest.mark.parametrize("height", [0.15, 0.7])
def test_short_dipole__over_soil_changes_as_sommerfelds_integral_says(record, ground, upright, height):
    """Reaction of a triangular current with what the ground sends back, over that of the current with the far field's resistance.

    The current's length 2b makes the integral's exponential vary along it: (kb)^2 and (b/h)^2 both below 4e-3.
    """
    half, radius = 0.01, 1e-4
    direction = np.array([0.0, 0.0, 1.0]) if upright else np.array([1.0, 0.0, 0.0])
    middle = np.array([0.0, 0.0, height])
    design = Antenna("short", [Wire(middle - half * direction, middle + half * direction, radius)], [Port("p", 0)])
    # charges at both ends nearly cancel, and with them all but (kb)^2 of what tables are asked for
    over, d = impedance(finer(ground, 1e-7), design)
    free, _ = impedance(FreeSpace(), design)
    change = d.kinds[0].self_block - discretise(Station([Placed(design, (0, 0, 0))]), FREQUENCY_HZ).kinds[0].self_block
    # currents of the port source on this mesh, and their moment
    currents = solve_isolated(d)[0].currents[:, 0]
    sampled = d.kinds[0].samples(0.1, K, 1e-10)
    moment = direction @ np.einsum("iqn,n->i", sampled.currents, currents)
    found = (currents @ change @ currents) / (IMPEDANCE_OF_VACUUM * K**2 / (6.0 * np.pi) * moment**2)
    expected = short_dipole_change(ground, height, upright)
    name = "upright" if upright else "level"
    tolerance = ((K * half) ** 2 + (half / height) ** 2) + 2e-4
    record(
        f"short {name} dipole at {height} m, {ground.describe()[:24]}: change of Z over R", found, expected,
        relative=tolerance, wrong=[short_dipole_change(PerfectGround(), height, upright), 1.03 * expected], source=HALF_SPACE,
    )  # fmt: skip
    assert abs(over - free) > 0.0


def reflected_reaction(ground, d, current):
    """Reaction [ohm] of a current with its own field as the ground sends it back, by plane waves; P, N, K and V take no part.

    Waves exp(-jL.rho + u0 z) come down with E across L -j omega mu0 J_t/(2 u0) and H across L (u0 J_l + jL J_z)/(2 u0); those that
    go up again have Gh of the first and Ge of the second, and E along L and upwards follow from H.
    """
    mesh = d.kinds[0].mesh
    lowest = float(min(mesh.start[:, 2].min(), mesh.end[:, 2].min()))
    # panels no longer than the way to the image, on which 20 points follow every wave that comes back
    sampled = sample_mesh(mesh, np.full(mesh.n_elements, 20), np.ceil(0.5 * mesh.length / lowest).astype(int))
    level, weight = spectrum_nodes(lowest)
    gh, ge, u0 = reflections(ground, level)
    omega = 2.0 * np.pi * FREQUENCY_HZ
    mu0 = IMPEDANCE_OF_VACUUM * K / omega
    moments = sampled.current_weights @ current
    total = 0.0
    angles = 2.0 * np.pi * np.arange(40) / 40
    for angle in angles:
        c, s = np.cos(angle), np.sin(angle)
        place = np.outer(level, c * sampled.points[:, 0] + s * sampled.points[:, 1])
        height = np.outer(u0, sampled.points[:, 2])
        sent, heard = (np.exp(sign * 1j * place - height) @ moments.T for sign in (1.0, -1.0))
        electric = -1j * omega * mu0 * (-s * sent[:, 0] + c * sent[:, 1]) / (2.0 * u0) * gh
        magnetic = (u0 * (c * sent[:, 0] + s * sent[:, 1]) + 1j * level * sent[:, 2]) / (2.0 * u0) * ge
        along = u0 / (1j * omega * VACUUM_PERMITTIVITY) * magnetic
        field = electric * (-s * heard[:, 0] + c * heard[:, 1])
        field = field + along * (c * heard[:, 0] + s * heard[:, 1] - 1j * level / u0 * heard[:, 2])
        total -= np.sum(field * level * weight) / angles.size
    return total / (2.0 * np.pi)


LEVEL, UPRIGHT, SLANTED = (0.0, 1.0, 0.0), (0.0, 0.0, 1.0), (0.6, 0.3, 0.5)


@EVERY_SOIL
@pytest.mark.parametrize(
    ("direction", "height"),
    # lower, a level dipole's waves would need hundreds of azimuths
    [(LEVEL, 0.1), (LEVEL, 0.3), (LEVEL, 1.0), (UPRIGHT, 0.03), (UPRIGHT, 0.3), (SLANTED, 0.03), (SLANTED, 1.0)],
)
def test_half_wave_dipole__change_of_impedance_with_height_is_that_of_plane_waves(record, ground, direction, height):
    """Lowest point at the height [m]; the current is that in free space, so that the reaction is the change of Z to first order."""
    u = np.array(direction) / np.linalg.norm(direction)
    middle = np.array([0.0, 0.0, height + 0.47 * u[2]])
    design = Antenna("half", [Wire(middle - 0.47 * u, middle + 0.47 * u, 1e-4)], [Port("p", 0)])
    over, free = (discretise(Station([Placed(design, (0, 0, 0))], g), FREQUENCY_HZ) for g in (ground, FreeSpace()))
    current = solve_isolated(free)[0].currents[:, 0]
    current = current / (free.kinds[0].mesh.gap_vectors @ current)[0]
    found = current @ (over.kinds[0].self_block - free.kinds[0].self_block) @ current
    expected = reflected_reaction(ground, over, current)
    perfect = reflected_reaction(Soil(10.0, 1e4), over, current)
    # the tables' 1e-5 of the direct kernel, of which the current sums about its length over the distance
    record(
        f"half-wave dipole {height} m over {ground.describe()[:24]}, change of Z [ohm]", found, expected,
        absolute=1e-5 * K * IMPEDANCE_OF_VACUUM / (4.0 * np.pi) * 0.94**2 / (2.0 * height), relative=1e-4,
        wrong=[1.002 * expected, perfect], source=HALF_SPACE,
    )  # fmt: skip


@EVERY_SOIL
def test_half_wave_dipole__high_over_soil_hears_its_image_weakened_by_fresnel(record, ground):
    """Z(h) - Z_free over the same above a perfect plane tends to the reflection straight down, with an error of order 1/(2kh)."""
    gh, _, _ = reflections(ground, np.array([0.0]))
    wave = 2.0 * np.pi / K
    errors, ratios = [], []
    for waves in (4.0, 16.0, 64.0):
        h = waves * wave
        design = Antenna("half", [Wire((0, -0.47, h), (0, 0.47, h), 1e-4)], [Port("p", 0)])
        block = [
            discretise(Station([Placed(design, (0, 0, 0))], g), FREQUENCY_HZ)
            for g in (finer(ground, 1e-7), PerfectGround(), FreeSpace())
        ]
        currents = solve_isolated(block[2])[0].currents[:, 0]
        over, plane, free = (currents @ d.kinds[0].self_block @ currents for d in block)
        ratios.append((over - free) / (plane - free))
        errors.append(abs(ratios[-1] + gh[0]))
    assert errors[2] < 0.3 * errors[1] < 0.3 * 0.3 * errors[0]
    record(
        f"half-wave dipole high over {ground.describe()[:24]}: change over that of a perfect plane",
        # the term of order 1/h, large over layers that resonate, taken off
        (4.0 * ratios[2] - ratios[1]) / 3.0, -gh[0],
        absolute=0.1 / (2.0 * K * h), wrong=[1.0, -gh[0].conjugate(), -1.01 * gh[0]],
        source="Fresnel coefficient straight down (Balanis, chapter 4; from memory)",
    )  # fmt: skip


# --- limits


def test_limits__conductive_soil_is_a_perfect_plane_and_thin_soil_is_free_space(record):
    station = [Placed(crossed(), (0, 0, 0)), Placed(crossed(), (1.6, 0.4, 0.2), 30.0, 5.0, -8.0)]

    def solved(ground):
        return solve(Station(station, ground), FREQUENCY_HZ, precision="double")

    sky = np.array([0.1, 0.7, 1.2]), np.array([0.3, 2.0, 5.0])
    plane, free = solved(PerfectGround()), solved(FreeSpace())
    far = [solved(Soil(10.0, s)) for s in (1e2, 1e4)]
    errors = [np.abs(s.scattering_matrix() - plane.scattering_matrix()).max() for s in far]
    # the skin's impedance falls as the root of the conductivity: ten times for a hundred
    assert 8.0 < errors[0] / errors[1] < 12.0
    record(
        "S over soil of 1e4 S/m and over a perfect plane", errors[1], 0.0, absolute=3e-3,
        wrong=np.abs(free.scattering_matrix() - plane.scattering_matrix()).max(), source="skin depth of a good conductor",
    )  # fmt: skip
    thin = solved(Soil(1.0, 0.0))
    record(
        "S over soil that is air and in free space", np.abs(thin.scattering_matrix() - free.scattering_matrix()).max(), 0.0,
        absolute=1e-6, wrong=errors[0], source="no interface, no reflection",
    )  # fmt: skip
    patterns = [s.embedded_patterns(*sky) for s in (thin, free)]
    assert np.abs(patterns[0] - patterns[1]).max() < 1e-6 * np.abs(patterns[1]).max()


# --- the two solvers


@EVERY_SOIL
def test_reduced_solver__over_soil_is_within_its_stated_error(record, ground):
    rng = np.random.default_rng(3)
    places = [(1.9 * i + rng.uniform(-0.2, 0.2), 1.9 * j + rng.uniform(-0.2, 0.2), 0.0) for i in range(4) for j in range(3)]
    d = discretise(Station([Placed(crossed(), p, 30.0 * n) for n, p in enumerate(places)], ground), FREQUENCY_HZ)
    direct, _ = solve_direct(d)
    reduced, space, statistics = solve_reduced(d, ReductionSettings(1e-4))
    theta, phi = (g.ravel() for g in np.meshgrid(np.linspace(0.0, 1.55, 12), np.linspace(0.0, 6.0, 13)))
    frame = direction_frame(theta, phi)
    exact = station_patterns(d, direct.currents, frame)
    found = station_patterns(d, reduced.currents, frame, space=space)
    peak = np.sqrt((np.abs(exact) ** 2).sum(-1)).max(axis=1)
    error = float((np.sqrt((np.abs(found - exact) ** 2).sum(-1)).max(axis=1) / peak).max())
    assert statistics.pattern_error < 2e-4
    record(
        f"worst pattern of the reduced solver over {ground.describe()[:24]}", error, 0.0,
        absolute=statistics.pattern_error, wrong=0.01, source="direct solution",
    )  # fmt: skip
    ports = np.linalg.norm(reduced.loaded_admittance - direct.loaded_admittance) / np.linalg.norm(direct.loaded_admittance)
    assert ports < statistics.port_matrix_error
