"""What is found wrong with a station before it is solved: each problem by severity and wording."""

import time
from dataclasses import replace

import numpy as np
import pytest

from elbowroom import Antenna, FreeSpace, Layout, PerfectGround, Placed, Port, Station, Wire, crossed_dipoles, random_disc
from elbowroom.base.constants import SPEED_OF_LIGHT
from elbowroom.base.errors import GeometryError, ModelRangeError
from elbowroom.geometry.mesh import MESHES
from elbowroom.geometry.soils import LayeredSoil, Soil
from elbowroom.job.checks import PROXIMITY_RADII, RADIUS_LIMIT_WAVELENGTHS, check_station, mesh_statistics
from elbowroom.system.discretisation import discretise


def dipole(length=1.0, radius=0.005, height=1.0, gap=None):
    wire = Wire((-length / 2, 0.0, height), (length / 2, 0.0, height), radius)
    return Antenna("dipole", [wire], [Port("x", 0, gap=gap)])


def made_of(*wires, name="made"):
    return Antenna(name, wires, [Port("x", 0)])


def found(antenna_or_station, frequencies=(150e6,), mesh="default", ground=None):
    station = antenna_or_station
    if isinstance(station, Antenna):
        station = Station([Placed(station)], ground or FreeSpace())
    return [str(p) for p in check_station(station, frequencies, mesh)]


def pair(east, north=0.0, up=0.0, rotation=0.0, ground=None):
    second = Placed(dipole(), (east, north, up), rotation, name="B")
    return Station([Placed(dipole(), name="A"), second], ground or FreeSpace())


def test_nothing_wrong():
    assert found(pair(0.0, 2.0)) == []


def test_two_antennas_in_one_place():
    (problem,) = found(pair(0.0))
    assert problem == "error: antennas 'A' and 'B' stand in one place, at (0, 0, 0) m; expected at least 1 mm"
    assert "stand 0.5 mm apart" in found(pair(0.0, 0.0005))[0]
    assert "one place" not in " ".join(found(pair(0.0, 0.0011)))


def test_many_in_one_place__each_told_once():
    station = Station([Placed(dipole(), (1.0, 2.0, 0.0)) for _ in range(60)])
    assert len(found(station)) == 59


def test_wires_of_two_antennas_that_cross():
    (problem,) = found(pair(0.1, 0.2, 0.0, 90.0))
    assert problem.startswith("error: wire 0 of antenna 'A' and wire 0 of antenna 'B' cross; the sum of their radii is 10 mm")


@pytest.mark.parametrize(
    ("distance", "severity", "said"),
    [
        (0.0099, "error", "come within 9.9 mm; the sum of their radii is 10 mm"),
        (0.0101, "warning", "come within 10.1 mm; below 40 mm (8 radii)"),
        (0.0399, "warning", "come within 39.9 mm"),
        (0.0401, None, None),
    ],
)
def test_wires_of_two_antennas_that_come_close(distance, severity, said):
    for station in (pair(0.0, distance), pair(0.3, 0.0, distance), pair(1.0 + distance), pair(0.0, 0.5 + distance, 0.0, 90.0)):
        problems = found(station)
        if severity is None:
            assert problems == []
        else:
            (problem,) = problems
            assert problem.startswith(f"{severity}: wire 0 of antenna 'A' and wire 0 of antenna 'B' ")
            assert said in problem


def test_proximity__is_where_even_charge_errs_by_a_hundredth():
    # exact capacitance of two parallel cylinders, W. R. Smythe, Static and Dynamic Electricity (from memory)
    d = PROXIMITY_RADII
    error = np.log(d) / np.arccosh(d / 2) - 1.0
    assert 0.005 < error < 0.01


def test_names_of_wires_and_antennas__are_the_right_ones():
    cross = crossed_dipoles(arm_length_m=0.8, height_m=0.75, wire_radius_m=0.006, droop_deg=40.0)
    width = 2.0 * max(abs(w.end[0]) for w in cross.wires)
    station = Station([Placed(cross, (0, 0, 0)), Placed(cross, (5, 0, 0)), Placed(cross, (5 + width + 0.004, 0, 0))])
    (problem,) = found(station, ground=PerfectGround())
    # wire 1 is the arm towards the east, wire 2 the one towards the west
    assert problem.startswith("error: wire 1 of antenna 'A002' and wire 2 of antenna 'A003' come within 4 mm")


