"""How much the ground matters, from the command line."""

import csv
import json

import pytest

SOIL = ("--soil", 10, 0.01)
MESH = ("--wire-mesh", 0.1, 0.001)


def test_grounds__writes_table_and_picture_and_solves_nothing_twice(command, job):
    outcome = command("grounds", job, *SOIL, *MESH)
    assert outcome.code == 0, outcome.all
    assert "solved on perfect, mesh on soil, bare soil" in outcome.out
    assert "not a measurement" in outcome.out
    assert "relative permittivity 10" in outcome.out
    results = job.parent / "results"
    table = list(csv.DictReader(x for x in (results / "grounds.csv").read_text().splitlines() if not x.startswith("#")))
    assert {r["ground"] for r in table} == {"perfect", "mesh on soil", "bare soil"}
    loss = {r["ground"]: float(r["ground_loss"]) for r in table}
    assert loss["perfect"] == 0.0 < loss["mesh on soil"] < loss["bare soil"]
    assert (results / "grounds.png").stat().st_size > 1000
    again = command("grounds", job, *SOIL, "--json", "--output", job.parent / "other")
    lines = [json.loads(line) for line in again.out.splitlines()]
    assert [line["solved"] for line in lines if line["kind"] == "unit"] == [[]]
    found = [line for line in lines if line["kind"] == "grounds"]
    assert {line["ground"] for line in found} == {"perfect", "bare soil"}
    assert (job.parent / "other" / "grounds.csv").exists()


def test_grounds__takes_soil_and_mesh_from_the_job(command, job, change):
    table = (
        '\n[station.ground]\nkind = "mesh-on-soil"\nrelative_permittivity = 5\nconductivity_s_per_m = 0.01\npitch_m = 0.1\n'
        "wire_radius_m = 0.001\n[band]"
    )
    change(job, "\n[band]", table)
    text = "\n".join(line for line in job.read_text().splitlines() if not line.startswith("ground ="))
    job.write_text(text)
    outcome = command("grounds", job, "--json")
    assert outcome.code == 0, outcome.all
    found = [line for line in map(json.loads, outcome.out.splitlines()) if line["kind"] == "grounds"]
    assert {line["ground"] for line in found} == {"perfect", "mesh on soil", "bare soil"}
    # the job's own ground is one of them
    stored = command("solve", job, "--json")
    assert stored.code == 0
    states = [line["state"] for line in map(json.loads, stored.out.splitlines()) if line["kind"] == "unit"]
    assert states == ["from store"]


def test_grounds__does_not_write_over_the_table_of_the_soil(command, job, change):
    table = "frequency_hz,relative_permittivity,conductivity_s_per_m\n50e6,12,0.01\n300e6,9,0.02\n"
    (job.parent / "grounds.csv").write_text(table)
    change(job, "\n[band]", '\n[station.ground]\nkind = "soil"\nfile = "grounds.csv"\n[band]')
    job.write_text("\n".join(line for line in job.read_text().splitlines() if not line.startswith("ground =")))
    outcome = command("grounds", job, "--output", job.parent)
    assert outcome.code == 7
    assert "it is a file of the job itself" in outcome.all
    assert (job.parent / "grounds.csv").read_text() == table


@pytest.mark.parametrize(
    ("options", "code", "told"),
    [
        ((), 4, "no soil is known"),
        (MESH, 4, "no soil is known"),
        (("--soil", 0.1, 0.01), 4, "relative_permittivity 0.1"),
        ((*SOIL, "--wire-mesh", 0.1, 0.1), 4, "wire_radius_m 0.1"),
        ((*SOIL, "--frequency-hz", 1e6), 2, "not a frequency of this job"),
    ],
)
def test_grounds__bad_options_are_refused(command, job, options, code, told):
    outcome = command("grounds", job, *options)
    assert outcome.code == code
    assert told in " ".join(outcome.all.split())


def test_grounds__antennas_that_end_on_the_ground_cannot_stand_on_soil(command, job, tmp_path):
    (job.parent / "antenna.toml").write_text('shape = "monopole"\nlength_m = 0.5\nwire_radius_m = 0.003\n')
    text = job.read_text()
    job.write_text(text[: text.index("[[beam]]")] if "[[beam]]" in text else text)
    outcome = command("grounds", job, *SOIL)
    assert outcome.code == 3
    assert "wires that end on or enter soil are not modelled" in " ".join(outcome.all.split())
