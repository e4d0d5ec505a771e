"""Runs of many units on the command line: plan, workers, failures, interruption, clusters, several jobs."""

import json
import os
import re
import signal
import subprocess
import sys
import time

import h5py
import psutil
import pytest

from elbowroom.base.errors import SolveError
from elbowroom.job import solve as solve_module
from elbowroom.job.jobfile import read_job
from elbowroom.job.pipeline import JobRun

FOUR = "[110e6, 111e6, 112e6, 113e6]"


def lines(outcome, kind):
    return [found for found in map(json.loads, outcome.out.splitlines()) if found["kind"] == kind]


def without_beams(path):
    """Leave out the beams, whose pictures take longest."""
    text = path.read_text()
    path.write_text(text[: text.index("# Beams:")] + text[text.index("[sky]") :])


@pytest.fixture
def band(job, change):
    change(job, "[110e6]", FOUR)
    return job


def test_plan__tells_and_solves_nothing(command, band):
    told = command("solve", band, "--plan")
    assert told.code == 0
    assert "4 frequencies, 0 in the store already, 4 to solve" in told.out
    assert "predicted" in told.out
    assert told.out.count("to solve") >= 5
    assert not list(band.parent.rglob("*.h5"))
    assert command("solve", band, "--frequency-hz", "111e6", "--quiet").code == 0
    again = command("solve", band, "--plan", "--json")
    (plan,) = lines(again, "plan")
    assert (plan["units"], plan["stored"], plan["to_solve"]) == (4, 1, 3)
    assert [u["state"] for u in lines(again, "planned")] == ["to solve", "in store", "to solve", "to solve"]
    path = next((band.parent / "store").rglob("*.h5"))
    disk = [u["disk_bytes"] for u in lines(again, "planned") if u["state"] == "to solve"]
    assert disk == [pytest.approx(path.stat().st_size, rel=0.1)] * 3


def test_workers__give_what_one_process_gives(command, band, tmp_path):
    here = command("solve", band, "--threads", 1, "--json")
    assert [u["state"] for u in lines(here, "unit")] == ["solved"] * 4
    before = {p.name: p for p in (band.parent / "store").rglob("*.h5")}
    (band.parent / "store").rename(tmp_path / "first")
    apart = command("solve", band, "--threads", 1, "--workers", 2, "--json")
    assert apart.code == 0, apart.all
    assert [u["state"] for u in lines(apart, "unit")] == ["solved"] * 4
    last = lines(apart, "progress")[-1]
    assert (last["finished"], last["running"], last["failed"], last["units"]) == (4, 0, 0, 4)
    assert last["left_seconds"] == 0.0
    after = {p.name: p for p in (band.parent / "store").rglob("*.h5")}
    assert after.keys() == before.keys()
    for name, path in after.items():
        with h5py.File(path) as one, h5py.File(next((tmp_path / "first").rglob(name))) as other:
            assert (one["currents_per_volt"][...] == other["currents_per_volt"][...]).all()
            assert one["record_attributes"].attrs["blas_threads"] == one["record_attributes"].attrs["loop_threads"] == 1


def test_workers__progress_says_finished_running_and_left(command, band):
    outcome = command("solve", band, "--workers", 2)
    assert "solving in 2 worker processes" in outcome.out
    assert re.search(r"solved in .* \(1 of 4 done, \d running, .* left\)", outcome.out)
    assert "(4 of 4 done)" in outcome.out
    quiet = command("solve", band, "--workers", 2, "--quiet")
    assert "done" not in quiet.out
    log = (band.parent / "store" / "solve.log").read_text()
    assert len(re.findall(r"INFO solved 11\d MHz in", log)) == 4
    assert "4 solved, 0 failed" in log


def test_failed_units__stop_no_other_and_only_they_run_next_time(command, band, monkeypatch, tmp_path):
    original = solve_module.solve_direct

    def sometimes(d, **options):
        if d.frequency_hz in (111e6, 113e6):
            msg = f"no luck at {d.frequency_hz / 1e6:g} MHz"
            raise SolveError(msg)
        return original(d, **options)

    with monkeypatch.context() as patch:
        patch.setattr(solve_module, "solve_direct", sometimes)
        outcome = command("solve", band, "--log", tmp_path / "own.log")
    assert outcome.code == 5
    assert "failed at 111 MHz: no luck at 111 MHz" in outcome.err
    assert "failed at 113 MHz: no luck at 113 MHz" in outcome.err
    assert "2 of 4 units failed" in outcome.err
    assert "ERROR failed 111 MHz: no luck" in (tmp_path / "own.log").read_text()
    again = command("solve", band, "--json")
    assert again.code == 0
    states = {u["frequency_hz"]: u["state"] for u in lines(again, "unit")}
    assert states == {110e6: "from store", 111e6: "solved", 112e6: "from store", 113e6: "solved"}


