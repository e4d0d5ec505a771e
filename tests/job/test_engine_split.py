"""How cores are split, how long units take with some threads, and what a campaign counts."""

import math

import pytest

from elbowroom.base.errors import JobFileError, ModelRangeError, ResourceError
from elbowroom.job.engine import campaign as campaign_module
from elbowroom.job.engine.campaign import Campaign, predicted_seconds
from elbowroom.job.engine.split import SMALL_SECONDS, Split, choose_split, seconds_with
from elbowroom.job.jobfile import read_job
from elbowroom.job.pipeline import JobRun
from elbowroom.job.plan import Prediction
from elbowroom.job.templates import write_template

GIGABYTE = 10**9


def unit(seconds=60.0, memory=GIGABYTE, serial=0.0):
    return Prediction(memory, 1000, seconds, 1000, serial)


def test_split__many_units_get_a_core_each():
    assert choose_split(16, unit(), cores=2, memory_bytes=24 * GIGABYTE) == Split(2, 1)
    assert choose_split(512, unit(), cores=64, memory_bytes=512 * GIGABYTE) == Split(64, 1)


def test_split__one_unit_gets_all_cores():
    assert choose_split(1, unit(), cores=8, memory_bytes=24 * GIGABYTE) == Split(1, 8)


def test_split__an_odd_unit_at_the_end_is_weighed():
    # three units on two cores: two rounds of one-thread units take 2, three of two threads one after another 3 / 1.6
    assert choose_split(3, unit(), cores=2, memory_bytes=24 * GIGABYTE) == Split(1, 2)
    # but what threads do not shorten takes its time either way
    assert choose_split(3, unit(serial=50.0), cores=2, memory_bytes=24 * GIGABYTE) == Split(2, 1)


def test_split__memory_bounds_the_workers():
    found = choose_split(100, unit(memory=10 * GIGABYTE), cores=16, memory_bytes=45 * GIGABYTE)
    assert found == Split(4, 4)
    assert choose_split(100, unit(memory=40 * GIGABYTE), cores=16, memory_bytes=45 * GIGABYTE) == Split(1, 16)


def test_split__small_jobs_stay_in_one_process():
    assert choose_split(10, unit(0.1 * SMALL_SECONDS), cores=4, memory_bytes=GIGABYTE) == Split(1, 4)
    assert choose_split(12, unit(0.1 * SMALL_SECONDS), cores=4, memory_bytes=24 * GIGABYTE) == Split(4, 1)


def test_split__bad_arguments():
    with pytest.raises(ModelRangeError, match="0 units on 2 cores"):
        choose_split(0, unit(), cores=2, memory_bytes=1)


def test_seconds__with_threads():
    whole = unit(10.0, serial=4.0)
    assert seconds_with(whole, 8, 8) == pytest.approx(10.0)
    one = seconds_with(whole, 1, 8)
    # the rest is shared but for a quarter
    assert one == pytest.approx(4.0 + 6.0 / (0.25 + 0.75 / 8))
    assert seconds_with(whole, 4, 8) < one


@pytest.fixture
def job(tmp_path):
    folder = tmp_path / "one"
    write_template("small", folder)
    return folder / "job.toml"


def test_campaign__turned_and_shifted_copies_with_one_store_are_solved_once(job):
    copy = job.parent / "turned.toml"
    text = job.read_text()
    copy.write_text(text.replace("turn_deg = 0.0", "turn_deg = 30.0").replace("shift_east_m = 0.0", "shift_east_m = 100.0"))
    assert copy.read_text() != text
    found = Campaign([JobRun(read_job(job)), JobRun(read_job(copy))])
    assert len(found.units) == 4
    assert [u.twin is not None for u in found.units] == [False, False, True, True]
    found.predict()
    items = found.items(1)
    assert len(items) == 2
    assert sorted(u.run.job.path.name for u in found.units_of(items[0], 0)) == ["job.toml", "turned.toml"]
    # a store of its own: nothing is shared
    apart = job.parent / "apart.toml"
    apart.write_text(copy.read_text().replace('folder = "store"', 'folder = "other"'))
    assert not any(u.twin for u in Campaign([JobRun(read_job(job)), JobRun(read_job(apart))]).units)


def test_campaign__a_job_given_twice_is_refused(job):
    with pytest.raises(JobFileError, match="given more than once"):
        Campaign([JobRun(read_job(job)), JobRun(read_job(job))])


def test_campaign__threads_do_not_depend_on_what_is_stored_or_asked_for_again(job, monkeypatch):
    text = job.read_text().replace("[110e6, 165e6]", str([100e6 + 1e6 * i for i in range(40)]))
    job.write_text(text)
    monkeypatch.setattr(campaign_module, "available_cores", lambda: 4)
    monkeypatch.setattr(campaign_module, "NOMINAL_RATE", 1e9)
    found = Campaign([JobRun(read_job(job))])
    found.predict()
    whole = found.split()
    assert whole.threads == 1
    for u in found.units[:-1]:
        u.stored = True
    assert found.split() == whole
    assert found.here(whole)  # one unit is left, and needs no worker
    assert found.split(workers=2) == Split(2, 2)
    assert found.split(threads=3) == Split(1, 3)
    assert found.split(3, 5) == Split(3, 5)


