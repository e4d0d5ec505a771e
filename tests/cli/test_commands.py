"""Commands on a small job: what they write, say and return."""

import csv
import json
import os
import signal
import subprocess
import sys
import time

import h5py
import pytest

from elbowroom.cli.screen import readable_seconds


def test_start_inspect_solve__on_the_template(command, tmp_path):
    folder = tmp_path / "new"
    started = command("start", folder)
    assert started.code == 0
    assert {p.name for p in folder.iterdir()} == {"job.toml", "antenna.toml", "layout.csv"}
    looked = command("inspect", folder / "job.toml")
    assert looked.code == 0
    assert "no problems found in the model" in looked.out
    assert "memory available" in looked.out
    assert not (folder / "store").exists()


def test_solve__a_second_time__takes_it_from_the_store(command, job):
    first = command("solve", job)
    assert first.code == 0
    assert "1 to solve" in first.out
    second = command("solve", job)
    assert "1 in the store already, 0 to solve" in second.out
    assert "from store" in second.out


def test_run__writes_table_comparison_and_pictures(command, job):
    outcome = command("run", job)
    assert outcome.code == 0, outcome.all
    results = job.parent / "results"
    names = {p.name for p in results.iterdir()}
    assert {
        "beams.h5",
        "comparison.csv",
        "layout.png",
        "impedance.png",
        "sky_zenith-x_110MHz.png",
        "cuts_low-x_110MHz.png",
    } <= names
    assert all((results / n).read_bytes()[:4] == b"\x89PNG" for n in names if n.endswith(".png"))
    with h5py.File(results / "beams.h5") as file:
        assert list(file["beam_name"].asstr()) == ["zenith-x", "zenith-y", "low-x"]
        assert "not a measurement" in file.attrs["warning"]
    for name in names:
        assert str(results / name) in outcome.out.replace("\n", "")
    assert "not a measurement" in outcome.out


def test_compare_export_draw__one_by_one__give_what_run_gives(command, job, tmp_path):
    assert command("run", job, "--quiet").code == 0
    results = job.parent / "results"
    assert command("compare", job, "--output", tmp_path / "c.csv").code == 0
    assert (tmp_path / "c.csv").read_text() == (results / "comparison.csv").read_text()
    assert command("export", job, "--output", tmp_path / "b.h5").code == 0
    with h5py.File(tmp_path / "b.h5") as ours, h5py.File(results / "beams.h5") as theirs:
        assert (ours["coupled_beam"][...] == theirs["coupled_beam"][...]).all()
    assert command("draw", job, "--output", tmp_path / "pictures", "--component", "cross").code == 0
    assert {p.name for p in (tmp_path / "pictures").iterdir()} == {p.name for p in results.iterdir() if p.suffix == ".png"}


def test_draw__layout_only__needs_nothing_solved(command, job):
    assert command("draw", job, "--layout-only").code == 0
    assert [p.name for p in (job.parent / "results").iterdir()] == ["layout.png"]


def test_export__csv_with_another_step__has_a_line_for_each_direction(command, job):
    assert command("solve", job, "--quiet").code == 0
    outcome = command("export", job, "--format", "csv", "--step-deg", 30, "--components", "co-cross", "--normalisation", "peak")
    assert outcome.code == 0
    lines = (job.parent / "results" / "beams.csv").read_text().splitlines()
    rows = list(csv.DictReader(line for line in lines if not line.startswith("#")))
    # three beams, four rows of zenith angle and twelve of phi
    assert len(rows) == 3 * 4 * 12
    assert "coupled_co_real" in rows[0]


def test_json__every_line_is_an_object(command, job):
    for verb in ("inspect", "run", "compare", "export"):
        outcome = command(verb, job, "--json")
        assert outcome.code == 0
        kinds = [json.loads(line)["kind"] for line in outcome.out.splitlines()]
        assert kinds
    assert json.loads(outcome.out.splitlines()[-1])["path"].endswith("beams.h5")


def test_quiet__says_results_only(command, job):
    loud, quiet = command("solve", job), command("solve", job, "--quiet")
    assert "solver.mesh = default" in loud.out
    assert "solver.mesh" not in quiet.out
    assert quiet.err == ""


def test_frequency_option__takes_part_of_the_job(command, job, change):
    change(job, "[110e6]", "[110e6, 120e6]")
    outcome = command("solve", job, "--frequency-hz", "120e6", "--json")
    units = [json.loads(line) for line in outcome.out.splitlines() if '"unit"' in line]
    assert [u["frequency_hz"] for u in units] == [120e6]


