"""Grounds in job files, in keys of the store, and the doubts about them."""

import numpy as np
import pytest

from elbowroom.base.errors import JobFileError
from elbowroom.geometry.antennas import Antenna, Port
from elbowroom.geometry.grounds import FreeSpace, MeshOnSoil, PerfectGround
from elbowroom.geometry.mesh import mesh_settings
from elbowroom.geometry.soils import LayeredSoil, MoistSoil, Soil, TabulatedSoil
from elbowroom.geometry.stations import Placed, Station
from elbowroom.geometry.wires import Wire
from elbowroom.job.checks import check_station
from elbowroom.job.groundchecks import HORIZON_NOTE
from elbowroom.job.groups import solve_group
from elbowroom.job.jobfile import read_job
from elbowroom.job.pipeline import JobRun
from elbowroom.job.solve import SOLUTION_SCHEMA, solution_key, solve
from elbowroom.job.templates import write_template
from elbowroom.store import MemoryStore
from elbowroom.system.discretisation import FarSettings
from elbowroom.system.self_block import NearSettings

CROSS = 'shape = "crossed-dipoles"\narm_length_m = 0.6\nheight_m = 1.0\nwire_radius_m = 0.005\n'
JOB = """
[station]
layout = "layout.csv"
antenna = "cross.toml"
{ground}
[band]
frequency_hz = [150e6, 60e6]
[[beam]]
name = "low"
port = "x"
zenith_angle_deg = 85
"""
SOIL = "[station.ground]\nkind = 'soil'\n"
MESH = "[station.ground]\nkind = 'mesh-on-soil'\n"


DRY = "[[station.ground.layers]]\nrelative_permittivity = 4\nconductivity_s_per_m = 0.001\n"
MIDDLE = "[[station.ground.layers]]\nwater_content = 0.2\nconductivity_s_per_m = 0.01\n"
TABLE_BELOW = "[[station.ground.layers]]\nfile = 'soil.csv'\n"


@pytest.fixture
def job(tmp_path):
    (tmp_path / "cross.toml").write_text(CROSS)
    (tmp_path / "layout.csv").write_text("name,east_m,north_m\nA1,0,0\nA2,3,0\n")
    (tmp_path / "soil.csv").write_text("frequency_hz,relative_permittivity,conductivity_s_per_m\n50e6,12,0.01\n200e6,9,0.02\n")

    def read(ground):
        (tmp_path / "job.toml").write_text(JOB.format(ground=ground))
        return read_job(tmp_path / "job.toml")

    return read


@pytest.mark.parametrize(
    ("ground", "expected"),
    [
        ("", PerfectGround()),
        ('ground = "free-space"', FreeSpace()),
        ("[station.ground]\nkind = 'free-space'", FreeSpace()),
        (SOIL + "relative_permittivity = 10\nconductivity_s_per_m = 0.01", Soil(10.0, 0.01)),
        (SOIL + "water_content = 0.2\nconductivity_s_per_m = 0.01\ntolerance = 1e-6", MoistSoil(0.2, 0.01, 1e-6)),
        (SOIL + "file = 'soil.csv'", TabulatedSoil((50e6, 200e6), (12.0, 9.0), (0.01, 0.02))),
        (
            MESH + "relative_permittivity = 10\nconductivity_s_per_m = 0\npitch_m = 0.1\nwire_radius_m = 1e-3",
            MeshOnSoil(Soil(10.0, 0.0), 0.1, 1e-3),
        ),
        (
            MESH + "file = 'soil.csv'\npitch_m = 0.1\nwire_radius_m = 1e-3\nwire_conductivity_s_per_m = 5e6\n"
            "wire_relative_permeability = 50",
            MeshOnSoil(TabulatedSoil((50e6, 200e6), (12.0, 9.0), (0.01, 0.02)), 0.1, 1e-3, 5e6, 50.0),
        ),
        (
            SOIL + DRY + "thickness_m = 0.4\n" + MIDDLE + "thickness_m = 1\n" + TABLE_BELOW,
            LayeredSoil(
                ((0.4, Soil(4.0, 1e-3)), (1.0, MoistSoil(0.2, 0.01))), TabulatedSoil((50e6, 200e6), (12.0, 9.0), (0.01, 0.02))
            ),
        ),
        (
            MESH + "pitch_m = 0.1\nwire_radius_m = 0.001\ntolerance = 1e-6\n" + DRY + "thickness_m = 0.4\n" + MIDDLE,
            MeshOnSoil(LayeredSoil(((0.4, Soil(4.0, 1e-3)),), MoistSoil(0.2, 0.01), 1e-6), 0.1, 1e-3),
        ),
    ],
)
def test_job__has_the_ground_that_its_table_describes(job, ground, expected):
    made = job(ground)
    assert made.ground == expected
    assert made.station().ground == expected
    assert f"station.ground = {expected.describe()}" in made.resolved_lines()


