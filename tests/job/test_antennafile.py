"""Antenna files: what they make, and every kind of bad file by its class, key and wording."""

import numpy as np
import pytest

from elbowroom.base.errors import JobFileError
from elbowroom.geometry.shapes import crossed_dipoles
from elbowroom.job.antennafile import read_antenna

SHAPE = """
name = "cross"
shape = "crossed-dipoles"
arm_length_m = 0.8
height_m = 1
wire_radius_m = 0.006
droop_deg = 40.0
"""

FREE = """
name = "pair"
[[wire]]
name = "arm"
start_m = [-0.5, 0, 1.5]
end_m = [0.5, 0, 1.5]
radius_m = 0.005
conductivity_s_per_m = 3.5e7
relative_permeability = 2.0
[[wire]]
start_m = [0, -0.5, 1.2]
end_m = [0, 0.5, 1.2]
radius_m = 0.004
[[port]]
name = "x"
wire = "arm"
nominal_azimuth_deg = 5.0
[[port]]
name = "y"
wire = 1
position = 0.4
gap_m = 0.02
[[load]]
wire = "arm"
position = 0.9
resistance_ohm = 50.0
inductance_h = 1e-8
capacitance_f = 2e-12
gap_m = 0.015
"""


def written(tmp_path, text, name="antenna.toml"):
    path = tmp_path / name
    path.write_bytes(text if isinstance(text, bytes) else text.encode())
    return path


def fault(tmp_path, text):
    path = written(tmp_path, text)
    with pytest.raises(JobFileError) as caught:
        read_antenna(path)
    assert caught.value.file == str(path)
    assert str(caught.value).startswith(f"{path}: ")
    return caught.value


def test_shape__keys_are_the_arguments_of_the_function(tmp_path):
    expected = crossed_dipoles("cross", arm_length_m=0.8, height_m=1.0, wire_radius_m=0.006, droop_deg=40.0)
    assert read_antenna(written(tmp_path, SHAPE)) == expected


def test_free_form__every_key_arrives(tmp_path):
    antenna = read_antenna(written(tmp_path, FREE))
    assert antenna.name == "pair"
    first, second = antenna.wires
    assert (first.start, first.end, first.radius) == ((-0.5, 0.0, 1.5), (0.5, 0.0, 1.5), 0.005)
    assert (first.conductivity, first.relative_permeability) == (3.5e7, 2.0)
    assert (second.conductivity, second.relative_permeability) == (None, 1.0)
    x, y = antenna.ports
    assert (x.name, x.wire, x.position, x.gap, x.nominal_azimuth_deg) == ("x", 0, 0.5, None, 5.0)
    assert (y.name, y.wire, y.position, y.gap, y.nominal_azimuth_deg) == ("y", 1, 0.4, 0.02, None)
    (load,) = antenna.loads
    assert (load.wire, load.position, load.gap) == (0, 0.9, 0.015)
    omega = 2.0 * np.pi * 1e8
    assert load.impedance(omega) == 50.0 + 1j * omega * 1e-8 + 1.0 / (1j * omega * 2e-12)


def test_name__is_the_files_by_default(tmp_path):
    assert read_antenna(written(tmp_path, SHAPE.replace('name = "cross"', ""), "tall.toml")).name == "tall"


def test_all_problems_are_told_together_with_their_keys(tmp_path):
    error = fault(
        tmp_path,
        """
nam = "x"
[[wire]]
name = "arm"
start_m = [0, 0, 0]
end_m = [0, 0, 0]
radius_m = 0.01
[[wire]]
start_m = [0, 0]
end_m = [0, "a", 1]
raduis_m = 0.01
[[port]]
name = "x"
wire = "amr"
[[port]]
name = "y"
wire = 3
position = 1.5
[[load]]
wire = 1
position = 0.5
gap_m = -1
""",
    )
    assert error.problems == (
        "nam: unknown key; did you mean 'name'?",
        "wire[0]: wire of zero length at (0.0, 0.0, 0.0): start and end must differ",
        "wire[1].raduis_m: unknown key; did you mean 'radius_m'?",
        "wire[1].start_m = [0, 0]: expected at least 3 in the list",
        'wire[1].end_m[1] = "a": expected a number',
        "port[0].wire = \"amr\": no wire of that name; did you mean 'arm'?",
        "port[1].position = 1.5: expected a number of at most 1.0",
        "load[0].gap_m = -1: expected a number above 0.0",
    )
    assert "8 problems" in str(error)


