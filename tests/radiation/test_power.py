"""Where accepted power goes: the parts add up, and each is what it is by its own account."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from elbowroom.base.errors import ModelRangeWarning
from elbowroom.geometry.antennas import Antenna, Load, Port
from elbowroom.geometry.directions import Directions
from elbowroom.geometry.grounds import FreeSpace, MeshOnSoil, PerfectGround
from elbowroom.geometry.networks import FeedPoint, Line, Network
from elbowroom.geometry.soils import LayeredSoil, Soil
from elbowroom.geometry.stations import Placed, Station
from elbowroom.geometry.wires import Wire
from elbowroom.job.oneantenna import alone
from elbowroom.job.solve import solve
from elbowroom.radiation.patterns import station_patterns
from elbowroom.radiation.power import power_directions
from elbowroom.radiation.power_quadrature import MOST_REFLECTION_DEGREE, power_sphere, reflection_degree
from elbowroom.system.discretisation import discretise
from elbowroom.system.plane_waves import direction_frame
from helpers import FREQUENCY_HZ, cluster, crossed, dipole


@pytest.mark.parametrize("ground", [True, False], ids=["perfect", "free-space"])
@pytest.mark.parametrize("solver", ["direct", "reduced"])
def test_power_parts__of_lossless_antennas_all_is_radiated(ground, solver):
    solution = solve(cluster(4, ground), FREQUENCY_HZ, solver=solver)
    weights = np.vstack([solution.pointing_weights(0.4, 1.0, port="x"), np.eye(8)[3]])
    parts = solution.power_parts(weights)
    assert parts.accepted.shape == (2,)
    # bends leave up to 0.07 (ka)^2 of the resistance unaccounted for, radius 3 mm
    assert_allclose(parts.radiation_efficiency, 1.0, atol=0.07 * (np.pi * 0.003) ** 2 * 4.0)
    assert_allclose(parts.radiated + parts.unaccounted, parts.accepted, rtol=1e-6)
    for nothing in (parts.wires, parts.loads, parts.networks, parts.ground):
        assert_allclose(nothing, 0.0, atol=1e-7)  # single precision


def test_power_parts__accepted_is_what_waves_do_not_bring_back():
    solution = solve(cluster(3), FREQUENCY_HZ)
    weights = np.eye(6)
    scattering = solution.scattering_matrix(100.0)
    expected = 1.0 - np.sum(np.abs(scattering) ** 2, axis=0)
    assert_allclose(solution.power_parts(weights).accepted, expected, rtol=1e-9)


def test_power_parts__loss_of_wire_and_load_are_those_of_their_resistances():
    wire = Wire((0.0, 0.0, 0.4), (0.0, 0.0, 1.4), 0.002, conductivity=1e5)
    free = Antenna("free", [Wire(wire.start, wire.end, 0.002)], [Port("p", 0)])
    loaded = Antenna("loaded", [wire], [Port("p", 0)], loads=[Load(0, 0.3, resistance_ohm=30.0)])
    solution = solve(Station([Placed(loaded, (0, 0, 0))], PerfectGround()), FREQUENCY_HZ)
    parts = solution.power_parts([1.0])
    total = parts.radiated + parts.wires + parts.loads
    assert_allclose(total, parts.accepted, rtol=1e-5)
    assert parts.wires > 0.01 * parts.accepted
    assert parts.loads > 0.05 * parts.accepted
    bare = solve(Station([Placed(free, (0, 0, 0))], FreeSpace()), FREQUENCY_HZ).power_parts([1.0])
    assert_allclose(bare.radiated, bare.accepted, rtol=1e-5)


def test_power_parts__network_takes_what_its_lossy_lines_do():
    def solved(antenna):
        return solve(Station([Placed(antenna, (0, 0, 0))], PerfectGround()), FREQUENCY_HZ).power_parts([1.0])

    wires = [Wire((0.0, -0.45, 0.5), (0.0, 0.45, 0.5), 0.002)]
    line = {"start": "gap", "end": "amplifier", "impedance_ohm": 100.0, "length_m": 1.3}

    def behind(**loss):
        feed = FeedPoint("gap", 0, 0.5)
        return Antenna("fed", wires, [Port("p", node="amplifier")], feeds=[feed], network=Network(lines=[Line(**line, **loss)]))

    lossless, lossy = solved(behind()), solved(behind(loss_db_per_m=1.0))
    assert_allclose(lossless.networks, 0.0, atol=1e-9)
    assert_allclose(lossless.radiated, lossless.accepted, rtol=1e-5)
    assert_allclose(lossy.networks + lossy.radiated, lossy.accepted, rtol=1e-5)
    # a matched line of 1.3 dB would take 26 %; one that carries waves both ways takes more
    assert lossy.fraction("networks")[0] > 1.0 - 10.0**-0.13


# --- integration over the sky above grounds that echo

DRY, WET, SEA = Soil(3.0, 1e-4), Soil(30.0, 0.1), Soil(80.0, 5.0)


def panels(n_panels, n_phi):
    """Return a rule that knows nothing of reflections: Gauss rules of 24 points on panels that shrink towards the horizon."""
    x, w = np.polynomial.legendre.leggauss(24)
    edges = (np.arange(n_panels + 1) / n_panels) ** 2
    low, step = edges[:-1, None], np.diff(edges)[:, None]
    cosine, weight = (low + step * (x + 1.0) / 2.0).ravel(), (step * w / 2.0).ravel()
    phi = np.arange(n_phi) * (2.0 * np.pi / n_phi)
    return Directions(
        np.repeat(np.arccos(cosine), n_phi), np.tile(phi, cosine.size), np.repeat(weight * (2.0 * np.pi / n_phi), n_phi)
    )


def sent(d, sky):
    """Power of a current through the first gap."""
    current = d.kinds[0].mesh.gap_vectors.T[:, :1].astype(complex)
    return sky.integrate(
        np.sum(np.abs(station_patterns(d, current, direction_frame(sky.theta_rad, sky.phi_rad))[0]) ** 2, axis=-1)
    )


@pytest.mark.parametrize(
    ("ground", "frequency_hz"),
    [
        (LayeredSoil(((10.0, DRY),), WET), 350e6),
        (LayeredSoil(((20.0, DRY),), WET), 350e6),
        (LayeredSoil(((40.0, DRY),), WET), 150e6),
        (MeshOnSoil(LayeredSoil(((2.0, Soil(3.0, 0.0)),), SEA), 0.1, 1e-3), 200e6),
        (MeshOnSoil(Soil(10.0, 0.01), 0.02, 1e-3), 50e6),
        (SEA, 50e6),
    ],
    ids=["10m", "20m", "40m", "mesh-on-lossless", "fine-mesh", "sea"],
)
@pytest.mark.parametrize("upright", [True, False], ids=["upright", "level"])
def test_power_directions__follow_the_echoes_of_layers(ground, frequency_hz, upright):
    design = dipole(half_length=0.2, height=0.5 if upright else 0.1, direction=(0.0, 0.0, 1.0) if upright else (1.0, 0.0, 0.0))
    d = discretise(alone(design, ground), frequency_hz, self_blocks=False)
    reference, coarser = sent(d, panels(40, 12)), sent(d, panels(32, 12))
    assert reference == pytest.approx(coarser, rel=1e-7)
    assert sent(d, power_directions(d)) == pytest.approx(reference, rel=1e-6)


def test_power_sphere__of_one_antenna_follows_echoes_too():
    d = discretise(alone(dipole(half_length=0.2, height=0.5), LayeredSoil(((20.0, DRY),), WET)), 350e6, self_blocks=False)
    assert sent(d, power_sphere(d, d.wavenumber * 0.7, 8.0)) == pytest.approx(sent(d, panels(24, 12)), rel=1e-6)


def test_power_directions__of_large_stations_over_even_ground_are_no_more_than_the_degree_asks_for():
    places = [(x, y, 0.0) for x in (0.0, 30.0) for y in (0.0, 25.0)]
    shapes = []
    for ground in (PerfectGround(), Soil(10.0, 0.01), SEA, MeshOnSoil(Soil(10.0, 0.01), 0.1, 1e-3)):
        d = discretise(Station([Placed(crossed(), p) for p in places], ground), 200e6, self_blocks=False)
        shapes.append(power_directions(d).shape)
    assert len(set(shapes)) == 1


def test_reflection_degree__of_known_polynomials():
    """T_7 with cos(theta) from 0 to 1; its square is (1 + T_14)/2, and T_3^2 is of lower degree."""

    def reflection(theta):
        turn = np.arccos(2.0 * np.cos(theta) - 1.0)
        return 0.5j * np.cos(7.0 * turn), 0.9 * np.cos(3.0 * turn)

    degree, missing = reflection_degree(reflection)
    assert degree == 14
    assert missing < 1e-12


def test_power_directions__say_so_where_echoes_turn_too_quickly():
    ground = LayeredSoil(((100.0, Soil(3.0, 1e-5)),), WET)
    d = discretise(alone(dipole(half_length=0.2, height=0.5), ground), 350e6, self_blocks=False)
    with pytest.warns(ModelRangeWarning, match=f"350 MHz: .* degree {MOST_REFLECTION_DEGREE} .* leave out 0.03 of it"):
        sky = power_directions(d)
    error = sent(d, sky) / sent(d, panels(80, 12)) - 1.0
    assert 1e-8 < abs(error) < 0.03
