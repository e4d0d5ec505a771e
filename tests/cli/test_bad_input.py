"""Whatever is wrong with the input: one clear message, the exit code of its kind, no traceback, nothing lost."""

import subprocess
import sys

import h5py
import pytest

from elbowroom.job.templates import write_template

FREE_WIRES = """name = "wires"
[[wire]]
start_m = [-0.5, 0.0, 1.0]
end_m = [0.5, 0.0, 1.0]
radius_m = 0.003
[[port]]
name = "x"
wire = 0
[[port]]
name = "y"
wire = 0
position = 0.4
"""
ANOTHER_WIRE = """[[wire]]
start_m = [{}]
end_m = [{}]
radius_m = 0.003
"""


def refused(outcome, code, *words):
    assert outcome.code == code, outcome.all
    assert "Traceback" not in outcome.all
    for word in words:
        assert word in outcome.err, f"{word!r} is not in: {outcome.err}"


@pytest.mark.parametrize(
    ("name", "old", "new", "code", "words"),
    [
        ("layout.csv", "east_m,north_m,up_m", "east_m,nort_m,up_m", 2, ("layout.csv", "nort_m", "north_m")),
        ("layout.csv", "east_m,north_m,up_m", "east_m,up_m", 2, ("layout.csv", "line 4")),
        ("layout.csv", "1.387", "wide", 2, ("layout.csv", "line 6", "east_m", "wide")),
        ("layout.csv", "1.387", "nan", 2, ("layout.csv", "line 6", "east_m", "nan")),
        ("layout.csv", "1.387", "inf", 2, ("layout.csv", "line 6", "inf")),
        ("layout.csv", "1.387", "1387e3", 2, ("layout.csv", "line 6", "east_m")),
        ("layout.csv", "A002", "A001", 2, ("layout.csv", "line 6", "A001", "already used")),
        ("layout.csv", "1.387,-0.367", "-0.627,0.13", 2, ("A001", "A002")),
        ("layout.csv", "1.387,-0.367,0.0", "1.387,-0.367,-0.9", 3, ("A002", "ground")),
        ("layout.csv", "1.387,-0.367,0.0,0.0,0.0,0.0,", "1.387,-0.367,0.0,0.0,0.0,0.0,tall", 2, ("tall",)),
        ("job.toml", "[110e6]", "[110]", 2, ("band.frequency_hz", "110", "Hz")),
        ("job.toml", "[110e6]", "[0.0]", 2, ("band.frequency_hz", "0")),
        ("job.toml", "[110e6]", "[-110e6]", 2, ("band.frequency_hz", "-1.1")),
        ("job.toml", "[110e6]", "[nan]", 2, ("band.frequency_hz", "nan")),
        ("job.toml", "[110e6]", "[]", 2, ("frequency_hz = []", "at least one")),
        ("job.toml", "frequency_hz", "frequencies_hz", 2, ("frequencies_hz", "frequency_hz")),
        ("job.toml", "\n[band]\n", "\n[bend]\n", 2, ("bend", "band")),
        ("job.toml", "\n[band]\n", "\n[band\n", 2, ("job.toml", "line")),
        ("job.toml", 'port = "x"', 'port = "z"', 2, ("beam[0].port", "z", "x, y")),
        ("job.toml", "impedance_ohm = 100.0", "impedance_ohm = -100.0", 2, ("termination.impedance_ohm", "-100")),
        ("job.toml", 'layout = "layout.csv"', 'layout = "lay.csv"', 2, ("lay.csv",)),
        ("job.toml", 'ground = "perfect"', 'ground = "perfct"', 2, ("ground", "perfct", "perfect")),
        ("job.toml", "step_deg = 10.0", "step_deg = 7.0", 2, ("sky.step_deg", "7")),
        ("antenna.toml", "arm_length_m", "arm_lenght_m", 2, ("arm_lenght_m", "arm_length_m")),
        ("antenna.toml", "arm_length_m = 0.80", 'arm_length_m = "long"', 2, ("arm_length_m", "long")),
        ("antenna.toml", "wire_radius_m = 0.006", "wire_radius_m = 0.4", 2, ("antenna.toml",)),
        ("antenna.toml", "wire_radius_m = 0.006", "wire_radius_m = 0.06", 2, ("antenna.toml",)),
        ("antenna.toml", "wire_radius_m = 0.006", "wire_radius_m = -0.006", 2, ("antenna.toml", "-0.006", "must be positive")),
        ("antenna.toml", 'shape = "crossed-dipoles"', 'shape = "crossed-dipole"', 2, ("crossed-dipole", "crossed-dipoles")),
    ],
)  # fmt: skip
@pytest.mark.parametrize("verb", ["inspect", "run"])
def test_input__wrong_in_one_place__is_named(command, job, change, name, old, new, code, words, verb):
    change(job.parent / name, old, new)
    outcome = command(verb, job)
    if verb == "inspect" and code == 3:
        # inspect lists problems of the model as its result
        assert outcome.code == 3
        assert all(word in outcome.all for word in words)
        return
    refused(outcome, code, *words)
    assert not (job.parent / "results").exists()


