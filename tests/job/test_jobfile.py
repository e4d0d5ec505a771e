"""Job files: what they resolve to, and every kind of bad file by its class, key and wording."""

import contextlib

import numpy as np
import pytest

from elbowroom.base.errors import ElbowroomError, JobFileError
from elbowroom.geometry.directions import azimuth_deg
from elbowroom.geometry.grounds import FreeSpace, PerfectGround
from elbowroom.geometry.stations import Placed, orientation_matrix, turned
from elbowroom.job.jobfile import azimuth_to_phi_deg, read_job

CROSS = 'shape = "crossed-dipoles"\narm_length_m = 0.6\nheight_m = 1.0\nwire_radius_m = 0.005\n'
SINGLE = """
[[wire]]
start_m = [-0.5, 0, 1]
end_m = [0.5, 0, 1]
radius_m = 0.005
[[port]]
name = "x"
wire = 0
"""
LAYOUT = """name,east_m,north_m,up_m,rotation_deg,tilt_east_deg,tilt_north_deg,antenna
A1,0,0,0,0,0,0,
A2,3,0,0,30,0,0,
A3,0,4,0.5,10,3,-2,
B1,9,9,0,0,0,0,single
"""
JOB = """
schema = 1
title = "try"
[station]
layout = "layout.csv"
antenna = "cross.toml"
ground = "perfect"
[station.antennas]
single = "single.toml"
[band]
frequency_hz = [150e6, 60e6]
[termination]
impedance_ohm = 75
[termination.ports]
"A1/x" = [10, -20]
"B1/x" = "open"
[solver]
mesh = "refined"
precision = "double"
[[beam]]
name = "up"
port = "x"
[[beam]]
name = "east"
port = "y"
zenith_angle_deg = 30
azimuth_deg = 90
antennas = ["A1", "A3"]
delay_step_s = 1e-9
[sky]
step_deg = 7.5
[store]
folder = "kept"
"""
MINIMAL = """
[station]
layout = "layout.csv"
antenna = "cross.toml"
[station.antennas]
single = "single.toml"
[band]
start_hz = 50e6
stop_hz = 350e6
step_hz = 0.1e6
"""


@pytest.fixture
def folder(tmp_path):
    (tmp_path / "cross.toml").write_text(CROSS)
    (tmp_path / "single.toml").write_text(SINGLE)
    (tmp_path / "layout.csv").write_text(LAYOUT)
    return tmp_path


def job_of(folder, text):
    (folder / "job.toml").write_text(text)
    return read_job(folder / "job.toml")


def faults(folder, text):
    (folder / "job.toml").write_text(text)
    with pytest.raises(JobFileError) as caught:
        read_job(folder / "job.toml")
    assert caught.value.file == str(folder / "job.toml")
    assert str(caught.value).startswith(f"{folder / 'job.toml'}: ")
    return caught.value.problems


def test_job__everything_given_arrives(folder):
    job = job_of(folder, JOB)
    assert job.text == JOB
    assert (job.title, job.ground, job.solver, job.mesh, job.precision) == ("try", PerfectGround(), "auto", "refined", "double")
    assert job.frequencies_hz == (60e6, 150e6)
    assert (job.termination, job.termination_of_port) == (75.0, {"A1/x": 10 - 20j, "B1/x": "open"})
    assert (job.sky_step_deg, job.store_folder, job.output_folder) == (7.5, folder / "kept", folder / "results")
    up, east = job.beams
    assert (up.name, up.port, up.antennas, up.delay_step_s, up.zenith_angle_deg) == ("up", "x", None, None, 0.0)
    assert (east.name, east.antennas, east.delay_step_s) == ("east", ("A1", "A3"), 1e-9)
    # azimuth 90 deg is east, which is phi = 0
    assert east.direction_rad == pytest.approx((np.pi / 6, 0.0), abs=1e-15)


def test_station__antennas_of_the_layout_with_their_designs(folder):
    station = job_of(folder, JOB).station()
    assert [p.name for p in station] == ["A1", "A2", "A3", "B1"]
    assert [len(p.antenna.ports) for p in station] == [2, 2, 2, 1]
    third = station.placed[2]
    assert third.position == (0.0, 4.0, 0.5)
    assert (third.rotation_deg, third.tilt_east_deg, third.tilt_north_deg) == (10.0, 3.0, -2.0)