def test_wires_within_an_antenna_that_cross():
    feed = Wire((-0.5, 0, 1), (0.5, 0, 1), 0.005)
    (problem,) = found(made_of(feed, Wire((0.2, -0.3, 1), (0.2, 0.3, 1), 0.004)))
    assert problem.startswith(
        "error: antenna 'made': wire 0 and wire 1 cross; the sum of their radii is 9 mm; to join them, let an end"
    )


def test_wires_within_an_antenna_that_almost_join():
    feed = Wire((-0.5, 0, 1), (0.5, 0, 1), 0.005)
    (problem,) = found(made_of(feed, Wire((0.503, 0, 1), (0.503, 0, 0.5), 0.005)))
    assert problem.startswith("error: antenna 'made': wire 0 and wire 1 come within 3 mm; the sum of their radii is 10 mm")
    assert "to within 0.005 mm" in problem
    # joined exactly, at an end or on the way, nothing is wrong
    assert found(made_of(feed, Wire((0.5, 0, 1), (0.5, 0, 0.5), 0.005))) == []
    assert found(made_of(feed, Wire((0.25, 0, 1), (0.25, 0, 0.5), 0.005))) == []


def test_wires_within_an_antenna_that_lie_on_one_another():
    feed = Wire((-0.5, 0, 1), (0.5, 0, 1), 0.005)
    assert "lie on one another between" in found(made_of(feed, Wire((0.2, 0, 1), (0.8, 0, 1), 0.005)))[0]
    sharp = found(made_of(feed, Wire((0.5, 0, 1), (-0.4, 0, 1.006), 0.005)))
    assert "are joined at (0.5, 0, 1) m but stay within" in sharp[0]
    assert all(p.startswith("error") for p in sharp)
    # an angle of 6 degrees is wide enough
    assert found(made_of(feed, Wire((0.5, 0, 1), (-0.4, 0, 1.1), 0.005))) == []


def test_wires_within_an_antenna_that_come_close():
    feed = Wire((-0.5, 0, 1), (0.5, 0, 1), 0.005)
    (problem,) = found(made_of(feed, Wire((-0.5, 0, 1.03), (0.5, 0, 1.03), 0.005)))
    assert problem.startswith("warning: antenna 'made': wire 0 and wire 1 come within 30 mm; below 40 mm")


def test_wire_below_the_ground__told_once_for_all_alike():
    station = Station([Placed(dipole(height=0.5), (0, 3.0 * i, -0.7)) for i in range(5)], PerfectGround())
    (problem,) = found(station)
    assert problem.startswith(
        "error: antenna 'A001' (and 4 more alike), wire 0 of 'dipole' reaches 0.2 m below the ground (z = 0)"
    )
    assert found(Station(station.placed, FreeSpace())) == []


def test_wire_in_and_near_the_ground():
    assert "lies in the ground's surface" in found(dipole(height=0.0), ground=PerfectGround())[0]
    (problem,) = found(dipole(height=0.003), ground=PerfectGround())
    assert "comes within 3 mm of the ground, less than its radius (5 mm)" in problem
    mast = Antenna("mast", [Wire((0, 0, 0), (0, 0, 0.5), 0.005)], [Port("x", 0, 0.0)])
    assert found(mast, ground=PerfectGround()) == []


def test_tilted_into_the_ground():
    station = Station([Placed(dipole(height=0.3), tilt_east_deg=45.0)], PerfectGround())
    # the end at +0.5 m goes down by (0.5 - 0.3) / sqrt(2)
    assert "reaches 0.141 m below the ground" in found(station)[0]


@pytest.mark.parametrize(
    ("radius_wavelengths", "severity", "said"),
    [(0.0099, None, None), (0.0101, "warning", "is accurate up to 0.01"), (0.0199, "warning", "0.0199 wavelengths at 300 MHz"),
     (0.0201, "error", "the thin-wire model holds up to 0.02")],
)  # fmt: skip
def test_radius_against_wavelength__at_the_highest_frequency(radius_wavelengths, severity, said):
    radius = radius_wavelengths * SPEED_OF_LIGHT / 300e6
    problems = found(dipole(radius=radius), (50e6, 300e6, 100e6))
    if severity is None:
        assert problems == []
        return
    (problem,) = problems
    assert problem.startswith(f"{severity}: antenna 'dipole', wire 0: radius ")
    assert said in problem


