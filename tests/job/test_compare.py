"""Comparison of coupled and isolated beams: its numbers on fields whose answers are known, and on a small station."""

import csv
from dataclasses import fields as dataclass_fields
from dataclasses import replace
from types import SimpleNamespace

import numpy as np
import pytest

from elbowroom.base.errors import ExportError, JobFileError
from elbowroom.geometry.antennas import Antenna, Port
from elbowroom.geometry.directions import hemisphere_grid, unit_vectors
from elbowroom.geometry.grounds import FreeSpace, PerfectGround
from elbowroom.geometry.soils import Soil
from elbowroom.geometry.stations import Placed, Station
from elbowroom.geometry.wires import Wire
from elbowroom.job.beamfields import beam_fields, mean_nominal_phi_rad
from elbowroom.job.compare import (
    FLOOR_DB,
    MEANINGS,
    BeamComparison,
    compare_beams,
    decibels,
    half_power_width_deg,
    main_lobe,
    refined_peak,
    total_power,
    write_comparison,
)
from elbowroom.job.jobfile import Beam
from elbowroom.job.solve import solve

SKY = hemisphere_grid(3.0)


def level_dipole(height=0.5, half=0.45):
    return Antenna("level", [Wire((-half, 0, height), (half, 0, height), 0.003)], [Port("x", 0)])


@pytest.fixture(scope="module")
def pair():
    station = Station([Placed(level_dipole(), (0.0, 0.0, 0.0)), Placed(level_dipole(), (0.0, 0.6, 0.0))], ground=PerfectGround())
    return solve(station, 150e6)


@pytest.fixture(scope="module")
def rows(pair):
    return compare_beams(beam_fields(pair, [Beam("up", "x"), Beam("low", "x", 35.0, 20.0)], SKY, 100.0))


def test_decibels__of_nothing__is_the_floor():
    assert decibels(0.0) == FLOOR_DB
    assert decibels(100.0) == pytest.approx(20.0)
    assert decibels(1e-40) == FLOOR_DB


def test_half_power_width__of_a_gaussian__is_the_closed_form():
    angle = np.arange(-90.0, 90.001, 0.05)
    width = half_power_width_deg(angle, np.exp(-4.0 * np.log(2.0) * (angle / 17.0) ** 2))
    assert width == pytest.approx(17.0, abs=1e-4)


def test_half_power_width__when_one_side_never_falls__is_not_a_number():
    angle = np.arange(-20.0, 90.001, 0.05)
    assert np.isnan(half_power_width_deg(angle, np.exp(-4.0 * np.log(2.0) * (angle / 60.0) ** 2)))


def test_main_lobe__stops_at_the_null_around_it_and_crosses_the_zenith():
    grid = hemisphere_grid(1.0)
    separation = np.arccos(np.clip(grid.unit_vectors() @ unit_vectors(np.radians(4.0), 0.3), -1, 1))
    x = separation / np.radians(12.0) + 1e-9
    power = np.sinc(x) ** 2
    lobe = main_lobe(power.reshape(grid.shape), int(np.argmax(power))).ravel()
    assert np.all(separation[lobe] < np.radians(13.1))
    assert np.all(lobe[separation < np.radians(11.0)])
    # the first sidelobe of sinc^2, 13.26 dB down (closed form), is what remains highest outside
    assert 10 * np.log10(power[~lobe].max()) == pytest.approx(-13.26, abs=0.05)


@pytest.mark.parametrize(("theta", "phi"), [(0.0, 0.0), (0.55, 2.1), (0.031, 4.0), (1.2, -1.0)])
def testrefined_peak__lies_between_grid_points(theta, phi):
    grid = hemisphere_grid(2.0)
    true = unit_vectors(theta + 0.006 if theta else 0.0, phi + 0.007 if theta else 0.0)
    power = np.exp(-4 * np.log(2) * (np.arccos(np.clip(grid.unit_vectors() @ true, -1, 1)) / np.radians(30.0)) ** 2)
    _, peak = refined_peak(power, grid)
    assert np.degrees(np.arccos(np.clip(peak @ true, -1, 1))) < 0.05


def test_compare__of_identical_beams__finds_no_difference(pair):
    fields_ = beam_fields(pair, [Beam("up", "x")], SKY, 100.0)
    same = SimpleNamespace(
        beam=pair.isolated_beam, isolated_beam=pair.isolated_beam, embedded_patterns=pair.isolated_patterns, station=pair.station,
        discretisation=pair.discretisation, frequency_hz=pair.frequency_hz, statistics=pair.statistics,
        power_parts=pair.power_parts,
    )  # fmt: skip
    (row,) = compare_beams(replace(fields_, solution=same, coupled=fields_.isolated))
    assert row.largest_difference_db == FLOOR_DB
    assert row.rms_difference_db == FLOOR_DB
    assert row.peak_change_db == pytest.approx(0.0, abs=1e-9)
    assert row.peak_shift_deg == 0.0
    assert row.antenna_spread_db < -200.0


