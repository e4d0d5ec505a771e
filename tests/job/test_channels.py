"""Bands of many channels: segments, what is solved and what is made from it, units in the store, job files."""

from dataclasses import replace

import h5py
import numpy as np
import pytest

from elbowroom.base.errors import JobFileError, ModelRangeError, SolveError, StoreError
from elbowroom.geometry.directions import hemisphere_grid
from elbowroom.geometry.grounds import MeshOnSoil, PerfectGround
from elbowroom.geometry.mesh import mesh_settings
from elbowroom.geometry.soils import LayeredSoil, Soil, TabulatedSoil
from elbowroom.geometry.stations import Placed, Station
from elbowroom.job.band import FEWEST_CHANNELS, SegmentChannels, SegmentPlan, plan_segments, solve_band, solved_channels
from elbowroom.job.channels import ChannelSettings, channel_key
from elbowroom.job.engine.campaign import Campaign
from elbowroom.job.engine.items import run_item
from elbowroom.job.jobfile import read_job
from elbowroom.job.pipeline import JobRun
from elbowroom.job.solve import StationKeys, solve
from elbowroom.radiation.solution import Solution
from elbowroom.system.band_features import Feature
from elbowroom.system.discretisation import FarSettings, discretise
from elbowroom.system.self_block import NearSettings
from elbowroom.system.solving import solve_direct, solve_isolated
from elbowroom.system.spaces import CurrentSpace
from helpers import cluster, dipole

TOLERANCE = 1e-3
SKY = hemisphere_grid(15.0)
STEP = 1e6
CHANNELS = tuple(140e6 + STEP * i for i in range(18))
FINE = tuple(np.sort([*CHANNELS, 140.31e6, 147.5e6, 150.017e6, 156.9e6]))


def station_of(count=3):
    level = dipole(height=0.8, direction=(1.0, 0.0, 0.0))
    return Station([Placed(level, p.position) for p in cluster(count)], PerfectGround())


def in_full(station, frequency_hz, mesh_hz):
    d = discretise(station, frequency_hz, mesh_hz=mesh_hz)
    coupled, statistics = solve_direct(d, precision="double")
    alone = solve_isolated(d)
    return Solution(d, coupled, tuple(alone[k] for k in d.kind_of), 100.0, statistics)


def pattern_error(solution, mesh_hz):
    exact = in_full(solution.station, solution.frequency_hz, mesh_hz)
    a, b = (s.embedded_patterns(SKY.theta_rad, SKY.phi_rad) for s in (exact, solution))
    return float(np.max(np.linalg.norm(a - b, axis=-1).max(axis=1) / np.linalg.norm(a, axis=-1).max(axis=1)))


# --- which channels are solved, and in which segment


@pytest.mark.parametrize("step", [1e6, 0.7e6, 3e6])
def test_solved_channels__are_channels_no_farther_apart_than_the_step_and_a_channel(step):
    channels = 100e6 + 1e5 * np.arange(101)
    solved = solved_channels(channels, step)
    assert set(solved) <= set(channels)
    assert (solved[0], solved[-1]) == (channels[0], channels[-1])
    assert np.diff(solved).max() <= step + 1e5 * (1.0 + 1e-9)
    assert len(solved) <= 10e6 / step + 2


def test_solved_channels__all_without_a_step_and_none_out_of_order():
    assert solved_channels(CHANNELS, None) == CHANNELS
    with pytest.raises(ModelRangeError, match="rising"):
        solved_channels([2e8, 1e8], 1e6)
    with pytest.raises(ModelRangeError, match="positive"):
        solved_channels(CHANNELS, 0.0)


@pytest.mark.parametrize("tolerance", [1e-3, 1e-4])
def test_segments__cover_the_band_with_ends_in_common(tolerance):
    channels = tuple(np.arange(50e6, 350.1e6, 1e6))
    plans = plan_segments(station_of(), channels, tolerance)
    assert plans[0].low_hz == 50e6
    assert plans[-1].high_hz == 350e6
    for one, other in zip(plans[:-1], plans[1:], strict=True):
        assert one.high_hz == other.low_hz
    assert set(channels) == {f for p in plans for f in p.solved}
    assert min(len(p.solved) for p in plans) >= FEWEST_CHANNELS