def test_radius_limit__is_the_solvers():
    for factor, refused in ((0.999, False), (1.001, True)):
        station = Station([Placed(dipole(radius=factor * RADIUS_LIMIT_WAVELENGTHS * SPEED_OF_LIGHT / 300e6))])
        errors = [p for p in check_station(station, [300e6]) if p.severity == "error"]
        assert bool(errors) == refused
        if refused:
            with pytest.raises(ModelRangeError):
                discretise(station, 300e6, self_blocks=False)
        else:
            discretise(station, 300e6, self_blocks=False)


def test_radius_against_length():
    problems = found(dipole(length=0.09, radius=0.01))
    assert problems == [
        "warning: antenna 'dipole', wire 0: its length of 0.09 m is 9 of its radii (0.01 m); at least 10 expected of a thin wire"
    ]
    assert found(dipole(length=0.1, radius=0.01)) == []


def test_element_shorter_than_the_radius():
    (problem,) = found(dipole(gap=0.002))
    assert problem.startswith(
        "warning: antenna 'dipole', wire 0: an element is 0.002 m long, 0.4 of the wire's radius (0.005 m); at least 1 expected"
    )
    # the refined mesh has elements of a quarter radius on purpose
    assert found(dipole(), mesh="refined") == []


def test_mesh_that_cannot_be_made_or_is_too_fine():
    port_in_the_air = Antenna("loose", [Wire((0, 0, 1), (0, 0, 2), 0.005)], [Port("x", 0, 0.0)])
    (problem,) = found(port_in_the_air)
    assert problem.startswith("error: antenna 'loose': port 'x' sits at an end of wire 0")
    fine = replace(MESHES["default"], longest_wavelengths=0.001)
    # elements of 2 mm: longer than this radius
    (problem,) = found(dipole(radius=0.001), mesh=fine)
    assert problem.startswith("warning: antenna 'dipole': ")
    assert "unknowns at 150 MHz, more than 1500" in problem


def test_errors_come_first():
    antenna = made_of(
        Wire((-0.5, 0, 1), (0.5, 0, 1), 0.005), Wire((0.2, -0.3, 1), (0.2, 0.3, 1), 0.004), Wire((0, 2, 1), (0, 2.03, 1), 0.004)
    )
    severities = [p.severity for p in check_station(Station([Placed(antenna)]), [150e6])]
    assert severities == ["error", "warning"]


def test_bad_arguments():
    with pytest.raises(GeometryError, match="mesh 'fine' is not known"):
        check_station(pair(0.0, 2.0), [1e8], "fine")
    with pytest.raises(ModelRangeError, match="no frequencies"):
        check_station(pair(0.0, 2.0), [])


def test_close_wires__agree_with_every_pair_tried_one_by_one():
    # independent: dense sampling of both wires; steps of 5 mm see any distance to 2.5 mm
    rng = np.random.default_rng(3)
    places = rng.uniform(0, 1.6, size=(12, 2))
    station = Station(
        [
            Placed(dipole(), (x, y, 0.1 * z), r)
            for (x, y), z, r in zip(places, rng.uniform(size=12), rng.uniform(0, 180, 12), strict=True)
        ]
    )
    t = np.linspace(0, 1, 201)[:, None]
    lines = []
    for p in station:
        a, b = p.to_station(np.array([station.placed[0].antenna.wires[0].start, station.placed[0].antenna.wires[0].end]))
        lines.append(a + t * (b - a))
    near, sure = set(), set()
    for i in range(12):
        for j in range(i + 1, 12):
            d = np.linalg.norm(lines[i][:, None] - lines[j][None], axis=2).min()
            # sampled distances are at most half a step of each wire too long
            if d < 0.04 + 0.005:
                near.add((f"A{i + 1:03d}", f"A{j + 1:03d}"))
            if d < 0.04:
                sure.add((f"A{i + 1:03d}", f"A{j + 1:03d}"))
    told = {tuple(text.split("'")[1::2][:2]) for text in found(station)}
    assert len(sure) >= 3
    assert sure <= told <= near


def test_speed__256_antennas_of_six_wires():
    cross = crossed_dipoles(arm_length_m=0.8, height_m=0.75, wire_radius_m=0.006, droop_deg=40.0)
    layout = random_disc(256, 18.5, 1.45, 3, turn="random")
    station = Station(
        [Placed(cross, tuple(p), r) for p, r in zip(layout.positions, layout.rotation_deg, strict=True)], PerfectGround()
    )
    check_station(Station(station.placed[:2], PerfectGround()), [300e6])
    clock = time.perf_counter()
    check_station(station, [60e6, 300e6])
    assert time.perf_counter() - clock < 3.0


