"""Predictions against what was measured and what is counted; limits of the machine; refusals."""

import tracemalloc

import numpy as np
import pytest

from elbowroom import PerfectGround, Placed, Station, crossed_dipoles, random_disc
from elbowroom.base.errors import ModelRangeError, ResourceError
from elbowroom.base.sizes import readable_bytes
from elbowroom.job.plan import (
    PROCESS_BYTES,
    Prediction,
    calibrated_rate,
    format_seconds,
    predict,
    predict_station,
    refuse_if_too_large,
    total,
)
from elbowroom.system.assembly import TILE_ORDER
from elbowroom.system.discretisation import discretise
from elbowroom.system.factorisation import TiledSymmetric
from elbowroom.system.solving import solve_direct


def test_time__agrees_with_a_measured_solve():
    # n = 16384, P = 512, mixed: 13 + 49 + 28 s on a machine of 165 GFLOP/s in single-precision products
    seconds = predict(16384, 512, 256, "mixed", operations_per_second=165e9).seconds
    assert seconds == pytest.approx(13 + 49 + 28, rel=0.1)


def test_time__grows_as_the_method_says():
    def at(n, precision="mixed"):
        return predict(n, 2, 1, precision, operations_per_second=1e11).seconds

    assert 7.5 < at(400_000) / at(200_000) < 8.0  # cubes of large orders, with a rest of squares
    assert at(20_000, "single") < at(20_000, "mixed") < at(20_000, "double")
    assert predict(5000, 50, 25, operations_per_second=1e11).seconds == pytest.approx(
        2.0 * predict(5000, 50, 25, operations_per_second=2e11).seconds
    )


def test_rate__is_measured_once_and_plausible():
    rate = calibrated_rate()
    assert 1e8 < rate < 1e14
    assert calibrated_rate() == rate


@pytest.mark.parametrize("n", [1000, 5000])
def test_memory__covers_the_matrices_that_the_solver_keeps(n):
    sizes = [TILE_ORDER] * (n // TILE_ORDER) + [n % TILE_ORDER]
    double, single = TiledSymmetric(sizes, np.complex128).nbytes, TiledSymmetric(sizes, np.complex64).nbytes
    few = 1
    for precision, factors in (("mixed", single), ("single", single), ("double", double)):
        predicted = predict(n, few, 1, precision, operations_per_second=1e11).memory_bytes
        kept = double + factors
        assert kept < predicted < 300e6 + 1.1 * kept + n * TILE_ORDER * 16


@pytest.mark.parametrize("precision", ["mixed", "single"])
def test_memory__of_a_real_solve(precision):
    cross = crossed_dipoles(arm_length_m=0.8, height_m=0.75, wire_radius_m=0.006, droop_deg=40.0)
    layout = random_disc(40, 8.0, 1.45, 3)
    d = discretise(Station([Placed(cross, tuple(p)) for p in layout.positions], PerfectGround()), 110e6)
    tracemalloc.start()
    solve_direct(d, precision=precision)
    _, peak = tracemalloc.get_traced_memory()
    tracemalloc.stop()
    predicted = predict(d.n_unknowns, d.n_ports, 40, precision, operations_per_second=1e11).memory_bytes - PROCESS_BYTES
    # single does not refine, so it stays a little lower; a matrix forgotten would be a third
    assert 0.8 * predicted < peak < 1.1 * predicted


def test_disk__is_currents_and_port_matrices():
    p = predict(10_000, 400, 200, operations_per_second=1e11)
    assert p.disk_bytes == pytest.approx(16 * (10_000 * 400 + 400**2), rel=0.01)


def test_station__one_prediction_a_frequency_and_their_total():
    cross = crossed_dipoles(arm_length_m=0.8, height_m=0.75, wire_radius_m=0.006, droop_deg=40.0)
    layout = random_disc(12, 4.0, 1.45, 3)
    station = Station([Placed(cross, tuple(p)) for p in layout.positions], PerfectGround())
    each = predict_station(station, [60e6, 300e6], operations_per_second=1e11)
    assert [p.n_unknowns for p in each] == [12 * 52, 12 * 76]
    whole = total(each)
    assert whole.memory_bytes == each[1].memory_bytes > each[0].memory_bytes
    assert whole.disk_bytes == each[0].disk_bytes + each[1].disk_bytes
    assert whole.seconds == each[0].seconds + each[1].seconds
    assert whole.n_unknowns == 12 * 76
    assert total([]) == Prediction(0, 0, 0.0, 0)


def test_bad_arguments():
    with pytest.raises(ModelRangeError, match="precision 'high': expected mixed, double, single"):
        predict(10, 1, 1, "high")
    with pytest.raises(ModelRangeError, match="a station of 1 antennas, 0 ports and 10 unknowns: positive numbers expected"):
        predict(10, 0, 1)


def test_refusal__gives_figures(tmp_path):
    p = Prediction(64_000_000_000, 1000, 1.0, 70_000)
    with pytest.raises(ResourceError, match=r"64 GB of memory needed for 70000 unknowns, 8 GB available; nothing was started"):
        refuse_if_too_large(p, available_bytes=8_000_000_000)
    with pytest.raises(ResourceError, match=r"1e\+06 TB of disk needed in .*store, .* free"):
        refuse_if_too_large(Prediction(1, 10**18, 1.0, 1), folder=tmp_path / "not" / "yet" / "store", available_bytes=2)
    refuse_if_too_large(p, available_bytes=64_000_000_000, folder=tmp_path)
    with pytest.raises(ResourceError, match="of memory needed"):
        refuse_if_too_large(Prediction(10**18, 0, 0.0, 10**6))


def test_words():
    assert [readable_bytes(b) for b in (0, 999, 1000, 123456, 4.3e9, 2e12)] == [
        "0 byte",
        "999 byte",
        "1 kB",
        "123 kB",
        "4.3 GB",
        "2 TB",
    ]
    assert [format_seconds(s) for s in (0.2, 8, 89, 600, 7200)] == ["less than 1 s", "8 s", "89 s", "10 min", "2.0 h"]
