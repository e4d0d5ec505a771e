"""Antennas moved after a reduced solve: only their rows and columns are filled anew, and the answer is that of a fresh solve."""

from dataclasses import replace

import numpy as np
import pytest

from elbowroom.base.errors import GeometryError, SolveError
from elbowroom.geometry.arrangements import random_disc
from elbowroom.geometry.grounds import PerfectGround
from elbowroom.geometry.stations import Placed, Station
from elbowroom.system.discretisation import discretise
from elbowroom.system.interactions import SkeletonInteractions
from elbowroom.system.reduction import ReductionSettings
from elbowroom.system.solving_reduced import ReducedStation
from helpers import crossed

SETTINGS = ReductionSettings(1e-4)
COUNT = 10


def station(moves=None):
    layout = random_disc(COUNT, 3.6, 1.6, 4, turn="random")
    design = crossed()
    placed = [
        Placed(design, tuple(p), rotation_deg=float(turn)) for p, turn in zip(layout.positions, layout.rotation_deg, strict=True)
    ]
    for index, (east, north) in (moves or {}).items():
        placed[index] = replace(placed[index], position=(east, north, 0.0))
    return Station(placed, PerfectGround())


@pytest.fixture(scope="module")
def solved():
    return ReducedStation(discretise(station(), 200e6), SETTINGS, movable=True)


def near(solved, index, east=0.03, north=-0.02):
    x, y, _ = solved.discretisation.station.placed[index].position
    return {index: (x + east, y + north)}


def test_moved__equals_a_fresh_solve(solved):
    places = near(solved, 2) | near(solved, 7, -0.05, 0.01)
    found = solved.moved(places)
    fresh = ReducedStation(discretise(station(places), 200e6), SETTINGS)
    size = np.abs(fresh.currents.loaded_admittance).max()
    np.testing.assert_allclose(found.currents.loaded_admittance, fresh.currents.loaded_admittance, atol=1e-5 * size)
    # and the move is seen at all
    assert np.abs(solved.currents.loaded_admittance - fresh.currents.loaded_admittance).max() > 1e-3 * size
    assert found.statistics.pattern_error < SETTINGS.tolerance


def test_moved__fills_rows_and_columns_of_the_moved_only(solved, monkeypatch):
    pairs = []
    original = SkeletonInteractions.blocks

    def counted(self, i, others, level):
        pairs.extend((i, int(j)) for j in others)
        return original(self, i, others, level)

    monkeypatch.setattr(SkeletonInteractions, "blocks", counted)
    solved.moved(near(solved, 4))
    assert len(pairs) == COUNT - 1
    assert all(4 in pair for pair in pairs)


def test_moved__twice_and_back__is_where_it_was(solved):
    home = {4: solved.discretisation.station.placed[4].position[:2]}
    there = solved.moved(near(solved, 4, 0.2, 0.1))
    back = there.moved(home)
    size = np.abs(solved.currents.loaded_admittance).max()
    np.testing.assert_allclose(back.currents.loaded_admittance, solved.currents.loaded_admittance, atol=1e-6 * size)


def test_moved__to_where_its_functions_no_longer_serve__is_told_by_the_stated_error(solved):
    # a few centimetres from its neighbour, whose near field none of the functions knows
    distances = np.linalg.norm(solved.discretisation.station.positions[0] - solved.discretisation.station.positions, axis=1)
    other = int(np.argsort(distances)[1])
    x, y, _ = solved.discretisation.station.placed[other].position
    turn = np.deg2rad(solved.discretisation.station.placed[other].rotation_deg)
    found = solved.moved({0: (x + 0.02 * np.cos(turn + 0.8), y + 0.02 * np.sin(turn + 0.8))})
    assert found.statistics.pattern_error > 3.0 * solved.statistics.pattern_error


def test_moved__what_cannot_be__is_refused(solved):
    with pytest.raises(GeometryError, match="no antenna 99: expected 0 to 9"):
        solved.moved({99: (0.0, 0.0)})
    with pytest.raises(GeometryError, match="position"):
        solved.moved({0: (float("nan"), 0.0)})
    fixed = ReducedStation(solved.discretisation, SETTINGS)
    with pytest.raises(SolveError, match="movable=True"):
        fixed.moved({0: (0.0, 0.0)})