def test_unforeseen_error__is_a_failure_with_its_trace(command, band, monkeypatch):
    def broken(d, **options):
        raise ZeroDivisionError

    monkeypatch.setattr(solve_module, "solve_direct", broken)
    outcome = command("solve", band)
    assert outcome.code == 1
    assert outcome.err.count("a fault of the program: ZeroDivisionError") == 4
    assert "Traceback" in outcome.err
    assert "4 of 4 units failed" in outcome.err


@pytest.mark.parametrize("deed", [signal.SIGINT, signal.SIGTERM])
def test_interrupted_workers__leave_whole_units_and_no_process(command, band, change, deed):
    change(band, 'mesh = "default"', 'mesh = "refined"')
    process = subprocess.Popen(
        [sys.executable, "-m", "elbowroom", "solve", str(band), "--json", "--workers", "2"],
        stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, env={**os.environ, "PYTHONUNBUFFERED": "1"},
        start_new_session=True,
    )  # fmt: skip
    for line in process.stdout:
        if json.loads(line)["kind"] == "unit":
            break
    family = psutil.Process(process.pid).children(recursive=True)
    assert len(family) >= 2
    # as a terminal does it: to everybody
    os.killpg(process.pid, deed) if deed == signal.SIGINT else process.send_signal(deed)
    _, err = process.communicate(timeout=60)
    assert process.returncode == {signal.SIGINT: 130, signal.SIGTERM: 143}[deed]
    assert "Traceback" not in err
    _, left = psutil.wait_procs(family, timeout=5.0)
    assert not left
    found = len(list((band.parent / "store").rglob("*.h5")))
    assert 1 <= found < 4
    # a worker that had to be killed leaves a claim behind, which nobody takes for one
    store = JobRun(read_job(band)).store
    assert not any(store.claimed(path.stem) for path in (band.parent / "store").rglob("*.claim"))
    again = command("solve", band, "--json")
    assert again.code == 0
    assert [u["state"] for u in lines(again, "unit")].count("from store") == found


def test_several_jobs__of_one_store__are_one_run(command, band):
    copy = band.parent / "copy.toml"
    text = band.read_text()
    copy.write_text(text.replace("turn_deg = 0.0", "turn_deg = 45.0"))
    assert copy.read_text() != text
    outcome = command("solve", band, copy)
    assert outcome.code == 0, outcome.all
    assert "8 units of 2 stations, 0 in the store already, 4 to solve, 4 solved with another of the same key" in outcome.out
    assert len(list((band.parent / "store").rglob("*.h5"))) == 4
    told = command("solve", band, copy, "--json")
    assert {u["job"] for u in lines(told, "unit")} == {str(band), str(copy)}
    assert command("solve", band, band).code == 2


def test_run__of_several_jobs__makes_results_of_each(command, job):
    without_beams(job)
    copy = job.parent / "copy.toml"
    copy.write_text(
        job.read_text().replace('folder = "results"', 'folder = "others"').replace("turn_deg = 0.0", "turn_deg = 45.0")
    )
    assert command("run", job, copy, "--quiet").code == 0
    assert {p.name for p in (job.parent / "results").iterdir()} == {p.name for p in (job.parent / "others").iterdir()}


