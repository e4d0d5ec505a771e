"""Layouts: reading with every kind of bad input, exact round trips, figures."""

import math

import numpy as np
import pytest
from hypothesis import HealthCheck, assume, given, settings
from hypothesis import strategies as st
from numpy.testing import assert_allclose, assert_array_equal
from scipy.spatial.distance import pdist

from elbowroom.base.errors import ExportError, GeometryError, JobFileError
from elbowroom.geometry.layouts import (
    Layout,
    closest_spacing,
    diameter,
    layout_statistics,
    read_layout,
    write_layout,
)

GOOD = """\
# invented station
name,east_m,north_m,up_m,rotation_deg,tilt_east_deg,tilt_north_deg,antenna
A001,0,0,0,0,0,0,
A002,1.5,-2.25,0.01,30,0.5,-0.5,crossed
"""


@pytest.fixture
def file(tmp_path):
    """Write text or bytes to a file and return its path."""

    def write(content):
        path = tmp_path / "layout.csv"
        path.write_bytes(content if isinstance(content, bytes) else content.encode())
        return path

    return write


def problems_of(path):
    with pytest.raises(JobFileError) as caught:
        read_layout(path)
    assert str(path) in str(caught.value)
    assert all(problem in str(caught.value) for problem in caught.value.problems)
    return caught.value.problems