def test_terminations_and_amplitudes__follow_the_ports(folder):
    job = job_of(folder, JOB)
    station = job.station()
    assert [str(n) for n in station.port_names] == ["A1/x", "A1/y", "A2/x", "A2/y", "A3/x", "A3/y", "B1/x"]
    assert job.termination_values(station) == [10 - 20j, 75.0, 75.0, 75.0, 75.0, 75.0, "open"]
    assert job.termination_values() == job.termination_values(station)
    assert job.beams[0].amplitudes(station).tolist() == [1, 0, 1, 0, 1, 0, 1]
    assert job.beams[1].amplitudes(station).tolist() == [0, 1, 0, 0, 0, 1, 0]


def test_minimal__defaults_and_a_stepped_band(folder):
    job = job_of(folder, MINIMAL)
    assert len(job.frequencies_hz) == 3001
    assert (job.frequencies_hz[0], job.frequencies_hz[-1]) == (50e6, pytest.approx(350e6, rel=1e-15))
    assert (job.title, job.termination, job.solver, job.mesh, job.precision) == ("job", 100.0, "auto", "default", "mixed")
    assert (job.beams, job.sky_step_deg, job.store_folder) == ((), 1.0, folder / "store")


def test_stepped_band__stops_before_a_stop_that_is_no_whole_step_away(folder):
    text = MINIMAL.replace("step_hz = 0.1e6", "step_hz = 130e6")
    assert job_of(folder, text).frequencies_hz == (50e6, 180e6, 310e6)


def test_resolved_lines__say_every_setting(folder):
    lines = job_of(folder, JOB).resolved_lines()
    assert all(" = " in line for line in lines)
    for expected in (
        f"station.layout = {folder / 'layout.csv'} (4 antennas)",
        f"station.antenna = {folder / 'cross.toml'} ('cross', ports x, y; 3 antennas)",
        f"station.antennas.single = {folder / 'single.toml'} ('single', ports x; 1 antenna)",
        "station.ground = perfect",
        "station.turn_deg = 0",
        "band.frequency_hz = 60000000, 150000000 (2 in all)",
        "termination.impedance_ohm = 75",
        "termination.ports.A1/x = [10, -20]",
        "termination.ports.B1/x = open",
        "solver.method = auto",
        "solver.mesh = refined",
        "beam.east = port y, zenith angle 30 deg, azimuth 90 deg (phi 0 deg), 2 antennas, delays in steps of 1e-09 s",
        "sky.step_deg = 7.5",
        f"store.folder = {folder / 'kept'}",
    ):
        assert expected in lines
    long = job_of(folder, MINIMAL).resolved_lines()
    assert "band.frequency_hz = 50000000, 50100000, ..., 350000000 (3001 in all)" in long


def test_azimuth__is_north_through_east():
    assert [azimuth_to_phi_deg(a) for a in (0, 90, 180, 270, 360, -90)] == [90, 0, 270, 180, 90, 180]
    for phi in np.linspace(0.0, 359.0, 50):
        assert azimuth_to_phi_deg(float(azimuth_deg(np.radians(phi)))) == pytest.approx(phi, abs=1e-9)


def test_turn__carries_places_attitudes_and_tilts_along(folder):
    keys = 'ground = "free-space"\nturn_deg = 137.0\nshift_east_m = 2.0\nshift_north_m = -1.0'
    straight = job_of(folder, JOB).station()
    job = job_of(folder, JOB.replace('ground = "perfect"', keys))
    moved = job.station()
    assert job.ground == FreeSpace()
    turn = orientation_matrix(137.0)
    points = np.random.default_rng(1).normal(size=(20, 3))
    for before, after in zip(straight, moved, strict=True):
        expected = before.to_station(points) @ turn.T + [2.0, -1.0, 0.0]
        # coordinates of up to 13 m: rounding of 1e-14; a tilt left unturned would be 5 cm off
        np.testing.assert_allclose(after.to_station(points), expected, rtol=0, atol=1e-13)
        assert after.name == before.name
    assert moved.placed[1].tilt_east_deg == 0.0
    assert moved.placed[1].rotation_deg == 167.0