def test_segments__a_finer_tolerance_and_a_larger_antenna_make_them_narrower():
    channels = tuple(np.arange(50e6, 350.1e6, 1e6))
    coarse = len(plan_segments(station_of(), channels, 1e-3))
    assert len(plan_segments(station_of(), channels, 1e-5)) > coarse
    tall = Station([Placed(dipole(height=4.0, direction=(1.0, 0.0, 0.0)))], PerfectGround())
    assert len(plan_segments(tall, channels, 1e-3)) > coarse


def test_segments__few_channels_are_solved_one_by_one():
    assert plan_segments(station_of(), CHANNELS[: FEWEST_CHANNELS - 1], TOLERANCE) == []
    wide = tuple(np.arange(50e6, 350.1e6, 15e6))
    assert len(wide) > FEWEST_CHANNELS
    assert plan_segments(station_of(), wide, TOLERANCE) == []


def plans_over_table(entries, channels, **options):
    soil = TabulatedSoil(tuple(entries), tuple(10.0 + i % 2 for i in range(len(entries))), (0.01,) * len(entries))
    return plan_segments(Station(station_of().placed, soil), channels, TOLERANCE, **options)


def test_segments__never_pass_over_an_entry_of_the_grounds_table():
    assert len(plans_over_table((100e6, 200e6), CHANNELS)) == len(plans_over_table((CHANNELS[0], CHANNELS[-1]), CHANNELS)) == 1
    # Either side has too few channels.
    assert plans_over_table((100e6, 148.3e6, 200e6), CHANNELS) == []


@pytest.mark.parametrize("spacing", [5e6, 10e6, 50e6])
def test_segments__end_at_entries_of_the_grounds_table(spacing):
    channels = tuple(50e6 + 1e5 * np.arange(3001))
    entries = np.arange(50e6, 350.1e6, spacing)
    plans = plans_over_table(entries, channels)
    assert {f for p in plans for f in p.solved} == set(channels)
    for plan in plans:
        assert not np.any((entries > plan.low_hz) & (entries < plan.high_hz))
        assert len(plan.solved) >= FEWEST_CHANNELS
    for one, other in zip(plans[:-1], plans[1:], strict=True):
        assert one.high_hz == other.low_hz


def test_segments__entries_between_channels_are_between_segments():
    channels = tuple(140e6 + 1e5 * np.arange(101))
    plans = plans_over_table((100e6, 143.33e6, 147.111e6, 147.113e6, 200e6), channels)
    ends = [(p.low_hz, p.high_hz) for p in plans]
    assert ends == [(140e6, 143.3e6), (143.4e6, 147.1e6), (147.2e6, 150e6)]


def test_segments__channels_beside_entries_are_solved_and_enough_between_them():
    channels = tuple(140e6 + 25e3 * np.arange(801))
    plans = plans_over_table((100e6, 150e6, 200e6), channels, solve_step_hz=1e6)
    assert [(p.low_hz, p.high_hz) for p in plans] == [(140e6, 150e6), (150e6, 160e6)]
    assert {f for p in plans for f in (*p.solved, *p.between)} == set(channels)
    for plan in plans:
        assert {plan.low_hz, plan.high_hz} <= set(plan.solved)
        assert FEWEST_CHANNELS <= len(plan.solved) <= FEWEST_CHANNELS + 1
        assert np.diff(plan.solved).max() <= 1e6


def test_segments__made_narrow_by_echoes_have_enough_channels_solved():
    channels = tuple(140e6 + 25e3 * np.arange(1601))
    layered = LayeredSoil(((3.0, Soil(3.0, 1e-4)),), Soil(25.0, 0.05))
    plans = plan_segments(Station(station_of().placed, layered), channels, 1e-4, solve_step_hz=1e6)
    assert {f for p in plans for f in (*p.solved, *p.between)} == set(channels)
    for plan in plans:
        assert plan.high_hz - plan.low_hz < 10e6
        assert FEWEST_CHANNELS <= len(plan.solved) <= FEWEST_CHANNELS + 1


# --- solutions


@pytest.fixture(scope="module")
def band():
    return list(solve_band(station_of(), FINE, tolerance=TOLERANCE, solve_step_hz=STEP))


def test_band__every_channel_says_what_it_is_and_meets_its_statement(band):
    assert [s.frequency_hz for s in band] == list(FINE)
    for solution in band:
        s = solution.statistics
        between = solution.frequency_hz not in CHANNELS
        assert s.origin == ("interpolated currents" if between else "interpolated matrix")
        assert 0.0 < s.pattern_error <= TOLERANCE
    for index in (0, 1, 8, 9, len(FINE) - 2):
        assert pattern_error(band[index], CHANNELS[-1]) <= band[index].statistics.pattern_error