class TestReading:
    def test_read_layout__all_columns(self, file):
        layout = read_layout(file(GOOD))
        assert layout.names == ("A001", "A002")
        assert_array_equal(layout.positions, [[0, 0, 0], [1.5, -2.25, 0.01]])
        assert_array_equal(layout.rotation_deg, [0, 30])
        assert_array_equal(layout.tilt_east_deg, [0, 0.5])
        assert_array_equal(layout.tilt_north_deg, [0, -0.5])
        assert layout.antenna == ("", "crossed")

    def test_read_layout__optional_columns_have_defaults_and_order_is_free(self, file):
        layout = read_layout(file("north_m,name,east_m\n2,west end,-1e1\n"))
        assert layout == Layout(("west end",), [[-10.0, 2.0, 0.0]])

    @pytest.mark.parametrize(
        "change",
        [
            lambda text: "\ufeff" + text,
            lambda text: text.replace("\n", "\r\n"),
            lambda text: text.replace("\n", "\r"),
            lambda text: text.replace(",", " ,  "),
            lambda text: text + "\n\n   \n",
            lambda text: text + ",,,,,,,\n",
            lambda text: text.rstrip("\n"),
            lambda text: text.replace("A001,", "\n  # between\nA001,"),
            lambda text: '"# first, with a comma",,,,,,,\n' + text,
            lambda text: text.replace("A002", ' "A002" '),
            lambda text: "\ufeff" + text.replace("\n", " \r\n"),
        ],
        ids=[
            "byte-order mark",
            "CRLF",
            "CR",
            "spaces",
            "trailing blanks",
            "trailing commas",
            "no last line end",
            "comment between",
            "quoted comment",
            "quoted cell",
            "BOM, CRLF and spaces",
        ],
    )
    def test_read_layout__harmless_variants_read_the_same(self, file, change):
        expected = read_layout(file(GOOD))
        assert read_layout(file(change(GOOD))) == expected

    @pytest.mark.parametrize(
        ("text", "expected"),
        [
            ("name,est_m,north_m\nA,1,2\n", ["line 1: unknown column 'est_m'; did you mean 'east_m'?"]),
            ("name,East_m,north_m\nA,1,2\n", ["line 1: unknown column 'East_m'; did you mean 'east_m'?"]),
            ("name,east_m\nA,1\n", ["line 1: required column 'north_m' is missing"]),
            (
                "# c\n\nname,x,y\nA,1,2\n",
                [
                    "line 3: unknown column 'x'; known columns: name, east_m, north_m, up_m, rotation_deg, "
                    "tilt_east_deg, tilt_north_deg, antenna",
                    "line 3: unknown column 'y'; known columns: name, east_m, north_m, up_m, rotation_deg, "
                    "tilt_east_deg, tilt_north_deg, antenna",
                    "line 3: required column 'east_m' is missing",
                    "line 3: required column 'north_m' is missing",
                ],
            ),
            (
                "name,east_m,north_m,rotation\nA,1,2,0\n",
                ["line 1: unknown column 'rotation'; did you mean 'rotation_deg'?"],
            ),
            ("name,east_m,north_m,\nA,1,2,\n", ["line 1: column 4 has no name"]),
            ("name,east_m,north_m,east_m\nA,1,2,1\n", ["line 1: column 'east_m' appears 2 times"]),
            (
                "name;east_m;north_m\nA;1,5;2,5\n",
                ["line 1: cells seem to be separated by semicolons; commas expected"],
            ),
            (
                "name\teast_m\tnorth_m\nA\t1\t2\n",
                ["line 1: cells seem to be separated by tabs; commas expected"],
            ),
            (
                "A001,1.0,-2.0\nA002,2,3\n",
                ["line 1: the header is missing; column names expected first, for example name,east_m,north_m"],
            ),
            (
                "name,east_m,north_m\nA,one,2\n",
                ["line 2: east_m = 'one' is not a number; metres expected, as in -12.5"],
            ),
            (
                "name,east_m,north_m\nA,1_000,2\n",
                ["line 2: east_m = '1_000' is not a number; metres expected, as in -12.5"],
            ),
            (
                "name,east_m,north_m,rotation_deg\nA,1,2,30°\n",
                ["line 2: rotation_deg = '30°' is not a number; degrees expected, as in -12.5"],
            ),
            ("name,east_m,north_m\nA,1,\n", ["line 2: north_m is empty; a number in metres expected"]),
            (
                "name,east_m,north_m,up_m\nA,nan,-inf,1e999\n",
                [
                    "line 2: east_m = 'nan' is not a finite number",
                    "line 2: north_m = '-inf' is not a finite number",
                    "line 2: up_m = '1e999' is not a finite number",
                ],
            ),
            (
                "name,east_m,north_m\nA,1\nB,1,2,3\n",
                [
                    "line 2: 2 cells found, 3 (name, east_m, north_m) expected",
                    "line 3: 4 cells found, 3 (name, east_m, north_m) expected",
                ],
            ),
            ("name,east_m,north_m\nA\n", ["line 2: 1 cell found, 3 (name, east_m, north_m) expected"]),
            ("name,east_m,north_m\nA,1,2\n\nA,3,4\n", ["line 4: name 'A' is already used (line 2)"]),
            ("name,east_m,north_m\n ,1,2\n", ["line 2: the name is empty"]),
            (
                "name,east_m,north_m\nA,1,2\nB,1,2\nC,1.0004,2\nD,1.0011,2\n",
                [
                    "line 3: 'B' stands at the same place as 'A' (line 2)",
                    "line 4: 'C' stands 0.4 mm from 'A' (line 2)",
                ],
            ),
            (
                "name,east_m,north_m,up_m\nA,-35000,17500.5,10001\n",
                [
                    "line 2: east_m = -35000: metres expected; millimetres?",
                    "line 2: north_m = 17500.5: metres expected; millimetres?",
                    "line 2: up_m = 10001: metres expected; millimetres?",
                ],
            ),
            (
                'name,east_m,north_m\n"A,1,2\nB,3,4\nB,5,6\n',
                [
                    "line 2: a double quote is opened and not closed on the same line",
                    "line 4: name 'B' is already used (line 3)",
                ],
            ),
            (
                "name,east_m,north_m\nA\x07,1,2\n",
                ["line 2: name 'A\\x07' has unprintable characters, outer spaces, a slash or a leading '#'"],
            ),
            ("name,east_m,north_m\n", ["line 1: no antennas below the header"]),
            ("# only a comment\n", ["no header line and no antennas"]),
        ],
    )
    def test_read_layout__names_every_problem_with_its_line(self, file, text, expected):
        assert list(problems_of(file(text))) == expected

    def test_read_layout__collects_problems_of_every_kind_in_order_of_lines(self, file):
        text = "name,east_m,nroth_m\nA,1,2\nA,x,3\n,1e6,0\nB,1\n"
        assert list(problems_of(file(text))) == [
            "line 1: unknown column 'nroth_m'; did you mean 'north_m'?",
            "line 3: east_m = 'x' is not a number; metres expected, as in -12.5",
            "line 3: name 'A' is already used (line 2)",
            "line 4: east_m = 1000000: metres expected; millimetres?",
            "line 4: the name is empty",
            "line 5: 2 cells found, 3 (name, east_m, nroth_m) expected",
        ]

    def test_read_layout__very_long_cell(self, file):
        found = problems_of(file("name,east_m,north_m\n" + "A" * 200_000 + ",1,2\n"))
        assert "line 2: cannot be split into cells" in found[0]

    @pytest.mark.parametrize("content", [b"", b"\n \r\n"])
    def test_read_layout__empty_file(self, file, content):
        with pytest.raises(JobFileError, match=r"layout\.csv: the file is empty"):
            read_layout(file(content))

    @pytest.mark.parametrize(
        ("content", "text"),
        [
            (GOOD.encode() + b"A\xe9,1,2", r"not UTF-8 text \(line 5, byte 0xe9\); save it as UTF-8"),
            (b"\xef\xbb\xbfname,east_m\r\n\xff", r"line 2, byte 0xff"),
            (GOOD.encode("utf-16"), "it looks like UTF-16"),
        ],
    )
    def test_read_layout__not_utf8(self, file, content, text):
        with pytest.raises(JobFileError, match=text):
            read_layout(file(content))

    def test_read_layout__absent_file_with_a_hint(self, file):
        path = file(GOOD)
        with pytest.raises(JobFileError, match=r"no such file; did you mean 'layout.csv'\?"):
            read_layout(path.with_name("layuot.csv"))
        with pytest.raises(JobFileError, match=r"no such file$"):
            read_layout(path.parent / "nowhere" / "q.csv")

    def test_read_layout__folder(self, tmp_path):
        with pytest.raises(JobFileError, match="is a folder; a CSV file expected"):
            read_layout(tmp_path)

    @pytest.mark.parametrize("name", ["x" * 300, "nul\0byte"])
    def test_read_layout__impossible_path(self, tmp_path, name):
        with pytest.raises(JobFileError, match="cannot be read: "):
            read_layout(tmp_path / name)

    def test_read_layout__many_antennas_at_one_place_end_soon(self, file):
        rows = "".join(f"A{i},1,2\n" for i in range(3000))
        assert len(problems_of(file("name,east_m,north_m\n" + rows))) == 2999