def test_layout__without_antennas__is_refused(command, job):
    (job.parent / "layout.csv").write_text("name,east_m,north_m\n")
    refused(command("run", job), 2, "layout.csv", "no antennas")
    (job.parent / "layout.csv").write_text("")
    refused(command("run", job), 2, "layout.csv")


@pytest.mark.parametrize(
    ("extra", "words"),
    [
        (ANOTHER_WIRE.format("0.1, 0.0, 1.0", "0.9, 0.0, 1.0"), ("wire",)),
        (ANOTHER_WIRE.format("0.0, -0.3, 1.0", "0.0, 0.3, 1.002"), ("wire",)),
        (ANOTHER_WIRE.format("0.0, 0.2, 1.0", "0.0, 0.2, 1.0"), ("wire[1]", "length")),
        (ANOTHER_WIRE.format("0.0, 0.2, -1.0", "0.0, 0.2, -2.0"), ("below the ground",)),
        (ANOTHER_WIRE.format("0.0, 0.2, 1.0", "0.0, 0.2, 1.004"), ("wire[1]", "radius", "length")),
    ],
    ids=["overlapping", "crossing", "no length", "below ground", "thick"],
)
def test_wires__that_cannot_be__are_refused(command, job, extra, words):
    (job.parent / "antenna.toml").write_text(FREE_WIRES + extra)
    outcome = command("run", job)
    assert outcome.code in (2, 3)
    refused(outcome, outcome.code, *words)


def test_antennas__whose_wires_cut_each_other__are_refused(command, job, change):
    change(job.parent / "layout.csv", "1.387,-0.367", "-0.227,0.13")
    refused(command("solve", job), 3, "A001", "A002")


def test_job__too_large_for_the_machine__is_refused_before_it_starts(command, job, monkeypatch):
    import elbowroom.job.plan as plan

    monkeypatch.setattr(plan, "available_memory_bytes", lambda root="/": 1_000_000)
    outcome = command("run", job)
    refused(outcome, 8, "of memory needed", "1 MB available", "nothing was started")
    assert not list(job.parent.rglob("*.h5"))


def test_job__too_large_for_the_process_limit__is_refused(tmp_path):
    # a real limit on the address space, as a container or batch system sets one; the demo station needs gigabytes
    write_template("demo", tmp_path / "demo")
    script = (
        "import resource, sys; from elbowroom.cli.main import main; import psutil, numba, scipy.linalg, h5py; "
        "resource.setrlimit(resource.RLIMIT_AS, (psutil.Process().memory_info().vms + 800_000_000,) * 2); "
        f"sys.argv = ['elbowroom', 'run', {str(tmp_path / 'demo' / 'job.toml')!r}]; main()"
    )
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=False)
    assert done.returncode == 8, done.stdout + done.stderr
    assert "of memory needed" in done.stderr
    assert "Traceback" not in done.stderr
    assert not list((tmp_path / "demo").rglob("*.h5"))