def test_campaign__refuses_with_figures(job, monkeypatch):
    found = Campaign([JobRun(read_job(job))])
    found.predict()
    found.check()
    found.to_solve[0].prediction = Prediction(64 * 10**15, 10**18, 1.0, 70_000)
    with pytest.raises(
        ResourceError, match=r"6\.4e\+04 TB of memory needed for 70000 unknowns, .* available; 1e\+06 TB of disk needed"
    ):
        found.check()


def test_predicted_seconds__is_the_longest_worker(job, monkeypatch):
    found = Campaign([JobRun(read_job(job))])
    for u, seconds in zip(found.units, (5.0, 3.0), strict=True):
        u.prediction = unit(seconds)
    monkeypatch.setattr("elbowroom.job.engine.items.available_cores", lambda: 1)
    assert predicted_seconds(found, Split(2, 1)) == pytest.approx(5.0)
    assert predicted_seconds(found, Split(1, 1)) == pytest.approx(8.0)
    assert math.isclose(found.total().seconds, 8.0)


def test_split__counts_what_is_solved_together_as_one(job, monkeypatch):
    band = [100e6 + 1e6 * i for i in range(40)]
    job.write_text(job.read_text().replace("[110e6, 165e6]", str(band)))
    monkeypatch.setattr(campaign_module, "available_cores", lambda: 4)
    monkeypatch.setattr(campaign_module, "NOMINAL_RATE", 1e9)
    run = JobRun(read_job(job))
    assert Campaign([run]).split().workers == 4

    class Segment:
        low_hz, high_hz = band[0], band[-1]

    monkeypatch.setattr(run, "segment_of", lambda frequency_hz: Segment)
    monkeypatch.setattr(run, "key", lambda frequency_hz: f"{int(frequency_hz):064x}")
    monkeypatch.setattr(run, "predicted", lambda frequency_hz, **options: unit())
    # one item: all cores are its own
    assert Campaign([run]).split() == Split(1, 4)


def test_progress__counts_units_by_what_they_took(capsys):
    from elbowroom.cli.progress import RunProgress
    from elbowroom.cli.screen import Screen
    from engine_work import good, item

    items = [item(n, good, frequencies=(1e8, 2e8) if n == 0 else (1e8,)) for n in range(3)]
    progress = RunProgress(Screen("normal"), items, 2)
    for one in items:
        progress.started(one)
    assert progress.counts()["running"] == 2  # the third waits in a queue
    progress.ended(items[0], 2.0, 1)
    assert (progress.finished, progress.failed, progress.all) == (1, 1, 4)
    progress.ended(items[1], 2.0, 0)
    progress.ended(items[2], 2.0, 0)
    assert progress.counts()["fraction_of_all"] == 1.0
    assert progress.left_seconds == 0.0
    said = capsys.readouterr().out
    assert "item 0: failed (1 of 4 done, 2 running, 1 failed" in said
    assert "item 2: solved in 2.0 s (3 of 4 done, 1 failed)" in said


def test_progress__stages_of_several_frequencies_of_one_item():
    from elbowroom.cli.progress import RunProgress
    from elbowroom.cli.screen import Screen
    from engine_work import good, item

    one = item(0, good, frequencies=(1e8, 2e8))
    progress = RunProgress(Screen("quiet"), [one], 1)
    progress.started(one)
    progress.stage(1e8, "port excitations", 1.0)
    assert progress.counts()["fraction_of_all"] == pytest.approx(0.5)
    progress.stage(2e8, "assemble", 1.0)
    assert progress.counts()["fraction_of_all"] == pytest.approx(0.5 + 0.5 * 0.25)


def test_campaign__samples_stations_of_the_same_antennas_once(job, monkeypatch):
    from elbowroom.job import sampling

    asked = []

    def needed(station, frequency_hz, mesh, tolerance):
        asked.append((len(station), frequency_hz))
        return 10 * len(station)

    monkeypatch.setattr(sampling, "functions_needed", needed)
    text = job.read_text().replace('method = "auto"', 'method = "reduced"')
    job.write_text(text)
    layout = job.parent / "layout.csv"
    rows = layout.read_text().splitlines(keepends=True)
    (job.parent / "fewer.csv").write_text("".join(rows[:-1]))
    other = job.parent / "fewer.toml"
    other.write_text(text.replace('layout = "layout.csv"', 'layout = "fewer.csv"'))
    runs = [JobRun(read_job(job)), JobRun(read_job(other))]
    assert [len(run.station) for run in runs] == [7, 6]
    found = Campaign(runs)
    found.predict()
    assert not asked
    found.predict(sampled=True)
    assert asked == [(7, 110e6), (7, 165e6)]
    whole, fewer = (found.units[i].prediction.disk_bytes for i in (0, 2))
    assert fewer < whole
