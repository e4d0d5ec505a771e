"""Log-periodic antennas: geometry against its formulas, both feeders against one another, refusals by key."""

from dataclasses import replace

import numpy as np
import pytest

from elbowroom.base.constants import IMPEDANCE_OF_VACUUM
from elbowroom.base.errors import GeometryError
from elbowroom.geometry.antennas import Antenna
from elbowroom.geometry.grounds import FreeSpace, PerfectGround
from elbowroom.geometry.mesh import MeshSettings
from elbowroom.geometry.networks import Branch, Line, Stub
from elbowroom.geometry.shapes import log_periodic
from elbowroom.geometry.shapes.log_periodic import two_wire_impedance, two_wire_spacing
from elbowroom.geometry.stations import Placed, Station
from elbowroom.geometry.wires import segment_distances, wire_end_points
from elbowroom.radiation.patterns import station_patterns
from elbowroom.system.discretisation import discretise
from elbowroom.system.plane_waves import direction_frame
from elbowroom.system.port_algebra import impedance_from_loaded
from elbowroom.system.solving import REFERENCE_OHM, solve_isolated

COARSE = MeshSettings(order=2, end_radii=8.0, gap_radii=8.0, floor_wavelengths=0.02)
RATIOS = {"tau": 0.8, "sigma": 0.07, "longest_half_length_m": 1.5, "elements": 10, "height_m": 2.4, "wire_radius_m": 0.004}
NETWORK = RATIOS | {"feeder_impedance_ohm": 100.0}
BOOMS = RATIOS | {"feeder": "wires", "boom_spacing_m": 0.07, "boom_radius_m": 0.004}
TABLE = {
    "half_lengths_m": [0.3, 0.4, 0.5], "positions_m": [0.0, 0.1, 0.25], "height_m": 1.5, "wire_radius_m": 0.003,
    "feeder_impedance_ohm": 100.0,
}  # fmt: skip


def impedance(antenna, frequency_hz, ground=None, mesh=COARSE):
    d = discretise(Station([Placed(antenna)], ground or FreeSpace()), frequency_hz, mesh=mesh)
    return impedance_from_loaded(solve_isolated(d)[0].loaded_admittance, REFERENCE_OHM)


def elements_of(antenna, port):
    """Return half-lengths and heights of the elements of a polarisation of a network-fed antenna, from the top down."""
    n = len(antenna.wires) // len(antenna.ports)
    wires = antenna.wires[port * n : (port + 1) * n]
    return np.array([0.5 * w.length for w in wires]), np.array([w.start[2] for w in wires])


@pytest.mark.parametrize("port", [0, 1])
def test_elements__lengths_and_spacings_go_by_tau_and_tips_lie_on_one_angle(port):
    antenna = log_periodic(**NETWORK)
    half, height = elements_of(antenna, port)
    assert half.size == 10
    assert half[-1] == pytest.approx(1.5)
    np.testing.assert_allclose(half[:-1] / half[1:], 0.8, rtol=1e-12)
    spacing = -np.diff(height)
    np.testing.assert_allclose(spacing[:-1] / spacing[1:], 0.8, rtol=1e-12)
    np.testing.assert_allclose(spacing / (4.0 * half[1:]), 0.07, rtol=1e-12)
    # tan(alpha) = (1 - tau) / (4 sigma), and all tips on it: the apex is where the lengths vanish
    slope = np.diff(half) / spacing
    np.testing.assert_allclose(slope, (1.0 - 0.8) / (4.0 * 0.07), rtol=1e-9)
    offset = 0.5 * spacing.min()
    assert height[0] == pytest.approx(2.4 - port * offset)


def test_elements__follow_until_one_is_short_enough():
    sizes = NETWORK | {"elements": None}
    half, _ = elements_of(log_periodic(**sizes, shortest_half_length_m=0.3), 0)
    assert half[0] <= 0.3 < half[1]
    exact, _ = elements_of(log_periodic(**sizes, shortest_half_length_m=1.5 * 0.8**5), 0)
    assert exact.size == 6


def test_elements__from_a_table():
    antenna = log_periodic(**TABLE, offset_m=0.04)
    for port in (0, 1):
        half, height = elements_of(antenna, port)
        np.testing.assert_allclose(half, [0.3, 0.4, 0.5])
        np.testing.assert_allclose(height, np.array([1.5, 1.4, 1.25]) - 0.04 * port)


def test_elements__radii_scale_with_lengths_if_asked():
    half, _ = elements_of(log_periodic(**NETWORK, scale_radii=True), 0)
    radii = np.array([w.radius for w in log_periodic(**NETWORK, scale_radii=True).wires[:10]])
    np.testing.assert_allclose(radii / half, 0.004 / 1.5)
    assert {w.radius for w in log_periodic(**NETWORK).wires} == {0.004}


