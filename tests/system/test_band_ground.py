"""Grounds that resonate or guide waves along frequency: seen in their kernels, met by more nodes and by checks where they err."""

import numpy as np
import pytest

from elbowroom.base.constants import wavenumber_of
from elbowroom.base.errors import SolveError
from elbowroom.geometry.grounds import FreeSpace, MeshOnSoil, PerfectGround
from elbowroom.geometry.soils import LayeredSoil, Soil
from elbowroom.geometry.stations import Placed, Station
from elbowroom.kernels.lossy_grounds import ground_response
from elbowroom.kernels.soil.sommerfeld import kernels_at
from elbowroom.system import band_ground
from elbowroom.system.band_ground import MOST_GROUND_INTERVALS, GroundScan, interpolated, scan_ground, segment_intervals
from elbowroom.system.band_interpolation import band_nodes, intervals_for, reach_of
from helpers import dipole

# A tight mesh over dry sand over sea water: a cavity of a metre. Wet sand over dry: waves run along the layer.
RESONANT = MeshOnSoil(LayeredSoil(((1.0, Soil(3.0, 1e-5)),), Soil(80.0, 5.0)), 0.03, 1e-3)
GUIDING = LayeredSoil(((0.5, Soil(20.0, 1e-3)),), Soil(3.0, 1e-4))
LOW, HIGH = 71e6, 88e6
TOLERANCE = 1e-4


def station_over(ground, places=((0.0, 0.0, 0.0), (1.6, 0.3, 0.0), (10.0, 2.0, 0.0), (24.0, -3.0, 0.0))):
    level = dipole(half_length=0.6, radius=0.005, height=0.5, direction=(1.0, 0.2, 0.1))
    return Station([Placed(level, p) for p in places], ground)


@pytest.mark.parametrize("ground", [FreeSpace(), PerfectGround()], ids=["free space", "perfect ground"])
def test_intervals__without_soil_are_those_of_the_paths(ground, monkeypatch):
    monkeypatch.setattr(band_ground, "kernels_at", None)
    station = station_over(ground)
    least = intervals_for(HIGH - LOW, reach_of(station), 0.02 * TOLERANCE)
    assert segment_intervals(station, LOW, HIGH, TOLERANCE) == (least, 2 * least, None)


@pytest.mark.parametrize("soil", [Soil(10.0, 0.01), Soil(3.0, 1e-4), MeshOnSoil(Soil(10.0, 0.01), 0.1, 1e-3)])
def test_intervals__over_even_soil_are_those_of_the_paths(soil):
    station = station_over(soil)
    least = intervals_for(HIGH - LOW, reach_of(station), 0.02 * TOLERANCE)
    intervals, own, scan = segment_intervals(station, LOW, HIGH, TOLERANCE)
    assert (intervals, own) == (least, 2 * least)
    between = band_nodes(LOW, HIGH, least)
    assert scan.missed_by(0.5 * (between[1:] + between[:-1]), intervals, own, TOLERANCE) == []


@pytest.mark.parametrize("ground", [RESONANT, GUIDING], ids=["resonant", "guiding"])
def test_intervals__of_grounds_that_vary_are_as_many_as_their_kernels_ask_for(ground):
    station = station_over(ground)
    least = intervals_for(HIGH - LOW, reach_of(station), 0.02 * TOLERANCE)
    intervals, own, _ = segment_intervals(station, LOW, HIGH, TOLERANCE)
    assert least < intervals <= MOST_GROUND_INTERVALS
    assert own % intervals == 0
    assert own >= 2 * least
    # Kernels themselves, at frequencies, distances and heights that were not looked at.
    rho, z = np.array([2.3, 14.0]), np.array([1.3])

    def still(f):
        k = wavenumber_of(f)
        return kernels_at(ground_response(ground, f), rho, z)[:3] * np.exp(1j * k * rho)[:, None] / k

    errors = []
    for count in (least, intervals):
        nodes = band_nodes(LOW, HIGH, count)
        places = np.linspace(LOW, HIGH, 41)
        made = interpolated(nodes, np.array([still(f) for f in nodes]), places)
        errors.append(np.abs(made - np.array([still(f) for f in places])).max())
    assert errors[1] < TOLERANCE
    assert errors[1] < 0.3 * errors[0]


def test_scan__is_finer_where_a_resonance_is_narrow_and_there_it_is_missed():
    scan = scan_ground(station_over(RESONANT), LOW, HIGH, TOLERANCE)
    assert len(scan.frequencies_hz) > 49
    # The sheet of the mesh and the layer below it are in resonance where waves from above are swallowed.
    fine = np.linspace(LOW, HIGH, 341)
    swallowed = fine[np.argmin([abs(ground_response(RESONANT, f).reflection(np.zeros(1))[0][0]) for f in fine])]
    nodes = band_nodes(LOW, HIGH, 6)
    between = 0.5 * (nodes[1:] + nodes[:-1])
    missed = scan.missed_by(between[[0, 2, 5]], 6, 12, TOLERANCE)
    assert missed
    assert all(abs(f - swallowed) < 2e6 for f in missed)
    assert scan.missed_by(np.array(missed), 6, 12, TOLERANCE) == []


def test_scan__picks_the_worst_and_leaves_what_is_small():
    f = band_nodes(1e8, 2e8, 48)
    pole = 1.0 / (f - 1.63e8 - 4e6j)[:, None]
    scan = GroundScan(f, 0.0 * pole, 1e4 * pole)
    errors = np.abs(
        interpolated(band_nodes(1e8, 2e8, 6), interpolated(f, scan.between, band_nodes(1e8, 2e8, 6)), f) - scan.between
    )
    worst = float(f[np.argmax(errors)])
    assert scan.missed_by(np.array([1.1e8]), 6, 12, TOLERANCE) == [worst]
    assert scan.missed_by(np.array([1.1e8]), 6, 12, 100.0) == []
    assert scan.missed_by(np.array([1.1e8, worst]), 6, 12, TOLERANCE) == []


def test_scan__what_cannot_be_worked_out_leaves_the_paths(monkeypatch):
    def refuse(*_):
        raise SolveError("unresolved")

    monkeypatch.setattr(band_ground, "kernels_at", refuse)
    assert scan_ground(station_over(RESONANT), LOW, HIGH, TOLERANCE) is None
