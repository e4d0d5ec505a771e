"""Parametric shapes: dimensions, refusals by key, quarter-turned twins, and solves of the sizes that their texts name."""

import numpy as np
import pytest

from elbowroom.base.constants import wavenumber_of
from elbowroom.base.errors import GeometryError
from elbowroom.geometry.grounds import FreeSpace, PerfectGround
from elbowroom.geometry.mesh import MeshSettings
from elbowroom.geometry.shapes import (
    SHAPES,
    bow_tie,
    crossed_dipoles,
    dipole,
    folded_dipole,
    log_periodic,
    monopole,
    polygonal_loop,
)
from elbowroom.geometry.stations import Placed, Station
from elbowroom.job.checks import check_station
from elbowroom.radiation.patterns import station_patterns
from elbowroom.system.discretisation import discretise
from elbowroom.system.plane_waves import direction_frame
from elbowroom.system.port_algebra import impedance_from_loaded
from elbowroom.system.solving import REFERENCE_OHM, solve_isolated

# No more than is needed to tell right from wrong connections: most of these solves take a tenth of a second.
COARSE = MeshSettings(order=2, end_radii=8.0, gap_radii=8.0, floor_wavelengths=0.02)

CROSSED = {"arm_length_m": 0.45, "height_m": 0.9, "wire_radius_m": 0.004}
DIPOLE = {"half_length_m": 0.475, "height_m": 1.5, "wire_radius_m": 0.004}
FOLDED = {"half_length_m": 0.46, "height_m": 1.5, "spacing_m": 0.06, "wire_radius_m": 0.003}
BOW_TIE = {"half_length_m": 0.35, "flare_deg": 60.0, "height_m": 0.9, "wire_radius_m": 0.003}
LOOP = {"circumference_m": 2.1, "height_m": 1.5, "wire_radius_m": 0.004}
MONOPOLE = {"length_m": 0.48, "wire_radius_m": 0.004}
ON_RADIALS = MONOPOLE | {"height_m": 0.8, "radials": 4}
LOG_PERIODIC = {
    "tau": 0.8, "sigma": 0.08, "longest_half_length_m": 1.0, "elements": 8, "height_m": 1.9, "wire_radius_m": 0.003,
    "feeder_impedance_ohm": 100.0,
}  # fmt: skip
EXAMPLES = {
    "crossed-dipoles": lambda: crossed_dipoles(**CROSSED),
    "crossed-dipoles drooping": lambda: crossed_dipoles(**CROSSED, droop_deg=30.0),
    "crossed-dipoles on a mast": lambda: crossed_dipoles(**CROSSED, droop_deg=30.0, mast_radius_m=0.01),
    "dipole": lambda: dipole(**DIPOLE),
    "dipole upright": lambda: dipole(**DIPOLE, upright=True),
    "folded-dipole": lambda: folded_dipole(**FOLDED),
    "folded-dipole crossed": lambda: folded_dipole(**FOLDED, crossed=True),
    "folded-dipole unequal": lambda: folded_dipole(**FOLDED, second_radius_m=0.006),
    "bow-tie": lambda: bow_tie(**BOW_TIE),
    "bow-tie crossed": lambda: bow_tie(**BOW_TIE, crossed=True),
    "bow-tie open": lambda: bow_tie(**BOW_TIE, closed=False),
    "polygonal-loop": lambda: polygonal_loop(**LOOP),
    "polygonal-loop vertical": lambda: polygonal_loop(**LOOP, sides=6, plane="vertical"),
    "monopole": lambda: monopole(**MONOPOLE),
    "monopole on radials": lambda: monopole(**ON_RADIALS, radial_droop_deg=30.0),
    "log-periodic": lambda: log_periodic(**LOG_PERIODIC),
}


def solved(antenna, frequency_hz, ground=None, mesh=COARSE):
    """Return discretisation, port currents and impedance matrix of an antenna alone."""
    d = discretise(Station([Placed(antenna)], ground or FreeSpace()), frequency_hz, mesh=mesh)
    found = solve_isolated(d)[0]
    return d, found, impedance_from_loaded(found.loaded_admittance, REFERENCE_OHM)


def pattern(d, currents, theta, phi):
    return station_patterns(d, currents, direction_frame(theta, phi))


