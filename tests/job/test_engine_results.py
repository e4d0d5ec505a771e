"""Arrays of units: the same to the last bit however they were run with one number of threads, and near it with another."""

import warnings

import numpy as np
import pytest

from elbowroom.base.machine import available_cores
from elbowroom.base.threads import blas_threads, loop_threads, threads
from elbowroom.geometry.grounds import PerfectGround
from elbowroom.geometry.shapes import log_periodic
from elbowroom.geometry.stations import Placed, Station, turned
from elbowroom.job import sampling
from elbowroom.job.engine.campaign import Campaign
from elbowroom.job.engine.items import UnitFailure
from elbowroom.job.engine.local import InProcess, ProcessWorkers
from elbowroom.job.engine.runner import run_items
from elbowroom.job.jobfile import read_job
from elbowroom.job.pipeline import JobRun
from elbowroom.job.plan import predict_reduced, predict_station
from elbowroom.job.sampling import functions_needed
from elbowroom.job.solve import HALVED, SOLUTION_SCHEMA, solve
from elbowroom.job.templates import write_template
from elbowroom.store import Hdf5Store, MemoryStore
from helpers import FREQUENCY_HZ, cluster, crossed

FREQUENCIES = "[110e6, 120e6]"


def job_in(folder, method="direct", antennas=3, **changes):
    write_template("small", folder)
    path = folder / "job.toml"
    text = path.read_text().replace("[110e6, 165e6]", FREQUENCIES).replace('method = "auto"', f'method = "{method}"')
    assert FREQUENCIES in text
    assert f'method = "{method}"' in text
    for key, value in changes.items():
        text = text.replace(f'{key} = "{"double" if key == "precision" else "keep"}"', f'{key} = "{value}"')
    path.write_text(text)
    layout = folder / "layout.csv"
    lines = layout.read_text().splitlines(keepends=True)
    rows = [i for i, line in enumerate(lines) if line.strip() and not line.startswith("#")]
    layout.write_text("".join(line for i, line in enumerate(lines) if i not in rows[antennas + 1 :]))
    return path


def solved(path, workers, count=1, *, only=None):
    """Solve what is missing and return all records."""
    run = JobRun(read_job(path), frequencies_hz=only)
    found = Campaign([run])
    found.predict()
    found.check()
    for event in run_items(found.items(count), workers, elsewhere=found.elsewhere):
        if event.kind == "ended":
            assert not any(isinstance(o, UnitFailure) for o in event.result.outcomes), event.result
    return {f: run.store.get(run.key(f)) for f in run.frequencies_hz}


def assert_same_bits(first, second):
    assert first.keys() == second.keys()
    for f in first:
        for name, array in first[f].arrays.items():
            np.testing.assert_array_equal(array, second[f].arrays[name], err_msg=f"{name} at {f} Hz")


@pytest.mark.parametrize("method", ["direct", "reduced"])
def test_resumed_and_parallel_runs__give_the_same_bits(tmp_path, method):
    whole = solved(job_in(tmp_path / "whole", method), InProcess())
    parallel = solved(job_in(tmp_path / "parallel", method), ProcessWorkers(2, 10**12))
    assert_same_bits(whole, parallel)
    resumed = job_in(tmp_path / "resumed", method)
    solved(resumed, InProcess(), only=[110e6])
    assert_same_bits(whole, solved(resumed, ProcessWorkers(1, 10**12)))
    for record in whole.values():
        assert (record.attributes["blas_threads"], record.attributes["loop_threads"]) == (1, 1)


def test_cluster__gives_the_same_bits_as_this_process(tmp_path):
    pytest.importorskip("distributed", reason="Dask distributed is not installed (extra 'cluster')")
    from elbowroom.job.engine.cluster import DaskWorkers, connect

    with warnings.catch_warnings():
        # of its own: sockets and event loops closed late, ports in use
        warnings.simplefilter("ignore")
        workers = DaskWorkers(connect("local", workers=2))
        assert workers.workers == 2
        clustered = solved(job_in(tmp_path / "clustered"), workers)
    assert_same_bits(solved(job_in(tmp_path / "here"), InProcess()), clustered)


ROUNDING = {"double": np.finfo(np.float64).eps, "single": np.finfo(np.float32).eps, "reduced": np.finfo(np.float32).eps}


