"""A station between two frequencies: matrices interpolated and factored, against solving at the frequency itself."""

import numpy as np
import pytest

from elbowroom.base.errors import ModelRangeError
from elbowroom.base.threads import blas_threads
from elbowroom.geometry.antennas import Antenna, Load, Port
from elbowroom.geometry.grounds import FreeSpace, PerfectGround
from elbowroom.geometry.shapes import log_periodic
from elbowroom.geometry.stations import Placed, Station
from elbowroom.geometry.wires import Wire
from elbowroom.system.band import BandSegment, SegmentSettings
from elbowroom.system.band_interpolation import OwnBlocks, band_nodes, intervals_for, node_weights, reach_of
from elbowroom.system.discretisation import discretise
from elbowroom.system.port_algebra import is_passive
from elbowroom.system.solving import solve_direct
from helpers import cluster

LOW, HIGH = 130e6, 155e6
SETTINGS = SegmentSettings(1e-4)


def lossy_log_periodic():
    return log_periodic(
        height_m=1.4, wire_radius_m=0.002, tau=0.82, sigma=0.07, longest_half_length_m=0.6, elements=2,
        feeder_impedance_ohm=200.0, conductivity_s_per_m=3.5e7,
    )  # fmt: skip


@pytest.fixture(scope="module")
def crossed_segment():
    return BandSegment(Station(cluster(4).placed, PerfectGround()), LOW, HIGH, SETTINGS)


def relative(a, b):
    return float(np.max(np.linalg.norm(a - b, axis=0) / np.linalg.norm(b, axis=0)))


def against_direct(segment, frequency_hz):
    """Return the worst relative error of a port's currents, and that of the loaded admittance, on the same mesh."""
    made = segment.solve(frequency_hz)
    d = discretise(segment.station, frequency_hz, mesh_hz=segment.high_hz)
    exact, _ = solve_direct(d, precision="double")
    currents = made.space.unknowns(made.discretisation, made.currents.currents)
    admittance = made.currents.loaded_admittance
    return made, relative(currents, exact.currents), relative(admittance, exact.loaded_admittance)


# --- nodes


def test_nodes__polynomials_of_their_degree_are_exact():
    nodes = band_nodes(50e6, 80e6, 6)
    x = (nodes - 65e6) / 15e6
    for f in (50e6, 53.3e6, 71e6, 80e6, float(nodes[2])):
        for degree in range(7):
            assert node_weights(nodes, f) @ x**degree == pytest.approx(((f - 65e6) / 15e6) ** degree, abs=1e-13)
    assert abs(node_weights(nodes, 53.3e6) @ x**7 - ((53.3e6 - 65e6) / 15e6) ** 7) > 1e-4


def test_nodes__outside_is_refused():
    with pytest.raises(ModelRangeError, match="outside the segment"):
        node_weights(band_nodes(50e6, 80e6, 4), 81e6)


@pytest.mark.parametrize("reach", [0.5, 2.0, 4.0])
@pytest.mark.parametrize("tolerance", [1e-4, 1e-6])
def test_intervals__phases_up_to_the_reach_are_met_and_fewer_would_not_do(reach, tolerance):
    count = intervals_for(40e6, reach, tolerance)

    def error(n):
        nodes = band_nodes(100e6, 140e6, n)
        phase = np.exp(-2j * np.pi * nodes * reach / 299_792_458.0)
        return max(
            abs(node_weights(nodes, f) @ phase - np.exp(-2j * np.pi * f * reach / 299_792_458.0))
            for f in np.linspace(100e6, 140e6, 91)
        )

    # Extrema of a Chebyshev polynomial do at most twice as badly as its zeros, of which the bound speaks.
    assert error(count) <= 2.0 * tolerance
    assert count == 2 or error(count - 2) > tolerance


# --- own blocks


