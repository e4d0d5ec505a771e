"""Ports of a solved job from the command line: Touchstone files, active impedances, a scan, and what is refused."""

import csv
import json

import numpy as np
import pytest

from elbowroom.job.jobfile import read_job
from elbowroom.job.pipeline import JobRun
from elbowroom.job.portmatrices import active_ports, port_matrices
from elbowroom.job.touchstone import read_touchstone


@pytest.fixture
def solved(command, job):
    assert command("solve", job, "--quiet").code == 0
    return job


def table(path):
    return list(csv.DictReader(line for line in path.read_text().splitlines() if not line.startswith("#")))


def test_ports__writes_all_ports_and_active_impedances(command, solved):
    outcome = command("ports", solved)
    assert outcome.code == 0, outcome.all
    results = solved.parent / "results"
    beams = ("zenith-x", "zenith-y", "low-x")
    assert {p.name for p in results.iterdir()} == {"ports_S.s6p", "active_ports.csv", *(f"active_{b}.png" for b in beams)}
    run = JobRun(read_job(solved))
    found = read_touchstone(results / "ports_S.s6p", ports=6)
    np.testing.assert_allclose(found.matrices[0], run.solution(110e6).scattering_matrix(100.0), atol=1e-12)
    rows = table(results / "active_ports.csv")
    assert [(r["beam"], r["port"]) for r in rows] == [(b, b[-1]) for b in beams for _ in range(3)]
    active = active_ports(run)
    low = [r for r in rows if r["beam"] == "low-x"]
    driven = np.flatnonzero(active.weights[0, 2])
    z = [float(r["active_resistance_ohm"]) + 1j * float(r["active_reactance_ohm"]) for r in low]
    np.testing.assert_allclose(z, active.impedance_ohm[0, 2, driven], rtol=1e-8)
    size = [float(r["active_reflection"]) for r in low]
    np.testing.assert_allclose(size, np.abs(active.reflection[0, 2, driven]), rtol=1e-8)
    assert [float(low[0][k]) for k in ("zenith_angle_deg", "azimuth_deg")] == [40.0, 120.0]
    head = (results / "active_ports.csv").read_text()
    assert all(f"# {name}: " in head for name in rows[0])
    assert "not a measurement" in head
    # scan or not, the power that comes back is that of the scattering matrix
    s = run.solution(110e6).scattering_matrix(100.0)
    w = active.weights[0, 2]
    back = (s @ w)[driven]
    assert active.returned_power()[0, 2] == pytest.approx(np.sum(np.abs(back) ** 2) / np.sum(np.abs(w) ** 2), rel=1e-9)
    assert f"{100 * active.returned_power()[0, 2]:.1f}" in outcome.out


def test_ports__some_ports_in_another_form(command, solved, tmp_path):
    options = ("--matrix", "z", "--ports", "A003/y", "--antenna", "A001", "--touchstone-version", 2, "--output", tmp_path / "o")
    references = ("--reference-ohm", 50, "--reference-ohm", 75, "--reference-ohm", 100)
    outcome = command("ports", solved, *options, *references)
    assert outcome.code == 0, outcome.all
    assert "3 others terminated as the job says" in outcome.out
    found = read_touchstone(tmp_path / "o" / "ports_Z.ts", ports=3)
    expected = port_matrices(JobRun(read_job(solved)), "Z", ["A003/y", "A001"])
    np.testing.assert_allclose(found.matrices, expected.matrices, rtol=1e-12)
    assert found.reference_ohm.tolist() == [50.0, 75.0, 100.0]