@pytest.mark.parametrize("precision", ["double", "single", "mixed", "reduced"])
def test_thread_counts__agree_to_100_roundings_or_to_what_refinement_leaves(precision):
    # Mixed is refined to a residual of 1e-9 and then as good as double but for the conditioning of what is left.
    limit = 1e-9 if precision == "mixed" else 100.0 * ROUNDING[precision]
    options = {"solver": "reduced"} if precision == "reduced" else {"solver": "direct", "precision": precision}
    places = [(1.7 * (i % 4), 1.6 * (i // 4) + 0.05 * i, 0.0) for i in range(8)]
    design = cluster(1).placed[0].antenna
    station = Station([Placed(design, p, rotation_deg=7.0 * i) for i, p in enumerate(places)], cluster(1).ground)
    found = {}
    for count in (1, 2):
        with threads(count):
            found[count] = solve(station, FREQUENCY_HZ, **options).coupled
    for name in ("currents", "loaded_admittance"):
        one, many = getattr(found[1], name), getattr(found[2], name)
        assert one.shape == many.shape
        assert np.abs(one - many).max() <= limit * np.abs(one).max()


def test_threads__are_held_and_given_back():
    before = (blas_threads(), loop_threads())
    assert before[1] == available_cores()
    with threads(1):
        assert (blas_threads(), loop_threads()) == (1, 1)
        with threads(2):
            assert loop_threads() == 2
        assert (blas_threads(), loop_threads()) == (1, 1)
    assert (blas_threads(), loop_threads()) == before
    with pytest.raises(ValueError, match="0 threads"), threads(0):
        pass


def test_single_storage__halves_the_file_and_is_read_back_as_before(tmp_path):
    full = job_in(tmp_path / "double")
    half = job_in(tmp_path / "single", precision="single")
    double, single = solved(full, InProcess()), solved(half, InProcess())
    for f, record in single.items():
        currents = record.arrays["currents_per_volt"]
        assert currents.dtype == np.complex64
        assert record.arrays["loaded_admittance_s"].dtype == np.complex128
        np.testing.assert_allclose(currents, double[f].arrays["currents_per_volt"], rtol=0, atol=6e-8 * np.abs(currents).max())
    size = [sum(p.stat().st_size for p in job.parent.rglob("*.h5")) for job in (full, half)]
    saved = sum(double[f].arrays[name].nbytes / 2 for f in double for name in HALVED)
    assert size[0] - size[1] == pytest.approx(saved, rel=0.02)
    run, reference = JobRun(read_job(half)), JobRun(read_job(full))
    theta, phi = np.full(5, 0.7), np.linspace(0.0, 6.0, 5)
    got = run.stored_solution(110e6)
    assert got.coupled.currents.dtype == np.complex128
    expected = reference.stored_solution(110e6).embedded_patterns(theta, phi)
    np.testing.assert_allclose(got.embedded_patterns(theta, phi), expected, rtol=0, atol=1e-6 * np.abs(expected).max())


def test_single_storage__is_kept_apart_from_double():
    store = MemoryStore(SOLUTION_SCHEMA)
    solve(cluster(1), FREQUENCY_HZ, store=store, single_storage=True)
    solve(cluster(1), FREQUENCY_HZ, store=store)
    assert len(store.keys()) == 2


def test_stations_of_one_store__turned_copies_solved_in_one_go(tmp_path):
    path = job_in(tmp_path / "two")
    copy = path.parent / "copy.toml"
    copy.write_text(path.read_text().replace("turn_deg = 0.0", "turn_deg = 40.0"))
    runs = [JobRun(read_job(p)) for p in (path, copy)]
    found = Campaign(runs)
    found.predict()
    assert len(list(e for e in run_items(found.items(1), InProcess()) if e.kind == "ended")) == 2
    theta, phi = np.full(4, 0.5), np.linspace(0.1, 5.0, 4)
    a, b = (run.stored_solution(110e6) for run in runs)
    assert [turned(p, 40.0).rotation_deg for p in a.discretisation.station] == [p.rotation_deg for p in b.discretisation.station]
    expected = np.abs(a.embedded_patterns(theta, phi))
    # Places agree to a micrometre, 3e-6 rad of phase at this frequency.
    got = b.embedded_patterns(theta, phi + np.deg2rad(40.0))
    np.testing.assert_allclose(np.linalg.norm(got, axis=-1), np.linalg.norm(expected, axis=-1), atol=2e-5 * expected.max())


SHORT_LOG_PERIODIC = log_periodic(
    height_m=1.4, wire_radius_m=0.002, tau=0.8, sigma=0.07, longest_half_length_m=0.62, elements=4, feeder_impedance_ohm=200.0
)


@pytest.mark.parametrize("single", [False, True])
@pytest.mark.parametrize("method", ["direct", "reduced"])
@pytest.mark.parametrize("design", [crossed(), SHORT_LOG_PERIODIC], ids=["dipoles", "log-periodic"])
def test_disk__is_predicted_within_10_percent(tmp_path, method, design, single):
    # turned one by one, so that there is a kind for each
    places = [(0.0, 0.0, 0.0), (1.7, 0.2, 0.0), (-0.3, 1.9, 0.0), (2.0, 2.2, 0.0)]
    station = Station([Placed(design, p, rotation_deg=20.0 * i) for i, p in enumerate(places)], PerfectGround())
    text = {"job_file": "x" * 5000}
    common = {"operations_per_second": 1e11, "single_storage": single, "text_bytes": 5000}
    if method == "direct":
        (prediction,) = predict_station(station, [FREQUENCY_HZ], **common)
    else:
        functions = functions_needed(station, FREQUENCY_HZ, "default", 1e-4)
        prediction = predict_reduced(station, FREQUENCY_HZ, functions=functions, **common)
    store = Hdf5Store(tmp_path, SOLUTION_SCHEMA)
    options = {"single_storage": single, "with_mesh_error": False, "attributes": text}
    solution = solve(station, FREQUENCY_HZ, solver=method, store=store, **options)
    if method == "reduced":
        assert functions == solution.statistics.n_functions
    (key,) = store.keys()
    assert prediction.disk_bytes == pytest.approx(store.path_of(key).stat().st_size, rel=0.1)


def test_disk__of_a_job_is_predicted_within_10_percent(tmp_path):
    run = JobRun(read_job(job_in(tmp_path / "job")))
    predicted = run.predicted(110e6).disk_bytes
    run.solution(110e6)
    assert predicted == pytest.approx(run.path_of(110e6).stat().st_size, rel=0.1)


def test_functions__are_interpolated_between_samples(monkeypatch):
    asked = []

    def needed(station, frequency_hz, mesh, tolerance):
        asked.append(frequency_hz)
        return int(frequency_hz / 1e6)

    monkeypatch.setattr(sampling, "functions_needed", needed)
    counts = sampling.FunctionCounts(cluster(2), [100e6 + 1e6 * i for i in range(101)], "default", 1e-4)
    assert asked == [100e6, 150e6, 200e6]
    assert counts.at(130e6) == pytest.approx(130.0)
    assert sampling.FunctionCounts(cluster(2), [80e6], "default", 1e-4).at(80e6) == 80.0
