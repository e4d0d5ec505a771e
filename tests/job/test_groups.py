"""Groups of stations: neighbours within a radius, held against the whole group solved together."""

import numpy as np
import pytest

from elbowroom.base.errors import ModelRangeError
from elbowroom.geometry.grounds import FreeSpace, PerfectGround
from elbowroom.geometry.stations import Placed, Station
from elbowroom.job.groups import plan_group, solve_group, with_neighbours
from elbowroom.job.solve import solve
from helpers import crossed

FREQUENCY = 200e6


def line(first_east, count=3, spacing=1.7, ground=None):
    design = crossed()
    return Station([Placed(design, (first_east + spacing * i, 0.2 * i, 0.0)) for i in range(count)], ground or PerfectGround())


GROUP = [line(0.0), line(5.3), line(10.6)]


def together():
    placed = [p for s in GROUP for p in s]
    return Station([Placed(p.antenna, p.position) for p in placed], PerfectGround())


def test_with_neighbours__takes_those_within_the_radius():
    station, ports = with_neighbours(GROUP, 1, 2.0)
    assert [p.name for p in station] == ["1:A001", "1:A002", "1:A003", "0:A003", "2:A001"]
    assert ports.tolist() == [0, 1, 2, 3, 4, 5]
    assert len(with_neighbours(GROUP, 0, 100.0)[0]) == 9


def test_solve_group__stated_error_covers_what_the_radius_leaves_out():
    whole = solve(together(), FREQUENCY, solver="direct", precision="double")
    rng = np.random.default_rng(0)
    theta, phi = np.arccos(rng.uniform(0, 1, 300)), rng.uniform(0, 2 * np.pi, 300)
    members = solve_group(GROUP, FREQUENCY, 4.0)
    true = []
    for number, member in enumerate(members):
        exact = whole.embedded_patterns(theta, phi, ports=np.arange(6 * number, 6 * number + 6))
        found = member.solution.embedded_patterns(theta, phi, ports=member.ports)
        true.append((np.linalg.norm(exact - found, axis=-1).max(axis=1) / np.linalg.norm(exact, axis=-1).max(axis=1)).max())
    stated = members[0].coupling_error + members[0].solution.statistics.pattern_error
    assert max(true) < stated
    # and without any neighbours it is much worse than that
    alone = solve(GROUP[1], FREQUENCY, solver="direct").embedded_patterns(theta, phi)
    exact = whole.embedded_patterns(theta, phi, ports=np.arange(6, 12))
    assert (np.linalg.norm(exact - alone, axis=-1).max(axis=1) / np.linalg.norm(exact, axis=-1).max(axis=1)).max() > 1.5 * max(
        true
    )


def test_solve_group__whole_group_within_the_radius__has_no_coupling_error():
    members = solve_group(GROUP[:2], FREQUENCY, 50.0)
    assert [m.coupling_error for m in members] == [0.0, 0.0]
    assert [m.neighbours for m in members] == [3, 3]


def test_plan_group__grows_with_the_radius():
    small, large = (plan_group(GROUP, FREQUENCY, r) for r in (1.0, 50.0))
    assert 0 < small.seconds < large.seconds
    assert small.memory_bytes <= large.memory_bytes


@pytest.mark.parametrize(
    ("group", "radius", "words"),
    [([], 1.0, "at least one"), ([line(0.0), line(9.0, ground=FreeSpace())], 1.0, "one ground"), (GROUP, 0.0, "radius_m"), (GROUP, float("nan"), "radius_m")],
)  # fmt: skip
def test_group__that_makes_no_sense__is_refused(group, radius, words):
    with pytest.raises(ModelRangeError, match=words):
        with_neighbours(group, 0, radius)