def test_compare__a_beam_scaled_by_a_complex_factor__keeps_its_shape(pair):
    fields_ = beam_fields(pair, [Beam("up", "x")], SKY, 100.0)
    scaled = SimpleNamespace(
        beam=lambda *a, **k: (0.5 + 0.5j) * pair.isolated_beam(*a, **k), isolated_beam=pair.isolated_beam,
        embedded_patterns=pair.isolated_patterns, station=pair.station, discretisation=pair.discretisation,
        frequency_hz=pair.frequency_hz, statistics=pair.statistics, power_parts=pair.power_parts,
    )  # fmt: skip
    (row,) = compare_beams(replace(fields_, solution=scaled, coupled=(0.5 + 0.5j) * fields_.isolated))
    assert row.main_lobe_shape_difference_db < -200.0
    assert row.peak_change_db == pytest.approx(10 * np.log10(0.5), abs=1e-9)
    # |1 - (0.5 + 0.5j)| of the peak
    assert row.largest_difference_db == pytest.approx(10 * np.log10(0.5), abs=1e-9)


def test_compare__numbers_of_a_pair__hang_together(rows, pair):
    up, low = rows
    assert (up.beam, low.beam) == ("up", "low")
    assert up.frequency_hz == 150e6
    assert -40.0 < up.rms_difference_db < 0.0
    assert up.main_lobe_difference_db <= up.largest_difference_db + 1e-9
    assert up.mesh_error == pair.statistics.mesh_error
    # both antennas of a symmetric pair change alike, so that the beam still peaks at the zenith
    assert up.peak_shift_deg < 1e-3
    assert up.antenna_spread_db < -60.0
    # seen from aside the two stand in different places
    assert -60.0 < low.antenna_spread_db < 0.0


def test_compare__directivity_of_a_level_short_dipole_over_ground__is_the_handbook_limit():
    # Low over a perfect ground a short level dipole has directivity 7.5: its image is of opposite sign, the pattern
    # cos^2(theta)(1 - sin^2(theta)cos^2(phi)); closed-form integral 8 pi/15.
    station = Station([Placed(level_dipole(height=0.05, half=0.05), (0.0, 0.0, 0.0))], ground=PerfectGround())
    (row,) = compare_beams(beam_fields(solve(station, 50e6), [Beam("one", "x")], SKY, 100.0))
    assert row.coupled_directivity_db == pytest.approx(10 * np.log10(7.5), abs=0.02)
    assert row.isolated_directivity_db == pytest.approx(row.coupled_directivity_db, abs=1e-6)
    assert np.isnan(row.antenna_spread_db)


def test_compare__directivity_in_free_space__counts_the_lower_half():
    station = Station([Placed(level_dipole(height=0.0, half=0.01), (0.0, 0.0, 0.0))], ground=FreeSpace())
    (row,) = compare_beams(beam_fields(solve(station, 50e6), [Beam("one", "x")], SKY, 100.0))
    # a short dipole: 1.5 (any antenna handbook)
    assert row.coupled_directivity_db == pytest.approx(10 * np.log10(1.5), abs=0.01)


def test_compare__without_beams_or_grid__is_refused(pair):
    with pytest.raises(JobFileError, match="no \\[\\[beam\\]\\]"):
        compare_beams(beam_fields(pair, [], SKY))
    with pytest.raises(JobFileError, match="grid"):
        compare_beams(beam_fields(pair, [Beam("up", "x")], replace(SKY, shape=None)))


def test_compare__ports_all_shorted_out_of_the_beam__is_refused(pair):
    fields_ = beam_fields(pair, [Beam("up", "x")], SKY, 100.0)
    with pytest.raises(JobFileError, match="zero in every direction"):
        compare_beams(replace(fields_, coupled=np.zeros_like(fields_.coupled)))


def test_mean_nominal_phi__follows_the_ports_in_the_beam():
    station = Station(
        [Placed(level_dipole(), (0, 0, 0), rotation_deg=30.0), Placed(level_dipole(), (0, 3, 0), rotation_deg=50.0)]
    )
    assert np.degrees(mean_nominal_phi_rad(station, np.array([[1, 1], [1, 0], [0, 1j]]))) == pytest.approx([40.0, 30.0, 50.0])