def test_run__that_drops_currents__keeps_port_matrices_only(command, job, change):
    change(job, 'currents = "keep"', 'currents = "drop"')
    assert command("solve", job, "--quiet").code == 0
    (whole,) = (job.parent / "store").rglob("*.h5")
    with h5py.File(whole) as file:
        admittance = file["loaded_admittance_s"][...]
    results = job.parent / "results"

    def made_of_ports():
        outcome = command("ports", job)
        assert outcome.code == 0, outcome.all
        tables = {path.name: path.read_text() for path in (*results.glob("ports_S.*"), *results.glob("active*.csv"))}
        assert len(tables) >= 2
        return tables

    from_currents = made_of_ports()
    outcome = command("run", job)
    assert outcome.code == 0, outcome.all
    assert "dropped" in outcome.out
    assert (job.parent / "results" / "beams.h5").exists()
    (left,) = (job.parent / "store").rglob("*.h5")
    assert left.name == whole.name
    with h5py.File(left) as file:
        assert "currents_per_volt" not in file
        assert (file["loaded_admittance_s"][...] == admittance).all()
        assert file["record_attributes"].attrs["strategy"] == "direct"
    # ports need none
    assert made_of_ports() == from_currents
    # another table needs the currents
    outcome = command("compare", job)
    assert outcome.code == 6
    assert "of 1 the currents were dropped once their tables were made (store.currents)" in outcome.all
    assert "1 to solve" in command("solve", job).out


def test_run__with_a_unit_damaged_inside_among_too_many_to_read__solves_it_again(command, job, monkeypatch):
    without_beams(job)
    assert command("solve", job, "--quiet").code == 0
    from elbowroom.job.engine import campaign

    monkeypatch.setattr(campaign, "READ_UNITS", 0)
    (path,) = (job.parent / "store").rglob("*.h5")
    content = bytearray(path.read_bytes())
    content[len(content) // 2] ^= 4
    path.write_bytes(content)
    outcome = command("run", job)
    assert outcome.code == 0, outcome.all
    assert "1 in the store already, 0 to solve" in outcome.out
    assert "not used" in outcome.err
    assert command("solve", job, "--json").out.count('"from store"') == 1


def test_cluster__local_and_an_address_where_nobody_answers(command, band, monkeypatch):
    distributed = pytest.importorskip("distributed", reason="Dask distributed is not installed (extra 'cluster')")
    assert distributed
    environment = {**os.environ, "PYTHONWARNINGS": "ignore"}
    arguments = [sys.executable, "-m", "elbowroom", "solve", str(band), "--json", "--cluster", "local", "--workers", "2"]
    done = subprocess.run(arguments, capture_output=True, text=True, check=False, env=environment, timeout=120)
    assert done.returncode == 0, done.stderr
    units = [json.loads(line) for line in done.stdout.splitlines() if '"unit"' in line]
    assert [u["state"] for u in units] == ["solved"] * 4
    monkeypatch.setattr("elbowroom.job.engine.cluster.CONNECT_SECONDS", 0.5)
    for unit in (band.parent / "store").rglob("*.h5"):
        unit.unlink()
    clock = time.monotonic()
    outcome = command("solve", band, "--cluster", "tcp://127.0.0.1:9")
    assert outcome.code == 8
    assert "no scheduler answers at tcp://127.0.0.1:9" in outcome.err
    assert time.monotonic() - clock < 30.0


def test_cluster__without_dask__says_what_to_install(command, band, monkeypatch):
    monkeypatch.setitem(sys.modules, "distributed", None)
    outcome = command("solve", band, "--cluster", "local")
    assert outcome.code == 8
    assert "pip install 'elbowroom[cluster]'" in outcome.err


@pytest.mark.parametrize(
    ("channels", "step", "method", "why"),
    [
        ("start_hz = 100e6\nstop_hz = 150e6\nstep_hz = 1e6", "10e6", "auto", "a station of this size is solved directly"),
        ("start_hz = 100e6\nstop_hz = 150e6\nstep_hz = 1e6", "10e6", "reduced", "it leaves 6 of 51 channels to be solved"),
        ("start_hz = 100e6\nstop_hz = 150e6\nstep_hz = 1e6", "0.5e6", "reduced", "the 51 channels are no closer than it"),
        ("start_hz = 100e6\nstop_hz = 110e6\nstep_hz = 0.25e6", "0.5e6", "reduced", None),
    ],
)
def test_step_of_solving_without_effect__is_told(command, job, change, channels, step, method, why):
    text = job.read_text()
    (line,) = [x for x in text.splitlines() if x.startswith("frequency_hz")]
    change(job, line, f"{channels}\nsolve_step_hz = {step}")
    change(job, 'method = "auto"', f'method = "{method}"')
    outcome = command("inspect", job)
    assert outcome.code == 0, outcome.all
    assert ("has no effect" in outcome.all) == (why is not None)
    if why is None:
        assert "20 of them are made from solved ones where the error allows" in " ".join(
            command("solve", job, "--plan").all.split()
        )
    else:
        assert why in " ".join(outcome.all.split())
