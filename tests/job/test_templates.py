"""Starting points: they run as they are, and the demonstration is one and the same in both places."""

from pathlib import Path

import numpy as np
import pytest

from elbowroom import random_disc
from elbowroom.base.constants import wavelength_of
from elbowroom.base.errors import ExportError, JobFileError
from elbowroom.geometry.antennas import Antenna
from elbowroom.geometry.grounds import PerfectGround
from elbowroom.geometry.mesh import mesh_settings
from elbowroom.geometry.networks import Network
from elbowroom.geometry.wires import segment_distances
from elbowroom.job.checks import check_station
from elbowroom.job.jobfile import read_job
from elbowroom.job.jobtables import SECTIONS, BeamTable
from elbowroom.job.oneantenna import alone, solve_alone
from elbowroom.job.solve import solution_key, solve
from elbowroom.job.templates import TEMPLATES, template_files, write_template
from elbowroom.radiation.solution import antenna_power_gain
from elbowroom.system.discretisation import FarSettings
from elbowroom.system.self_block import NearSettings

DEMO = Path(__file__).parents[2] / "demo_data"


@pytest.mark.parametrize("name", TEMPLATES)
def test_templates__are_read_and_pass_every_check(tmp_path, name):
    written = write_template(name, tmp_path / "new" / "job")
    assert written[0].name == "job.toml"
    job = read_job(written[0])
    assert check_station(job.station(), job.frequencies_hz, job.mesh) == []
    assert job.output_folder.parent == tmp_path / "new" / "job"


@pytest.mark.parametrize("name", TEMPLATES)
def test_templates__explain_every_key(name):
    text = template_files(name)["job.toml"].decode()
    keys = {key for model in SECTIONS.values() for key in model.model_fields} | set(BeamTable.model_fields)
    assert len(keys) > 20
    assert [key for key in keys if key not in text] == []


@pytest.mark.parametrize(("name", "folder"), [("demo", DEMO), ("log-periodic", DEMO / "log-periodic")])
def test_demo__package_data_and_demo_data_are_the_same(name, folder):
    files = template_files(name)
    assert sorted(files) == sorted(p.name for p in folder.iterdir() if p.is_file())
    for file, data in files.items():
        assert (folder / file).read_bytes() == data, file


def test_log_periodic__is_the_station_that_its_files_say():
    job = read_job(DEMO / "log-periodic" / "job.toml")
    assert job.frequencies_hz == (80e6, 200e6, 350e6)
    again = random_disc(16, radius_m=4.5, minimum_spacing_m=1.6, seed=11)
    assert np.abs(job.layout.positions - again.positions).max() <= 0.5e-3 * (1 + 1e-9)
    antenna = job.station().placed[0].antenna
    assert (len(antenna.wires), len(antenna.network.lines), [p.name for p in antenna.ports]) == (20, 18, ["x", "y"])
    assert [branch.resistance_ohm for branch in antenna.network.branches] == [250.0, 250.0]
    # no wire of one antenna reaches into the circle of another, however both are turned
    reach = max(np.hypot(*end[:2]) for wire in antenna.wires for end in (wire.start, wire.end))
    offsets = job.layout.positions[:, None] - job.layout.positions[None]
    distance = np.linalg.norm(offsets, axis=2) + 100.0 * np.eye(16)
    assert distance.min() >= 1.6 - 1e-3
    assert 2.0 * reach < 1.53
    heights = sorted({wire.start[2] for wire in antenna.wires})
    assert 0.7 < heights[0] < 0.75
    assert heights[-1] == 1.95