@pytest.mark.parametrize("tilt", [(0.0, 0.0), (20.0, 0.0), (-60.0, 85.0), (5.0, -100.0), (90.0, 0.0)])
def test_turned__is_the_product_of_rotations(folder, tilt):
    antenna = job_of(folder, JOB).designs[""]
    placed = Placed(antenna, (1.0, 2.0, 3.0), 33.0, *tilt)
    for angle in (-200.0, 90.0, 45.0):
        expected = orientation_matrix(angle) @ placed.orientation
        np.testing.assert_allclose(turned(placed, angle).orientation, expected, atol=1e-14)


@pytest.mark.parametrize(
    ("old", "new", "expected"),
    [
        # keys
        ("[solver]", "[sovler]", "sovler: unknown key; did you mean 'solver'?"),
        ("mesh =", "msh =", "solver.msh: unknown key; did you mean 'mesh'?"),
        ("delay_step_s", "delay_steps", "beam[1].delay_steps: unknown key; did you mean 'delay_step_s'?"),
        ('title = "try"', "frequency_hz = [1e8]", "frequency_hz: unknown key; it belongs into [band]"),
        ("schema = 1", "schema = 2", "schema = 2: expected 1, the only version there is"),
        ("schema = 1", "schema = true", "schema = true: expected 1"),
        ('title = "try"', "title = 5", "title = 5: expected one line of text in quotes"),
        # station
        ('layout = "layout.csv"', "", "station.layout: required key is missing"),
        ('layout = "layout.csv"', "layout = 3", "station.layout = 3: expected text in quotes"),
        ('ground = "perfect"', 'ground = "prefect"', "station.ground = \"prefect\": expected \"perfect\" or \"free-space\"; did you mean 'perfect'?"),
        ('ground = "perfect"', "turn_deg = nan", "station.turn_deg = nan: expected a finite number"),
        ('ground = "perfect"', 'shift_east_m = "2"', 'station.shift_east_m = "2": expected a number'),
        ("single = ", "singel = ", "station.antennas: 1 antenna of layout.csv (first 'B1') asks for the design 'single', which is not there; did you mean 'singel'?"),
        ('antenna = "cross.toml"', "", "station.antenna: required key is missing: 3 antennas of layout.csv (first 'A1') name no design"),
        ("cross.toml", "corss.toml", "corss.toml: no such antenna file; did you mean 'cross.toml'?"),
        ("layout.csv", "layuot.csv", "layuot.csv: no such file; did you mean 'layout.csv'?"),
        # band
        ("[150e6, 60e6]", "[150e6, 60]", "band.frequency_hz[1]: 60 Hz: expected 1e+06 to 1e+09 Hz; MHz given for Hz? 60 MHz is 6e+07 Hz"),
        ("[150e6, 60e6]", "[150.0]", "MHz given for Hz? 150 MHz is 1.5e+08 Hz"),
        ("[150e6, 60e6]", "[150e3]", "kHz given for Hz? 150000 kHz is 1.5e+08 Hz"),
        ("[150e6, 60e6]", "[0.15]", "GHz given for Hz? 0.15 GHz is 1.5e+08 Hz"),
        ("[150e6, 60e6]", "[2e9]", "band.frequency_hz[0]: 2e+09 Hz: expected 1e+06 to 1e+09 Hz"),
        ("[150e6, 60e6]", "[0]", "band.frequency_hz[0]: 0 Hz: expected a positive frequency"),
        ("[150e6, 60e6]", "[-1e8]", "band.frequency_hz[0]: -1e+08 Hz: expected a positive frequency"),
        ("[150e6, 60e6]", "[nan]", "band.frequency_hz[0] = nan: expected a finite number"),
        ("[150e6, 60e6]", "[inf]", "band.frequency_hz[0] = inf: expected a finite number"),
        ("[150e6, 60e6]", '["150 MHz"]', 'band.frequency_hz[0] = "150 MHz": expected a number'),
        ("[150e6, 60e6]", "150e6", "band.frequency_hz = 150000000.0: expected a list in [ ]"),
        ("[150e6, 60e6]", "[]", "band: frequency_hz = []: expected at least one frequency"),
        ("[150e6, 60e6]", "[1e8, 2e8, 1e8]", "band: frequency_hz: 1e+08 Hz appears more than once"),
        ("frequency_hz = [150e6, 60e6]", "", "band: no frequencies; expected frequency_hz = [...], or start_hz, stop_hz and step_hz"),
        ("[150e6, 60e6]", "[1e8]\nstart_hz = 1e8", "band: both frequency_hz and start_hz are given"),
        ("frequency_hz = [150e6, 60e6]", "start_hz = 1e8", "band: stop_hz and step_hz missing beside start_hz"),
        ("frequency_hz = [150e6, 60e6]", "start_hz = 2e8\nstop_hz = 1e8\nstep_hz = 1e6", "band: stop_hz = 1e+08 lies below start_hz = 2e+08"),
        ("frequency_hz = [150e6, 60e6]", "start_hz = 1e8\nstop_hz = 2e8\nstep_hz = 0", "band.step_hz = 0: expected a number above 0.0"),
        ("frequency_hz = [150e6, 60e6]", "start_hz = 1e8\nstop_hz = 2e8\nstep_hz = 1000", "band: 100001 frequencies; expected at most 100000; take a larger step_hz"),
        ("frequency_hz = [150e6, 60e6]", "start_hz = 1e8\nstop_hz = 2e8\nstep_hz = 1e-300", "frequencies; expected at most 100000"),
        # termination
        ("impedance_ohm = 75", 'impedance_ohm = "opne"', "termination.impedance_ohm: \"opne\" is not known; expected ohms, [resistance, reactance] in ohms, \"open\" or \"short\"; did you mean 'open'?"),
        ("impedance_ohm = 75", "impedance_ohm = -5", "termination.impedance_ohm: -5: a resistance of -5 ohm is negative; a passive termination expected"),
        ("impedance_ohm = 75", "impedance_ohm = inf", 'termination.impedance_ohm: inf is not finite; use "open" for an open port'),
        ("impedance_ohm = 75", "impedance_ohm = [1, 2, 3]", "termination.impedance_ohm: [1, 2, 3]: expected ohms, [resistance, reactance]"),
        ("impedance_ohm = 75", "impedance_ohm = true", "termination.impedance_ohm: true: expected ohms"),
        ('"A1/x" = [10, -20]', '"A1/z" = 5', "termination.ports.\"A1/z\": no such port; did you mean 'A1/y'?"),
        ('"A1/x" = [10, -20]', '"A1/x" = "shrot"', "did you mean 'short'?"),
        # solver
        ('mesh = "refined"', 'mesh = "fine"', "solver.mesh = \"fine\": expected"),
        ('precision = "double"', 'precision = "doubel"', "did you mean 'double'?"),
        ('precision = "double"', 'method = "reduce"', "solver.method = \"reduce\": expected"),
        # beams
        ('name = "east"', 'name = "up"', "beam[1].name = \"up\": already the name of beam[0]"),
        ('name = "east"', 'name = "a/b"', "beam[1].name: \"a/b\": expected a name without slashes"),
        ('port = "y"', 'port = "Y1"', "beam[1].port = \"Y1\": no antenna has such a port; did you mean 'y'?"),
        ('port = "y"', "", "beam[1].port: required key is missing"),
        ('["A1", "A3"]', '["A1", "A33"]', "beam[1].antennas: no antenna 'A33'; did you mean 'A3'?"),
        ('["A1", "A3"]', '["A1", "B1"]', "beam[1].antennas: 'B1' has no port 'y'; it has x"),
        ('["A1", "A3"]', '["A1", "A1"]', "beam[1].antennas: 'A1' appears 2 times"),
        ('["A1", "A3"]', "[]", "beam[1].antennas = []: expected at least 1 in the list"),
        ("zenith_angle_deg = 30", "zenith_angle_deg = 95", "beam[1].zenith_angle_deg = 95: expected a number of at most 90.0"),
        ("azimuth_deg = 90", "azimuth_deg = 400", "beam[1].azimuth_deg = 400: expected a number of at most 360.0"),
        ("delay_step_s = 1e-9", "delay_step_s = 0.5", "beam[1].delay_step_s = 0.5: expected a number of at most 1e-06"),
        # sky, folders
        ("step_deg = 7.5", "step_deg = 7", "sky.step_deg: 7 deg: expected a step of at least 0.05 that divides 90 degrees"),
        ("step_deg = 7.5", "step_deg = 0", "sky.step_deg: 0 deg: expected a step"),
        ('folder = "kept"', 'folder = ""', 'store.folder = "": expected some text'),
    ],
)  # fmt: skip
def test_bad_jobs__name_key_found_and_expected(folder, old, new, expected):
    assert old in JOB
    problems = faults(folder, JOB.replace(old, new, 1))
    assert any(expected in p for p in problems), problems
    assert len(problems) == 1


