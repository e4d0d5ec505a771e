"""One antenna alone from the command line: what it writes and says, and what it refuses."""

import csv
import json
import os
import signal
import subprocess
import sys

import pytest

DIPOLE = 'shape = "dipole"\nhalf_length_m = 0.45\nheight_m = 0.8\nwire_radius_m = 0.003\nconductivity_s_per_m = 1e6\n'
LOG_PERIODIC = """shape = "log-periodic"
height_m = 1.2
wire_radius_m = 0.002
tau = 0.8
sigma = 0.1
longest_half_length_m = 0.45
elements = 3
feeder_impedance_ohm = 120.0
"""
PICTURES = ["view", "impedance", "gain", "cuts", "convergence"]


@pytest.fixture
def file(tmp_path):
    path = tmp_path / "rod.toml"
    path.write_text(DIPOLE)
    return path


def table(path):
    return list(csv.DictReader(line for line in path.read_text().splitlines() if not line.startswith("#")))


def test_antenna__over_a_ground_writes_table_and_pictures(command, file):
    outcome = command("antenna", file, "--start-hz", 140e6, "--stop-hz", 160e6, "--step-hz", 10e6)
    assert outcome.code == 0, outcome.all
    results = file.parent / "results"
    assert {p.name for p in results.iterdir()} == {"antenna_rod.csv", *(f"antenna-{name}_rod.png" for name in PICTURES)}
    rows = table(results / "antenna_rod.csv")
    assert [float(r["frequency_hz"]) for r in rows] == [140e6, 150e6, 160e6]
    assert all(0.9 < float(r["radiation_efficiency"]) < 0.999 for r in rows)
    assert all(r["front_to_back_db"] == "nan" and 0.0 < float(r["impedance_change"]) < 0.05 for r in rows)
    assert "not a measurement" in outcome.out
    assert "(3 of 3)" in outcome.out
    for name in PICTURES:
        assert f"antenna-{name}_rod.png" in outcome.out.replace("\n", "")


def test_antenna__log_periodic_in_free_space_as_json(command, tmp_path):
    path = tmp_path / "log.toml"
    path.write_text(LOG_PERIODIC)
    options = ("--ground", "free-space", "--frequency-hz", 200e6, "--frequency-hz", 170e6, "--no-convergence", "--json")
    outcome = command("antenna", path, *options, "--output", tmp_path / "out", "--termination", "90-5j", "--mesh", "default")
    assert outcome.code == 0, outcome.all
    lines = [json.loads(line) for line in outcome.out.splitlines()]
    found = [line for line in lines if line["kind"] == "figures"]
    assert [(f["frequency_hz"], f["port"]) for f in found] == [(170e6, "x"), (170e6, "y"), (200e6, "x"), (200e6, "y")]
    # it looks at the sky, and x and y are one antenna
    assert all(f["front_to_back_db"] > 3.0 and f["impedance_change"] is None for f in found)
    assert found[0]["resistance_ohm"] == pytest.approx(found[1]["resistance_ohm"], rel=1e-9)
    written = [line["path"] for line in lines if line["kind"] == "file"]
    assert len(written) == 5
    assert not any("convergence" in path for path in written)


def test_antenna__height_and_quiet(command, file):
    low, high = (
        command("antenna", file, "--frequency-hz", 150e6, "--height-m", h, "--no-convergence", "--quiet", "--output", file.parent / str(h))
        for h in (0.0, 0.5)
    )  # fmt: skip
    assert low.code == high.code == 0
    assert "unknowns" not in low.out
    values = [float(table(file.parent / str(h) / "antenna_rod.csv")[0]["resistance_ohm"]) for h in (0.0, 0.5)]
    assert abs(values[0] - values[1]) > 1.0


def states(outcome):
    lines = [json.loads(line) for line in outcome.out.splitlines()]
    return [line["state"] for line in lines if line["kind"] == "unit"]