def test_job_without_beams__is_solved_and_drawn(command, job):
    text = job.read_text()
    job.write_text(text[: text.index("# Beams:")] + text[text.index("[sky]") :])
    outcome = command("run", job)
    assert outcome.code == 0, outcome.all
    assert "no [[beam]]" in outcome.err
    assert "impedance.png" in {p.name for p in (job.parent / "results").iterdir()}


@pytest.mark.parametrize(
    "verb", ["", "start", "layout", "inspect", "antenna", "solve", "compare", "export", "draw", "ports", "run"]
)
def test_help__says_what_the_command_does(command, verb):
    outcome = command(*([verb] if verb else []), "--help")
    assert outcome.code == 0
    assert "Usage:" in outcome.out
    assert len(outcome.out.splitlines()) > 5


def test_help__imports_nothing_heavy():
    script = (
        "import sys; sys.argv = ['elbowroom', '--help']\n"
        "from elbowroom.cli.main import main\n"
        "try:\n    main()\nexcept SystemExit:\n    pass\n"
        "heavy = {'numpy', 'scipy', 'numba', 'h5py', 'matplotlib', 'pydantic', 'rich'} & set(sys.modules)\n"
        "assert not heavy, heavy\n"
    )
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr


@pytest.mark.parametrize("deed", [signal.SIGINT, signal.SIGKILL])
def test_interrupted_run__loses_nothing_and_goes_on(command, job, change, deed):
    change(job, "[110e6]", "[110e6, 111e6, 112e6, 113e6, 114e6, 115e6, 116e6, 117e6]")
    # Seven antennas and a fine mesh, so that there is time to interrupt it after the first unit.
    change(job, 'mesh = "default"', 'mesh = "refined"')
    process = subprocess.Popen(
        [sys.executable, "-m", "elbowroom", "solve", str(job), "--json"],
        stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, env={**os.environ, "PYTHONUNBUFFERED": "1"},
    )  # fmt: skip
    for line in process.stdout:
        if json.loads(line)["kind"] == "unit":
            break
    time.sleep(0.05)
    process.send_signal(deed)
    _, err = process.communicate(timeout=60)
    if deed == signal.SIGINT:
        assert process.returncode == 130
        assert "interrupted" in err
        assert "Traceback" not in err
    found = len(list((job.parent / "store").rglob("*.h5")))
    assert 1 <= found < 8
    outcome = command("solve", job, "--json")
    assert outcome.code == 0
    states = [json.loads(line)["state"] for line in outcome.out.splitlines() if '"unit"' in line]
    assert states.count("from store") == found
    assert len(states) == 8


def test_second_run__compiles_nothing(job):
    """Every compiled function of a second process comes from numba's cache on disk."""
    script = (
        "import sys; sys.argv = ['elbowroom', 'solve', sys.argv[1], '--quiet']\n"
        "from elbowroom.cli.main import main\n"
        "try:\n    main()\nexcept SystemExit as end:\n    assert not end.code, end.code\n"
        "from numba.core.registry import CPUDispatcher\n"
        "import gc\n"
        "ours = [f for f in gc.get_objects() if isinstance(f, CPUDispatcher) and f.py_func.__module__.startswith('elbowroom')]\n"
        "misses = {f.__name__: sum(f.stats.cache_misses.values()) for f in ours}\n"
        "assert any(sum(f.stats.cache_hits.values()) for f in ours), 'nothing compiled was used'\n"
        "assert not any(misses.values()), misses\n"
    )
    if os.environ.get("NUMBA_DISABLE_JIT") == "1":
        pytest.skip("nothing is compiled in this run")
    subprocess.run([sys.executable, "-m", "elbowroom", "solve", str(job), "--quiet"], check=True, capture_output=True)
    for unit in (job.parent / "store").rglob("*.h5"):
        unit.unlink()
    done = subprocess.run([sys.executable, "-c", script, str(job)], capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr[-2000:]


def test_readable_numbers():
    assert [readable_seconds(n) for n in (12.34, 600, 7200)] == ["12.3 s", "10.0 min", "2.0 h"]


def test_tables__keep_their_units_and_fit_narrow_screens(command, job, monkeypatch):
    assert command("solve", job, "--quiet").code == 0
    wide = command("compare", job)
    assert "[deg]" in wide.out
    assert "[dB]" in wide.out
    monkeypatch.setenv("COLUMNS", "50")
    narrow = command("compare", job)
    assert "peak shift [deg]: " in narrow.out
    assert max(map(len, narrow.out.splitlines())) < 250


def test_terminated_run__says_so(job):
    process = subprocess.Popen(
        [sys.executable, "-m", "elbowroom", "run", str(job)], stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True
    )
    process.stdout.readline()
    process.terminate()
    _, err = process.communicate(timeout=60)
    assert process.returncode == 143
    assert "terminated" in err
