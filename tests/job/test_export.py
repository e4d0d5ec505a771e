"""Beam tables, read back with plain h5py and csv as someone without this program would."""

import csv
import itertools
from dataclasses import replace

import h5py
import numpy as np
import pytest

from elbowroom.base.errors import ExportError, StoreError
from elbowroom.geometry.antennas import Antenna, Port
from elbowroom.geometry.directions import hemisphere_grid
from elbowroom.geometry.grounds import PerfectGround
from elbowroom.geometry.soils import Soil
from elbowroom.geometry.stations import Placed, Station
from elbowroom.geometry.wires import Wire
from elbowroom.job.beamfields import beam_fields
from elbowroom.job.export import TABLE_FORMAT, TableSettings, export_csv, export_hdf5
from elbowroom.job.jobfile import Beam
from elbowroom.job.solve import solve

SKY = hemisphere_grid(15.0)
BEAMS = (Beam("up", "x"), Beam("low", "y", 35.0, 20.0))
SEEN = [100.0, "open", 75.0 + 20.0j, 30.0]


def crossed():
    return Antenna(
        "crossed", [Wire((-0.4, 0, 0.5), (0.4, 0, 0.5), 0.003), Wire((0, -0.4, 0.45), (0, 0.4, 0.45), 0.003)], [Port("x", 0), Port("y", 1)]
    )  # fmt: skip


@pytest.fixture(scope="module")
def tables():
    station = Station(
        [Placed(crossed(), (0.0, 0.0, 0.0)), Placed(crossed(), (0.0, 1.0, 0.0), rotation_deg=30.0)], ground=PerfectGround()
    )
    return [beam_fields(solve(station, f), BEAMS, SKY, SEEN) for f in (100e6, 150e6)]


def test_hdf5__read_with_plain_h5py__is_what_was_computed(tables, tmp_path):
    path = tmp_path / "deep" / "beams.h5"
    export_hdf5(path, iter(tables), 2, title="two antennas", job_text="schema = 1\n")
    with h5py.File(path) as file:
        assert file.attrs["format"] == TABLE_FORMAT
        assert "not a measurement" in file.attrs["warning"]
        assert "exp(+j omega t)" in file.attrs["conventions"]
        assert file.attrs["job_file"] == "schema = 1\n"
        assert file.attrs["ground"] == "perfect"
        assert "horizon" not in file.attrs
        assert file["frequency_hz"][:] == pytest.approx([100e6, 150e6])
        assert list(file["beam_name"].asstr()) == ["up", "low"]
        assert list(file["port_name"].asstr()) == ["A001/x", "A001/y", "A002/x", "A002/y"]
        assert file["termination_ohm"].asstr()[:].tolist() == [["100 +0j", "open", "75 +20j", "30 +0j"]] * 2
        assert [d[0].name for d in file["termination_ohm"].dims] == ["/frequency_hz", "/port_name"]
        assert file["pointing_theta_rad"][1] == pytest.approx(np.radians(35.0))
        # azimuth 20 deg, north through east, is 70 deg from east towards north
        assert file["pointing_phi_rad"][1] == pytest.approx(np.radians(70.0))
        assert file["theta_rad"].shape + file["phi_rad"].shape == SKY.shape
        for f, table in enumerate(tables):
            for name, field in (("coupled_beam", table.coupled), ("isolated_beam", table.isolated)):
                assert file[name].attrs["unit"] == "m"
                np.testing.assert_array_equal(file[name][f].reshape(2, -1, 2), field)
            np.testing.assert_array_equal(file["weight"][f], table.weights)
            assert file["mesh_error"][f] == table.solution.statistics.mesh_error
            # one of the two ports of "low" is open and the other is not: it cannot be sent
            np.testing.assert_allclose(file["radiation_efficiency"][f], [1.0, np.nan], atol=1e-9)
            np.testing.assert_array_equal(file["ground_loss"][f], [0.0, np.nan])
            assert file["relative_residual"][f] == table.solution.statistics.relative_residual
        # every axis of a field knows its scale
        assert [d.keys()[0] for d in file["coupled_beam"].dims] == [
            "frequency_hz",
            "beam_name",
            "theta_rad",
            "phi_rad",
            "component",
        ]
        for name, dataset in file.items():
            assert dataset.attrs["unit"], name
            assert dataset.attrs["description"], name
            if dataset.dtype.kind in "fc" and name not in ("radiation_efficiency", "ground_loss"):  # told above
                assert np.all(np.isfinite(dataset[...])), name