@pytest.mark.parametrize(
    ("old", "new", "expected"),
    [
        ("arm_length_m", "arm_lenght_m", "arm_lenght_m: unknown key; did you mean 'arm_length_m'?"),
        ("arm_length_m = 0.8", "", "arm_length_m: required key is missing"),
        ("arm_length_m = 0.8", 'arm_length_m = "0.8"', 'arm_length_m = "0.8": expected a number'),
        ("arm_length_m = 0.8", "arm_length_m = true", "arm_length_m = true: expected a number"),
        ("arm_length_m = 0.8", "arm_length_m = inf", "arm_length_m = inf: expected a finite number"),
        ("arm_length_m = 0.8", "arm_length_m = nan", "arm_length_m = nan: expected a finite number"),
        ("crossed-dipoles", "cross-dipoles", "unknown shape; did you mean 'crossed-dipoles'?"),
        ('"crossed-dipoles"', "3", "shape = 3: unknown shape; expected text in quotes"),
        ("height_m = 1", "height_m = 0.4", "reach down to -0.114"),
        ("droop_deg = 40.0", "droop_deg = 85.0", "droop_deg 85 must lie between -80 and 80"),
        ('name = "cross"', "name = 3", "name = 3: expected text in quotes"),
        ("droop_deg = 40.0", "[[wire]]\nradius_m = 1", "wire: a shape brings its own"),
    ],
)
def test_bad_shapes(tmp_path, old, new, expected):
    (problem,) = fault(tmp_path, SHAPE.replace(old, new)).problems
    assert expected in problem


@pytest.mark.parametrize(
    ("old", "new", "expected"),
    [
        ('wire = "arm"\nnominal', "wire = 2\nnominal", "port[0].wire = 2: no such wire; expected a number from 0 to 1"),
        ('wire = "arm"\nnominal', "wire = 0.0\nnominal", "port[0].wire = 0.0: expected a wire's number, counted from 0"),
        ('wire = "arm"\nnominal', "nominal", "port[0].wire: required key is missing"),
        ('name = "y"', 'name = "x"', "port: the name 'x' is used 2 times"),
        ("[[port]]", "[[prt]]", "prt: unknown key; did you mean 'port'?"),
        ("radius_m = 0.004", "radius_m = 0.0", "wire[1].radius_m = 0.0: expected a number above 0.0"),
        ("radius_m = 0.004", "radius_m = 0.5", "wire[1]: wire radius 0.5 m is too large for a length of 1 m"),
        ("start_m = [0, -0.5, 1.2]", "start_m = [0, -0.5, nan]", "wire[1].start_m[2] = nan: expected a finite number"),
        ("gap_m = 0.02", "gap_m = 2.0", "port[1]: gap of 2 m must be positive and shorter than its wire (1 m)"),
        ("gap_m = 0.015", "gap_m = 0.3", "load[0]: the gap of 0.3 m sticks out of the end of its wire"),
        ("_per_m = 3.5e7", "_per_m = -1.0", "wire[0].conductivity_s_per_m = -1.0: expected a number above"),
        ("resistance_ohm = 50.0", "resistance_ohm = -50.0", "load[0].resistance_ohm = -50.0: expected a number of at least 0.0"),
        ("capacitance_f = 2e-12", "capacitance_f = 0", "load[0].capacitance_f = 0: expected a number above 0.0"),
        ("resistance_ohm", "resistence_ohm", "load[0].resistence_ohm: unknown key; did you mean 'resistance_ohm'?"),
        ('name = "pair"', "height_m = 1.0", "height_m: unknown key; needs shape = ..., which is missing"),
    ],
)  # fmt: skip
def test_bad_free_form(tmp_path, old, new, expected):
    assert old in FREE
    text = FREE.replace(old, new)
    problems = fault(tmp_path, text).problems
    assert any(expected in p for p in problems), problems
    assert len(problems) == (2 if "[[prt]]" in text else 1)


def test_tables_of_the_wrong_kind(tmp_path):
    problems = fault(tmp_path, "wire = 3\n[port]\nname = 'x'\n").problems
    assert problems == (
        "wire: expected [[wire]] tables in double brackets, found 3",
        "port: expected [[port]] tables in double brackets, found a table",
    )


def test_nothing_given(tmp_path):
    problems = fault(tmp_path, "name = 'empty'\n").problems
    assert problems == ("[[wire]] is missing: at least one expected", "[[port]] is missing: at least one expected")


def test_missing_file__names_a_near_one(tmp_path):
    written(tmp_path, SHAPE)
    with pytest.raises(JobFileError, match=r"anntena\.toml: no such antenna file; did you mean 'antenna\.toml'\?"):
        read_antenna(tmp_path / "anntena.toml")


def test_folder(tmp_path):
    with pytest.raises(JobFileError, match="is a folder; an antenna file expected"):
        read_antenna(tmp_path)


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("name = 'a'\nshape = crossed\n", "not TOML: line 2, column 9: invalid value: shape = crossed"),
        ("name = 'a'\n\n[[wire]\n", "not TOML: line 3"),
        ("name = 'a'\nname = 'b'\n", "not TOML: line 2"),
        ('name = "a', "not TOML: line 1"),
        ("  \n", "the file is empty; an antenna file expected"),
        (b"name = 'a'\n# caf\xe9\n", "not UTF-8 text (line 2, byte 0xe9); save it as UTF-8"),
    ],
)
def test_not_toml__names_the_line(tmp_path, text, expected):
    assert expected in str(fault(tmp_path, text))