def test_band__channels_serve_like_any_solution(band):
    solution = band[FINE.index(147.5e6)]
    exact = in_full(solution.station, 147.5e6, CHANNELS[-1])
    theta, phi = np.array([0.2, 0.9]), np.array([0.3, -1.0])
    for seen in (50.0, "open", "short"):
        np.testing.assert_allclose(
            solution.isolated_patterns(theta, phi, termination=seen), exact.isolated_patterns(theta, phi, termination=seen),
            atol=1e-4 * np.abs(exact.isolated_patterns(theta, phi, termination=seen)).max(),
        )  # fmt: skip
        weights = solution.pointing_weights(0.3, 0.2)
        beam = exact.beam(weights, theta, phi, termination=seen)
        np.testing.assert_allclose(solution.beam(weights, theta, phi, termination=seen), beam, atol=0.01 * np.abs(beam).max())
    # All of 1 % would be seen: antennas alone differ by more.
    alone = exact.isolated_beam(weights, theta, phi, termination=100.0)
    assert np.abs(alone - exact.beam(weights, theta, phi)).max() > 0.02 * np.abs(alone).max()
    s = solution.scattering_matrix()
    np.testing.assert_array_equal(s, s.T)
    assert np.linalg.svd(s, compute_uv=False).max() <= 1.0 + TOLERANCE


def test_band__without_a_step_every_channel_is_solved_and_single_ones_are_alone():
    channels = (*CHANNELS, 250e6)
    solutions = list(solve_band(station_of(2), channels, tolerance=TOLERANCE))
    assert [s.statistics.origin for s in solutions] == ["interpolated matrix"] * len(CHANNELS) + ["assembled"]


def test_segment__channels_whose_estimate_is_too_large_are_solved():
    # Too few and too far apart to be interpolated between: the estimate says so.
    plan = SegmentPlan(100e6, 160e6, tuple(np.arange(100e6, 161e6, 10e6)), tuple(np.arange(101e6, 160e6, 2e6)))
    segment = SegmentChannels(station_of(2), plan, TOLERANCE)
    added = segment.complete()
    assert added
    assert set(added) < set(plan.between)
    counts = segment.counts
    assert counts.solved == len(plan.solved) + len(added)
    made = [segment.solution(f) for f in plan.between]
    assert {s.statistics.origin for s in made} == {"interpolated matrix", "interpolated currents"}
    for s in made[::4]:
        assert s.statistics.pattern_error <= TOLERANCE
        assert pattern_error(s, plan.high_hz) <= s.statistics.pattern_error
    assert segment.complete() == []
    assert segment.counts.interpolated == len(plan.between) - len(added)


def test_segment__channels_beside_a_narrow_resonance_are_solved(monkeypatch):
    plan = SegmentPlan(140e6, 157e6, CHANNELS, tuple(np.arange(150.05e6, 150.96e6, 0.1e6)))
    monkeypatch.setattr("elbowroom.job.band.narrow_features", lambda *_: [Feature(150.52e6, 1e3, "array")])
    segment = SegmentChannels(station_of(2), plan, TOLERANCE)
    added = {round(f / 1e4) for f in segment.complete()}
    # The nearest, and one on either side at growing distances.
    assert {15055, 15045} <= added
    assert len(added) < len(plan.between)
    origins = {round(f / 1e4): segment.solution(f).statistics.origin for f in plan.between}
    assert {f for f, origin in origins.items() if origin == "interpolated matrix"} == added


def test_segment__resonances_far_from_what_is_asked_for_cost_nothing(monkeypatch):
    plan = SegmentPlan(140e6, 157e6, CHANNELS)
    monkeypatch.setattr("elbowroom.job.band.narrow_features", lambda *_: [Feature(150.52e6, 1e3, "array")])
    segment = SegmentChannels(station_of(2), plan, TOLERANCE)
    assert segment.solution(144.3e6).statistics.origin == "interpolated currents"
    assert segment.counts.solved == len(CHANNELS)


def test_segment__one_that_gives_power_is_solved(monkeypatch):
    plan = SegmentPlan(140e6, 157e6, CHANNELS, (150.3e6,))
    segment = SegmentChannels(station_of(2), plan, TOLERANCE)
    monkeypatch.setattr("elbowroom.job.band.is_passive", lambda *_: False)
    assert segment.solution(150.3e6).statistics.origin == "interpolated matrix"


