"""How much the ground matters: which grounds are compared, and that the numbers are what their names say."""

import csv
from dataclasses import fields

import numpy as np
import pytest
from numpy.testing import assert_allclose

from elbowroom.base.errors import ModelRangeError
from elbowroom.geometry.directions import hemisphere_grid
from elbowroom.geometry.grounds import FreeSpace, MeshOnSoil, PerfectGround
from elbowroom.geometry.soils import Soil
from elbowroom.geometry.stations import Placed, Station
from elbowroom.job.compare import FLOOR_DB
from elbowroom.job.groundcomparison import (
    MEANINGS,
    GroundFigures,
    compare_grounds,
    compared_grounds,
    write_ground_figures,
)
from elbowroom.job.jobfile import Beam
from elbowroom.job.pictures.grounds import draw_grounds
from elbowroom.job.solve import solve
from helpers import crossed

SOIL = Soil(10.0, 0.01)
MESH = MeshOnSoil(SOIL, 0.1, 1e-3)
SKY = hemisphere_grid(5.0)
BEAMS = [Beam("up", "x"), Beam("low", "y", 50.0, 30.0)]


@pytest.fixture(scope="module")
def solutions():
    placed = [Placed(crossed(), (0, 0, 0)), Placed(crossed(), (1.6, 0.4, 0.0)), Placed(crossed(), (-0.3, 1.8, 0.0))]
    return {name: solve(Station(placed, g), 100e6) for name, g in compared_grounds(MESH).items()}


@pytest.fixture(scope="module")
def rows(solutions):
    return compare_grounds(solutions, BEAMS, SKY)


@pytest.mark.parametrize(
    ("own", "options", "expected"),
    [
        (MESH, {}, [PerfectGround(), MESH, SOIL]),
        (SOIL, {}, [PerfectGround(), SOIL]),
        (SOIL, {"mesh": (0.2, 0.002)}, [PerfectGround(), MeshOnSoil(SOIL, 0.2, 0.002), SOIL]),
        (PerfectGround(), {"soil": SOIL}, [PerfectGround(), SOIL]),
        (MESH, {"soil": Soil(5.0, 0.0)}, [PerfectGround(), MeshOnSoil(Soil(5.0, 0.0), 0.1, 1e-3), Soil(5.0, 0.0)]),
    ],
)
def test_compared_grounds__are_a_plane_a_mesh_if_any_and_soil(own, options, expected):
    assert list(compared_grounds(own, **options).values()) == expected


def test_compared_grounds__need_soil():
    for ground in (PerfectGround(), FreeSpace()):
        with pytest.raises(ModelRangeError, match="no soil is known"):
            compared_grounds(ground, mesh=(0.1, 1e-3))


def test_compare_grounds__the_plane_does_not_differ_from_itself(rows):
    assert [(r.ground, r.beam) for r in rows] == [(g, b) for g in ("perfect", "mesh on soil", "bare soil") for b in ("up", "low")]
    for row in rows[:2]:
        assert row.coupling_difference == row.reflection_difference == row.ground_loss == 0.0
        assert row.element_difference_db == row.beam_difference_db == row.main_lobe_shape_difference_db == FLOOR_DB
        assert row.radiation_efficiency == pytest.approx(1.0)


def test_compare_grounds__numbers_are_what_their_names_say(solutions, rows):
    plane, bare = solutions["perfect"], solutions["bare soil"]
    first, second = plane.scattering_matrix(100.0), bare.scattering_matrix(100.0)
    apart = np.kron(np.eye(3), np.ones((2, 2))) == 0.0
    row = rows[4]
    expected = np.sqrt(np.sum(np.abs(second - first)[apart] ** 2) / np.sum(np.abs(first)[apart] ** 2))
    assert row.coupling_difference == pytest.approx(expected)
    assert row.reflection_difference == pytest.approx(np.abs(np.diagonal(second - first)).max())
    theta, phi = SKY.theta_rad, SKY.phi_rad
    each = [s.embedded_patterns(theta, phi) for s in (plane, bare)]
    power = [(np.abs(p) ** 2).sum(-1) @ SKY.weights_sr for p in (each[1] - each[0], each[0])]
    assert row.element_difference_db == pytest.approx(10 * np.log10(power[0].sum() / power[1].sum()))
    weights = plane.pointing_weights(0.0, 0.0, port="x")
    beams = [s.beam(weights, theta, phi) for s in (plane, bare)]
    power = [(np.abs(p) ** 2).sum(-1) @ SKY.weights_sr for p in (beams[1] - beams[0], beams[0])]
    assert row.beam_difference_db == pytest.approx(10 * np.log10(power[0] / power[1]))
    parts = bare.power_parts(weights)
    assert_allclose([row.radiation_efficiency, row.ground_loss], [parts.radiation_efficiency[0], parts.fraction("ground")[0]])
    assert row.radiation_efficiency + row.ground_loss == pytest.approx(1.0, abs=1e-9)


def test_compare_grounds__mesh_lies_between_plane_and_soil(rows):
    for beam in (0, 1):
        _, mesh, bare = rows[beam::2]
        assert 0.0 < mesh.coupling_difference < bare.coupling_difference
        assert 0.0 < mesh.ground_loss < bare.ground_loss < 1.0
        assert mesh.main_lobe_shape_difference_db < bare.main_lobe_shape_difference_db < mesh.beam_difference_db + 20.0


def test_compare_grounds__without_beams_and_with_mixed_terminations(solutions):
    found = compare_grounds(solutions, [], SKY)
    assert [r.beam for r in found] == [""] * 3
    assert all(np.isnan(r.beam_difference_db) and 0.0 < r.radiation_efficiency <= 1.0 + 1e-4 for r in found)
    mixed = compare_grounds(solutions, BEAMS, SKY, ["open", 100.0] * 3)
    # x ports all open and y ports all loaded can be driven, each beam by itself; together they cannot
    assert all(np.isnan(r.radiation_efficiency) for r in mixed)


def test_table_and_picture__have_every_figure(rows, tmp_path):
    assert list(MEANINGS) == [f.name for f in fields(GroundFigures)]
    path = tmp_path / "grounds.csv"
    write_ground_figures(rows, path, ("of a test",))
    text = path.read_text()
    assert text.startswith("# of a test\n")
    assert "not a measurement" in text
    assert "horizon" in text
    table = list(csv.DictReader(line for line in text.splitlines() if not line.startswith("#")))
    assert [float(r["ground_loss"]) for r in table] == pytest.approx([r.ground_loss for r in rows], rel=1e-8)
    for name, some in (("beams", rows), ("none", [r for r in rows if r.ground != "mesh on soil"][:1])):
        picture = draw_grounds(some, tmp_path / f"{name}.png", title="try", about=["soil"])
        assert picture.read_bytes().startswith(b"\x89PNG")
    with pytest.raises(ModelRangeError, match="nothing to draw"):
        draw_grounds([], tmp_path / "never.png")