def test_one_polarisation():
    antenna = log_periodic(**NETWORK, crossed=False)
    assert [p.name for p in antenna.ports] == ["x"]
    assert antenna.wires == log_periodic(**NETWORK).wires[:10]


def test_network__transposed_lines_from_gap_to_gap():
    antenna = log_periodic(**NETWORK, velocity_factor=0.95, stub_length_m=0.2)
    _, height = elements_of(antenna, 0)
    lines = antenna.network.lines
    assert len(lines) == 18
    assert [line.start for line in lines[:9]] == ["x", *(f"x{i}" for i in range(2, 10))]
    assert [line.end for line in lines[9:]] == [f"y{i}" for i in range(2, 11)]
    np.testing.assert_allclose([line.length_m for line in lines], np.tile(-np.diff(height), 2))
    assert all(line.crossed and line.impedance_ohm == 100.0 and line.velocity_factor == 0.95 for line in lines)
    assert antenna.network.stubs == (Stub("x10", 100.0, 0.2, 0.95), Stub("y10", 100.0, 0.2, 0.95))
    ended = log_periodic(**NETWORK, end_resistance_ohm=100.0)
    assert ended.network.branches == (Branch("x10", resistance_ohm=100.0), Branch("y10", resistance_ohm=100.0))
    assert ended.network.stubs == ()
    assert log_periodic(**NETWORK).network.stubs == ()
    assert len(antenna.gaps) == 20
    # every element is fed in its middle, whatever its radius
    for gap in antenna.gaps:
        assert 0.5 * (gap.low + gap.high) == pytest.approx(0.5 * antenna.wires[gap.wire].length)


def test_network__impedance_from_booms():
    sizes = RATIOS | {"boom_spacing_m": 0.03, "boom_radius_m": 0.01}
    (line, *_) = log_periodic(**sizes, crossed=False).network.lines
    assert line == Line("x", "x2", two_wire_impedance(0.03, 0.01), line.length_m, crossed=True)


def test_two_wire_line__formula_and_inverse():
    x = 0.5 * 0.05 / 0.004
    # arcosh(x) = ln(x + sqrt(x^2 - 1)); far apart it is ln(spacing / radius)
    expected = IMPEDANCE_OF_VACUUM / np.pi * np.log(x + np.sqrt(x**2 - 1.0))
    assert two_wire_impedance(0.05, 0.004) == pytest.approx(expected, rel=1e-12)
    assert two_wire_impedance(1.0, 1e-4) == pytest.approx(119.9 * np.log(1e4), rel=1e-3)
    assert two_wire_spacing(expected, 0.004) == pytest.approx(0.05)
    with pytest.raises(GeometryError, match="touch"):
        two_wire_impedance(0.008, 0.004)
    with pytest.raises(GeometryError, match="radius_m nan"):
        two_wire_impedance(0.008, float("nan"))


def pieces(antenna):
    """Return the sets of wires that are joined to one another, and the smallest distance of wires that are not."""
    wires = antenna.wires
    start, end = wire_end_points(wires)
    joined = np.eye(len(wires), dtype=bool)
    for point in (start, end):
        tiny = point[:, None] + [0.0, 0.0, 1e-9]
        joined |= segment_distances(point[:, None], tiny, start[None], end[None]) < 1e-8
    joined |= joined.T
    distance = segment_distances(start[:, None], end[:, None], start[None], end[None])
    # Two halves that leave one boom are joined through it alone.
    nearest = distance[~joined].min()
    reach = joined.copy()
    for _ in range(len(wires)):
        reach = (reach.astype(int) @ joined.astype(int)) > 0
    return {frozenset(np.flatnonzero(row)) for row in reach}, nearest


@pytest.mark.parametrize("end", [{"stub_length_m": 0.2}, {"end_resistance_ohm": 300.0}, {}])
def test_booms__one_conductor_each_and_two_polarisations_apart(end):
    antenna = log_periodic(**BOOMS, **end)
    sets, nearest = pieces(antenna)
    half = len(antenna.wires) // 2
    assert sets == {frozenset(range(half)), frozenset(range(half, 2 * half))}
    assert half == 3 + 20 + bool(end)
    # closest are the halves of one polarisation and the booms of the other, or the two booms' elements across the offset
    offset = 0.5 * 4 * 0.07 * 1.5 * 0.8**8
    assert nearest == pytest.approx(min(0.035, offset))
    assert len(antenna.loads) == (2 if "end_resistance_ohm" in end else 0)