@pytest.mark.parametrize("name", EXAMPLES)
def test_examples__raise_no_warning_and_solve_over_a_ground(name):
    antenna = EXAMPLES[name]()
    band = (100e6, 150e6, 300e6) if name == "log-periodic" else (150e6,)
    assert [str(p) for p in check_station(Station([Placed(antenna)], PerfectGround()), band)] == []
    _, _, z = solved(antenna, 150e6, PerfectGround(), "default" if len(antenna.wires) < 16 else COARSE)
    assert np.isfinite(z).all()
    # A lossless antenna radiates: the resistance matrix is positive, and of the size of dipoles or their folded kin.
    assert np.linalg.eigvalsh(z.real).min() > 10.0
    assert np.abs(z).max() < 500.0


def test_shapes__every_shape_has_an_example():
    assert {name.split(" ")[0] for name in EXAMPLES} == set(SHAPES)


@pytest.mark.parametrize("name", EXAMPLES)
def test_examples__port_x_is_at_height_m_and_names_are_x_and_y(name):
    antenna = EXAMPLES[name]()
    gap = antenna.port_gaps[0]
    wire = antenna.wires[gap.wire]
    height = {
        "crossed": 0.9, "dipole": 1.5, "folded": 1.5, "bow": 0.9, "polygonal": 1.5, "monopole": 0.8 if "radials" in name else 0.0,
        "log": 1.9,
    }[name.split("-")[0].split(" ")[0]]  # fmt: skip
    # a monopole's port is the half gap above its foot
    place = 0.0 if "monopole" in name else 0.5 * (gap.low + gap.high)
    assert wire.point(place)[2] == pytest.approx(height, abs=1e-12)
    assert [p.name for p in antenna.ports] in (["x"], ["x", "y"])


TWINS = {
    "crossed dipoles": (lambda: crossed_dipoles(**CROSSED), 0.032),
    "drooping dipoles": (lambda: crossed_dipoles(**CROSSED, droop_deg=40.0, separation_m=0.05), 0.05),
    "folded dipoles": (lambda: folded_dipole(**FOLDED, crossed=True), 0.03),
    "bow-ties": (lambda: bow_tie(**BOW_TIE, crossed=True), 0.024),
    "log-periodic": (lambda: log_periodic(**LOG_PERIODIC), 0.5 * 4 * 0.08 * 0.8**6),
    "log-periodic, stated offset": (lambda: log_periodic(**LOG_PERIODIC, offset_m=0.03), 0.03),
    "log-periodic on booms": (
        lambda: log_periodic(**LOG_PERIODIC | {"feeder_impedance_ohm": 350.0}, feeder="wires", boom_radius_m=0.002),
        0.5 * 4 * 0.08 * 0.8**6,
    ),
}


@pytest.mark.parametrize("name", TWINS)
def test_dual_polarised__port_y_is_port_x_turned_by_a_right_angle_and_lowered(name):
    make, drop = TWINS[name]
    antenna = make()
    assert [p.name for p in antenna.ports] == ["x", "y"]
    x, y = (p.wire for p in antenna.ports)
    assert (x, 2 * y) == (0, len(antenna.wires))
    turn = np.array([[0.0, -1.0, 0.0], [1.0, 0.0, 0.0], [0.0, 0.0, 1.0]])
    for a, b in zip(antenna.wires[:y], antenna.wires[y:], strict=True):
        for p, q in ((a.start, b.start), (a.end, b.end)):
            np.testing.assert_allclose(turn @ p - [0.0, 0.0, drop], q, rtol=0, atol=1e-12)
        assert a.radius == b.radius


@pytest.mark.parametrize("name", ["crossed dipoles", "drooping dipoles", "folded dipoles", "log-periodic"])
def test_dual_polarised__where_polarisations_do_not_couple__responses_are_turned_too(name):
    """Each half of these pairs lies in a plane of symmetry of the other, so that in free space neither knows of its twin."""
    make, drop = TWINS[name]
    frequency = 150e6
    d, found, z = solved(make(), frequency)
    assert abs(z[0, 1]) < 1e-6 * abs(z[0, 0])
    assert z[1, 1] == pytest.approx(z[0, 0], rel=1e-6)
    theta, phi = np.deg2rad([0.0, 20.0, 50.0, 80.0]), np.deg2rad([10.0, 100.0, 200.0, 321.0])
    at_x = pattern(d, found.currents, theta, phi)[0]
    at_y = pattern(d, found.currents, theta, phi + 0.5 * np.pi)[1]
    lowered = np.exp(-1j * wavenumber_of(frequency) * drop * np.cos(theta))[:, None]
    np.testing.assert_allclose(at_y, lowered * at_x, rtol=0, atol=1e-6 * np.abs(at_x).max())
    assert np.abs(at_x).max() > 1e-3


