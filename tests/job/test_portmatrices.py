"""Port matrices and active impedances of a job: through files, terminations over frequency, and dead ports."""

import warnings

import numpy as np
import pytest

from elbowroom.base.errors import ExportError, ModelRangeError
from elbowroom.job.jobfile import read_job
from elbowroom.job.pipeline import JobRun
from elbowroom.job.portmatrices import active_ports, pointings, port_indices, port_matrices, write_port_matrices
from elbowroom.job.touchstone import read_touchstone

with warnings.catch_warnings():
    warnings.simplefilter("ignore")
    import skrf

JOB = """
[station]
layout = "layout.csv"
antenna = "cross.toml"
[station.damage]
open = ["A3/y"]
[band]
frequency_hz = [80e6, 120e6]
[termination]
circuit = "parallel"
resistance_ohm = 150.0
capacitance_f = 4e-12
[termination.ports]
"A2/x" = "short"
"A2/y" = [30, 12]
[[beam]]
name = "up"
port = "y"
[[beam]]
name = "low"
port = "y"
zenith_angle_deg = 50
azimuth_deg = 30
"""


@pytest.fixture(scope="module")
def run(tmp_path_factory):
    folder = tmp_path_factory.mktemp("job")
    (folder / "cross.toml").write_text(
        'shape = "crossed-dipoles"\narm_length_m = 0.6\nheight_m = 0.9\nwire_radius_m = 0.003\nseparation_m = 0.04\n'
    )
    (folder / "layout.csv").write_text("name,east_m,north_m\nA1,0,0\nA2,1.6,0.2\nA3,-0.4,1.9\n")
    (folder / "job.toml").write_text(JOB)
    return JobRun(read_job(folder / "job.toml"))


def loads_at(frequency):
    circuit = 1 / (1 / 150 + 2j * np.pi * frequency * 4e-12)
    return np.array([circuit, circuit, 0.0, 30 + 12j, circuit, np.inf])


def test_port_matrices__are_schur_complements_with_the_loads_of_each_frequency(run):
    found = port_matrices(run, "Z", ["A3/x", "A1"])
    assert found.matrices.shape == (2, 3, 3)
    assert found.comments[-3:] == ("port 1: A3/x", "port 2: A1/x", "port 3: A1/y")
    for f, frequency in enumerate(run.frequencies_hz):
        z = run.solution(frequency).impedance_matrix()
        kept = [4, 0, 1]
        # port 5 is open and drops out; port 2 is shorted
        rest = [2, 3]
        inner = z[np.ix_(rest, rest)] + np.diag(loads_at(frequency)[rest])
        expected = z[np.ix_(kept, kept)] - z[np.ix_(kept, rest)] @ np.linalg.solve(inner, z[np.ix_(rest, kept)])
        np.testing.assert_allclose(found.matrices[f], expected, atol=1e-8 * np.abs(expected).max())


@pytest.mark.parametrize(("parameter", "version"), [("S", 1), ("Z", 1), ("Y", 2), ("S", 2)])
def test_files__read_back_by_us_and_by_an_independent_reader(run, tmp_path, parameter, version):
    reference = 75.0 if version == 1 else [50.0, 75.0]
    path = tmp_path / "pair.s2p"
    written = write_port_matrices(run, path, parameter, ["A1/x", "A3/x"], reference_ohm=reference, version=version)
    again = read_touchstone(path, ports=2)
    np.testing.assert_allclose(again.matrices, written.matrices, rtol=1e-14)
    network = skrf.Network(str(path))
    expected = port_matrices(run, "S", ["A1/x", "A3/x"], reference_ohm=reference).matrices
    np.testing.assert_allclose(network.s, expected, atol=1e-9)
    assert "port 2: A3/x" in path.read_text()
    assert "not a measurement" in path.read_text()


def test_files__a_name_that_does_not_fit_is_told_before_anything_is_solved(run, tmp_path, monkeypatch):
    monkeypatch.setattr(run, "solution", lambda *_: pytest.fail("solved"))
    with pytest.raises(ExportError, match=r"the name must end in \.s2p, as there are 2 ports"):
        write_port_matrices(run, tmp_path / "a.s3p", ports=["A1"])


def test_ports__are_found_by_name(run):
    assert port_indices(run.station) == [0, 1, 2, 3, 4, 5]
    assert port_indices(run.station, ["A2/y", "A1"]) == [3, 0, 1]
    for names, match in (
        (["A2/z"], "no port or antenna 'A2/z'; did you mean 'A2/y'"),
        (["A1", "A1/x"], "'A1/x': one of its ports is named already"),
        ([], "no ports are named"),
    ):
        with pytest.raises(ModelRangeError, match=match):
            port_indices(run.station, names)
    for reference in (0.0, np.nan, [50.0]):
        with pytest.raises(ModelRangeError, match="reference_ohm"):
            port_matrices(run, "S", ["A1"], reference_ohm=reference)


def test_active__is_the_circuit_of_the_job_at_each_frequency_and_pointing(run):
    found = active_ports(run)
    assert found.impedance_ohm.shape == (2, 2, 6)
    for f, frequency in enumerate(run.frequencies_hz):
        z, load = run.solution(frequency).impedance_matrix(), loads_at(frequency)
        # ports x and the dead A3/y are only terminated; the open one carries no current
        live = [0, 1, 2, 3, 4]
        for b in range(2):
            weights = found.weights[f, b]
            assert np.flatnonzero(weights).tolist() == [1, 3]
            source = 2 * weights[live] * np.sqrt(load[live].real)
            current = np.linalg.solve(z[np.ix_(live, live)] + np.diag(load[live]), source)
            voltage = z[np.ix_(live, live)] @ current
            expected = (voltage / current)[[1, 3]]
            np.testing.assert_allclose(found.impedance_ohm[f, b, [1, 3]], expected, rtol=1e-8)
            reflection = (expected - load[[1, 3]].conj()) / (expected + load[[1, 3]])
            np.testing.assert_allclose(found.reflection[f, b, [1, 3]], reflection, atol=1e-8)
            assert np.isnan(found.impedance_ohm[f, b, [0, 2, 4, 5]]).all()
    # pointing and frequency matter
    assert np.abs(found.impedance_ohm[0, 0, 1] - found.impedance_ohm[0, 1, 1]) > 0.1
    assert np.abs(found.impedance_ohm[0, 0, 1] - found.impedance_ohm[1, 0, 1]) > 1.0


def test_active__over_pointing(run):
    scan = pointings(run.job.beams[0], [0.0, 50.0], [0.0, 30.0])
    found, of_job = active_ports(run, scan, reference_ohm=50.0), active_ports(run)
    np.testing.assert_allclose(found.impedance_ohm, of_job.impedance_ohm, rtol=1e-12)
    driven = [1, 3]
    z = found.impedance_ohm[..., driven]
    np.testing.assert_allclose(found.reflection[..., driven], (z - 50) / (z + 50), rtol=1e-9)
    for bad in (95.0, np.nan):
        with pytest.raises(ModelRangeError, match="zenith angles from 0 to 90"):
            pointings(run.job.beams[0], bad, 0.0)
    with pytest.raises(ModelRangeError, match="no beam"):
        active_ports(run, [])