def test_booms__halves_change_sides_from_element_to_element():
    wires = log_periodic(**BOOMS, crossed=False).wires
    right, left = wires[3::2], wires[4::2]
    assert len(right) == len(left) == 10
    for i, (r, q) in enumerate(zip(right, left, strict=True)):
        side = -0.035 if i % 2 == 0 else 0.035
        assert (r.start[:2], r.end[1]) == ((0.0, side), side)
        assert (q.start[:2], q.end[1]) == ((0.0, -side), -side)
        assert r.end[0] == pytest.approx(-q.end[0])
        assert r.end[0] > 0.0


def test_booms__spacing_from_impedance():
    sizes = BOOMS | {"boom_spacing_m": None, "feeder_impedance_ohm": 350.0}
    assert log_periodic(**sizes).wires[0].length == pytest.approx(two_wire_spacing(350.0, 0.004))


@pytest.mark.parametrize("frequency", [50e6, 83e6, 137e6, 211e6, 350e6])
def test_twenty_elements__impedance_is_finite_and_passive_over_the_band(frequency):
    z = impedance(log_periodic(**NETWORK | {"longest_half_length_m": 1.55}), frequency, PerfectGround())
    assert np.isfinite(z).all()
    assert np.linalg.eigvalsh(z.real).min() > 1.0
    assert np.abs(z).max() < 500.0
    # Polarisations lie in each other's planes of symmetry: what is left, -100 dB at most, is quadrature.
    assert abs(z[0, 1]) < 1e-5 * abs(z[0, 0])


def replace_network(antenna, network):
    return Antenna(antenna.name, antenna.wires, antenna.ports, antenna.loads, antenna.feeds, network)


FIVE = {
    "tau": 0.8, "sigma": 0.08, "longest_half_length_m": 0.7, "elements": 5, "height_m": 1.6, "wire_radius_m": 0.002,
    "crossed": False,
}  # fmt: skip


@pytest.mark.parametrize("end", [{"stub_length_m": 0.15}, {"end_resistance_ohm": 300.0}])
@pytest.mark.parametrize("frequency", [125e6, 160e6, 200e6])
def test_feeders__booms_act_as_the_network_of_their_impedance(frequency, end):
    """The two differ by the booms' own fields, which vanish with their spacing.

    At 332 ohm (a spacing of sixteen radii) reflections at the port, against that impedance, are within 0.04 at a spacing of
    16 mm or a hundredth of a wavelength, and half as far apart at half the spacing (measured: 0.015 to 0.033, and ratios of
    0.45 to 0.53).  Lines that are not transposed are ten times as far off.
    """
    reference = two_wire_impedance(0.016, 0.001)
    fed_by_lines = log_periodic(**FIVE, feeder_impedance_ohm=reference, **end)

    def reflection(antenna):
        z = impedance(antenna, frequency)[0, 0]
        return (z - reference) / (z + reference)

    network = reflection(fed_by_lines)
    wide, narrow = (
        abs(reflection(log_periodic(**FIVE, feeder="wires", boom_spacing_m=16 * a, boom_radius_m=a, **end)) - network)
        for a in (0.001, 0.0005)
    )
    assert wide < 0.04
    assert 0.4 < narrow / wide < 0.6
    straight = [replace(line, crossed=False) for line in fed_by_lines.network.lines]
    wrong = replace_network(fed_by_lines, replace(fed_by_lines.network, lines=straight))
    assert abs(reflection(wrong) - network) > 0.4


def test_feeders__have_one_polarity_and_one_direction():
    """They respond alike, to a tenth at the zenith, and less than half as well from the nadir."""
    reference = two_wire_impedance(0.008, 0.0005)
    found = []
    for feeder in ({"feeder_impedance_ohm": reference}, {"feeder": "wires", "boom_spacing_m": 0.008, "boom_radius_m": 0.0005}):
        antenna = log_periodic(**FIVE | {"crossed": True}, **feeder, end_resistance_ohm=300.0)
        d = discretise(Station([Placed(antenna)], FreeSpace()), 160e6, mesh=COARSE)
        currents = solve_isolated(d)[0].currents
        # along phi = 0, theta_hat at the zenith is x and phi_hat is y
        found.append(station_patterns(d, currents, direction_frame(np.array([0.0, np.pi]), np.array([0.0, 0.0]))))
    network, booms = found
    largest = np.abs(network).max()
    np.testing.assert_allclose(booms[:, 0], network[:, 0], rtol=0, atol=0.1 * largest)
    for pattern in found:
        for port in (0, 1):
            assert abs(pattern[port, 0, port]) > 0.9 * largest
            assert abs(pattern[port, 0, 1 - port]) < 0.1 * largest
            assert np.abs(pattern[port, 1]).max() < 0.5 * largest