def test_crossed_dipoles__sizes():
    antenna = crossed_dipoles(**CROSSED, droop_deg=30.0, mast_radius_m=0.01)
    assert [w.length for w in antenna.wires[:3]] == pytest.approx([0.048, 0.45, 0.45])
    for arm in antenna.wires[1:3]:
        assert arm.start[2] - arm.end[2] == pytest.approx(0.225)
    mast = antenna.wires[-1]
    assert mast.start == (0.0, 0.0, 0.0)
    assert 0.9 - 0.032 - mast.end[2] == pytest.approx(8 * 0.01)


def test_folded_dipole__sizes():
    antenna = folded_dipole(**FOLDED, second_radius_m=0.005)
    fed, other, left, right = antenna.wires
    assert fed.length == other.length == pytest.approx(0.92)
    assert left.length == right.length == pytest.approx(0.06)
    assert [w.radius for w in antenna.wires] == [0.003, 0.005, 0.003, 0.003]


def test_bow_tie__angle_between_its_wires():
    antenna = bow_tie(**BOW_TIE)
    feed, up, down, close = antenna.wires[:4]
    assert np.rad2deg(np.arccos(up.direction @ down.direction)) == pytest.approx(60.0)
    assert close.start[0] == close.end[0] == pytest.approx(0.35)
    assert close.length == pytest.approx(2 * (0.35 - 0.5 * feed.length) * np.tan(np.deg2rad(30.0)))
    assert len(antenna.wires) == 7
    assert len(bow_tie(**BOW_TIE, closed=False).wires) == 5


@pytest.mark.parametrize("plane", ["level", "vertical"])
@pytest.mark.parametrize("sides", [3, 4, 5, 12])
def test_polygonal_loop__closes_with_equal_sides_and_angles(sides, plane):
    antenna = polygonal_loop(**LOOP, sides=sides, plane=plane)
    assert sum(w.length for w in antenna.wires) == pytest.approx(2.1)
    for wire, following in zip(antenna.wires, (*antenna.wires[1:], antenna.wires[0]), strict=True):
        assert wire.end == following.start
        assert wire.length == pytest.approx(2.1 / sides)
        assert wire.direction @ following.direction == pytest.approx(np.cos(2 * np.pi / sides), abs=1e-12)
    np.testing.assert_allclose(antenna.wires[0].direction, [1.0, 0.0, 0.0], atol=1e-15)
    points = np.array([w.start for w in antenna.wires])
    if plane == "level":
        np.testing.assert_allclose(points.mean(axis=0), [0.0, 0.0, 1.5], atol=1e-12)
    else:
        assert points[:, 2].min() == pytest.approx(1.5)
        np.testing.assert_allclose(points[:, 1], 0.0, atol=1e-15)
    assert polygonal_loop(side_m=2.1 / sides, sides=sides, height_m=1.5, wire_radius_m=0.004, plane=plane) == antenna


def test_monopole__radials():
    antenna = monopole(**ON_RADIALS | {"radials": 6}, radial_droop_deg=30.0, radial_length_m=0.6, radial_radius_m=0.002)
    assert [w.length for w in antenna.wires] == pytest.approx([0.48, *([0.6] * 6)])
    tips = np.array([w.end for w in antenna.wires[1:]])
    np.testing.assert_allclose(tips[:, 2], 0.8 - 0.3)
    np.testing.assert_allclose(np.mod(np.rad2deg(np.arctan2(tips[:, 1], tips[:, 0])), 360.0), np.arange(0, 360, 60), atol=1e-9)
    assert {w.radius for w in antenna.wires[1:]} == {0.002}


def test_monopole__is_half_a_dipole():
    _, _, z = solved(monopole(length_m=0.475, wire_radius_m=0.004), 150e6, PerfectGround(), "default")
    _, _, whole = solved(dipole(**DIPOLE, upright=True), 150e6, FreeSpace(), "default")
    # The dipole's gap is one element, the monopole's half of it another: equal to a part of what this mesh leaves (1e-2).
    assert 2.0 * z[0, 0] == pytest.approx(whole[0, 0], rel=1e-3)


