"""Pictures: that they are written, whole and without a warning, and that what they show is what was meant."""

import logging
import os
import struct
import zlib
from contextlib import contextmanager
from dataclasses import replace
from pathlib import Path

import matplotlib
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from elbowroom.base.errors import ExportError, ModelRangeError
from elbowroom.geometry.antennas import Antenna, Port
from elbowroom.geometry.directions import Directions, hemisphere_grid, sphere_quadrature
from elbowroom.geometry.grounds import PerfectGround
from elbowroom.geometry.stations import Placed, Station
from elbowroom.geometry.wires import Wire
from elbowroom.job.beamfields import beam_fields
from elbowroom.job.jobfile import Beam, read_job
from elbowroom.job.pictures import (
    draw_cuts,
    draw_element_spread,
    draw_impedance,
    draw_layout,
    draw_sky_maps,
    picture_name,
    port_impedances,
)
from elbowroom.job.pictures import ports as ports_picture
from elbowroom.job.pictures import skymaps as skymaps_picture
from elbowroom.job.pictures.cuts import principal_planes
from elbowroom.job.pictures.layouts import _port_places
from elbowroom.job.pictures.ports import input_reflection, mismatch
from elbowroom.job.pictures.sheets import decibels, frequency_text, printable, sheet, shortened, termination_text
from elbowroom.job.pictures.skymaps import central_port, closed_grid, component_size, isolated_peak, map_places, response_words
from elbowroom.job.solve import solve
from elbowroom.job.templates import write_template
from helpers import FREQUENCY_HZ, cluster, crossed, dipole


@pytest.fixture(scope="module")
def job(tmp_path_factory):
    folder = tmp_path_factory.mktemp("small")
    write_template("small", folder)
    return read_job(folder / "job.toml")


@pytest.fixture(scope="module")
def solution(job):
    return solve(job.station(), job.frequencies_hz[0])


@pytest.fixture(scope="module")
def fields(job, solution):
    return beam_fields(solution, job.beams, hemisphere_grid(10.0), job.termination_values())


@pytest.fixture(autouse=True)
def _silent(caplog, capsys):
    """Nothing may go to the screen or to the log, and the plotting settings of the process stay as they are."""
    before = dict(matplotlib.rcParams)
    with caplog.at_level(logging.INFO, logger="matplotlib"):
        yield
    assert [r.message for r in caplog.records if r.levelno >= logging.WARNING] == []
    assert capsys.readouterr() == ("", "")
    assert dict(matplotlib.rcParams) == before


def pixels(path: Path) -> tuple[int, int]:
    """Return width and height of a PNG file after checking all of its chunks against their checksums (PNG standard, 5.3)."""
    data = path.read_bytes()
    assert data[:8] == b"\x89PNG\r\n\x1a\n"
    at, kinds = 8, []
    while at < len(data):
        (length,) = struct.unpack(">I", data[at : at + 4])
        body = data[at + 4 : at + 8 + length]
        assert struct.unpack(">I", data[at + 8 + length : at + 12 + length])[0] == zlib.crc32(body)
        kinds.append(body[:4])
        at += length + 12
    assert kinds[0] == b"IHDR"
    assert kinds[-1] == b"IEND"
    return struct.unpack(">II", data[16:24])


def looks_drawn(path: Path) -> None:
    from matplotlib.image import imread

    width, height = pixels(path)
    assert 1000 <= width <= 2400
    assert 500 <= height <= 2400
    image = imread(path)[:, :, :3]
    ink = float(np.mean(np.any(image < 0.9, axis=2)))
    assert 0.005 < ink < 0.8
    # text or lines that run off the sheet would leave ink on its edge
    edge = np.concatenate(
        [image[:2].reshape(-1, 3), image[-2:].reshape(-1, 3), image[:, :2].reshape(-1, 3), image[:, -2:].reshape(-1, 3)]
    )
    assert edge.min() > 0.95


def test_draw_layout__small_station_and_a_single_antenna(job, tmp_path):
    path = draw_layout(
        job.station(), tmp_path / "new" / "layout.png", title=job.title, frequencies_hz=job.frequencies_hz, termination=100.0
    )
    looks_drawn(path)
    looks_drawn(draw_layout(Station([Placed(dipole())]), tmp_path / "one.png"))
    assert sorted(os.listdir(tmp_path / "new")) == ["layout.png"]


def test_draw_layout__many_antennas(tmp_path):
    from elbowroom.geometry.arrangements import random_disc

    places = random_disc(256, radius_m=19.0, minimum_spacing_m=1.5, seed=3).positions
    looks_drawn(draw_layout(Station([Placed(crossed(), p) for p in places], PerfectGround()), tmp_path / "many.png"))


