"""Runs that are killed at random: the short version of ``validation/benchmarks/store_campaign.py``."""

from __future__ import annotations

import numpy as np

from benchmarks.store_campaign import Tally, kill_at_random, make_job, two_at_once, undisturbed


def test_killed_runs__leave_good_units_or_none_and_the_next_goes_on(tmp_path):
    reference = undisturbed(make_job(tmp_path / "job", 3, (90e6, 100e6, 110e6, 120e6)), n_runs=1)
    tally = kill_at_random(reference, 6, np.random.default_rng(11), tell=lambda _: None)
    assert tally.kills.total() >= 6
    assert set(tally.kills) == {"main", "worker"}
    assert tally.failures == []
    pair = Tally()
    # each unit was solved and stored by one of the two, although one was killed
    assert two_at_once(reference, pair) == len(reference.records)
    assert pair.failures == []