def rotated(solution):
    """The same currents in other functions: each kind's mixed among themselves."""
    rng = np.random.default_rng(0)
    bases = solution.space.bases
    mixes = [np.linalg.qr(rng.normal(size=2 * (b.shape[1],)) + 0j)[0] for b in bases]
    currents = solution.coupled.currents.copy()
    for a, k in enumerate(solution.discretisation.kind_of):
        currents[solution.space.of(a)] = mixes[k].conj().T @ currents[solution.space.of(a)]
    space = CurrentSpace(solution.space.offsets, tuple(b @ m for b, m in zip(bases, mixes, strict=True)))
    return replace(solution, coupled=replace(solution.coupled, currents=currents), space=space)


def test_space__is_like_what_single_precision_leaves_of_it():
    space = CurrentSpace(np.array([0, 3]), (np.random.default_rng(0).normal(size=(5, 3)) + 0j, None))
    assert space.like(CurrentSpace(space.offsets, (space.bases[0].astype(np.complex64), None)))
    for bases in ((space.bases[0] * 1.00001, None), (space.bases[0][:, :2], None), (None, None), space.bases[:1]):
        assert not space.like(CurrentSpace(space.offsets, bases))
    assert not space.like(CurrentSpace(np.array([0, 4]), space.bases))


@pytest.mark.parametrize("kept", ["other functions", "more functions"])
def test_segment__channels_kept_in_unlike_functions_are_not_mixed_with_others(kept):
    plan = SegmentPlan(140e6, 157e6, CHANNELS, (140.5e6, 145.5e6, 150.5e6))
    segment = SegmentChannels(station_of(2), plan, TOLERANCE)
    if kept == "other functions":
        stored = rotated(segment.segment_solution(145e6))
        assert stored.space.size == segment.segment.space.size
    else:
        stored = SegmentChannels(station_of(2), plan, 0.01 * TOLERANCE).solved(145e6)
        assert stored.space.size > segment.segment.space.size
    segment._memory[145e6] = stored
    for f in plan.between:
        made = segment.solution(f)
        assert made.statistics.pattern_error <= TOLERANCE
        assert pattern_error(made, plan.high_hz) <= made.statistics.pattern_error
    # Those far from it are made from the others as they would be without it.
    assert made.statistics.origin == "interpolated currents"
    assert segment.solution(145e6) is stored


def test_segment__what_is_not_solved_is_told_where_nothing_may_be():
    segment = SegmentChannels(station_of(2), SegmentPlan(140e6, 157e6, CHANNELS), TOLERANCE)
    segment.solve_missing = False
    with pytest.raises(SolveError, match="140 MHz is not solved yet"):
        segment.solution(140e6)


# --- keys


def keys_of(station, plan, frequency_hz=140e6, **options):
    return [
        channel_key(StationKeys(station), plan, ChannelSettings("default", 1e-3, 1e6), frequency_hz, solved=solved, **options)
        for solved in (True, False)
    ]


def test_keys__tell_grounds_apart_that_differ_elsewhere_in_the_segment():
    plan = SegmentPlan(140e6, 157e6, CHANNELS)

    def over(*permittivities, wrap=lambda soil: soil):
        soil = TabulatedSoil((140e6, 150e6, 160e6), permittivities, (0.01,) * 3)
        return keys_of(Station(station_of().placed, wrap(soil)), plan)

    for wrap in (lambda s: s, lambda s: LayeredSoil(((0.5, s),), Soil(20.0, 0.02)), lambda s: MeshOnSoil(s, 0.1, 1e-3)):
        first = over(5.0, 7.0, 8.0, wrap=wrap)
        assert over(5.0, 7.0, 8.0, wrap=wrap) == first
        for other in (over(5.0, 7.0, 9.0, wrap=wrap), over(5.0, 7.5, 8.0, wrap=wrap)):
            assert not set(other) & set(first)


def test_keys__of_grounds_that_do_not_vary_are_what_they_were_and_shared_by_copies():
    plan = SegmentPlan(140e6, 157e6, CHANNELS)
    level = station_of().placed
    how = ("segment", "0.001, from 140000000 to 157000000 Hz")
    for ground in (PerfectGround(), Soil(5.0, 0.01), TabulatedSoil((100e6, 150e6, 200e6), (5.0,) * 3, (0.01,) * 3)):
        station = Station(level, ground)
        expected = StationKeys(station).key(140e6, mesh_settings("default"), NearSettings(), FarSettings(), how)
        assert keys_of(station, plan)[0] == expected
    varying = TabulatedSoil((100e6, 200e6), (5.0, 7.0), (0.01, 0.01))
    shifted = [Placed(p.antenna, p.position + np.array([30.0, -7.0, 0.0])) for p in level]
    assert keys_of(Station(level, varying), plan) == keys_of(Station(shifted, varying), plan)