def test_antenna__solves_nothing_twice(command, file, tmp_path):
    def look(*options):
        outcome = command("antenna", file, "--frequency-hz", 150e6, "--frequency-hz", 160e6, "--json", *options)
        assert outcome.code == 0, outcome.all
        return outcome

    first, again = look(), look()
    assert states(first) == ["solved", "solved"]
    assert states(again) == ["from store", "from store"]
    figures = [[line for line in outcome.out.splitlines() if '"figures"' in line] for outcome in (first, again)]
    assert figures[0] == figures[1]
    assert len(list((file.parent / "store").rglob("*.h5"))) == 4
    # the termination is no part of what is solved, and a denser band adds to it
    denser = look("--frequency-hz", 155e6, "--termination", "50")
    assert states(denser) == ["from store", "solved", "from store"]
    # ground and height are, and a store of its own knows nothing
    assert states(look("--ground", "free-space", "--no-convergence")) == ["solved", "solved"]
    assert states(look("--height-m", 0.1, "--no-convergence")) == ["solved", "solved"]
    assert states(look("--no-convergence", "--store", tmp_path / "mine")) == ["solved", "solved"]
    assert len(list((tmp_path / "mine").rglob("*.h5"))) == 2


def test_antenna__damaged_unit__is_told_and_solved_again(command, file):
    options = ("antenna", file, "--frequency-hz", 150e6, "--no-convergence")
    assert command(*options).code == 0
    (unit,) = (file.parent / "store").rglob("*.h5")
    unit.write_bytes(unit.read_bytes()[:-100])
    outcome = command(*options)
    assert outcome.code == 0
    assert unit.name in outcome.all.replace("\n", "")
    assert "from store" not in outcome.out
    assert "from store" in command(*options).out


def test_antenna__store_that_cannot_be_made__is_told_before_anything_is_solved(command, file):
    (file.parent / "store").write_text("")
    outcome = command("antenna", file, "--frequency-hz", 150e6)
    assert outcome.code == 6
    assert "store" in outcome.err
    assert not (file.parent / "results").exists()


@pytest.mark.parametrize("deed", [signal.SIGINT, signal.SIGKILL])
def test_antenna__interrupted__goes_on_where_it_was(command, file, deed):
    band = ("--start-hz", "100e6", "--stop-hz", "170e6", "--step-hz", "10e6", "--json")
    process = subprocess.Popen(
        [sys.executable, "-m", "elbowroom", "antenna", str(file), *band],
        stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True, env={**os.environ, "PYTHONUNBUFFERED": "1"},
    )  # fmt: skip
    for line in process.stdout:
        if json.loads(line)["kind"] == "unit":
            break
    process.send_signal(deed)
    _, err = process.communicate(timeout=60)
    if deed == signal.SIGINT:
        assert process.returncode == 130
        assert "what was finished is in the store" in err
        assert "Traceback" not in err
    # two meshes a frequency
    found = len(list((file.parent / "store").rglob("*.h5"))) // 2
    assert 1 <= found < 8
    outcome = command("antenna", file, *band)
    assert outcome.code == 0
    assert states(outcome).count("from store") == found
    assert len(states(outcome)) == 8


