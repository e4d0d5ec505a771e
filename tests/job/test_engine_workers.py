"""Items over processes: failures stop nothing, killed workers are noticed, nothing is left running."""

import contextlib
import os
import signal
import subprocess
import sys
import time
import warnings
from pathlib import Path

import psutil
import pytest

import engine_work as work
from elbowroom.base.errors import ResourceError
from elbowroom.job.engine.items import UnitFailure
from elbowroom.job.engine.local import InProcess, ProcessWorkers
from elbowroom.job.engine.runner import MOST_TRIES, run_items


@pytest.fixture(autouse=True)
def found_by_workers(monkeypatch):
    # the functions of this folder
    here = str(Path(__file__).parents[1])
    monkeypatch.setenv("PYTHONPATH", os.pathsep.join([here, os.environ.get("PYTHONPATH", "")]))


def outcomes_of(items, workers):
    """Run all and return the outcomes by the number of their item, and the events."""
    events = list(run_items(items, workers))
    ended = {e.item.number: e.result.outcomes for e in events if e.kind == "ended"}
    assert sorted(ended) == sorted(i.number for i in items)
    return ended, events


def begun(folder):
    return [tuple(map(int, line.split())) for line in (folder / "begun").read_text().splitlines()]


def alive(pid):
    with contextlib.suppress(psutil.NoSuchProcess):
        return psutil.Process(pid).status() != psutil.STATUS_ZOMBIE
    return False


@pytest.mark.parametrize("kind", ["here", "processes"])
def test_failures__stop_nothing_and_say_why(kind, tmp_path):
    items = [
        work.item(0, work.refused), work.item(1, work.good), work.item(2, work.broken), work.item(3, work.exhausted),
        work.item(4, work.second_fails, frequencies=(1e8, 2e8)), work.item(5, work.good, frequencies=(1e8, 2e8)),
    ]  # fmt: skip
    ended, _ = outcomes_of(items, InProcess() if kind == "here" else ProcessWorkers(2, 10**12))
    assert [isinstance(o, UnitFailure) for n in range(6) for o in ended[n]] == [
        True,
        False,
        True,
        True,
        False,
        True,
        False,
        False,
    ]
    assert (ended[0][0].cause, ended[0][0].exit_code, ended[0][0].details) == ("item 0 cannot be solved", 5, "")
    assert ended[2][0].exit_code == 1
    assert "nobody foresaw this" in ended[2][0].cause
    assert "engine_work.py" in ended[2][0].details
    assert ended[3][0].exit_code == 8
    assert ended[4][1].cause == "no"


def test_killed_worker__its_item_is_done_again_alone_and_the_others_go_on(tmp_path):
    items = [work.item(n, work.killed_once if n == 1 else work.recorded, str(tmp_path)) for n in range(5)]
    ended, events = outcomes_of(items, ProcessWorkers(2, 10**12))
    assert not any(isinstance(o, UnitFailure) for outcomes in ended.values() for o in outcomes)
    (again,) = [e for e in events if e.kind == "again"]
    assert again.item.number == 1
    assert "SIGKILL" in again.cause
    order = [number for number, _ in begun(tmp_path)]
    assert order.count(1) == 2
    assert order[-1] == 1  # when the others were finished
    assert sorted(order) == [0, 1, 1, 2, 3, 4]


def test_killed_worker__twice__is_a_failure_of_its_item_only(tmp_path):
    items = [work.item(n, work.killed if n == 0 else work.recorded, str(tmp_path)) for n in range(3)]
    ended, _ = outcomes_of(items, ProcessWorkers(1, 10**12))
    (failure,) = ended[0]
    assert "SIGKILL, as the system does when memory runs out" in failure.cause
    assert f"begun {MOST_TRIES} times" in failure.cause
    assert failure.exit_code == 8
    assert not any(isinstance(o, UnitFailure) for n in (1, 2) for o in ended[n])


def test_idle_worker_killed__is_replaced(tmp_path):
    workers = ProcessWorkers(1, 10**12)
    events = run_items([work.item(n, work.recorded, str(tmp_path)) for n in range(2)], workers)
    for event in events:
        if event.kind == "ended" and event.item.number == 0:
            os.kill(begun(tmp_path)[0][1], signal.SIGKILL)
            time.sleep(0.5)
        assert event.result is None or not isinstance(event.result.outcomes[0], UnitFailure)
    assert [number for number, _ in begun(tmp_path)].count(1) >= 1


