"""Where accepted power goes: the parts add up, and each is what it is by its own account."""

import numpy as np
import pytest
from numpy.testing import assert_allclose

from elbowroom.geometry.antennas import Antenna, Load, Port
from elbowroom.geometry.grounds import FreeSpace, PerfectGround
from elbowroom.geometry.networks import FeedPoint, Line, Network
from elbowroom.geometry.stations import Placed, Station
from elbowroom.geometry.wires import Wire
from elbowroom.job.solve import solve
from helpers import FREQUENCY_HZ, cluster


@pytest.mark.parametrize("ground", [True, False], ids=["perfect", "free-space"])
@pytest.mark.parametrize("solver", ["direct", "reduced"])
def test_power_parts__of_lossless_antennas_all_is_radiated(ground, solver):
    solution = solve(cluster(4, ground), FREQUENCY_HZ, solver=solver)
    weights = np.vstack([solution.pointing_weights(0.4, 1.0, port="x"), np.eye(8)[3]])
    parts = solution.power_parts(weights)
    assert parts.accepted.shape == (2,)
    # bends leave up to 0.07 (ka)^2 of the resistance unaccounted for, radius 3 mm
    assert_allclose(parts.radiation_efficiency, 1.0, atol=0.07 * (np.pi * 0.003) ** 2 * 4.0)
    assert_allclose(parts.radiated + parts.unaccounted, parts.accepted, rtol=1e-6)
    for nothing in (parts.wires, parts.loads, parts.networks, parts.ground):
        assert_allclose(nothing, 0.0, atol=1e-7)  # single precision


def test_power_parts__accepted_is_what_waves_do_not_bring_back():
    solution = solve(cluster(3), FREQUENCY_HZ)
    weights = np.eye(6)
    scattering = solution.scattering_matrix(100.0)
    expected = 1.0 - np.sum(np.abs(scattering) ** 2, axis=0)
    assert_allclose(solution.power_parts(weights).accepted, expected, rtol=1e-9)


def test_power_parts__loss_of_wire_and_load_are_those_of_their_resistances():
    wire = Wire((0.0, 0.0, 0.4), (0.0, 0.0, 1.4), 0.002, conductivity=1e5)
    free = Antenna("free", [Wire(wire.start, wire.end, 0.002)], [Port("p", 0)])
    loaded = Antenna("loaded", [wire], [Port("p", 0)], loads=[Load(0, 0.3, resistance_ohm=30.0)])
    solution = solve(Station([Placed(loaded, (0, 0, 0))], PerfectGround()), FREQUENCY_HZ)
    parts = solution.power_parts([1.0])
    total = parts.radiated + parts.wires + parts.loads
    assert_allclose(total, parts.accepted, rtol=1e-5)
    assert parts.wires > 0.01 * parts.accepted
    assert parts.loads > 0.05 * parts.accepted
    bare = solve(Station([Placed(free, (0, 0, 0))], FreeSpace()), FREQUENCY_HZ).power_parts([1.0])
    assert_allclose(bare.radiated, bare.accepted, rtol=1e-5)


def test_power_parts__network_takes_what_its_lossy_lines_do():
    def solved(antenna):
        return solve(Station([Placed(antenna, (0, 0, 0))], PerfectGround()), FREQUENCY_HZ).power_parts([1.0])

    wires = [Wire((0.0, -0.45, 0.5), (0.0, 0.45, 0.5), 0.002)]
    line = {"start": "gap", "end": "amplifier", "impedance_ohm": 100.0, "length_m": 1.3}

    def behind(**loss):
        feed = FeedPoint("gap", 0, 0.5)
        return Antenna("fed", wires, [Port("p", node="amplifier")], feeds=[feed], network=Network(lines=[Line(**line, **loss)]))

    lossless, lossy = solved(behind()), solved(behind(loss_db_per_m=1.0))
    assert_allclose(lossless.networks, 0.0, atol=1e-9)
    assert_allclose(lossless.radiated, lossless.accepted, rtol=1e-5)
    assert_allclose(lossy.networks + lossy.radiated, lossy.accepted, rtol=1e-5)
    # a matched line of 1.3 dB would take 26 %; one that carries waves both ways takes more
    assert lossy.fraction("networks")[0] > 1.0 - 10.0**-0.13