def test_all_problems_of_all_files_are_told_together(folder):
    (folder / "layout.csv").write_text("name,east_m,north_m\nA1,0,zero\nA1,5,5\n")
    (folder / "single.toml").write_text(SINGLE.replace("radius_m", "raduis_m"))
    text = JOB.replace("[150e6, 60e6]", "[150]").replace('precision = "double"', 'precision = "high"')
    problems = faults(folder, text)
    assert len(problems) == 7
    for expected in (
        "band.frequency_hz[0]: 150 Hz",
        "solver.precision",
        "station.layout: " + str(folder / "layout.csv") + ": not a usable layout, 2 problems",
        "station.layout: line 2: north_m = 'zero' is not a number",
        "station.layout: line 3: name 'A1' is already used",
        "station.antennas.single: " + str(folder / "single.toml") + ": not a usable antenna file, 1 problem",
        "station.antennas.single: wire[0].raduis_m: unknown key; did you mean 'radius_m'?",
    ):
        assert any(p.startswith(expected) for p in problems), (expected, problems)


def test_missing_tables(folder):
    assert faults(folder, 'title = "nothing"') == ("[station] is missing", "[band] is missing")


def test_tables_of_the_wrong_kind(folder):
    text = MINIMAL + "[[sky]]\nstep_deg = 1\n[beam]\nname = 'a'\n"
    assert faults(folder, "solver = 3\n" + text) == (
        "solver = 3: expected a table, written [solver]",
        "sky = [a table]: expected a table, written [sky]",
        "beam: expected [[beam]] tables in double brackets, found a table",
    )
    assert faults(folder, "beam = [3]\n" + MINIMAL) == ("beam[0] = 3: expected a table, written [[beam]]",)