@pytest.mark.parametrize("frequency", [158e6, 245e6])
def test_log_periodic__resistor_at_the_feeders_end_keeps_the_beam_whole(frequency):
    """Without it, long dipoles and open end resonate: realised gain towards the zenith drops by far more than the resistor costs."""
    antenna = read_job(DEMO / "log-periodic" / "job.toml").station().placed[0].antenna
    bare = Antenna("bare", antenna.wires, antenna.ports, antenna.loads, antenna.feeds, Network(antenna.network.lines))

    def gain_db(design, at):
        solution = solve_alone(alone(design, PerfectGround()), at)
        towards = solution.embedded_patterns([0.0], [0.0], ports=[0])
        gain = antenna_power_gain(towards, 1.0 / 100.0, wavelength_of(at)).sum()
        return 10.0 * np.log10(gain)

    assert gain_db(antenna, frequency) > 5.0
    assert gain_db(bare, frequency) < gain_db(antenna, frequency) - 1.0


def test_demo__is_the_station_that_its_readme_says():
    job = read_job(DEMO / "job.toml")
    assert len(job.layout) == 240
    assert job.frequencies_hz == (60e6, 110e6, 165e6, 230e6, 300e6)
    again = random_disc(240, radius_m=18.5, minimum_spacing_m=1.45, seed=20)
    # half a millimetre of rounding in each coordinate
    assert np.abs(job.layout.positions - again.positions).max() <= 0.5e-3 * (1 + 1e-9)
    offsets = job.layout.positions[:, None] - job.layout.positions[None]
    distance = np.linalg.norm(offsets, axis=2) + 100.0 * np.eye(240)
    assert distance.min() >= 1.45


def test_demo__wires_of_neighbours_clear_each_other_by_3_cm():
    station = read_job(DEMO / "job.toml").station()
    ends = np.array([p.to_station(np.array([[w.start, w.end] for w in p.antenna.wires])) for p in station])
    positions = station.positions
    nearest = np.inf
    for i in range(len(station)):
        near = [j for j in range(i) if np.linalg.norm(positions[i] - positions[j]) < 1.5]
        for j in near:
            between = segment_distances(ends[i][:, None, 0], ends[i][:, None, 1], ends[j][None, :, 0], ends[j][None, :, 1])
            nearest = min(nearest, between.min())
    assert 0.03 < nearest < 0.5


def test_small__solves_in_seconds(tmp_path):
    job = read_job(write_template("small", tmp_path)[0])
    station = job.station()
    solution = solve(station, job.frequencies_hz[0], mesh=job.mesh, precision=job.precision)
    impedance = solution.impedance_matrix()
    assert impedance.shape == (14, 14)
    # a passive station: the resistance matrix has no negative eigenvalue
    assert np.linalg.eigvalsh(impedance.real).min() > 0.0


def test_write__overwrites_nothing(tmp_path):
    (tmp_path / "layout.csv").write_text("mine")
    with pytest.raises(ExportError, match=r"layout\.csv already there; nothing was written; choose another folder"):
        write_template("small", tmp_path)
    assert [p.name for p in tmp_path.iterdir()] == ["layout.csv"]
    assert (tmp_path / "layout.csv").read_text() == "mine"


def test_write__folder_that_is_a_file(tmp_path):
    (tmp_path / "file").write_text("")
    with pytest.raises(ExportError, match="cannot write the template 'small'"):
        write_template("small", tmp_path / "file")


def test_unknown_template__gets_a_hint(tmp_path):
    with pytest.raises(JobFileError, match="no template 'demos'; did you mean 'demo'"):
        write_template("demos", tmp_path)
    with pytest.raises(JobFileError, match="no template 'zzz'; known: small, demo"):
        template_files("zzz")


def test_turned_and_shifted_job__is_the_same_solve(tmp_path):
    path = write_template("small", tmp_path)[0]
    text = path.read_text()

    def key():
        settings = (mesh_settings("default"), NearSettings(), FarSettings(), ("direct", "mixed"))
        return solution_key(read_job(path).station(), 110e6, *settings)

    before = key()
    path.write_text(text.replace("turn_deg = 0.0", "turn_deg = 37.0").replace("shift_east_m = 0.0", "shift_east_m = 12.5"))
    assert read_job(path).turn_deg == 37.0
    assert key() == before
    (tmp_path / "layout.csv").write_text((tmp_path / "layout.csv").read_text().replace("-0.627", "-0.628", 1))
    assert key() != before