def test_hdf5__elements__are_the_embedded_and_isolated_patterns(tables, tmp_path):
    export_hdf5(tmp_path / "t.h5", tables, 2, settings=TableSettings(elements=True))
    solution = tables[1].solution
    with h5py.File(tmp_path / "t.h5") as file:
        found = file["embedded_pattern"][1].reshape(4, -1, 2)
        alone = file["isolated_pattern"][1].reshape(4, -1, 2)
    np.testing.assert_allclose(
        found, solution.embedded_patterns(SKY.theta_rad, SKY.phi_rad, termination=SEEN), rtol=0, atol=1e-15
    )
    np.testing.assert_allclose(
        alone, solution.isolated_patterns(SKY.theta_rad, SKY.phi_rad, termination=SEEN), rtol=0, atol=1e-15
    )


def test_hdf5__elements_without_beams__is_a_table(tables, tmp_path):
    bare = beam_fields(tables[0].solution, [], SKY, SEEN)
    export_hdf5(tmp_path / "t.h5", [bare], 1, settings=TableSettings(elements=True))
    with h5py.File(tmp_path / "t.h5") as file:
        assert "coupled_beam" not in file
        assert file["embedded_pattern"].shape == (1, 4, *SKY.shape, 2)
    with pytest.raises(ExportError, match="nothing to export"):
        export_hdf5(tmp_path / "none.h5", [bare], 1)
    assert not (tmp_path / "none.h5").exists()


def test_hdf5__co_and_cross__follow_ludwig_by_each_beam_s_ports(tables, tmp_path):
    export_hdf5(tmp_path / "t.h5", tables, 2, settings=TableSettings(components="co-cross"))
    with h5py.File(tmp_path / "t.h5") as file:
        field, nominal = file["coupled_beam"][0], file["nominal_phi_rad"][:]
        assert list(file["component"].asstr()) == ["co", "cross"]
        assert "Ludwig" in file.attrs["components"]
    assert np.degrees(nominal) == pytest.approx([15.0, 105.0])
    zenith = field[0, 0, :, :]
    # at the zenith co and cross do not depend on the phi the direction is written with
    assert np.ptp(zenith.real, axis=0) == pytest.approx([0.0, 0.0], abs=1e-12)
    power = np.sum(np.abs(field) ** 2, axis=-1).reshape(2, -1)
    np.testing.assert_allclose(power, np.sum(np.abs(tables[0].coupled) ** 2, axis=-1), rtol=1e-12)


def test_hdf5__peak_and_single__are_normalised_and_small(tables, tmp_path):
    export_hdf5(tmp_path / "t.h5", tables, 2, settings=TableSettings(normalisation="peak", single=True))
    with h5py.File(tmp_path / "t.h5") as file:
        field = file["isolated_beam"]
        assert field.dtype == np.complex64
        assert field.attrs["unit"] == "1"
        assert np.sqrt(np.max(np.sum(np.abs(field[...]) ** 2, axis=-1), axis=(2, 3))) == pytest.approx(np.ones((2, 2)), rel=1e-6)


@pytest.mark.parametrize("announced", [1, 3])
def test_hdf5__another_number_of_frequencies__writes_nothing(tables, tmp_path, announced):
    with pytest.raises(ExportError, match="frequencies"):
        export_hdf5(tmp_path / "t.h5", tables, announced)
    assert list(tmp_path.iterdir()) == []


def test_hdf5__a_failure_on_the_way__keeps_the_old_file_and_its_own_words(tables, tmp_path):
    path = tmp_path / "t.h5"
    path.write_text("old")

    def broken():
        yield tables[0]
        raise StoreError("the disk has gone", path="/somewhere")

    with pytest.raises(StoreError, match="/somewhere: the disk has gone"):
        export_hdf5(path, broken(), 2)
    assert path.read_text() == "old"
    assert [p.name for p in tmp_path.iterdir()] == ["t.h5"]