@pytest.mark.parametrize("ground", [FreeSpace(), PerfectGround()], ids=["free space", "perfect ground"])
def test_own_blocks__with_loss_loads_and_images_equal_those_computed(ground):
    wires = [Wire((-0.5, 0.0, 1.0), (0.5, 0.0, 1.0), radius=0.003, conductivity=1e6)]
    loads = [Load(wire=0, position=0.25, gap=0.01, resistance_ohm=5.0, inductance_h=1e-7, capacitance_f=1e-11)]
    antenna = Antenna("loaded", wires=wires, ports=[Port("x", wire=0, gap=0.01)], loads=loads)
    station = Station([Placed(antenna, (0.0, 0.0, 0.0)), Placed(antenna, (2.0, 0.0, 0.5), tilt_east_deg=5.0)], ground)
    nodes = band_nodes(LOW, HIGH, 2 * intervals_for(HIGH - LOW, reach_of(station), 1e-6))
    own = OwnBlocks([discretise(station, float(f), mesh_hz=HIGH) for f in nodes])
    exact = discretise(station, 141.7e6, mesh_hz=HIGH)
    made = own.at(141.7e6)
    assert made.frequency_hz == 141.7e6
    for k in range(len(exact.kinds)):
        # The port's response feels what is left of potentials that nearly cancel.
        unit = exact.kinds[k].mesh.gap_vectors.T
        answers = [np.linalg.solve(d.kinds[k].self_block + 100.0 * unit @ unit.T, unit) for d in (made, exact)]
        assert relative(answers[0], answers[1]) < 1e-8
        basis = np.linalg.qr(np.random.default_rng(0).normal(size=(len(unit), 9)))[0] + 0j
        loaded = basis.T @ (exact.kinds[k].self_block + 100.0 * unit @ unit.T) @ basis
        np.testing.assert_allclose(own.loaded_in(k, basis, 100.0)(141.7e6), loaded, atol=1e-9 * np.abs(loaded).max())


# --- segments


@pytest.mark.parametrize("frequency_hz", [LOW, 133.1e6, 142.77e6, 154.3e6, HIGH])
def test_segment__equals_a_direct_solve_on_its_mesh(crossed_segment, frequency_hz):
    made, currents, admittance = against_direct(crossed_segment, frequency_hz)
    s = made.statistics
    assert s.origin == "interpolated matrix"
    assert 0.0 < s.pattern_error <= SETTINGS.tolerance
    # Currents err by the square root of what patterns do: these are products of two errors of the currents.
    assert currents < np.sqrt(SETTINGS.tolerance)
    assert admittance < SETTINGS.tolerance


def test_segment__interpolation_is_what_its_bound_says_and_coupling_is_in_it(crossed_segment):
    # The same functions at a frequency between nodes, assembled there: what is left is interpolation alone.
    from elbowroom.system.assembly import PairFiller, antenna_distances
    from elbowroom.system.interactions import SkeletonInteractions, SkeletonTable
    from elbowroom.system.solving_reduced import assemble_reduced

    frequency = float(crossed_segment.check_frequencies()[0])
    d = discretise(crossed_segment.station, frequency, mesh_hz=crossed_segment.high_hz)
    table = SkeletonTable(d, (0.3, 1.0), 1e-7)
    interactions = SkeletonInteractions(d, crossed_segment.space.bases, table)
    exact = assemble_reduced(
        d, crossed_segment.space, interactions, PairFiller(d), antenna_distances(d), 100.0, dtype=np.complex128
    ).dense()
    made = crossed_segment.samples.at(crossed_segment.own.at(frequency), 100.0).dense()
    space = crossed_segment.space
    for i in range(4):
        for j in range(i):
            block = exact[space.of(i), space.of(j)]
            # Skeletons of the segment and single precision come on top of interpolation.
            assert np.linalg.norm(made[space.of(i), space.of(j)] - block) < 5e-5 * np.linalg.norm(block)
            assert np.linalg.norm(block) > 0.0