@pytest.mark.parametrize(
    ("sizes", "change", "words"),
    [
        (NETWORK, {"tau": 1.0}, "tau 1 must lie between 0.5 and 0.995"),
        (NETWORK, {"tau": float("nan")}, "tau nan must lie"),
        (NETWORK, {"tau": None}, "tau missing; or half_lengths_m and positions_m"),
        (NETWORK, {"tau": None, "sigma": None}, "tau, sigma missing"),
        (NETWORK, {"sigma": 0.001}, "sigma 0.001 must lie between 0.01 and 1"),
        (NETWORK, {"sigma": 0.01}, "wires 0 and 10 come within .* change offset_m, widen sigma"),
        (NETWORK, {"longest_half_length_m": -1.5}, "longest_half_length_m -1.5 must be positive"),
        (NETWORK, {"elements": 1}, "elements 1: expected a whole number from 2 to 200"),
        (NETWORK, {"elements": 1000}, "elements 1000: expected a whole number from 2 to 200"),
        (NETWORK, {"elements": 10.0}, "elements 10.0: expected a whole number"),
        (NETWORK, {"elements": None}, "either shortest_half_length_m or elements"),
        (NETWORK, {"shortest_half_length_m": 0.3}, "either shortest_half_length_m or elements"),
        (NETWORK, {"elements": None, "shortest_half_length_m": 2.0}, "shortest_half_length_m 2 must lie below longest_half_length_m"),
        (NETWORK, {"height_m": 1.0}, "reaches down to .* raise height_m"),
        (NETWORK, {"height_m": float("nan")}, "height_m nan must be positive"),
        (NETWORK, {"offset_m": 0.0}, "offset_m 0.0 must be positive"),
        (NETWORK, {"offset_m": 0.005}, "come within 0.005 m of one another, less than the sum of their radii .* change offset_m"),
        (NETWORK, {"offset_m": 0.05, "crossed": False}, "offset_m 0.05 has no effect without crossed = true"),
        (NETWORK, {"feeder": "coax"}, "feeder 'coax': expected 'network' or 'wires'"),
        (NETWORK, {"feeder_impedance_ohm": None}, "either feeder_impedance_ohm, or boom_spacing_m and boom_radius_m"),
        (NETWORK, {"boom_spacing_m": 0.03}, "either feeder_impedance_ohm, or boom_spacing_m and boom_radius_m"),
        (NETWORK, {"feeder_impedance_ohm": 0.0}, "feeder_impedance_ohm 0.0 must be positive"),
        (NETWORK, {"velocity_factor": 1.1}, "velocity_factor 1.1 must be at most 1"),
        (NETWORK, {"stub_length_m": 0.2, "end_resistance_ohm": 50.0}, "either stub_length_m or end_resistance_ohm, not both"),
        (NETWORK, {"end_resistance_ohm": float("inf")}, "end_resistance_ohm inf must be positive"),
        (BOOMS, {"boom_spacing_m": 0.008}, "boom_spacing_m 0.008 lets booms of boom_radius_m 0.004 touch"),
        (BOOMS, {"boom_spacing_m": 0.012}, "come within 0.006 m .* boom_spacing_m"),
        (BOOMS, {"boom_radius_m": None}, "'wires' needs boom_radius_m and one of"),
        (BOOMS, {"feeder_impedance_ohm": 100.0}, "'wires' needs boom_radius_m and one of"),
        (BOOMS, {"velocity_factor": 0.9}, "velocity_factor 0.9: bare wires have 1"),
        (TABLE, {"positions_m": None}, "half_lengths_m and positions_m go together, both are needed"),
        (TABLE, {"tau": 0.9, "elements": 3}, "go together, and without tau, elements"),
        (TABLE, {"positions_m": [0.0, 0.1]}, "expected two lists of equal length, two or more numbers each, found 3 and 2"),
        (TABLE, {"positions_m": [0.1, 0.2, 0.3]}, "0 first, then increasing"),
        (TABLE, {"positions_m": [0.0, 0.2, 0.2]}, "0 first, then increasing"),
        (TABLE, {"positions_m": [0.0, 0.2, float("nan")]}, "0 first, then increasing"),
        (TABLE, {"half_lengths_m": [0.3, -0.4, 0.5]}, "half_lengths_m must be positive and finite"),
        (TABLE, {"positions_m": [0.0, 0.005, 0.2]}, "wires 0 and 1 come within 0.005 m"),
    ],
)  # fmt: skip
def test_bad_numbers__are_refused_by_their_key(sizes, change, words):
    log_periodic(**sizes)
    with pytest.raises(GeometryError, match=words):
        log_periodic(**(sizes | change))