@pytest.mark.parametrize("writer", ["hdf5", "csv"])
def test_table__below_a_file__names_the_path(tables, tmp_path, writer):
    (tmp_path / "file").write_text("x")
    target = tmp_path / "file" / "beams"
    with pytest.raises(ExportError, match=r"cannot write .*file/beams"):
        export_hdf5(target, tables, 2) if writer == "hdf5" else export_csv(target, tables)


def test_settings__unknown_words__are_refused():
    with pytest.raises(ExportError, match="components 'circular': expected 'theta-phi' or 'co-cross'"):
        TableSettings(components="circular")
    with pytest.raises(ExportError, match="normalisation 'zenith'"):
        TableSettings(normalisation="zenith")


def test_csv__every_line__is_what_was_computed(tables, tmp_path):
    path = tmp_path / "beams.csv"
    export_csv(path, tables, title="two antennas", job_text="schema = 1\n")
    lines = path.read_text().splitlines()
    head = [line for line in lines if line.startswith("#")]
    assert any("not a measurement" in line for line in head)
    assert any(line.startswith("# at 150000000 Hz: relative_residual") for line in head)
    assert "# job_file: schema = 1" in head
    rows = list(csv.DictReader(line for line in lines if not line.startswith("#")))
    assert len(rows) == 2 * len(BEAMS) * len(SKY)
    expected = itertools.product(tables, range(2), range(len(SKY)))
    for row, (table, b, d) in itertools.islice(zip(rows, expected, strict=True), 0, None, 37):
        assert float(row["frequency_hz"]) == table.solution.frequency_hz
        assert row["beam"] == BEAMS[b].name
        assert float(row["theta_deg"]) == pytest.approx(np.degrees(SKY.theta_rad[d]))
        assert float(row["azimuth_deg"]) == pytest.approx((90.0 - np.degrees(SKY.phi_rad[d])) % 360.0)
        for which, field in (("coupled", table.coupled), ("isolated", table.isolated)):
            for c, name in enumerate(("theta", "phi")):
                found = complex(float(row[f"{which}_{name}_real_m"]), float(row[f"{which}_{name}_imag_m"]))
                assert found == pytest.approx(field[b, d, c], rel=1e-8, abs=1e-12)


def test_csv__elements_or_nothing__is_refused(tables, tmp_path):
    with pytest.raises(ExportError, match="HDF5 only"):
        export_csv(tmp_path / "b.csv", tables, settings=TableSettings(elements=True))
    with pytest.raises(ExportError, match="nothing to export"):
        export_csv(tmp_path / "b.csv", [])
    assert list(tmp_path.iterdir()) == []


def test_table__of_a_silent_beam__cannot_be_divided_by_its_peak(tables, tmp_path):
    silent = replace(tables[0], coupled=np.zeros_like(tables[0].coupled))
    with pytest.raises(ExportError, match="no peak"):
        export_csv(tmp_path / "b.csv", [silent], settings=TableSettings(normalisation="peak"))


def test_hdf5__over_soil__tells_the_ground_and_what_it_takes(tmp_path):
    station = Station([Placed(crossed(), (0.0, 0.0, 0.0)), Placed(crossed(), (0.0, 1.0, 0.0))], ground=Soil(10.0, 0.01))
    solution = solve(station, 100e6)
    table = beam_fields(solution, BEAMS, SKY, 100.0)
    export_hdf5(tmp_path / "beams.h5", [table], 1)
    with h5py.File(tmp_path / "beams.h5") as file:
        assert file.attrs["ground"] == station.ground.describe()
        assert "horizon" in file.attrs["horizon"]
        parts = solution.power_parts(table.weights)
        np.testing.assert_allclose(file["radiation_efficiency"][0], parts.radiation_efficiency)
        np.testing.assert_allclose(file["ground_loss"][0], parts.fraction("ground"))
        assert 0.1 < file["ground_loss"][0, 0] < 0.9
        assert [d[0].name for d in file["ground_loss"].dims] == ["/frequency_hz", "/beam_name"]
        # the horizon
        np.testing.assert_allclose(np.abs(file["coupled_beam"][0, 0, -1]), 0.0, atol=1e-9)