def test_mesh_statistics__count_what_the_solver_makes():
    cross = crossed_dipoles(arm_length_m=0.8, height_m=0.75, wire_radius_m=0.006, droop_deg=40.0)
    layout = Layout(("a", "b", "c"), np.array([[0, 0, 0], [3, 0, 0], [0, 3, 0.0]]), 12.0)
    placed = [Placed(cross, tuple(p), r) for p, r in zip(layout.positions, layout.rotation_deg, strict=True)]
    mast = Antenna("mast", [Wire((0, 0, 0), (0, 0, 0.5), 0.005)], [Port("x", 0, 0.0)])
    station = Station([*placed, Placed(mast, (9, 9, 0)), Placed(mast, (12, 9, 0.2))][:4], PerfectGround())
    for frequency, mesh in ((60e6, "default"), (300e6, "refined")):
        s = mesh_statistics(station, frequency, mesh)
        d = discretise(station, frequency, mesh=mesh, self_blocks=False)
        assert (s["unknowns"], s["ports"], s["antennas"]) == (d.n_unknowns, 7, 4)
        elements = [d.kinds[k].mesh.n_elements for k in d.kind_of]
        assert s["elements"] == sum(elements)
        assert s["elements_per_antenna"] == {"crossed-dipoles": elements[0], "mast": elements[3]}
        lengths = np.concatenate([k.mesh.length for k in d.kinds])
        assert s["shortest_element_m"] == lengths.min()
        assert s["longest_element_m"] == lengths.max()
        wavelength = SPEED_OF_LIGHT / frequency
        assert s["longest_element_wavelengths"] == pytest.approx(lengths.max() / wavelength, rel=1e-12)
        assert s["shortest_element_radii"] == pytest.approx(
            (lengths / np.concatenate([k.mesh.radius for k in d.kinds])).min(), rel=1e-12
        )


def test_wire__just_above_a_perfect_ground__is_doubted():
    low = Antenna("low", [Wire((-0.4, 0, 0.005), (0.4, 0, 0.005), 0.004)], [Port("x", 0)])
    problems = check_station(Station([Placed(low)], PerfectGround()), [100e6])
    (doubt,) = [p.text for p in problems if "its image" in p.text]
    # ln(2 h/a) over arcosh(h/a), h = 1.25 a
    assert "5 mm above the ground, 2.5 radii from its image; below 10" in doubt
    assert "32 % too high" in doubt
    thick = Antenna("thick", [Wire((-0.4, 0, 0.05), (0.4, 0, 0.05), 0.011)], [Port("x", 0)])
    over_soil = [p.text for p in check_station(Station([Placed(thick)], Soil(10.0, 0.02)), [100e6]) if "its image" in p.text]
    assert len(over_soil) == 1
    assert "9.1 radii from its image" in over_soil[0]
    assert "0.56 % too high" in over_soil[0]
    high = Antenna("high", [Wire((-0.4, 0, 0.02), (0.4, 0, 0.02), 0.004)], [Port("x", 0)])
    assert not any("its image" in p.text for p in check_station(Station([Placed(high)], PerfectGround()), [100e6]))
    assert not any("its image" in p.text for p in check_station(Station([Placed(low)], FreeSpace()), [100e6]))


def test_echoes__too_quick_for_the_power_over_the_sky__are_doubted():
    wire = Antenna("d", [Wire((-0.2, 0, 0.5), (0.2, 0, 0.5), 0.002)], [Port("x", 0)])

    def said(depth_m, conductivity, frequencies):
        ground = LayeredSoil(((depth_m, Soil(3.0, conductivity)),), Soil(30.0, 0.1))
        return [p.text for p in check_station(Station([Placed(wire)], ground), frequencies) if "quadrature" in p.text]

    (doubt,) = said(100.0, 1e-5, [50e6, 350e6])
    assert doubt.startswith("at 350 MHz the ground's reflection turns so quickly")
    assert "leave out 0.03 of it (expected: 1e-05)" in doubt
    assert said(100.0, 1e-5, [50e6]) == []
    assert said(20.0, 1e-4, [350e6]) == []