def test_segment__loss_and_networks_are_those_of_the_frequency():
    antenna = lossy_log_periodic()
    station = Station([Placed(antenna), Placed(antenna, (1.35, 0.3, 0.0), rotation_deg=25.0)], PerfectGround())
    segment = BandSegment(station, 140e6, 150e6, SegmentSettings(1e-3))
    made, _, admittance = against_direct(segment, 146.3e6)
    assert admittance < 1e-3
    assert made.statistics.pattern_error <= 1e-3
    assert is_passive(made.currents.loaded_admittance, 100.0, 1e-6)


def test_segment__counts_what_it_did(crossed_segment):
    before = crossed_segment.counts
    crossed_segment.solve(137e6)
    after = crossed_segment.counts
    assert after.factorisations == before.factorisations + 1
    assert after.assemblies == before.assemblies >= len(crossed_segment.nodes)


def test_segment__an_error_above_the_tolerance_is_assembled_for_itself(crossed_segment, monkeypatch):
    # Everything checked is made out to be worse than the tolerance; the residual itself is made to say the same.
    monkeypatch.setattr(crossed_segment, "checked", {f: (1.0, s) for f, (_, s) in crossed_segment.checked.items()})
    checks = crossed_segment.counts.checks
    made = crossed_segment.solve(149e6)
    # The residual there is fine, and so the interpolated matrix stays.
    assert crossed_segment.counts.checks == checks + 1
    assert made.statistics.origin == "interpolated matrix"
    monkeypatch.setattr("elbowroom.system.band.is_passive", lambda *_: False)
    made = crossed_segment.solve(149e6)
    assert made.statistics.origin == "assembled"
    assert made.statistics.pattern_error <= SETTINGS.tolerance


def test_segment__outside_is_refused(crossed_segment):
    with pytest.raises(ModelRangeError, match="outside the segment"):
        crossed_segment.solve(HIGH + 1e6)


@pytest.mark.parametrize(("low", "high"), [(2.0, 1.0), (0.0, 1e8), (1e8, 1e8), (1e8, np.nan), (1e8, np.inf)])
def test_segment__ends_that_make_no_band_are_refused(low, high):
    with pytest.raises(ModelRangeError, match="rising positive"):
        BandSegment(cluster(2), low, high)


def test_stated_error__grows_with_sensitivity_and_not_from_one_resonance(crossed_segment, monkeypatch):
    monkeypatch.setattr(crossed_segment, "checked", {1.0: (1e-5, 1.0), 2.0: (2e-5, 1.5), 3.0: (1e-2, 2000.0), 4.0: (1e-5, 1.2)})
    assert crossed_segment.stated_error(1.0) == pytest.approx(2e-5)
    assert crossed_segment.stated_error(15.0) == pytest.approx(2e-4)
    assert crossed_segment.stated_error(2000.0) == pytest.approx(2000.0 / 1.5 * 2e-5)


# --- passivity


def test_passive__is_told_by_the_largest_singular_value():
    rng = np.random.default_rng(3)
    s = rng.normal(size=(6, 6)) + 1j * rng.normal(size=(6, 6))
    s /= np.linalg.norm(s, 2)
    for size, expected in ((0.999, True), (1.0005, True), (1.002, False), (np.nan, False)):
        admittance = (np.eye(6) - size * s) / 200.0
        assert is_passive(admittance, 100.0, 1e-3) is expected


def test_small_stations__solve_channels_with_one_thread_of_blas(crossed_segment, monkeypatch):
    used = []
    inner = BandSegment._port_currents

    def told(self, d):
        used.append(blas_threads())
        return inner(self, d)

    monkeypatch.setattr(BandSegment, "_port_currents", told)
    before = blas_threads()
    crossed_segment.solve(140e6)
    monkeypatch.setattr("elbowroom.system.band.SMALL_ORDER", 1)
    crossed_segment.solve(140e6)
    assert used == [1, before]
    assert blas_threads() == before