BAD = [
    (dipole, DIPOLE, {"half_length_m": -1.0}, "half_length_m -1.0 must be positive"),
    (dipole, DIPOLE, {"height_m": float("nan")}, "height_m nan must be positive and finite"),
    (dipole, DIPOLE, {"wire_radius_m": float("inf")}, "wire_radius_m inf must be positive and finite"),
    (dipole, DIPOLE, {"wire_radius_m": "thin"}, "wire_radius_m 'thin' must be positive"),
    (dipole, DIPOLE, {"half_length_m": True}, "half_length_m True must be positive"),
    (dipole, DIPOLE, {"gap_m": 0.0}, "gap_m 0.0 must be positive"),
    (dipole, DIPOLE, {"height_m": 0.4, "upright": True}, "reaches down to -0.075 m; raise height_m or shorten half_length_m"),
    (crossed_dipoles, CROSSED, {"arm_length_m": float("nan")}, "arm_length_m nan must be positive"),
    (crossed_dipoles, CROSSED, {"separation_m": 0.007}, "separation_m 0.007 lets the dipoles touch"),
    (crossed_dipoles, CROSSED, {"droop_deg": float("nan")}, "droop_deg nan must lie between -80 and 80"),
    (crossed_dipoles, CROSSED, {"mast_radius_m": 0.2}, "height_m 0.9 leaves no room for a mast of mast_radius_m 0.2"),
    (folded_dipole, FOLDED, {"spacing_m": 0.006}, "spacing_m 0.006 lets the two conductors touch; more than 0.006"),
    (folded_dipole, FOLDED, {"second_radius_m": float("nan")}, "second_radius_m nan must be positive"),
    (folded_dipole, FOLDED, {"crossed": True, "separation_m": 0.005}, "wires 0 and 4 come within 0.005 m .* widen separation_m"),
    (folded_dipole, FOLDED, {"crossed": True, "separation_m": 1.6}, "reaches down to -0.1 m; raise height_m or lessen separation_m"),
    (bow_tie, BOW_TIE, {"flare_deg": 170.0}, "flare_deg 170 must lie between 5 and 150"),
    (bow_tie, BOW_TIE, {"flare_deg": float("nan")}, "flare_deg nan must lie between 5 and 150"),
    (bow_tie, BOW_TIE, {"feed_length_m": 0.8}, "feed_length_m 0.8 leaves nothing of half_length_m 0.35"),
    (bow_tie, BOW_TIE, {"crossed": True, "separation_m": 0.004}, "come within 0.004 m .* widen separation_m"),
    (polygonal_loop, LOOP, {"sides": 2}, "sides 2: expected a whole number of at least 3"),
    (polygonal_loop, LOOP, {"sides": 4.0}, "sides 4.0: expected a whole number"),
    (polygonal_loop, LOOP, {"side_m": 0.5}, "either circumference_m or side_m"),
    (polygonal_loop, LOOP, {"circumference_m": None}, "either circumference_m or side_m"),
    (polygonal_loop, LOOP, {"plane": "flat"}, "plane 'flat': expected 'level' or 'vertical'"),
    (polygonal_loop, LOOP, {"sides": 200}, "sides of 0.0105 m are too short for wire_radius_m 0.004"),
    (monopole, MONOPOLE, {"height_m": 0.5}, "height_m 0.5 with 0 radials; without radials the foot stands on the ground"),
    (monopole, ON_RADIALS, {"height_m": 0.0}, "height_m 0 with 4 radials; radials need height_m above 0"),
    (monopole, ON_RADIALS, {"height_m": float("nan")}, "height_m nan must lie between"),
    (monopole, ON_RADIALS, {"radials": 1}, "radials 1: expected none, or at least 2"),
    (monopole, ON_RADIALS, {"radials": -3}, "radials -3: expected a whole number of at least 0"),
    (monopole, ON_RADIALS, {"radial_droop_deg": 90.0}, "radial_droop_deg 90 must lie between -80 and 80"),
    (monopole, ON_RADIALS, {"radial_droop_deg": 80.0, "radial_length_m": 0.9}, "raise height_m or lessen radial_droop_deg"),
    (dipole, DIPOLE, {"half_length_m": None}, "half_length_m None must be positive"),
    (folded_dipole, FOLDED, {"separation_m": 0.03}, "separation_m 0.03 has no effect without crossed = true"),
    (bow_tie, BOW_TIE, {"separation_m": 0.03}, "separation_m 0.03 has no effect without crossed = true"),
    (monopole, MONOPOLE, {"radial_length_m": 0.5}, "radial_length_m 0.5 has no effect without radials"),
    (monopole, MONOPOLE, {"radial_droop_deg": 10.0}, "radial_droop_deg 10.0 has no effect without radials"),
    (monopole, ON_RADIALS, {"radials": 400}, "400 radials touch over their whole length"),
]  # fmt: skip


@pytest.mark.parametrize(("make", "sizes", "change", "words"), BAD, ids=lambda v: str(v)[:40] if isinstance(v, dict) else "")
def test_bad_numbers__are_refused_by_their_key(make, sizes, change, words):
    make(**sizes)
    with pytest.raises(GeometryError, match=words):
        make(**(sizes | change))