@pytest.mark.parametrize(
    ("options", "code", "words"),
    [
        ((), 2, ("no frequencies", "--frequency-hz")),
        (("--frequency-hz", 150e6, "--start-hz", 1e8), 2, ("start_hz",)),
        (("--start-hz", 1e8, "--stop-hz", 2e8), 2, ("step_hz", "missing")),
        (("--start-hz", 2e8, "--stop-hz", 1e8, "--step-hz", 1e6), 2, ("stop_hz",)),
        (("--frequency-hz", 150), 2, ("150", "Hz")),
        (("--frequency-hz", "nan"), 2, ("nan",)),
        (("--frequency-hz", 150e6, "--termination", "open"), 2, ("open", "positive resistance")),
        (("--frequency-hz", 150e6, "--termination", "-50"), 2, ("-50", "positive resistance")),
        (("--frequency-hz", 150e6, "--termination", "nan"), 2, ("nan", "positive resistance")),
        (("--frequency-hz", 150e6, "--height-m", "nan"), 2, ("--height-m",)),
        (("--frequency-hz", 150e6, "--height-m", -0.9), 3, ("cannot be modelled", "below the ground")),
        (("--frequency-hz", 2.1e9), 2, ("2.1e+09 Hz",)),
        (("--frequency-hz", 150e6, "--ground", "sand"), 2, ("sand", "perfect")),
    ],
)
def test_antenna__bad_options_are_named(command, file, options, code, words):
    outcome = command("antenna", file, *options)
    assert outcome.code == code, outcome.all
    assert "Traceback" not in outcome.all
    for word in words:
        assert word in outcome.err, outcome.err
    assert not (file.parent / "results").exists()


def test_antenna__bad_files_are_named(command, file):
    gone = command("antenna", file.with_name("gone.toml"), "--frequency-hz", 150e6)
    assert (gone.code, "gone.toml" in gone.err) == (2, True)
    file.write_text(DIPOLE.replace("half_length_m", "half_lenght_m"))
    wrong = command("antenna", file, "--frequency-hz", 150e6)
    assert wrong.code == 2
    assert "half_lenght_m" in wrong.err
    assert "half_length_m" in wrong.err
    file.write_text(DIPOLE.replace("0.003", "0.03"))
    thick = command("antenna", file, "--frequency-hz", 300e6)
    assert thick.code == 3
    assert "0.03 wavelengths" in thick.err
    file.write_text(DIPOLE)
    (file.parent / "file").write_text("")
    nowhere = command("antenna", file, "--frequency-hz", 150e6, "--no-convergence", "--output", file.parent / "file")
    assert nowhere.code == 7


def test_antenna__over_soil_tells_what_the_ground_takes(command, file):
    def figures(*options):
        outcome = command("antenna", file, "--frequency-hz", 150e6, "--no-convergence", "--json", *options)
        assert outcome.code == 0, outcome.all
        return next(f for f in map(json.loads, outcome.out.splitlines()) if f["kind"] == "figures")

    plane, bare, mesh = figures(), figures("--soil", 10, 0.01), figures("--soil", 10, 0.01, "--wire-mesh", 0.1, 0.001)
    assert plane["ground_loss"] == 0.0
    assert bare["ground_loss"] > 2.0 * mesh["ground_loss"] > 0.02
    for found in (plane, bare, mesh):
        # one port, so that all that is accepted goes into sky, wires and ground; the power balance of the model is good to 1e-4
        assert found["radiation_efficiency"] + found["wire_loss"] + found["ground_loss"] == pytest.approx(1.0, abs=2e-4)
        assert found["wire_loss"] > 0.0
    shown = command("antenna", file, "--frequency-hz", 150e6, "--no-convergence", "--soil", 10, 0.01).out
    assert "relative permittivity 10" in shown
    assert "into ground: part of the accepted power" in " ".join(shown.split())


@pytest.mark.parametrize(
    ("options", "code", "told"),
    [
        (("--wire-mesh", 0.1, 0.001), 2, "give --soil"),
        (("--soil", 10, 0.01, "--ground", "free-space"), 2, "expected one of them"),
        (("--soil", 0.5, 0.01), 4, "relative_permittivity 0.5"),
        (("--soil", "nan", 0.01), 4, "relative_permittivity"),
        (("--soil", 10, 0.01, "--wire-mesh", 0.1, 0.05), 4, "wire_radius_m 0.05"),
        (("--soil", 10, 0.01, "--height-m", -0.8), 3, "ground"),
    ],
)
def test_antenna__bad_soil_is_refused(command, file, options, code, told):
    outcome = command("antenna", file, "--frequency-hz", 150e6, *options)
    assert outcome.code == code
    assert told in " ".join(outcome.all.split())