def test_draw_layout__five_designs_tilts_and_odd_names(tmp_path):
    monopole = Antenna("mast $x_1$ \u5929\u7dda", [Wire((0, 0, 0), (0, 0, 0.5), 0.004)], [Port("p\x07", 0, position=0.0)])
    placed = [Placed(monopole, (-4.0, 0.0, 0.0), name="\u5929 \\frac{")]
    placed += [
        Placed(crossed(arm_length_m=0.4 + 0.05 * i), (2.0 * i, 1.0, 0.0), 30.0 * i, 5.0 * i, name=f"a{i}" * 20) for i in range(4)
    ]
    looks_drawn(draw_layout(Station(placed, PerfectGround()), tmp_path / "odd.png", title="two\nlines $ \\alpha & \u5929" * 9))


@pytest.mark.parametrize(("count", "named"), [(7, True), (70, False)])
def test_draw_layout__damage_leaves_marks_and_names(count, named, tmp_path, monkeypatch):
    from elbowroom.job.damage import Damage
    from elbowroom.job.pictures import layouts as module

    places = [(2.0 * (i % 9), 2.0 * (i // 9), 0.0) for i in range(count)]
    placed = [Placed(crossed(), place, name=f"A{i:03d}") for i, place in enumerate(places)]
    gone = Placed(crossed(), (-3.0, 1.0, 0.0), name="gone")
    damage = Damage(("gone",), {"A001/x": "open", "A001/y": "open", "A002/x": "shorted", "A004/y": "amplifier off"})
    figures = keep_figures(monkeypatch, module)
    looks_drawn(draw_layout(Station(placed), tmp_path / "l.png", damage=damage, missing=[gone]))
    plan = figures[0].axes[0]
    marked = {line.get_label(): line.get_xydata() for line in plan.lines}
    reach = max(np.hypot(*end[:2]) for wire in crossed().wires for end in (wire.start, wire.end))
    np.testing.assert_allclose(marked["2 ports open"], [[2.0 + reach, 0.0], [2.0, reach]], atol=1e-12)
    np.testing.assert_allclose(marked["1 port shorted"], [[4.0 + reach, 0.0]], atol=1e-12)
    np.testing.assert_allclose(marked["1 antenna missing"], [[-3.0, 1.0]], atol=1e-12)
    assert len(marked["1 port off"]) == 1
    assert plan.get_xlim()[0] < -3.4
    names = {text.get_text() for text in plan.texts}
    assert {"gone", "A001", "A002", "A004"} <= names
    assert ("A003" in names) is named


def test_missing_antennas__stand_where_the_layout_and_the_turn_put_them(job):
    from elbowroom.job.damage import Damage
    from elbowroom.job.pictures import missing_antennas

    whole = job.station()
    broken = replace(job, damage=Damage((whole.placed[2].name,)))
    assert missing_antennas(broken) == (whole.placed[2],)
    assert missing_antennas(job) == ()


def test_draw_layout__ports_are_where_their_gaps_are():
    leaning = Placed(crossed(), (1.0, 2.0, 0.0), rotation_deg=90.0)
    upright = Placed(dipole(height=1.0), (5.0, 0.0, 0.0))
    places, level = _port_places(Station([leaning, upright]))
    np.testing.assert_allclose(places, [[1.0, 2.0, 0.9], [1.0, 2.0, 0.86], [5.0, 0.0, 1.0]], atol=1e-12)
    assert level.tolist() == [True, True, False]


@pytest.mark.parametrize("frequencies", [1, 3])
@pytest.mark.parametrize("count", [1, 3])
def test_draw_impedance__one_or_more_antennas_and_frequencies(count, frequencies, tmp_path):
    made = [
        port_impedances(solve(cluster(count), f), ["open", "short", 50.0, 75 + 20j, 100.0, 1e3][: 2 * count])
        for f in (160e6, 140e6, 150e6)[:frequencies]
    ]
    looks_drawn(draw_impedance(made, tmp_path / "z.png", title="t", ports=["y", "x"]))


def as_interpolated(made):
    return replace(made, statistics=replace(made.statistics, origin="interpolated currents"))


def test_draw_impedance__channels_made_from_others_are_marked(solution, tmp_path, monkeypatch):
    marked = []
    monkeypatch.setattr(ports_picture, "mark_interpolated", lambda axes, x, origins: marked.append((list(x), list(origins))))
    made = [port_impedances(solve(cluster(2), 140e6)), port_impedances(as_interpolated(solve(cluster(2), 141e6)))]

    draw_impedance(made, tmp_path / "z.png")

    assert marked[0] == ([140.0, 141.0], ["assembled", "interpolated currents"])
    assert len(marked) == 8


def test_pictures_of_a_channel_made_from_others__say_so(job, solution, tmp_path, monkeypatch):
    said = []

    def noted(path, title, details, *rest, **more):
        said.append(list(details))
        return sheet(path, title, details, *rest, **more)

    monkeypatch.setattr(skymaps_picture, "sheet", noted)
    for made in (solution, as_interpolated(solution)):
        draw_sky_maps(beam_fields(made, job.beams, hemisphere_grid(15.0), job.termination_values()), 0, tmp_path / "sky.png")

    assert "interpolated" not in " ".join(said[0])
    assert "currents interpolated between solved channels" in said[1]
    assert "perfect ground" in said[0]


def test_draw_impedance__unknown_port_and_nothing_to_draw_are_refused(solution, tmp_path):
    with pytest.raises(ModelRangeError, match="port 'q'"):
        draw_impedance([port_impedances(solution)], tmp_path / "z.png", ports=["q"])
    with pytest.raises(ModelRangeError, match="one solved frequency"):
        draw_impedance([], tmp_path / "z.png")
    assert os.listdir(tmp_path) == []


def test_port_impedances__open_ports_show_the_diagonal_of_z_and_shorted_ones_that_of_y(solution):
    np.testing.assert_allclose(port_impedances(solution, "open").coupled_ohm, np.diag(solution.impedance_matrix()), rtol=1e-9)
    shorted = port_impedances(solution, "short").coupled_ohm
    np.testing.assert_allclose(shorted, 1.0 / np.diag(solution.admittance_matrix()), rtol=1e-9)
    alone = np.concatenate([np.diag(solution.isolated_impedance(a)) for a in range(len(solution.station))])
    np.testing.assert_allclose(port_impedances(solution, "open").isolated_ohm, alone, rtol=1e-9)


def test_port_impedances__terminated_neighbours_as_a_circuit_says(solution):
    # Z_in of port p with the others on Z_T: the Schur complement of the loaded others
    load = np.linspace(20.0, 200.0, 14) + 1j * np.linspace(-50.0, 80.0, 14)
    z = solution.impedance_matrix()
    others = np.arange(1, 14)
    expected = z[0, 0] - z[0, others] @ np.linalg.solve(z[np.ix_(others, others)] + np.diag(load[others]), z[others, 0])
    found = port_impedances(solution, load)
    np.testing.assert_allclose(found.coupled_ohm[0], expected, rtol=1e-9)
    power_wave = abs((expected - load[0].conjugate()) / (expected + load[0]))
    np.testing.assert_allclose(found.coupled_reflection[0], power_wave, rtol=1e-9)
    # the neighbours do matter, so that leaving them out would be noticed
    assert abs(expected - z[0, 0]) > 1e-4 * abs(expected)


def test_input_reflection_and_mismatch__closed_forms():
    # two ports, textbook: S11 + S12 S21 t/(1 - S22 t)
    s, t = np.array([[0.1 + 0.2j, 0.3j], [0.3j, -0.4]]), np.array([0.7, -0.2 + 0.1j])
    assert input_reflection(s, t)[0] == pytest.approx(s[0, 0] + s[0, 1] * s[1, 0] * t[1] / (1 - s[1, 1] * t[1]), rel=1e-14)
    np.testing.assert_allclose(
        mismatch(np.array([0.3 + 0.4j, 0.5, 0.2j]), np.array([0.3 - 0.4j, 1.0, -1.0])), [0.0, 1.0, 1.0], atol=1e-15
    )
    assert mismatch(np.array([1.0 + 0j]), np.array([1.0 + 0j]))[0] == 1.0


@pytest.mark.parametrize("component", ["total", "co", "cross"])
def test_draw_sky_maps__every_component(component, job, fields, tmp_path):
    projection = "sine" if component == "co" else "zenith-angle"
    path = draw_sky_maps(fields, 2, tmp_path / "sky.png", title=job.title, component=component, projection=projection)
    looks_drawn(path)


def test_draw_sky_maps__beam_at_the_horizon_and_shorted_ports(solution, tmp_path):
    beam = Beam("edge", "x", 90.0, -100.0, ("A002",))
    looks_drawn(draw_sky_maps(beam_fields(solution, [beam], hemisphere_grid(15.0), "short"), 0, tmp_path / "s.png", port=3))


def test_draw_sky_maps__what_cannot_be_drawn_is_refused(job, solution, fields, tmp_path):
    path = tmp_path / "s.png"
    with pytest.raises(ModelRangeError, match="component 'left'"):
        draw_sky_maps(fields, 0, path, component="left")
    with pytest.raises(ModelRangeError, match="projection 'polar'"):
        draw_sky_maps(fields, 0, path, projection="polar")
    with pytest.raises(ModelRangeError, match="grid of directions"):
        draw_sky_maps(beam_fields(solution, job.beams, Directions([0.1, 0.2], [0.0, 0.0])), 0, path)
    with pytest.raises(ModelRangeError, match="no port takes part"):
        draw_sky_maps(beam_fields(solution, [Beam("none", "z")], hemisphere_grid(45.0)), 0, path)
    assert os.listdir(tmp_path) == []


@pytest.mark.parametrize(("zenith", "component"), [(0.0, "total"), (40.0, "co"), (90.0, "cross")])
def test_draw_cuts__pointings_and_components(zenith, component, job, solution, tmp_path):
    beam = Beam("b$x$/\u5929", "y", zenith, 250.0)
    path = draw_cuts(
        solution, beam, tmp_path / picture_name("cuts", beam.name, 110.25e6),
        termination=job.termination_values(), title=job.title, component=component, step_deg=2.0,
    )  # fmt: skip
    looks_drawn(path)


def test_draw_element_spread__few_and_more_antennas(job, solution, tmp_path):
    looks_drawn(draw_element_spread(solution, "y", tmp_path / "few.png", title=job.title, step_deg=5.0))
    row = Station([Placed(dipole(), (1.0 * i, 0.0, 0.0)) for i in range(12)])
    looks_drawn(draw_element_spread(solve(row, FREQUENCY_HZ), "p", tmp_path / "more.png", step_deg=5.0))
    with pytest.raises(ModelRangeError, match="port 'q'"):
        draw_element_spread(solution, "q", tmp_path / "none.png")


def test_pictures__unwritable_target_names_the_path(job, solution, fields, tmp_path):
    (tmp_path / "file").write_text("not a folder")
    target = tmp_path / "file" / "picture.png"
    beam = job.beams[0]
    for draw in (
        lambda: draw_layout(job.station(), target),
        lambda: draw_impedance([port_impedances(solution)], target),
        lambda: draw_sky_maps(fields, 0, target),
        lambda: draw_cuts(solution, beam, target, step_deg=30.0),
        lambda: draw_element_spread(solution, "x", target, step_deg=30.0),
    ):
        with pytest.raises(ExportError, match=r"picture\.png"):
            draw()
    assert (tmp_path / "file").read_text() == "not a folder"


def test_pictures__an_older_picture_survives_a_failure(tmp_path):
    path = tmp_path / "p.png"
    path.write_bytes(b"older")
    with pytest.raises(ZeroDivisionError), sheet(path, "title", ["detail"]):
        1 / 0  # noqa: B018
    assert path.read_bytes() == b"older"
    with sheet(path, "title", ["detail"]) as figure:
        figure.add_subplot()
    pixels(path)
    assert os.listdir(tmp_path) == ["p.png"]


def test_picture_name__says_kind_name_and_frequency():
    assert picture_name("sky", "zenith-x", 110e6) == "sky_zenith-x_110MHz.png"
    assert picture_name("sky", "zenith-x", 110.25e6) == "sky_zenith-x_110.25MHz.png"
    assert picture_name("cuts", "b", 50e6 + 1.0) == "cuts_b_50.000001MHz.png"
    assert picture_name("cuts", "b", 1e9 / 3.0) == "cuts_b_333.333333MHz.png"
    assert picture_name("layout") == "layout.png"
    for bad in (0.0, -1.0, np.nan, np.inf):
        with pytest.raises(ModelRangeError, match="positive"):
            picture_name("sky", "b", bad)


def test_picture_name__names_that_differ_never_share_a_file():
    names = [
        "a b",
        "a-b",
        "A-b",
        "a/b",
        "a\\b",
        "../a-b",
        "\u00e4-b",
        "a-b ",
        "\u5929",
        "\u7dda",
        "x" * 99,
        "x" * 98,
        ".",
        "-",
        "a_b",
        "CON",
    ]
    assert len({picture_name("sky", n, 1e8).lower() for n in names}) == len(names)


@settings(max_examples=60, deadline=None)
@given(st.text(min_size=1))
def test_picture_name__is_safe_whatever_the_beam_is_called(name):
    found = picture_name("sky", name, 110.25e6)
    assert set(found) <= set("abcdefghijklmnopqrstuvwxyz0123456789._-MHz")
    assert found.startswith("sky_")
    assert found.endswith("_110.25MHz.png")
    assert len(found) < 100


def test_decibels__values_floor_and_refusals():
    found = decibels(np.array([1.0, 10.0, -0.1, 1j, 0.0, 1e-300]), 1.0, -60.0)
    np.testing.assert_allclose(found, [0.0, 20.0, -20.0, 0.0, -60.0, -60.0], atol=1e-12)
    assert decibels([0.0, 2.0], 0.0, -40.0).tolist() == [-40.0, -40.0]
    assert np.all(np.isfinite(decibels([1e300], 5e-324)))
    for amplitude, reference in ((np.nan, 1.0), (np.inf, 1.0), (1.0, np.nan), (1.0, -1.0)):
        with pytest.raises(ModelRangeError, match="finite amplitudes"):
            decibels([amplitude], reference)


def test_closed_grid__first_column_again_behind_the_last():
    sky = hemisphere_grid(45.0)
    grid = closed_grid(np.arange(len(sky)), sky)
    assert grid.shape == (3, 9)
    np.testing.assert_array_equal(grid[:, :-1].ravel(), np.arange(24))
    np.testing.assert_array_equal(grid[:, -1], grid[:, 0])
    assert closed_grid(np.arange(len(sphere_quadrature(4, True))), sphere_quadrature(4, True)).shape == (3, 6)
    with pytest.raises(ModelRangeError, match="got shape"):
        closed_grid(np.arange(5), sky)
    half = Directions(np.full(4, 0.3), np.radians([0.0, 45.0, 90.0, 135.0]), shape=(1, 4))
    with pytest.raises(ModelRangeError, match="once round"):
        closed_grid(np.arange(4), half)


@pytest.mark.parametrize(("projection", "radius_60"), [("zenith-angle", 2.0 / 3.0), ("sine", np.sqrt(3.0) / 2.0)])
def test_map_places__north_up_east_on_the_right(projection, radius_60):
    east, north, west, south = np.radians([0.0, 90.0, 180.0, 270.0])
    right, up = map_places(np.radians([60.0] * 4 + [0.0, 90.0]), [east, north, west, south, north, north], projection)
    np.testing.assert_allclose(right, np.array([1, 0, -1, 0, 0, 0]) * radius_60, atol=1e-15)
    np.testing.assert_allclose(up, [0, radius_60, 0, -radius_60, 0, 1], atol=1e-15)


def test_map__east_of_the_picture_is_east_of_the_sky(tmp_path):
    """A field that is strong in the east only puts its bright colour on the right of the picture."""
    from matplotlib import colormaps
    from matplotlib.image import imread

    from elbowroom.job.pictures.skymaps import _draw_map

    sky = hemisphere_grid(5.0)
    level = closed_grid(np.where(np.cos(sky.phi_rad) > 0.5, 0.0, -60.0), sky)
    places = map_places(closed_grid(sky.theta_rad, sky), closed_grid(sky.phi_rad, sky)[:, [*range(72), 0]])
    with sheet(tmp_path / "p.png", "t", []) as figure:
        _draw_map(figure.add_subplot(), places, level, "viridis", (-60.0, 0.0), "zenith-angle")
    image = imread(tmp_path / "p.png")[:, :, :3]
    bright = np.argwhere(np.linalg.norm(image - colormaps["viridis"](1.0)[:3], axis=2) < 0.05)
    dark = np.argwhere(np.linalg.norm(image - colormaps["viridis"](0.0)[:3], axis=2) < 0.05)
    assert bright[:, 1].min() > np.median(dark[:, 1])
    assert abs(np.median(bright[:, 0]) - 0.5 * (dark[:, 0].min() + dark[:, 0].max())) < 20


def test_component_size__total_is_kept_by_co_and_cross():
    rng = np.random.default_rng(1)
    field = rng.normal(size=(3, 20, 2)) + 1j * rng.normal(size=(3, 20, 2))
    phi = rng.uniform(0.0, 6.0, 20)
    co, cross = (component_size(field, phi, 0.4, c) for c in ("co", "cross"))
    np.testing.assert_allclose(co**2 + cross**2, component_size(field, phi, 0.4) ** 2, rtol=1e-12)
    # a field along east at the zenith is all co-polar for a port that lies east-west
    at_zenith = np.array([[np.cos(0.7), -np.sin(0.7)]])
    assert component_size(at_zenith, [0.7], 0.0, "cross")[0] == pytest.approx(0.0, abs=1e-15)


def test_principal_planes__both_go_through_the_pointing_and_meet_at_right_angles():
    theta, phi = np.radians(40.0), np.radians(-30.0)
    planes = principal_planes(theta, phi, 1.0)
    target = np.array([np.sin(theta) * np.cos(phi), np.sin(theta) * np.sin(phi), np.cos(theta)])
    normals = []
    for plane in planes:
        unit = plane.directions.unit_vectors()
        at = int(np.flatnonzero(np.isclose(plane.angle_deg, plane.pointing_deg))[0])
        np.testing.assert_allclose(unit[at], target, atol=1e-12)
        # equal steps on one great circle
        np.testing.assert_allclose(np.sum(unit[1:] * unit[:-1], axis=1), np.cos(np.radians(1.0)), atol=1e-12)
        normals.append(np.cross(unit[at], unit[at + 1]) / np.sin(np.radians(1.0)))
        assert plane.directions.theta_rad.max() <= 0.5 * np.pi
    assert normals[0] @ normals[1] == pytest.approx(0.0, abs=1e-12)
    assert "azimuth 120\u00b0" in planes[0].label
    assert "azimuth 30\u00b0" in planes[1].label
    # growing angle goes where the label says: azimuth 30 deg is phi 60 deg
    assert planes[1].directions.phi_rad[-1] == pytest.approx(np.radians(60.0))


def test_principal_planes__a_beam_at_the_zenith_is_cut_along_the_compass():
    west_east, south_north = principal_planes(0.0, 1.234, 10.0)
    np.testing.assert_allclose(west_east.directions.unit_vectors()[-1], [1.0, 0.0, 0.0], atol=1e-15)
    np.testing.assert_allclose(south_north.directions.unit_vectors()[-1], [0.0, 1.0, 0.0], atol=1e-15)
    assert west_east.label.endswith("east")
    assert south_north.label.endswith("north")


def test_central_port_and_isolated_peak(job, solution, fields):
    row = central_port(fields, 1)
    assert str(solution.port_names[row]) == "A001/y"
    beam = solution.isolated_beam(fields.weights[1], fields.directions.theta_rad, fields.directions.phi_rad)
    assert isolated_peak(fields, 1) == pytest.approx(np.sqrt(np.sum(np.abs(beam) ** 2, axis=1)).max(), rel=1e-12)


def test_words__terminations_frequencies_and_texts():
    assert termination_text(100.0) == "ports terminated with 100 ohm"
    assert termination_text(75 - 20j) == "ports terminated with 75 - 20j ohm"
    assert termination_text("open") == "ports open"
    assert termination_text([50.0, 50.0, "short"]) == "ports terminated with 50 ohm, 1 of 3 otherwise"
    assert termination_text(np.array([50.0, 50.0])) == "ports terminated with 50 ohm"
    assert response_words(["short", 50.0], [0]) == ("short-circuit current per field", "m/ohm")
    assert response_words(["short", 50.0], [1]) == ("effective length", "m")
    assert response_words(["short", 50.0], [0, 1])[1] == "in mixed units"
    assert frequency_text(110.25e6) == "110.25 MHz"
    assert printable("a\u5929\x07b") == "a\u25a1\u25a1b"
    assert shortened("abcdef", 4) == "abc\u2026"


def test_draw_element_spread__dead_ports_and_other_units_stay_out(solution, tmp_path, monkeypatch):
    asked = []
    whole = type(solution).embedded_patterns

    def watched(self, *arguments, **options):
        asked.append(list(options["ports"]))
        return whole(self, *arguments, **options)

    monkeypatch.setattr(type(solution), "embedded_patterns", watched)
    names = [str(n) for n in solution.port_names]
    x = [i for i, n in enumerate(names) if n.endswith("/x")]
    live = np.ones(len(names), dtype=bool)
    live[x[2]] = False
    seen = [100.0] * len(names)
    seen[x[2]] = seen[x[4]] = "short"
    looks_drawn(draw_element_spread(solution, "x", tmp_path / "live.png", step_deg=15.0, termination=seen, taking_part=live))
    # x[2] is dead; x[4] answers with a current and the others with voltages
    assert asked == [[i for i in x if i not in (x[2], x[4])]] * 2
    with pytest.raises(ModelRangeError, match="no port 'x' takes part"):
        draw_element_spread(solution, "x", tmp_path / "n.png", taking_part=np.zeros(len(names)))
    with pytest.raises(ModelRangeError, match="one for each of 14 ports"):
        draw_element_spread(solution, "x", tmp_path / "n.png", taking_part=[True])


def keep_figures(monkeypatch, module):
    """Return a list that a module's figures are added to as they are finished."""
    figures = []

    @contextmanager
    def kept(*arguments, **options):
        with sheet(*arguments, **options) as figure:
            yield figure
            figures.append(figure)

    monkeypatch.setattr(module, "sheet", kept)
    return figures


@pytest.mark.parametrize("frequencies", [1, 2])
def test_draw_impedance__reflections_above_one_are_not_cut_off(frequencies, tmp_path, monkeypatch):
    """Behind a termination of negative resistance: |(Z - Z_T*)/(Z + Z_T)| exceeds 1."""
    from elbowroom.job.pictures import ports as module
    from elbowroom.system.terminations import ActiveImpedance

    made = [port_impedances(solve(cluster(2), f), [ActiveImpedance(-20.0), 50.0, 50.0, 50.0]) for f in (140e6, 150e6)]
    figures = keep_figures(monkeypatch, module)
    looks_drawn(draw_impedance(made[:frequencies], tmp_path / "z.png", ports=["x"]))
    largest = max(item.coupled_reflection.max() for item in made[:frequencies])
    assert largest > 1.05
    assert figures[0].axes[3].get_ylim()[1] >= largest


@pytest.mark.parametrize("frequencies", [1, 2])
def test_draw_impedance__dead_ports_stay_out_and_places_have_names(frequencies, tmp_path, monkeypatch):
    """The shorted port reflects all; with it the panel would reach 1."""
    made = [port_impedances(solve(cluster(3), f), [100.0, 100.0, "short", 100.0, 100.0, 100.0]) for f in (140e6, 150e6)]
    said, figures = [], keep_figures(monkeypatch, ports_picture)
    inner = ports_picture.sheet
    monkeypatch.setattr(ports_picture, "sheet", lambda *a, **k: said.append(a) or inner(*a, **k))
    looks_drawn(draw_impedance(made[:frequencies], tmp_path / "z.png", ports=["x"], dead=["A002/x", "A001/y"]))
    assert "1 dead port left out" in said[0][3]
    assert said[0][2][2] == "perfect ground"
    panel = figures[0].axes[3]
    drawn = np.concatenate([np.asarray(line.get_ydata(), dtype=float) for line in panel.lines])
    live = np.concatenate([m.coupled_reflection[[0, 4]] for m in made[:frequencies]])
    assert drawn.max() <= max(live.max(), max(m.isolated_reflection[[0, 4]].max() for m in made)) < 0.999
    if frequencies == 1:
        assert [text.get_text() for text in panel.get_xticklabels()] == ["A001", "A003"]
    # all of a name dead: they are drawn rather than nothing
    draw_impedance(made, tmp_path / "z.png", ports=["x"], dead=["A001/x", "A002/x", "A003/x"])
    assert not any("dead" in text for text in said[1][3])


def test_mark_interpolated__has_a_place_in_the_legend_and_is_no_stroke():
    from matplotlib.figure import Figure

    from elbowroom.job.pictures.sheets import legend_of, mark_interpolated

    axes = Figure().add_subplot()
    mark_interpolated(axes, np.array([1.0, 2.0, 3.0]), ["assembled", "interpolated currents", "assembled"])
    (handle,), (label,) = legend_of([axes])
    assert label == "interpolated channel"
    assert handle.get_marker() == "^"
    np.testing.assert_allclose(handle.get_xdata(), [2.0])


def test_ground_text__every_ground_in_few_words():
    from elbowroom.geometry.grounds import GROUND_TYPES, FreeSpace, MeshOnSoil
    from elbowroom.geometry.soils import LayeredSoil, MoistSoil, Soil, TabulatedSoil
    from elbowroom.job.pictures.sheets import ground_text

    moist = MoistSoil(0.2, 0.01)
    known = {
        FreeSpace(): "in free space",
        PerfectGround(): "perfect ground",
        Soil(10.0, 0.01): "soil, permittivity 10, 0.01 S/m",
        MeshOnSoil(Soil(10.0, 0.01), 0.1, 0.0015): "100 mm mesh on soil, permittivity 10, 0.01 S/m",
        LayeredSoil(((0.5, Soil(4.0, 0.001)),), Soil(10.0, 0.01)): "2 layers of soil",
        moist: "soil, 20 % water",
        TabulatedSoil((1e8, 2e8), (10.0, 9.0), (0.01, 0.02)): "soil of a table",
    }
    assert {type(ground) for ground in known} == set(GROUND_TYPES)
    assert {ground: ground_text(ground) for ground in known} == known


def test_pictures_of_an_antenna__tell_the_ground_and_leave_no_panel_empty(tmp_path, monkeypatch):
    """Crossed dipoles over a perfect plane are kept apart by symmetry: there is no coupling to draw."""
    from elbowroom.job.oneantenna import alone, antenna_figures, pattern_cuts, solve_alone
    from elbowroom.job.pictures import antenna as module

    said, figures = [], keep_figures(monkeypatch, module)
    inner = module.sheet
    monkeypatch.setattr(module, "sheet", lambda *a, **k: said.append(a) or inner(*a, **k))
    station = alone(crossed(), PerfectGround())
    solved = solve_alone(station, 100e6)
    rows = antenna_figures(solved, solve_alone(station, 100e6, "refined"))
    module.draw_antenna_impedance(rows, tmp_path / "z.png", ground=station.ground)
    assert len(figures[0].axes) == 2
    assert "coupling between ports: below -80 dB everywhere" in said[0][3]
    module.draw_antenna_gain(rows, tmp_path / "g.png", ground=station.ground)
    module.draw_antenna_convergence(rows, tmp_path / "d.png", ground=station.ground)
    module.draw_antenna_cuts(pattern_cuts(solved, step_deg=5.0), tmp_path / "c.png", ground=station.ground)
    assert ["perfect ground" in arguments[2] for arguments in said] == [True] * 4


def test_draw_antenna__of_two_ports_over_a_ground_and_of_one_with_a_network_in_free_space(tmp_path):
    from elbowroom.geometry.antennas import Load
    from elbowroom.geometry.networks import Branch, FeedPoint, Line, Network
    from elbowroom.job.oneantenna import alone, antenna_figures, pattern_cuts, solve_alone
    from elbowroom.job.pictures import antenna as pictures

    wires = [Wire((-0.4, 0.0, z), (0.4, 0.0, z), 0.002) for z in (1.0, 1.2)]
    network = Network(
        (Line("in", "a", 80.0, 0.1), Line("a", "b", 80.0, 0.2, crossed=True)), branches=(Branch("b", resistance_ohm=99.0),)
    )
    fed = Antenna(
        "fed $x$", wires, [Port("p\x07", node="in")], [Load(0, 0.2, 5.0)], [FeedPoint("a", 0), FeedPoint("b", 1)], network
    )
    for name, station, frequencies in (
        ("two", alone(crossed(), PerfectGround()), (80e6, 150e6)),
        ("one", alone(fed), (150e6,)),
        ("mast", alone(dipole(height=1.0), PerfectGround()), (150e6,)),
    ):
        solved = [solve_alone(station, f) for f in frequencies]
        rows = [row for s in solved for row in antenna_figures(s, solve_alone(station, s.frequency_hz, "refined"))]
        cuts = [cut for s in solved for cut in pattern_cuts(s, step_deg=5.0)]
        looks_drawn(pictures.draw_antenna(station, tmp_path / f"{name}v.png", title=name, frequencies_hz=frequencies))
        looks_drawn(pictures.draw_antenna_impedance(rows, tmp_path / f"{name}z.png", termination=75 - 20j))
        looks_drawn(pictures.draw_antenna_gain(rows, tmp_path / f"{name}g.png", title=name, free_space=name == "one"))
        looks_drawn(pictures.draw_antenna_cuts(cuts, tmp_path / f"{name}c.png", title=name))
        looks_drawn(pictures.draw_antenna_convergence(rows, tmp_path / f"{name}d.png", title=name))
    for draw in (
        pictures.draw_antenna_impedance,
        pictures.draw_antenna_gain,
        pictures.draw_antenna_convergence,
        pictures.draw_antenna_cuts,
    ):
        with pytest.raises(ModelRangeError, match="one "):
            draw([], tmp_path / "none.png")


def test_draw_from_above__arrows_that_reach_past_the_wires_are_not_cut_off():
    """The corners of a bow-tie are farther from its centre than its ends along the co-polarisation, and arrows are as long."""
    import matplotlib.pyplot as plt

    from elbowroom.geometry.shapes import bow_tie
    from elbowroom.job.oneantenna import alone
    from elbowroom.job.pictures.layouts import draw_from_above, port_colours

    station = alone(bow_tie(half_length_m=0.35, flare_deg=90.0, height_m=0.9, wire_radius_m=0.003))
    figure, axes = plt.subplots()
    draw_from_above(axes, station, port_colours(station))
    reach = 0.35 * np.sqrt(2.0)
    assert axes.get_xlim()[1] > reach
    plt.close(figure)


def test_draw_antenna_gain__of_a_dipole_in_free_space__shows_neither_rounding_nor_names_of_nothing(tmp_path, monkeypatch):
    """It has no front and no width across: round it every direction is as good."""
    from elbowroom.job.oneantenna import alone, antenna_figures, solve_alone
    from elbowroom.job.pictures import antenna as module

    figures = keep_figures(monkeypatch, module)
    rows = antenna_figures(solve_alone(alone(dipole(height=1.0, direction=(1.0, 0.0, 0.0))), 150e6))
    module.draw_antenna_gain(rows, tmp_path / "g.png", free_space=True)
    panels = {axes.get_title(loc="left"): axes for axes in figures[0].axes}
    low, high = panels["front to back"].get_ylim()
    assert high - low >= 0.999
    named = [text.get_text() for text in panels["half-power width"].get_legend().get_texts()]
    assert named == ["port p, along"]
