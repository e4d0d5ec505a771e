"""Offsets: files, what is refused, and layouts as built."""

import numpy as np
import pytest

from elbowroom.base.errors import GeometryError, JobFileError
from elbowroom.geometry.layouts import Layout
from elbowroom.geometry.offsets import Offsets, displaced, read_offsets

LAYOUT = Layout(("A1", "A2", "A3"), [[0, 0, 0], [3, 0, 0.2], [0, 4, 0]], 10.0, [0, 0, 3.0], 0.0, ("", "b", ""))


def offsets_of(tmp_path, text):
    (tmp_path / "built.csv").write_text(text)
    return read_offsets(tmp_path / "built.csv")


def test_offsets__are_added_to_places_and_angles(tmp_path):
    text = (
        "# surveyed\r\noffset_north_m, name, offset_up_m, offset_tilt_east_deg, offset_rotation_deg\r\n"
        "0.02, A3, -0.01, 1.5, -2\r\n-0.005, A2, 0, 0, 0\r\n"
    )
    offsets = offsets_of(tmp_path, text)
    built = displaced(LAYOUT, offsets)
    np.testing.assert_allclose(built.positions - LAYOUT.positions, [[0, 0, 0], [0, -0.005, 0], [0, 0.02, -0.01]], atol=1e-15)
    assert built.rotation_deg.tolist() == [10, 10, 8]
    assert built.tilt_east_deg.tolist() == [0, 0, 4.5]
    assert built.tilt_north_deg.tolist() == [0, 0, 0]
    assert (built.names, built.antenna) == (LAYOUT.names, LAYOUT.antenna)
    assert len(offsets) == 2
    assert offsets.largest_m == pytest.approx(np.hypot(0.02, 0.01))
    # the layout itself is left alone
    assert LAYOUT.positions[2, 1] == 4.0


@pytest.mark.parametrize(
    ("text", "problems"),
    [
        ("name\nA1\n", ["no column of offsets; at least one expected of offset_east_m"]),
        ("name,offset_est_m\nA1,0\n", ["line 1: unknown column 'offset_est_m'; did you mean 'offset_east_m'?"]),
        ("offset_east_m\n0.1\n", ["line 1: required column 'name' is missing"]),
        ("name,offset_east_m\nA1,12\n", ["line 2: offset_east_m = 12: at most 5 m expected; millimetres?"]),
        ("name,offset_east_m\nA1,0.1\nA1,0.2\n", ["line 3: name 'A1' is already used (line 2)"]),
        (
            "name,offset_east_m\nA1,nan\n,0.1\n",
            ["line 2: offset_east_m = 'nan' is not a finite number", "line 3: the name is empty"],
        ),
        ("name,offset_tilt_east_deg\nA1,x\n", ["line 2: offset_tilt_east_deg = 'x' is not a number; degrees expected"]),
        ("name,offset_east_m\n", ["line 1: no antennas below the header"]),
    ],
)
def test_bad_files__tell_every_problem(tmp_path, text, problems):
    with pytest.raises(JobFileError, match="not a usable file of offsets") as caught:
        offsets_of(tmp_path, text)
    assert len(caught.value.problems) == len(problems)
    for found, expected in zip(caught.value.problems, problems, strict=True):
        assert expected in found


def test_bad_offsets__are_refused():
    with pytest.raises(GeometryError, match="already used"):
        Offsets(("A", "A"), np.zeros((2, 3)))
    with pytest.raises(GeometryError, match="finite"):
        Offsets(("A",), [[0.0, np.nan, 0.0]])
    with pytest.raises(GeometryError, match="no such antenna"):
        displaced(LAYOUT, Offsets(("A9",), np.zeros((1, 3))))
    close = Layout(("A", "B"), [[0, 0, 0], [0.01, 0, 0]])
    with pytest.raises(GeometryError, match="same place"):
        displaced(close, Offsets(("A",), [[0.01, 0, 0]]))