def test_files_that_are_no_job(folder):
    (folder / "job.toml").write_text(JOB)
    with pytest.raises(JobFileError, match=r"jbo\.toml: no such job file; did you mean 'job\.toml'\?"):
        read_job(folder / "jbo.toml")
    (folder / "job.toml").write_text("[station]\nlayout = layout.csv\n")
    with pytest.raises(JobFileError, match=r"job\.toml: not TOML: line 2, column 10: invalid value: layout = layout\.csv"):
        read_job(folder / "job.toml")
    with pytest.raises(JobFileError, match="is a folder; a job file expected"):
        read_job(folder)
    with pytest.raises(JobFileError, match="cannot be read"):
        read_job("a\0b")


def test_random_damage__never_raises_anything_else(folder):
    rng = np.random.default_rng(5)
    letters = list("[]{}=\"'#.,\n 1aex-\0é")
    usable = 0
    for _ in range(150):
        text = list(JOB)
        for _ in range(rng.integers(1, 4)):
            place = int(rng.integers(len(text)))
            text[place : place + int(rng.integers(0, 3))] = letters[int(rng.integers(len(letters)))]
        with contextlib.suppress(ElbowroomError):  # anything else fails the test
            job_of(folder, "".join(text))
            usable += 1
    assert 0 < usable < 150