# --- jobs and stores

DIPOLE = "[[wire]]\nstart_m = [-0.47, 0, 0.8]\nend_m = [0.47, 0, 0.8]\nradius_m = 0.002\n[[port]]\nname = 'x'\nwire = 0\n"
JOB = """
[station]
layout = "layout.csv"
antenna = "dipole.toml"
[band]
start_hz = 140e6
stop_hz = 157e6
step_hz = 500e3
solve_step_hz = 1e6
[solver]
method = "reduced"
tolerance = 1e-3
"""


@pytest.fixture
def folder(tmp_path):
    (tmp_path / "dipole.toml").write_text(DIPOLE)
    (tmp_path / "layout.csv").write_text("name,east_m,north_m\nA1,0,0\nA2,1.5,0.3\n")
    (tmp_path / "job.toml").write_text(JOB)
    return tmp_path


def run_of(folder, old="", new="", **options):
    (folder / "job.toml").write_text(JOB.replace(old, new, 1) if old else JOB)
    return JobRun(read_job(folder / "job.toml"), **options)


def test_job__channels_are_units_of_the_store_that_say_what_they_are(folder):
    run = run_of(folder)
    assert len(Campaign([run]).to_solve) == len(run.frequencies_hz) == 35
    first = [run.solution(f) for f in run.frequencies_hz[:5]]
    origins = [s.statistics.origin for s in first]
    assert origins == ["interpolated matrix", "interpolated currents"] * 2 + ["interpolated matrix"]
    again = run_of(folder)
    for solution in first:
        stored = again.stored_solution(solution.frequency_hz)
        assert stored.statistics.origin == solution.statistics.origin
        assert stored.statistics.pattern_error == solution.statistics.pattern_error
        np.testing.assert_array_equal(stored.coupled.currents, solution.coupled.currents)
        np.testing.assert_array_equal(stored.coupled.loaded_admittance, solution.coupled.loaded_admittance)
        directions = np.array([0.2, 0.9]), np.array([0.3, -1.0])
        np.testing.assert_allclose(stored.embedded_patterns(*directions), solution.embedded_patterns(*directions), rtol=1e-12)
    # The half channel needs all solved ones, and they are there now.
    assert sum(u.stored for u in Campaign([again]).units) == 18 + 2
    with pytest.raises(StoreError, match=r"143\.5 MHz is not in the store"):
        again.stored_solution(143.5e6)


def test_job__segments_do_not_depend_on_which_frequencies_are_chosen(folder):
    whole, part = run_of(folder), run_of(folder, frequencies_hz=[150e6, 150.5e6])
    assert [part.key(f) for f in part.frequencies_hz] == [whole.key(150e6), whole.key(150.5e6)]
    assert part.needed_keys() >= {part.key(f) for f in part.frequencies_hz}


def test_job__keys_tell_tolerance_segment_step_and_storage_apart(folder):
    keys = [run_of(folder).key(150.5e6)]
    for old, new in (
        ("tolerance = 1e-3", "tolerance = 1e-4"),
        ("stop_hz = 157e6", "stop_hz = 158e6"),
        ("solve_step_hz = 1e6", "solve_step_hz = 2e6\nsegments = 'auto'"),
        ("solve_step_hz = 1e6", ""),
        ("solve_step_hz = 1e6", "segments = 'none'"),
        ("[solver]", "[store]\nprecision = 'single'\n[solver]"),
    ):
        keys.append(run_of(folder, old, new).key(150.5e6))
    # A step of 2 MHz leaves too few to share matrices, as "none" does: both assemble for themselves, and are one unit.
    assert keys[3] == keys[5]
    assert len(set(keys)) == 6