finite = st.floats(-360.0, 360.0)
places = st.tuples(*[st.floats(-1e4, 1e4)] * 3)
words = st.text(
    st.characters(exclude_categories=["C", "Z"], include_characters=' ,"', exclude_characters="/"), min_size=1, max_size=8
).filter(lambda s: s == s.strip() and not s.startswith("#") and s.isprintable())


class TestWriting:
    @given(
        rows=st.lists(
            st.tuples(words, places, finite, finite, finite, words),
            min_size=1,
            max_size=4,
            unique_by=(lambda row: row[0], lambda row: row[1]),
        ),
        comment=st.text(max_size=30).filter(lambda s: s.isprintable() or "\n" in s),
    )
    @settings(max_examples=25, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
    def test_write_layout__comes_back_to_the_last_digit(self, tmp_path, rows, comment):
        names, positions, rotation, east, north, antenna = zip(*rows, strict=True)
        assume(min(pdist(positions), default=1.0) > 1e-3)
        layout = Layout(names, positions, rotation, east, north, antenna)
        path = tmp_path / "again.csv"
        write_layout(layout, path, comment.encode("utf-8", "ignore").decode())
        assert read_layout(path) == layout

    def test_write_layout__columns_and_comment(self, tmp_path):
        path = tmp_path / "out.csv"
        write_layout(Layout(("A, left",), [[0.1, -0.0, 1e-7]], 45.0), path, "two\nlines")
        assert path.read_bytes().decode() == (
            "# two\n# lines\nname,east_m,north_m,up_m,rotation_deg,tilt_east_deg,tilt_north_deg,antenna\n"
            '"A, left",0.1,-0.0,1e-07,45.0,0.0,0.0,\n'
        )
        assert [p.name for p in tmp_path.iterdir()] == ["out.csv"]

    @pytest.mark.parametrize("name", [".", "nowhere/out.csv", "x" * 300, "nul\0byte"])
    def test_write_layout__says_why_it_cannot(self, tmp_path, name):
        with pytest.raises(ExportError, match="cannot write the layout: "):
            write_layout(Layout(("A",), [[0, 0, 0]]), tmp_path / name)
        assert list(tmp_path.iterdir()) == []


class TestLayout:
    def test_layout__scalars_hold_for_all_and_nothing_can_be_changed(self):
        layout = Layout(("A", "B"), [[0, 0, 0], [1, 0, 0]], 15.0, antenna="crossed")
        assert_array_equal(layout.rotation_deg, [15.0, 15.0])
        assert layout.antenna == ("crossed", "crossed")
        assert len(layout) == 2
        for array in (layout.positions, layout.rotation_deg, layout.tilt_north_deg):
            with pytest.raises(ValueError, match="read-only"):
                array[0] = 1.0

    def test_layout__does_not_alias_its_input(self):
        positions = np.zeros((1, 3))
        layout = Layout(("A",), positions)
        positions[0, 0] = 5.0
        assert layout.positions[0, 0] == 0.0

    def test_layout__equality(self):
        layout = Layout(("A",), [[0, 0, 0]])
        assert layout == Layout(("A",), [[0, 0, 0]])
        assert layout != Layout(("A",), [[0, 0, 1e-12]])
        assert layout != Layout(("A",), [[0, 0, 0]], tilt_north_deg=1.0)
        assert layout != "A"

    @pytest.mark.parametrize(
        ("arguments", "text"),
        [
            (((), np.zeros((0, 3))), "no antennas"),
            ((("A",), [[0, 0]]), "positions: expected an array of shape"),
            ((("A", "B"), [[0, 0, 0]]), "positions: expected an array of shape"),
            ((("A",), [[0, 0, math.nan]]), "positions: expected finite"),
            ((("A",), [[0, 0, 0]], [1.0, 2.0]), "rotation_deg: expected an array of shape"),
            ((("A",), [[0, 0, 0]], 0.0, math.inf), "tilt_east_deg: expected finite"),
            ((("A",), [[0, 0, 0]], "north"), "rotation_deg: expected numbers"),
            ((("A",), [[0, 0, 0]], 0.0, 0.0, 0.0, ("x", "y")), "expected 1 design names"),
            ((("A", "A"), [[0, 0, 0], [1, 0, 0]]), r"antenna 2: name 'A' is already used \(antenna 1\)"),
            ((("A", ""), [[0, 0, 0], [1, 0, 0]]), "antenna 2: the name is empty"),
            ((("#1",), [[0, 0, 0]]), "leading '#'"),
            (((" A",), [[0, 0, 0]]), "outer spaces"),
            (((7,), [[0, 0, 0]]), "name and design must be text"),
            ((("A",), [[0, 0, 12000.0]]), "millimetres"),
            ((("A", "B"), [[0, 0, 0], [0, 0, 0.0009]]), r"antenna 2: 'B' stands 0.9 mm from 'A'"),
        ],
    )
    def test_layout__refuses_bad_input(self, arguments, text):
        with pytest.raises(GeometryError, match=text):
            Layout(*arguments)

    def test_layout__nearest_allowed_pair_in_every_direction(self):
        # just above and just below a millimetre, across the borders of the search cubes
        rng = np.random.default_rng(0)
        for _ in range(100):
            place, step = rng.uniform(-1, 1, 3), rng.normal(size=3)
            step /= np.linalg.norm(step)
            assert len(Layout(("A", "B"), [place, place + 1.001e-3 * step])) == 2
            with pytest.raises(GeometryError, match="mm from"):
                Layout(("A", "B"), [place, place + 0.999e-3 * step])


class TestFigures:
    def test_layout_statistics__of_a_triangle(self):
        layout = Layout(("A", "B", "C"), [[0, 0, 0], [3, 0, 0], [0, 4, 1]], antenna=("x", "x", ""))
        found = layout_statistics(layout)
        assert (found.antennas, found.designs) == (3, {"x": 2, "": 1})
        assert (found.closest_spacing_m, set(found.closest_pair)) == (3.0, {"A", "B"})
        # neighbours at 3, 3 and sqrt(17); longest side sqrt(9 + 16 + 1); centre (1, 4/3, 1/3)
        assert found.median_neighbour_m == 3.0
        assert_allclose(found.diameter_m, math.sqrt(26), rtol=1e-15)
        assert_allclose(found.centre, (1, 4 / 3, 1 / 3), rtol=1e-15)
        assert_allclose(found.radius_m, math.hypot(1, 8 / 3), rtol=1e-15)
        assert (found.lowest_m, found.highest_m) == (0.0, 1.0)

    def test_layout_statistics__of_one_antenna(self):
        found = layout_statistics(Layout(("A",), [[1, 2, 3]]))
        assert (found.closest_spacing_m, found.closest_pair, found.diameter_m) == (math.inf, (), 0.0)

    def test_closest_spacing_and_diameter__against_all_pairs(self):
        positions = np.random.default_rng(4).uniform(-20, 20, (60, 3))
        layout = Layout(tuple(f"A{i}" for i in range(60)), positions)
        distances = pdist(positions)
        assert_allclose(closest_spacing(layout), distances.min(), rtol=1e-14)
        assert_allclose(diameter(layout), distances.max(), rtol=1e-14)
