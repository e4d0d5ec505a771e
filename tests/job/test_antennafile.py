"""Antenna files: what they make, and every kind of bad file by its class, key and wording."""

import numpy as np
import pytest

from elbowroom.base.errors import JobFileError
from elbowroom.geometry.antennas import Antenna, Port
from elbowroom.geometry.networks import Branch, FeedPoint, Line, Network, Stub, Transformer
from elbowroom.geometry.shapes import SHAPES, crossed_dipoles, log_periodic
from elbowroom.geometry.wires import Wire
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

NETWORK = """
name = "ladder"
[[wire]]
name = "short"
start_m = [-0.4, 0, 1.5]
end_m = [0.4, 0, 1.5]
radius_m = 0.004
[[wire]]
start_m = [-0.5, 0, 1.2]
end_m = [0.5, 0, 1.2]
radius_m = 0.004
[[feed]]
name = "top"
wire = "short"
[[feed]]
name = "low"
wire = 1
position = 0.45
gap_m = 0.02
[[port]]
name = "x"
node = "in"
nominal_azimuth_deg = 3.0
[[line]]
start = "top"
end = "low"
impedance_ohm = 120
length_m = 0.3
velocity_factor = 0.9
crossed = true
loss_db_per_m = 0.05
loss_reference_hz = 1e8
[[stub]]
node = "low"
impedance_ohm = 75.0
length_m = 0.2
velocity_factor = 0.8
shorted = false
loss_db_per_m = 0.02
loss_reference_hz = 2e8
[[branch]]
start = "low"
resistance_ohm = 300.0
inductance_h = 1e-7
capacitance_f = 3e-12
[[branch]]
start = "tap"
end = "top"
inductance_h = 2e-8
[[transformer]]
start = "in"
end = "tap"
ratio = -2.0
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


def test_network__every_key_arrives(tmp_path):
    expected = Antenna(
        "ladder",
        [Wire((-0.4, 0, 1.5), (0.4, 0, 1.5), 0.004), Wire((-0.5, 0, 1.2), (0.5, 0, 1.2), 0.004)],
        [Port("x", node="in", nominal_azimuth_deg=3.0)],
        feeds=[FeedPoint("top", 0), FeedPoint("low", 1, 0.45, 0.02)],
        network=Network(
            (Line("top", "low", 120.0, 0.3, 0.9, True, 0.05, 1e8),),
            (Stub("low", 75.0, 0.2, 0.8, False, 0.02, 2e8),),
            (Branch("low", None, 300.0, 1e-7, 3e-12), Branch("tap", "top", 0.0, 2e-8)),
            (Transformer("in", "tap", -2.0),),
        ),
    )
    found = read_antenna(written(tmp_path, NETWORK))
    assert found == expected
    assert found.nodes == ("top", "low", "in", "tap")


def test_network__defaults(tmp_path):
    text = NETWORK[: NETWORK.index("[[stub]]")].replace('node = "in"', 'node = "top"')
    for key in ("velocity_factor", "crossed", "loss_db", "loss_ref", "position", "gap_m"):
        text = "\n".join(line for line in text.splitlines() if not line.startswith(key))
    antenna = read_antenna(written(tmp_path, text))
    assert antenna.network == Network((Line("top", "low", 120.0, 0.3),))
    assert antenna.feeds == (FeedPoint("top", 0), FeedPoint("low", 1))
    stub = read_antenna(written(tmp_path, text + '\n[[stub]]\nnode = "low"\nimpedance_ohm = 50\nlength_m = 1\n')).network.stubs
    assert stub == (Stub("low", 50.0, 1.0),)


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


@pytest.mark.parametrize(
    ("old", "new", "expected"),
    [
        ('end = "low"', 'end = "lwo"', "line[0].end = \"lwo\": no feed or port has this name and nothing else is connected to it; did you mean 'low'?"),
        ('start = "in"', 'start = "iin"', "port[0].node = \"in\": no feed or port has this name and nothing else is connected to it; did you mean 'iin'?"),
        ('start = "in"', 'start = "iin"', "transformer[0].start = \"iin\": no feed or port has this name"),
        ('node = "low"', 'node = "elsewhere"', 'stub[0].node = "elsewhere": no feed or port has this name and nothing else is connected to it; nodes: top, low, in, tap'),
        ('end = "top"', 'end = "topp"', "branch[1].end = \"topp\": no feed or port has this name and nothing else is connected to it; did you mean 'top'?"),
        ('name = "low"', 'name = "Low"', "feed[1]: nothing is connected to 'Low'"),
        ('name = "low"', 'name = "top"', "feed: the name 'top' is used 2 times"),
        ('node = "in"', "wire = 0\nposition = 0.2", "transformer[0].start = \"in\": no feed or port has this name"),
        ('name = "x"\nnode = "in"', 'name = "top"\nwire = 0\nposition = 0.2', 'feed[0].name = "top": a port with a gap of its own has this name'),
        ('node = "in"', 'node = "in"\nwire = 0', "port[0]: both wire and node given; expected the wire with its gap, or a node"),
        ('node = "in"', 'node = "in"\ngap_m = 0.01', "port[0].gap_m: a port at a node has no gap of its own"),
        ('node = "in"', 'node = "in"\nposition = 0.5', "port[0].position: a port at a node has no gap of its own"),
        ('node = "in"', "node = 3", "port[0].node = 3: expected text in quotes"),
        ('node = "in"', "", "port[0].wire: required key is missing; or node, for a port that looks into a network"),
        ('node = "in"', 'nod = "in"', "port[0].nod: unknown key; did you mean 'node'?"),
        ('end = "low"', 'end = "top"', "line[0]: start and end are both 'top'; expected two nodes"),
        ('end = "tap"', 'end = "in"', "transformer[0]: start and end are both 'in'; expected two nodes"),
        ('end = "top"', 'end = "tap"', "branch[1]: start and end are both 'tap'; expected two nodes"),
        ("impedance_ohm = 120", "impedance_ohm = 0", "line[0].impedance_ohm = 0: expected a number above 0.0"),
        ("impedance_ohm = 120", "impedence_ohm = 120", "line[0].impedence_ohm: unknown key; did you mean 'impedance_ohm'?"),
        ("impedance_ohm = 120", "", "line[0].impedance_ohm: required key is missing"),
        ("length_m = 0.3", "length_m = -0.3", "line[0].length_m = -0.3: expected a number above 0.0"),
        ("length_m = 0.3", "length_m = nan", "line[0].length_m = nan: expected a finite number"),
        ("velocity_factor = 0.9", "velocity_factor = 90", "line[0].velocity_factor = 90: expected a number of at most 1.0"),
        ("crossed = true", "crossed = 1", "line[0].crossed = 1: expected true or false"),
        ("loss_db_per_m = 0.05", "loss_db_per_m = -0.05", "line[0].loss_db_per_m = -0.05: expected a number of at least 0.0"),
        ("loss_reference_hz = 1e8", "loss_reference_hz = 0.0", "line[0].loss_reference_hz = 0.0: expected a number above 0.0"),
        ("shorted = false", 'shorted = "no"', 'stub[0].shorted = "no": expected true or false'),
        ("length_m = 0.2", "length_m = inf", "stub[0].length_m = inf: expected a finite number"),
        ("impedance_ohm = 75.0", "", "stub[0].impedance_ohm: required key is missing"),
        ("velocity_factor = 0.8", "velocity_factor = 0", "stub[0].velocity_factor = 0: expected a number above 0.0"),
        ("resistance_ohm = 300.0", "resistance_ohm = -1", "branch[0].resistance_ohm = -1: expected a number of at least 0.0"),
        ("inductance_h = 1e-7", "inductance_h = -1e-7", "branch[0].inductance_h = -1e-07: expected a number of at least 0.0"),
        ("capacitance_f = 3e-12", "capacitance_f = 0.0", "branch[0].capacitance_f = 0.0: expected a number above 0.0"),
        ("ratio = -2.0", "ratio = 0.0", "transformer[0]: transformer from 'in' to 'tap': ratio 0.0: expected a number other than zero"),
        ("ratio = -2.0", "", "transformer[0].ratio: required key is missing"),
        ('name = "top"\nwire = "short"', 'name = "top"\nwire = "shrt"', "feed[0].wire = \"shrt\": no wire of that name; did you mean 'short'?"),
        ('name = "top"\nwire = "short"', 'name = "top"', "feed[0].wire: required key is missing"),
        ("gap_m = 0.02", "gap_m = 2.0", "feed[1]: gap of 2 m must be positive and shorter than its wire (1 m)"),
        ("position = 0.45", "position = 1.45", "feed[1].position = 1.45: expected a number of at most 1.0"),
        ("[[transformer]]", "[[transformr]]", "transformr: unknown key; did you mean 'transformer'?"),
    ],
)  # fmt: skip
def test_bad_networks(tmp_path, old, new, expected):
    assert NETWORK.count(old) >= 1
    problems = fault(tmp_path, NETWORK.replace(old, new, 1)).problems
    assert any(expected in p for p in problems), problems
    assert len(problems) <= 5


def test_bad_networks__a_shape_brings_its_own(tmp_path):
    text = SHAPE + '[[feed]]\nname = "a"\n[[line]]\nstart = "a"\n'
    assert fault(tmp_path, text).problems == (
        "feed: a shape brings its own; leave out either shape or the [[feed]] tables",
        "line: a shape brings its own; leave out either shape or the [[line]] tables",
    )


LOG_PERIODIC = """
shape = "log-periodic"
height_m = 2
wire_radius_m = 0.003
half_lengths_m = [0.4, 0.5, 0.65]
positions_m = [0, 0.15, 0.35]
feeder_impedance_ohm = 100.0
feeder = "network"
crossed = false
"""


def test_shape__with_lists_and_words(tmp_path):
    expected = log_periodic(
        "antenna", height_m=2.0, wire_radius_m=0.003, half_lengths_m=[0.4, 0.5, 0.65], positions_m=[0.0, 0.15, 0.35],
        feeder_impedance_ohm=100.0, crossed=False,
    )  # fmt: skip
    assert read_antenna(written(tmp_path, LOG_PERIODIC)) == expected


@pytest.mark.parametrize(
    ("old", "new", "expected"),
    [
        ('feeder = "network"', 'feeder = "netwrok"', 'feeder = "netwrok": expected "network" or "wires"; did you mean \'network\'?'),
        ("crossed = false", "crossed = 0", "crossed = 0: expected true or false"),
        ("[0.4, 0.5, 0.65]", "0.4", "half_lengths_m = 0.4: expected a list in [ ]"),
        ("[0.4, 0.5, 0.65]", '[0.4, "0.5", 0.65]', 'half_lengths_m[1] = "0.5": expected a number'),
        ("[0.4, 0.5, 0.65]", "[0.4, nan, 0.65]", "half_lengths_m[1] = nan: expected a finite number"),
        ("[0, 0.15, 0.35]", "[0, 0.15]", "expected two lists of equal length, two or more numbers each, found 3 and 2"),
        ('feeder = "network"', "elements = 3.5", "elements = 3.5: expected a whole number"),
        ('feeder = "network"', "tau = 0.8", "half_lengths_m and positions_m go together, and without tau"),
    ],
)  # fmt: skip
def test_bad_shapes__with_lists_and_words(tmp_path, old, new, expected):
    problems = fault(tmp_path, LOG_PERIODIC.replace(old, new)).problems
    assert any(expected in p for p in problems), problems


def test_shapes__all_have_keys_that_a_file_can_give(tmp_path):
    """Every shape is reached from a file and asks for what it needs by key."""
    for name in SHAPES:
        problems = fault(tmp_path, f'shape = "{name}"\n').problems
        assert all(p.endswith(": required key is missing") for p in problems), problems


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