def test_ports__scan_points_from_horizon_to_horizon(command, solved):
    outcome = command("ports", solved, "--scan", 120, "--scan-beam", "low-x", "--scan-frequency-hz", 110e6, "--json")
    assert outcome.code == 0, outcome.all
    lines = [json.loads(line) for line in outcome.out.splitlines()]
    assert [line["beam"] for line in lines if line["kind"] == "active"] == ["zenith-x", "zenith-y", "low-x"]
    results = solved.parent / "results"
    assert (results / "active-scan_low-x_110MHz.png").read_bytes()[:4] == b"\x89PNG"
    rows = table(results / "active-scan_low-x_110MHz.csv")
    assert len(rows) == 181 * 3
    # where the scan passes the beam's own direction, it is the beam
    here = [r for r in rows if (r["zenith_angle_deg"], r["azimuth_deg"]) == ("40", "120")]
    beam = [r for r in table(results / "active_ports.csv") if r["beam"] == "low-x"]
    assert [r["active_resistance_ohm"] for r in here] == [r["active_resistance_ohm"] for r in beam]
    there = [r for r in rows if (r["zenith_angle_deg"], r["azimuth_deg"]) == ("40", "300")]
    assert [r["active_resistance_ohm"] for r in there] != [r["active_resistance_ohm"] for r in beam]


def test_ports__open_terminations_need_a_reference(command, solved, change):
    change(solved, "impedance_ohm = 100.0", 'impedance_ohm = "open"')
    refused = command("ports", solved)
    assert refused.code == 4
    assert "open" in refused.err
    assert command("ports", solved, "--active-reference-ohm", 100, "--quiet").code == 0


def test_ports__job_without_beams(command, solved):
    text = solved.read_text()
    solved.write_text(text[: text.index("# Beams:")] + text[text.index("[sky]") :])
    outcome = command("ports", solved)
    assert outcome.code == 0
    assert "no [[beam]]" in outcome.err
    assert [p.name for p in (solved.parent / "results").iterdir()] == ["ports_S.s6p"]
    assert command("ports", solved, "--scan", 0).code == 2


@pytest.mark.parametrize(
    ("options", "code", "words"),
    [
        (("--ports", "A001/z"), 4, ("A001/z", "did you mean")),
        (("--ports", "A001/x", "--antenna", "A001"), 4, ("named already",)),
        (("--reference-ohm", 0), 4, ("reference_ohm",)),
        (("--reference-ohm", "nan"), 4, ("reference_ohm",)),
        (("--reference-ohm", 50, "--reference-ohm", 75), 4, ("reference_ohm", "6")),
        (("--antenna", "A001", "--reference-ohm", 50, "--reference-ohm", 75), 7, ("different resistances", "version 2")),
        (("--matrix", "T"), 2, ("'T'",)),
        (("--scan-beam", "zenith-x"), 2, ("--scan-beam without --scan",)),
        (("--scan", 0, "--scan-beam", "zenit-x"), 2, ("zenit-x", "zenith-x")),
        (("--scan", 0, "--scan-frequency-hz", 120e6), 2, ("120000000", "110000000")),
        (("--scan", "nan"), 2, ("--scan",)),
        (("--active-reference-ohm", -5), 2, ("--active-reference-ohm -5",)),
    ],
)
def test_ports__bad_options_are_named(command, solved, options, code, words):
    outcome = command("ports", solved, *options)
    assert outcome.code == code, outcome.all
    assert "Traceback" not in outcome.all
    for word in words:
        assert word in outcome.err, outcome.err


def test_ports__of_a_job_that_is_not_solved_says_how(command, job):
    outcome = command("ports", job)
    assert outcome.code == 6
    assert "elbowroom solve" in outcome.err


def test_ports__pictures_name_antennas_and_ground(command, solved, monkeypatch):
    from contextlib import contextmanager

    from elbowroom.job.pictures import active as module

    figures, said, inner = [], [], module.sheet

    @contextmanager
    def kept(path, title, details, *rest, **more):
        with inner(path, title, details, *rest, **more) as figure:
            yield figure
            figures.append(figure)
            said.append(details)

    monkeypatch.setattr(module, "sheet", kept)
    assert command("ports", solved, "--scan", 120).code == 0
    assert ["perfect ground" in details for details in said] == [True] * 4
    assert [tick.get_text() for tick in figures[0].axes[0].get_xticklabels()] == ["A001", "A002", "A003"]