@pytest.mark.parametrize("what", ["store", "results"])
def test_folder__whose_parent_is_a_file__is_refused(command, job, what):
    (job.parent / "taken").write_text("a file")
    table = "[store]\nfolder" if what == "store" else "[output]\nfolder"
    text = job.read_text()
    old = f'{table} = "{what}"'
    assert old in text
    job.write_text(text.replace(old, f'{table} = "taken/{what}"'))
    outcome = command("run", job, "--quiet")
    refused(outcome, 6 if what == "store" else 7, "taken")
    assert (job.parent / "taken").read_text() == "a file"
    # told before anything is solved in vain
    assert not list(job.parent.rglob("*.h5"))


def stored(job):
    (path,) = (job.parent / "store").rglob("*.h5")
    return path


@pytest.mark.parametrize("damage", ["bit", "truncated", "empty", "foreign"])
def test_damaged_unit__is_told_set_aside_and_solved_again(command, job, damage):
    assert command("solve", job, "--quiet").code == 0
    path = stored(job)
    content = bytearray(path.read_bytes())
    if damage == "bit":
        content[len(content) // 2] ^= 4
    content = {"truncated": content[: len(content) // 2], "empty": b"", "foreign": b"not a unit " * 500}.get(damage, content)
    path.write_bytes(content)
    outcome = command("solve", job)
    assert outcome.code == 0, outcome.all
    assert "warning" in outcome.err
    assert "solved" in outcome.out
    again = command("solve", job)
    assert again.code == 0
    assert "from store" in again.out
    assert "warning" not in again.err


def test_unit_of_another_schema_version__is_told_and_solved_again(command, job, monkeypatch):
    import dataclasses

    import elbowroom.job.pipeline as pipeline
    import elbowroom.job.solve as solving

    newer = dataclasses.replace(solving.SOLUTION_SCHEMA, version=solving.SOLUTION_SCHEMA.version + 1)
    with monkeypatch.context() as patch:
        patch.setattr(pipeline, "SOLUTION_SCHEMA", newer)
        assert command("solve", job, "--quiet").code == 0
    theirs = stored(job)
    before = theirs.read_bytes()
    outcome = command("solve", job)
    assert outcome.code == 0, outcome.all
    assert "solved" in outcome.out
    # a newer program's file is not ours to throw away, or it is set aside under another name
    kept = [p for p in (job.parent / "store").rglob("*") if p.is_file() and p.read_bytes() == before]
    assert kept, "the other version's file is lost"


def test_results_of_a_job_not_solved__say_how_to_get_them(command, job):
    for verb in ("compare", "export", "draw"):
        refused(command(verb, job), 6, "not solved yet", "elbowroom solve")


def test_frequency__that_the_job_has_not__is_refused(command, job):
    refused(command("solve", job, "--frequency-hz", "111e6"), 2, "111000000", "110000000")
    refused(command("solve", job, "--frequency-hz", "fast"), 2, "fast")


def test_export__with_options_that_do_not_fit__is_refused(command, job):
    assert command("solve", job, "--quiet").code == 0
    refused(command("export", job, "--step-deg", 7), 3, "divides 90")
    refused(command("export", job, "--step-deg", 0), 2, "0.05")
    refused(command("export", job, "--step-deg", "1e-9"), 2, "0.05")
    refused(command("export", job, "--format", "csv", "--elements"), 7, "HDF5 only")
    refused(command("export", job, "--format", "fits"), 2, "fits")


def test_start__in_a_folder_with_files__overwrites_nothing(command, job):
    before = job.read_text()
    outcome = command("start", job.parent)
    assert outcome.code != 0
    assert "Traceback" not in outcome.all
    assert job.read_text() == before


@pytest.mark.parametrize(
    ("arguments", "words"),
    [
        (("disc", "l.csv"), ("--count", "--radius-m", "--spacing-m")),
        (("disc", "l.csv", "--count", 500, "--radius-m", 5, "--spacing-m", 1.5), ("500",)),
        (("grid", "l.csv", "--columns", 0, "--rows", 3, "--spacing-m", 1.5), ("columns",)),
        (("rings", "l.csv", "--rings", "1,b", "--spacing-m", 1.5), ("1,b",)),
        (("disc", "l.csv", "--count", 5, "--radius-m", 5, "--spacing-m", 1.5, "--turn", "left"), ("left",)),
        (("triangle", "l.csv"), ("triangle",)),
    ],
)
def test_layout__that_cannot_be_made__is_refused(command, tmp_path, monkeypatch, arguments, words):
    monkeypatch.chdir(tmp_path)
    outcome = command("layout", *arguments)
    assert outcome.code in (2, 3)
    refused(outcome, outcome.code, *words)
    assert not (tmp_path / "l.csv").exists()


def test_one_bad_frequency__does_not_stop_the_others(command, job, change):
    # a radius of 8 mm is beyond 0.02 wavelengths at 900 MHz; the model's limits are known before anything is solved
    change(job, "[110e6]", "[110e6, 900e6]")
    change(job.parent / "antenna.toml", "wire_radius_m = 0.006", "wire_radius_m = 0.008")
    outcome = command("solve", job)
    assert outcome.code in (3, 4), outcome.all
    assert "900 MHz" in outcome.err
    assert "Traceback" not in outcome.all


def test_stored_file__opens_with_plain_h5py(command, job):
    assert command("solve", job, "--quiet").code == 0
    with h5py.File(stored(job)) as file:
        names: list[str] = []
        file.visit(names.append)
        assert any(name.endswith("loaded_admittance_s") for name in names)


@pytest.mark.parametrize("victim", ["job.toml", "layout.csv", "antenna.toml", "store/x.h5"])
@pytest.mark.parametrize("verb", ["compare", "export"])
def test_results__never_go_over_the_job_s_own_files(command, job, victim, verb):
    assert command("solve", job, "--quiet").code == 0
    target = job.parent / victim
    before = target.read_bytes() if target.exists() else None
    refused(command(verb, job, "--output", target), 7, victim.split("/")[-1])
    assert (target.read_bytes() if target.exists() else None) == before


def test_results__never_replace_what_is_no_plain_file(command, job, tmp_path):
    import os
    import stat

    assert command("solve", job, "--quiet").code == 0
    pipe = tmp_path / "pipe"
    os.mkfifo(pipe)
    refused(command("export", job, "--output", pipe), 7, "pipe")
    assert stat.S_ISFIFO(pipe.stat().st_mode)
    refused(command("export", job, "--output", tmp_path), 7, "folder")


def test_layout__over_a_file__needs_to_be_told(command, tmp_path):
    target = tmp_path / "l.csv"
    target.write_text("mine")
    arguments = ("layout", "grid", target, "--columns", 2, "--rows", 2, "--spacing-m", 2)
    refused(command(*arguments), 2, "--replace")
    assert target.read_text() == "mine"
    assert command(*arguments, "--replace").code == 0
    assert "--spacing-m 2" in target.read_text()
    refused(command("layout", "grid", tmp_path / "m.csv", "--columns", 100000, "--rows", 100000, "--spacing-m", 2), 2, "at most")
    refused(command("layout", "disc", tmp_path / "m.csv", "--rings", "1,6"), 2, "--rings has no meaning")


def test_job__with_frequencies_a_tenth_of_a_hertz_apart__is_refused(command, job, change):
    change(job, "[110e6]", "[110e6, 110000000.1]")
    refused(command("inspect", job), 2, "differ by less than 1 Hz")


@pytest.mark.parametrize("key", ["turn_deg = 0.0", "shift_east_m = 0.0"])
def test_station__turned_or_shifted_beyond_reason__is_refused(command, job, change, key):
    change(job, key, key.replace("0.0", "1e12"))
    refused(command("inspect", job), 2, key.split()[0])


def test_beam__over_ports_of_many_directions__is_doubted(command, job, change):
    change(job.parent / "layout.csv", "1.387,-0.367,0.0,0.0", "1.387,-0.367,0.0,75.0")
    outcome = command("inspect", job)
    assert outcome.code == 0
    assert "directions lie up to" in outcome.out


def test_truncated_unit__is_told_by_commands_that_need_it(command, job):
    assert command("solve", job, "--quiet").code == 0
    path = stored(job)
    path.write_bytes(path.read_bytes()[:500])
    refused(command("compare", job), 6, "damaged")


def test_flipped_bit__is_told_by_commands_that_need_it_and_nothing_is_solved(command, job):
    assert command("solve", job, "--quiet").code == 0
    path = stored(job)
    content = bytearray(path.read_bytes())
    content[len(content) // 2] ^= 1
    path.write_bytes(content)
    refused(command("compare", job), 6, "damaged")


def test_output_folder__that_is_a_file__is_told_before_anything_is_solved(command, job, change):
    change(job, 'folder = "results"', 'folder = "layout.csv"')
    refused(command("run", job), 7, "layout.csv")
    assert not (job.parent / "store").exists()


@pytest.mark.parametrize(("closed", "code"), [("stdout", 0), ("full", 7)])
def test_screen__closed_or_full__leaves_no_trace_back(job, closed, code):
    arguments = f"{sys.executable} -m elbowroom inspect {job}"
    tail = ">&-" if closed == "stdout" else "> /dev/full"
    done = subprocess.run(["bash", "-c", f"{arguments} {tail}"], capture_output=True, text=True, check=False)
    assert "Traceback" not in done.stderr
    assert done.returncode == code


@pytest.mark.parametrize(
    ("old", "new", "words"),
    [
        ('title = "Seven antennas"', "title = " + "9" * 5000, "a number of thousands of digits"),
        ('title = "Seven antennas"', "title = " + "[" * 3000 + "]" * 3000, "brackets nested hundreds deep"),
        ('title = "Seven antennas"', 'title = "red\\u001b[31m\\nline"', r'"red\x1b[31m\nline"'),
        ('ground = "perfect"', "ground = " + "[" * 200 + "]" * 200, "station.ground = [[...]]"),
    ],
)
def test_job__that_no_reader_expects__is_told_in_one_message(command, job, change, old, new, words):
    change(job, old, new)
    refused(command("inspect", job), 2, "job.toml", words)


def test_job__whose_layout_is_a_pipe_that_nobody_writes__is_not_waited_for(command, job):
    import os

    (job.parent / "layout.csv").unlink()
    os.mkfifo(job.parent / "layout.csv")
    refused(command("inspect", job), 2, "layout.csv", "the file is empty")


@pytest.mark.parametrize("victim", ["job.toml", "antenna.toml", "layout.csv", "store", "store/deeper/solve.log"])
def test_log__is_not_written_into_files_of_the_job(command, job, victim):
    target = job.parent / victim
    before = target.read_bytes() if target.exists() else None
    refused(command("solve", job, "--log", target), 7, "cannot write", victim)
    assert (target.read_bytes() if target.exists() else None) == before


def test_log__on_a_full_disk__stops_nothing(command, job):
    outcome = command("solve", job, "--log", "/dev/full", "--quiet")
    assert (outcome.code, outcome.err) == (0, ""), outcome.err
    assert list((job.parent / "store").glob("*/*.h5"))


def test_store__that_is_a_link_to_itself__is_refused(command, job):
    (job.parent / "store").symlink_to("store")
    refused(command("solve", job), 6, "store")
    refused(command("store", "pack", job, job.parent / "p"), 6)


def test_screen__without_the_letters_of_a_name__shows_their_codes(job):
    import os

    folder = job.parent.rename(job.parent.with_name("b\u00e4\u2603d"))
    surroundings = {**os.environ, "PYTHONIOENCODING": "ascii"}
    program = [sys.executable, "-m", "elbowroom.cli.main", "draw", folder / job.name, "--layout-only"]
    done = subprocess.run(program, env=surroundings, capture_output=True, timeout=60, check=False)
    assert (done.returncode, done.stderr) == (0, b"")
    assert rb"b\xe4\u2603d" in done.stdout


def test_screen__whose_reader_has_gone__ends_the_program_by_the_code_of_that(job):
    for mode in ("--quiet", "--json"):
        program = f"{sys.executable} -m elbowroom.cli.main inspect {job} {mode} | true; exit ${{PIPESTATUS[0]}}"
        done = subprocess.run(["bash", "-c", program], capture_output=True, timeout=60, check=False)
        assert (done.returncode, done.stderr) == (141, b"")