def test_memory__bounds_what_runs_at_a_time():
    workers = ProcessWorkers(3, 100)
    small, large = work.item(0, work.good, memory=40), work.item(1, work.good, memory=70)
    assert workers.can_start(work.item(2, work.good, memory=10**9))  # alone, it may: it was checked against the machine before
    workers.start(small)
    assert workers.can_start(work.item(3, work.good, memory=60))
    assert not workers.can_start(large)
    workers.stop()


def test_items_of_other_runs__come_last(tmp_path):
    items = [work.item(n, work.recorded, str(tmp_path)) for n in range(4)]
    claimed = {0, 2}

    def elsewhere(item):
        return item.number in claimed

    started = [e.item.number for e in run_items(items, InProcess(), elsewhere=elsewhere) if e.kind == "started"]
    assert started == [1, 3, 0, 2]


def test_closed_early__leaves_no_process(tmp_path):
    events = run_items([work.item(n, work.lasting, str(tmp_path)) for n in range(3)], ProcessWorkers(2, 10**12))
    deadline = time.monotonic() + 60.0
    for _ in events:
        if (tmp_path / "begun").exists() and len(begun(tmp_path)) == 2:
            break
        assert time.monotonic() < deadline
    processes = [pid for _, pid in begun(tmp_path)]
    assert all(map(alive, processes))
    clock = time.monotonic()
    events.close()
    assert time.monotonic() - clock < 10.0
    assert not any(map(alive, processes))


def test_parent_killed__its_workers_end(tmp_path):
    script = (
        "import engine_work as work\n"
        "from elbowroom.job.engine.local import ProcessWorkers\n"
        "from elbowroom.job.engine.runner import run_items\n"
        "if __name__ == '__main__':\n"
        f"    list(run_items([work.item(n, work.lasting, {str(tmp_path)!r}) for n in range(2)], ProcessWorkers(2, 10**12)))\n"
    )
    (tmp_path / "script.py").write_text(script)
    process = subprocess.Popen([sys.executable, tmp_path / "script.py"], stderr=subprocess.PIPE)
    deadline = time.monotonic() + 60.0
    while not (tmp_path / "begun").exists() or len(begun(tmp_path)) < 2:
        assert time.monotonic() < deadline
        assert process.poll() is None, process.stderr.read()
        time.sleep(0.05)
    workers = [pid for _, pid in begun(tmp_path)]
    process.kill()
    process.communicate()
    deadline = time.monotonic() + 15.0
    while any(map(alive, workers)):
        assert time.monotonic() < deadline, "orphans"
        time.sleep(0.1)


def test_killed_worker_of_a_cluster__its_item_is_done_again(tmp_path):
    pytest.importorskip("distributed", reason="Dask distributed is not installed (extra 'cluster')")
    from elbowroom.job.engine.cluster import DaskWorkers, connect

    items = [work.item(n, work.killed_once if n == 1 else work.recorded, str(tmp_path)) for n in range(3)]
    items.append(work.item(3, work.refused))
    with warnings.catch_warnings():
        # of its own: sockets and event loops closed late, ports in use
        warnings.simplefilter("ignore")
        ended, events = outcomes_of(items, DaskWorkers(connect("local", workers=1)))
    assert [isinstance(ended[n][0], UnitFailure) for n in range(4)] == [False, False, False, True]
    assert 1 in [e.item.number for e in events if e.kind == "again"]
    assert ended[3][0].cause == "item 3 cannot be solved"


def test_cluster_of_crowded_workers__is_refused():
    distributed = pytest.importorskip("distributed", reason="Dask distributed is not installed (extra 'cluster')")
    from elbowroom.job.engine.cluster import DaskWorkers

    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        cluster = distributed.LocalCluster(n_workers=1, threads_per_worker=2, processes=False, dashboard_address=None)
        with pytest.raises(ResourceError, match=r"takes several units at a time.*--nthreads 1"):
            DaskWorkers(distributed.Client(cluster))


def test_scheduler_file_that_does_not_come__is_told(tmp_path, monkeypatch):
    pytest.importorskip("distributed", reason="Dask distributed is not installed (extra 'cluster')")
    from elbowroom.job.engine import cluster

    monkeypatch.setattr(cluster, "CONNECT_SECONDS", 0.3)
    with pytest.raises(ResourceError, match=r"no scheduler answers at .*absent\.json: there is no such file"):
        cluster.connect(str(tmp_path / "absent.json"))