@pytest.mark.parametrize(
    ("ground", "told"),
    [
        ("[station.ground]\nrelative_permittivity = 10", "station.ground.kind: required key is missing"),
        ("[station.ground]\nkind = 'sole'", 'station.ground.kind = "sole": expected'),
        (SOIL, "station.ground: none given; expected one of relative_permittivity, water_content, file and layers"),
        (SOIL + DRY, "station.ground.layers"),
        (SOIL + "layers = []", "station.ground.layers"),
        (SOIL + DRY + MIDDLE, "station.ground: thickness_m of layer 1 is missing; all but the last have one"),
        (SOIL + (DRY + "thickness_m = 1\n") * 2, "station.ground: thickness_m of layer 2 is given; the last one"),
        (SOIL + DRY + "thickness_m = 0\n" + MIDDLE, "station.ground: thickness of layer 1 [m] 0.0: expected a number from 0.001"),
        (SOIL + "conductivity_s_per_m = 0.1\n" + DRY + "thickness_m = 1\n" + MIDDLE, "beside layers, each of which has its own"),
        (SOIL + "relative_permittivity = 3\n" + DRY + "thickness_m = 1\n" + MIDDLE, "relative_permittivity and layers given"),
        (SOIL + DRY + "thicknes_m = 1\n" + MIDDLE, "did you mean 'thickness_m'?"),
        (SOIL + DRY + "thickness_m = 1\n" + MIDDLE.replace("0.2", "0.9"), "station.ground: layer 2: water_content 0.9"),
        (SOIL + DRY + "thickness_m = 1\n" + TABLE_BELOW.replace("soil", "sail"), "station.ground.layers: "),
        ("[station.ground]\nkind = 'perfect'\n" + DRY + MIDDLE, "layers is given, which kind"),
        (SOIL + "relative_permittivity = 10", "conductivity_s_per_m is missing beside relative_permittivity"),
        (SOIL + "relative_permittivity = 10\nwater_content = 0.1", "relative_permittivity and water_content given"),
        (SOIL + "relative_permittivity = 0.5\nconductivity_s_per_m = 0.01", "station.ground: relative_permittivity 0.5"),
        (SOIL + "relative_permittivity = nan\nconductivity_s_per_m = 0.01", "station.ground.relative_permittivity = nan"),
        (SOIL + "file = 'soil.csv'\nconductivity_s_per_m = 0.01", "beside file, which has a column of it"),
        (SOIL + "file = 'sail.csv'", "station.ground.file: "),
        (SOIL + "relative_permitivity = 10\nconductivity_s_per_m = 0.01", "did you mean 'relative_permittivity'?"),
        (SOIL + "relative_permittivity = 10\nconductivity_s_per_m = 0.01\npitch_m = 0.1", 'kind = "mesh-on-soil" expected'),
        (MESH + "relative_permittivity = 10\nconductivity_s_per_m = 0.01\npitch_m = 0.1", "wire_radius_m missing"),
        (
            MESH + "relative_permittivity = 10\nconductivity_s_per_m = 0.01\npitch_m = 0.1\nwire_radius_m = 0.2",
            "station.ground: wire_radius_m 0.2: expected a number from 1e-06 to 0.01",
        ),
        ("[station.ground]\nkind = 'perfect'\npitch_m = 0.1", 'pitch_m is given, which kind = "perfect" has no use for'),
    ],
)
def test_job__bad_grounds_are_told(job, ground, told):
    with pytest.raises(JobFileError) as caught:
        job(ground)
    assert told in str(caught.value)


def test_job__soil_must_be_known_at_every_frequency(job, tmp_path):
    (tmp_path / "short.csv").write_text("frequency_hz,relative_permittivity,conductivity_s_per_m\n100e6,12,0.01\n200e6,9,0.02\n")
    with pytest.raises(JobFileError, match="60 MHz lies outside its 100 to 200 MHz"):
        job(SOIL + "file = 'short.csv'")


def test_job__layer_and_line_of_bad_soil_are_named(job, tmp_path):
    lines = ["frequency_hz,relative_permittivity,conductivity_s_per_m", "100e6,12,0.01", "200e6,0.5,0.02"]
    (tmp_path / "bad.csv").write_text("\n".join(lines))
    with pytest.raises(JobFileError, match=r"line 3: relative_permittivity 0\.5: expected a number from 1 to 100"):
        job(SOIL + "file = 'bad.csv'")
    (tmp_path / "short.csv").write_text("\n".join(lines[:2]))
    with pytest.raises(JobFileError, match=r"station\.ground: layer 2: soil table: 60 MHz lies outside"):
        job(SOIL + DRY + "thickness_m = 1\n" + TABLE_BELOW.replace("soil.csv", "short.csv"))
    (tmp_path / "empty.csv").write_text("")
    with pytest.raises(JobFileError, match="a header line and frequencies, a line each, expected"):
        job(SOIL + "file = 'empty.csv'")


