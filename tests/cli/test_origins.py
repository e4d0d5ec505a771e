"""Commands on channels that were not assembled for themselves: the screen and the heads of tables say so."""

import json
from dataclasses import replace

import pytest

from elbowroom.job.solve import SOLUTION_SCHEMA
from elbowroom.store import Hdf5Store

MADE = "interpolated currents"


@pytest.fixture
def made(command, job):
    """The job, its units stored as if they had been made from others."""
    assert command("grounds", job, "--soil", 10, 0.01, "--quiet").code == 0
    assert "origin" not in (job.parent / "results" / "grounds.csv").read_text()
    store = Hdf5Store(job.parent / "store", SOLUTION_SCHEMA)
    for key in store.keys():
        record = store.get(key)
        assert record.attributes["origin"] == "assembled"
        store.put(key, replace(record, attributes=record.attributes | {"origin": MADE}))
    return job


def head(path):
    return "\n".join(line for line in path.read_text().splitlines() if line.startswith("#"))


def test_compare_and_ports__add_a_column(command, made):
    for verb in ("compare", "ports"):
        outcome = command(verb, made)
        assert outcome.code == 0, outcome.all
        assert "interp. currents" in outcome.out
        assert "interpolated currents: currents were interpolated between solved frequencies" in outcome.out
    told = [json.loads(line) for line in command("ports", made, "--json").out.splitlines()]
    assert {line["origin"] for line in told if line["kind"] == "active"} == {MADE}


def test_compare_and_ports__say_nothing_where_all_were_assembled(command, job):
    assert command("solve", job, "--quiet").code == 0
    for verb in ("compare", "ports"):
        assert "origin" not in command(verb, job).out


def test_heads_of_grounds_and_scans__tell_the_origin(command, made):
    outcome = command("grounds", made, "--soil", 10, 0.01)
    assert "perfect: origin interpolated currents at 110000000 Hz" in outcome.out
    results = made.parent / "results"
    assert "# bare soil: origin interpolated currents at 110000000 Hz" in head(results / "grounds.csv")
    assert head(results / "grounds.csv").count("were interpolated between solved frequencies") == 1
    assert command("ports", made, "--scan", 120, "--scan-beam", "low-x").code == 0
    (scan,) = results.glob("active-scan_*.csv")
    assert "origin interpolated currents at 110000000 Hz" in head(scan)