def test_mean_nominal_phi__of_opposite_ports__is_zero():
    station = Station([Placed(level_dipole(), (0, 0, 0)), Placed(level_dipole(), (0, 3, 0), rotation_deg=180.0)])
    assert mean_nominal_phi_rad(station, np.array([1.0, 1.0])) == pytest.approx([0.0])


def test_write_comparison__has_every_number_and_says_what_it_means(rows, tmp_path):
    path = tmp_path / "new" / "comparison.csv"
    write_comparison(rows, path, ["job: pair"])
    lines = path.read_text().splitlines()
    head = [line for line in lines if line.startswith("#")]
    assert "# job: pair" in head
    assert any("not a measurement" in line for line in head)
    names = [f.name for f in dataclass_fields(BeamComparison)]
    assert set(names) == set(MEANINGS)
    for name in names:
        assert any(line.startswith(f"# {name}: ") for line in head)
    table = list(csv.DictReader(line for line in lines if not line.startswith("#")))
    assert [r["beam"] for r in table] == ["up", "low"]
    assert float(table[1]["rms_difference_db"]) == pytest.approx(rows[1].rms_difference_db, rel=1e-8)


def test_write_comparison__below_a_file__names_the_path_and_leaves_nothing(rows, tmp_path):
    (tmp_path / "file").write_text("x")
    with pytest.raises(ExportError, match=r"cannot write .*file/comparison.csv"):
        write_comparison(rows, tmp_path / "file" / "comparison.csv")
    assert [p.name for p in tmp_path.iterdir()] == ["file"]


def test_total_power__adds_both_components():
    assert total_power(np.array([[3.0 + 4.0j, 0.0], [1.0, 1j]])) == pytest.approx([25.0, 2.0])


def test_compare__narrow_beams_on_a_coarse_sky__are_not_misjudged():
    """24 dipoles over 14 m at 350 MHz, pointed between grid points: levels settle as the grid that was handed in is refined."""
    rng = np.random.default_rng(5)
    places = rng.uniform(-7.0, 7.0, (60, 2))
    places = places[np.hypot(*places.T) < 7.0][:24]
    station = Station([Placed(level_dipole(height=0.3, half=0.2), (x, y, 0.0)) for x, y in places], ground=PerfectGround())
    solution = solve(station, 350e6)
    beams = [Beam("between", "x", 30.5, 49.5)]
    coarse, fine = (compare_beams(beam_fields(solution, beams, hemisphere_grid(step), 100.0))[0] for step in (3.0, 0.75))
    assert 0.75 < coarse.sky_step_deg < 1.5
    assert coarse.coupled_peak_m == pytest.approx(fine.coupled_peak_m, rel=1e-4)
    assert coarse.coupled_width_up_deg == pytest.approx(fine.coupled_width_up_deg, abs=0.01)
    assert coarse.coupled_directivity_db == pytest.approx(fine.coupled_directivity_db, abs=0.05)
    assert coarse.coupled_sidelobe_db == pytest.approx(fine.coupled_sidelobe_db, abs=0.3)
    assert coarse.coupled_peak_offset_deg < 0.2


def test_compare__over_soil_beams_tell_what_the_ground_takes():
    wires = [Wire((0.0, -0.45, 0.7), (0.0, 0.45, 0.7), 0.003, conductivity=1e5)]
    design = Antenna("rod", wires, [Port("x", 0)])
    beams = [Beam("up", "x"), Beam("low", "x", 50.0, 90.0)]
    found = {}
    for ground in (PerfectGround(), Soil(10.0, 0.01)):
        solution = solve(Station([Placed(design, (0, 0, 0)), Placed(design, (1.1, 0.2, 0))], ground), 150e6)
        found[ground.name] = compare_beams(beam_fields(solution, beams, SKY, 100.0))
        # the open port and the loaded one are driven together
        mixed = beam_fields(solution, beams, SKY, ["open", 100.0])
        assert all(np.isnan(row.radiation_efficiency) and np.isnan(row.ground_loss) for row in compare_beams(mixed))
    for rows_ in found.values():
        for row in rows_:
            assert row.radiation_efficiency + row.wire_loss + row.ground_loss == pytest.approx(1.0, abs=1e-9)
            assert row.wire_loss > 1e-3
    assert all(row.ground_loss == 0.0 for row in found["perfect"])
    assert all(0.1 < row.ground_loss < 0.7 for row in found["soil"])
    # two beams of one station do not lose the same
    assert found["soil"][0].ground_loss != pytest.approx(found["soil"][1].ground_loss, rel=0.02)