def key(ground, frequency_hz=150e6):
    wire = Wire((0.0, -0.4, 1.0), (0.0, 0.4, 1.0), 0.002)
    station = Station([Placed(Antenna("d", [wire], [Port("p", 0)]), (0, 0, 0))], ground)
    return solution_key(station, frequency_hz, mesh_settings("default"), NearSettings(), FarSettings(), ("direct", "mixed"))


def test_store_key__knows_the_ground_as_it_is_at_the_frequency():
    table = TabulatedSoil((50e6, 150e6), (12.0, 10.0), (0.03, 0.02))
    assert key(table) == key(Soil(10.0, 0.02))
    # what lies elsewhere in the table changes nothing
    assert key(table) == key(TabulatedSoil((100e6, 150e6), (99.0, 10.0), (0.0, 0.02)))
    assert key(MeshOnSoil(table, 0.1, 1e-3)) == key(MeshOnSoil(Soil(10.0, 0.02), 0.1, 1e-3))
    different = [
        PerfectGround(), FreeSpace(), Soil(10.0, 0.02), Soil(10.0, 0.021), Soil(10.1, 0.02), Soil(10.0, 0.02, 1e-6),
        MeshOnSoil(Soil(10.0, 0.02), 0.1, 1e-3), MeshOnSoil(Soil(10.0, 0.02), 0.11, 1e-3),
        MeshOnSoil(Soil(10.0, 0.02), 0.1, 1e-3, 1e6), MeshOnSoil(Soil(10.0, 0.02), 0.1, 2e-3),
        LayeredSoil(((0.4, Soil(10.0, 0.02)),), Soil(5.0, 0.02)), LayeredSoil(((0.5, Soil(10.0, 0.02)),), Soil(5.0, 0.02)),
        LayeredSoil(((0.4, Soil(10.0, 0.02)),), Soil(5.0, 0.03)), MeshOnSoil(LayeredSoil(((0.4, Soil(10.0, 0.02)),), Soil(5.0, 0.02)), 0.1, 1e-3),
    ]  # fmt: skip
    assert len({key(g) for g in different}) == len(different)


def doubts(ground, height=1.0, frequencies=(150e6,), places=((0.0, 0.0), (30.0, 0.0))):
    wire = Wire((0.0, -0.4, height), (0.0, 0.4, height), 0.002)
    design = Antenna("d", [wire], [Port("p", 0)])
    station = Station([Placed(design, (*p, 0.0)) for p in places], ground)
    return [str(p) for p in check_station(station, frequencies)]


def test_checks__say_nothing_of_ordinary_ground():
    for ground in (Soil(10.0, 0.02), MeshOnSoil(Soil(10.0, 0.02), 0.1, 1e-3), MoistSoil(0.2, 0.02)):
        assert doubts(ground) == []


@pytest.mark.parametrize(
    ("ground", "height", "said"),
    [
        (Soil(10.0, 0.02), 0.03, ("comes within 30 mm of the soil", "40 mm")),
        (MeshOnSoil(Soil(10.0, 0.02), 0.1, 1e-3), 0.08, ("within 80 mm of the mesh", "pitch (100 mm)")),
        # wavelength 2 m, 0.63 m in the soil
        (MeshOnSoil(Soil(10.0, 0.02), 0.2, 1e-3), 1.0, ("pitch of the mesh 200 mm", "0.319 wavelengths", "up to a quarter")),
        (
            MeshOnSoil(LayeredSoil(((0.04, Soil(10.0, 0.02)),), Soil(25.0, 0.05)), 0.05, 1e-3),
            1.0,
            ("top layer of the soil 0.04 m, thinner than the pitch", "0.05 m"),
        ),
        (LayeredSoil(((0.5, Soil(10.0, 0.02)),), Soil(30.0, 1e-4)), 1.0, ("hardly loses power", "dB across the station's 30 m")),
        (Soil(30.0, 1e-4), 1.0, ("hardly loses power", "dB across the station's 30 m")),
    ],
)
def test_checks__doubts_have_their_numbers(ground, height, said):
    (problem,) = doubts(ground, height)
    assert problem.startswith("warning: ")
    for part in said:
        assert part in problem


def test_checks__numbers_are_of_the_worst_frequency():
    (problem,) = doubts(MeshOnSoil(Soil(10.0, 0.02), 0.2, 1e-3), frequencies=(150e6, 300e6, 50e6))
    assert "300 MHz" in problem
    index = np.sqrt(10.0 - 0.02j / (2 * np.pi * 300e6 * 8.8541878e-12)).real
    assert f"{0.2 * index / 0.99930819:.3g} wavelengths" in problem