@pytest.mark.parametrize(("spacing_mhz", "told"), [(5, True), (10, False)])
def test_job__a_table_of_soil_too_fine_for_segments_is_told(folder, spacing_mhz, told):
    entries = range(140, 165, spacing_mhz)
    rows = [f"{f}e6,{10 + f % 7},0.01" for f in entries]
    (folder / "soil.csv").write_text("\n".join(["frequency_hz,relative_permittivity,conductivity_s_per_m", *rows]) + "\n")
    ground = "antenna = \"dipole.toml\"\n[station.ground]\nkind = 'soil'\nfile = 'soil.csv'"
    text = JOB.replace('antenna = "dipole.toml"', ground).replace("solve_step_hz = 1e6\n", "")
    (folder / "job.toml").write_text(text)
    run = JobRun(read_job(folder / "job.toml"))
    doubts = [p.text for p in run.problems() if "one by one" in p.text]
    assert len(doubts) == told
    if told:
        assert doubts[0].startswith("35 of 35 channels are assembled one by one")
        assert "of which 3 lie in the band" in doubts[0]
    else:
        assert [(p.low_hz, p.high_hz) for p in run.segments] == [(140e6, 150e6)]


def test_job__none_assembles_every_frequency(folder):
    run = run_of(folder, "solve_step_hz = 1e6", "segments = 'none'", frequencies_hz=[150e6])
    assert run.segments == []
    assert run.solution(150e6).statistics.origin == "assembled"
    reference = solve(run.station, 150e6, solver="reduced", tolerance=1e-3)
    np.testing.assert_array_equal(run.solution(150e6).coupled.currents, reference.coupled.currents)


def test_job__a_direct_solver_makes_no_channels(folder):
    with pytest.raises(JobFileError) as caught:
        run_of(folder, 'method = "reduced"', 'method = "direct"')
    assert "solve_step_hz" in caught.value.problems[0]
    assert run_of(folder, 'solve_step_hz = 1e6\n[solver]\nmethod = "reduced"', '[solver]\nmethod = "direct"').segments == []


def test_job__a_step_needs_segments(folder):
    with pytest.raises(JobFileError) as caught:
        run_of(folder, "solve_step_hz = 1e6", "solve_step_hz = 1e6\nsegments = 'none'")
    assert "segments" in caught.value.problems[0]


def test_job__settings_are_shown(folder):
    lines = run_of(folder).job.resolved_lines()
    assert "band.segments = auto" in lines
    assert "band.solve_step_hz = 1000000" in lines


def test_campaign__a_segment_is_one_item(folder):
    campaign = Campaign([run_of(folder)])
    campaign.predict()
    items = campaign.items(1)
    assert len(items) == 1
    assert len(items[0].frequencies_hz) == 35
    assert items[0].label == "140 MHz to 157 MHz"
    result = run_item(items[0])
    assert [o.state for o in result.outcomes] == ["solved"] * 35
    origins = [o.statistics.origin for o in result.outcomes]
    assert origins == ["interpolated matrix", "interpolated currents"] * 17 + ["interpolated matrix"]
    assert Campaign([run_of(folder)]).to_solve == []
    again = run_item(items[0])
    assert [o.state for o in again.outcomes] == ["from store"] * 35


def test_outputs__tell_solved_from_interpolated_channels(folder):
    from elbowroom.job.beamfields import beam_fields
    from elbowroom.job.compare import compare_beams
    from elbowroom.job.export import TableSettings, export_csv, export_hdf5
    from elbowroom.job.portmatrices import active_ports, write_active_ports, write_port_matrices

    run = run_of(folder, "[solver]", "[[beam]]\nname = 'all'\nport = 'x'\n[solver]", frequencies_hz=[150e6, 150.5e6])
    fields = [beam_fields(run.solution(f), run.job.beams, SKY, run.termination_at(f)) for f in run.frequencies_hz]
    wanted = ["interpolated matrix", "interpolated currents"]
    assert [row.origin for f in fields for row in compare_beams(f)] == wanted
    about = {"settings": TableSettings(), "title": "t", "job_text": ""}
    export_hdf5(folder / "beams.h5", iter(fields), 2, **about)
    with h5py.File(folder / "beams.h5") as file:
        assert list(file["origin"].asstr()[:]) == wanted
    export_csv(folder / "beams.csv", iter(fields), **about)
    lines = (folder / "beams.csv").read_text().splitlines()
    assert [line.split("origin ")[1] for line in lines if line.startswith("# at ")] == wanted
    write_port_matrices(run, folder / "ports.s2p")
    write_active_ports(active_ports(run), folder / "active.csv")
    for name in ("ports.s2p", "active.csv"):
        text = (folder / name).read_text()
        assert "origin interpolated matrix at 150000000 Hz" in text
        assert "origin interpolated currents at 150500000 Hz" in text