@pytest.mark.parametrize(
    ("height", "said"), [(0.0, "lies in the ground's surface"), (-0.1, "below the ground"), (0.001, "less than its radius")]
)
def test_checks__wires_in_soil_are_errors(height, said):
    problems = doubts(Soil(10.0, 0.02), height, places=((0.0, 0.0),))
    assert [p for p in problems if p.startswith("error")]
    assert said in problems[0]
    assert "join it to the ground" not in problems[0]


def test_checks__a_foot_on_soil_is_an_error():
    design = Antenna("mast", [Wire((0.0, 0.0, 0.0), (0.0, 0.0, 0.5), 0.002)], [Port("p", 0, position=0.5)])
    station = Station([Placed(design, (0.0, 0.0, 0.0))], Soil(10.0, 0.02))
    assert "wires that end on or enter soil are not modelled" in str(check_station(station, (150e6,))[0])
    assert check_station(Station(station.placed, PerfectGround()), (150e6,)) == []


def test_job__beams_near_the_horizon_over_soil_are_doubted(job):
    over_soil = job(SOIL + "relative_permittivity = 10\nconductivity_s_per_m = 0.01")
    assert any(HORIZON_NOTE in str(p) for p in JobRun(over_soil).problems())
    assert not any(HORIZON_NOTE in str(p) for p in JobRun(job("")).problems())


def test_template__its_ground_is_one(tmp_path):
    write_template("small", tmp_path)
    path = tmp_path / "job.toml"
    lines = path.read_text().splitlines()
    first = lines.index("# [station.ground]")
    block = [line.removeprefix("# ") for line in lines[first : first + 6]]
    kept = [line for line in lines if not line.startswith("ground =")]
    at = kept.index("[band]")
    path.write_text("\n".join([*kept[:at], *block, *kept[at:]]))
    assert read_job(path).ground == MeshOnSoil(Soil(10.0, 0.01), 0.1, 0.0015)


@pytest.mark.parametrize("solver", ["direct", "reduced"])
def test_store__gives_back_a_station_over_soil_as_it_was_solved(solver):
    table = TabulatedSoil((50e6, 200e6), (12.0, 9.0), (0.01, 0.02))
    wires = [Wire((0.0, -0.4, 0.8), (0.0, 0.4, 0.8), 0.002), Wire((-0.4, 0.0, 0.9), (0.4, 0.0, 0.9), 0.002)]
    design = Antenna("cross", wires, [Port("y", 0), Port("x", 1)])
    station = Station([Placed(design, (1.5 * n, 0.2 * n, 0.0)) for n in range(3)], MeshOnSoil(table, 0.1, 1e-3))
    store = MemoryStore(SOLUTION_SCHEMA)
    first = solve(station, 150e6, solver=solver, store=store)
    again = solve(station, 150e6, solver=solver, store=store, only_stored=True)
    theta, phi = np.array([0.1, 1.2]), np.array([0.3, 4.0])
    np.testing.assert_array_equal(again.scattering_matrix(), first.scattering_matrix())
    np.testing.assert_allclose(again.embedded_patterns(theta, phi), first.embedded_patterns(theta, phi), rtol=1e-12)
    np.testing.assert_allclose(again.isolated_patterns(theta, phi), first.isolated_patterns(theta, phi), rtol=1e-12)
    weights = first.pointing_weights(0.2, 0.0, port="x")
    np.testing.assert_allclose(
        again.power_parts(weights).fraction("ground"), first.power_parts(weights).fraction("ground"), rtol=1e-9
    )
    # the same numbers without a table of frequencies are the same station
    constant = Station(station.placed, MeshOnSoil(table.at(150e6), 0.1, 1e-3))
    solve(constant, 150e6, solver=solver, store=store, only_stored=True)


def test_group__of_stations_over_soil_is_each_with_its_neighbours():
    wires = [Wire((0.0, -0.4, 0.8), (0.0, 0.4, 0.8), 0.002)]
    design = Antenna("rod", wires, [Port("y", 0)])
    ground = Soil(10.0, 0.01)

    def stand(east, name):
        return Station([Placed(design, (east + 1.4 * n, 0.0, 0.0), name=f"{name}{n}") for n in range(2)], ground)

    group = solve_group([stand(0.0, "A"), stand(8.0, "B")], 150e6, 100.0, tolerance=1e-5)
    whole = solve(Station([*stand(0.0, "A").placed, *stand(8.0, "B").placed], ground), 150e6)
    found = group[0].solution.impedance_matrix()[0, 0]
    assert abs(found - whole.impedance_matrix()[0, 0]) < 1e-5 * abs(found)
