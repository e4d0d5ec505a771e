"""Functions in place of unknowns: their norm, their order, the spaces they span, and the settings that are refused."""

from concurrent.futures import ThreadPoolExecutor

import numpy as np
import pytest

import independent
from elbowroom.base.errors import ModelRangeError
from elbowroom.geometry.grounds import FreeSpace, PerfectGround
from elbowroom.geometry.stations import Placed, Station
from elbowroom.system.discretisation import discretise
from elbowroom.system.reduction import Candidates, KindAnswers, ReductionSettings, current_weights, sky_samples
from elbowroom.system.solving_reduced import solve_reduced
from elbowroom.system.spaces import all_unknowns, reduced_space
from helpers import FREQUENCY_HZ, cluster, crossed, dipole

RNG = np.random.default_rng(6)


def random_complex(*shape):
    return RNG.normal(size=shape) + 1j * RNG.normal(size=shape)


@pytest.mark.parametrize("design", [dipole(height=1.0, direction=(1, 0, 0.2)), crossed()], ids=["dipole", "crossed"])
def test_current_weights__are_the_mean_squares_of_current_and_charge_along_the_wires(design):
    d = discretise(Station([Placed(design)], PerfectGround()), FREQUENCY_HZ, self_blocks=False)
    weights = current_weights(d.kinds[0].mesh, d.wavenumber)
    sampled = independent.sampled_antenna(d, 0)
    x = random_complex(d.n_unknowns)
    current = sampled.weight @ np.abs(sampled.current @ x) ** 2
    charge = sampled.weight @ np.abs(sampled.slope @ x) ** 2 / d.wavenumber**2
    found = np.real(x.conj() @ weights @ x)
    assert found == pytest.approx(current + charge, rel=1e-10)
    assert min(current, charge) > 1e-6 * found
    np.testing.assert_allclose(weights, weights.T, rtol=0, atol=1e-12 * np.abs(weights).max())


@pytest.fixture(scope="module")
def reduced():
    design, other = crossed(), dipole(height=1.2, direction=(0.3, 1.0, 0.1))
    placed = [Placed(design), Placed(other, (1.6, 0.2, 0.0), 20.0), Placed(design, (-0.5, 1.9, 0.0), 75.0)]
    d = discretise(Station(placed, PerfectGround()), FREQUENCY_HZ)
    return d, *solve_reduced(d, ReductionSettings(1e-3))


def test_bases__are_orthonormal_in_the_norm_of_current_and_charge(reduced):
    d, _, space, _ = reduced
    for kind, basis in zip(d.kinds, space.bases, strict=True):
        n, m = basis.shape
        assert len(kind.antenna.ports) <= m < n
        gram = basis.conj().T @ current_weights(kind.mesh, d.wavenumber) @ basis
        np.testing.assert_allclose(gram, np.eye(m), atol=1e-10)
        assert np.abs(basis.conj().T @ basis / np.linalg.norm(basis[:, 0]) ** 2 - np.eye(m)).max() > 1e-3


def test_bases__turned_antennas_of_a_design_share_one(reduced):
    d, _, space, _ = reduced
    first, last = d.kind_of[0], d.kind_of[2]
    assert first != last
    np.testing.assert_array_equal(space.bases[first], space.bases[last])


def test_reduced_space__coordinates_and_unknowns_round_trip(reduced):
    d, ports, space, statistics = reduced
    assert space.reduced
    assert space.size == statistics.n_functions == sum(space.bases[k].shape[1] for k in d.kind_of)
    coordinates = random_complex(space.size, 4)
    unknowns = space.unknowns(d, coordinates)
    assert unknowns.shape == (d.n_unknowns, 4)
    for a, k in enumerate(d.kind_of):
        weights = current_weights(d.kinds[k].mesh, d.wavenumber)
        back = space.bases[k].conj().T @ weights @ unknowns[d.unknowns_of(a)]
        np.testing.assert_allclose(back, coordinates[space.of(a)], atol=1e-10)
    np.testing.assert_array_equal(
        space.rows_of(np.array([2, 0])), [*range(*space.of(2).indices(99)), *range(*space.of(0).indices(99))]
    )
    assert ports.currents.shape == (space.size, d.n_ports)


def test_all_unknowns__hands_currents_through():
    d = discretise(cluster(2), FREQUENCY_HZ, self_blocks=False)
    space = all_unknowns(d)
    currents = random_complex(d.n_unknowns, 3)
    assert not space.reduced
    assert space.size == d.n_unknowns
    assert space.of(1) == d.unknowns_of(1)
    assert space.unknowns(d, currents) is currents


def test_reduced_space__of_complete_bases_is_that_of_all_unknowns():
    d = discretise(cluster(3), FREQUENCY_HZ, self_blocks=False)
    n = d.kinds[0].mesh.n_unknowns
    space = reduced_space(d, [np.eye(n, dtype=complex)])
    np.testing.assert_array_equal(space.offsets, d.unknown_offsets)
    currents = random_complex(d.n_unknowns, 2)
    np.testing.assert_array_equal(space.unknowns(d, currents), currents)


def test_candidates__are_cut_by_what_they_carry_and_keep_their_ports():
    made = Candidates(random_complex(9, 5), np.array([1.0, 0.5, 0.1, 1e-3, 1e-6]), 2)
    assert [made.count(c) for c in (0.9, 0.2, 0.05, 1e-4, 0.0)] == [2, 2, 3, 4, 5]
    np.testing.assert_array_equal(made.cut(0.05), made.functions[:, :3])
    assert made.most == 5


@pytest.mark.parametrize("whole", [False, True])
def test_sky_samples__resolve_the_waves_an_antenna_can_tell_apart(whole):
    radius, k = 1.5, 3.0
    theta, phi = sky_samples(radius, k, whole)
    assert theta.max() == pytest.approx(np.pi if whole else np.pi / 2)
    assert theta.min() == 0.0
    # Rows no farther apart than half a period of the highest harmonic, and as many around the horizon as it has lobes.
    degree = k * radius
    assert np.diff(np.unique(theta)).max() <= np.pi / degree
    around = np.sort(np.mod(phi[np.isclose(theta, theta[np.argmin(abs(theta - np.pi / 2))])], 2.0 * np.pi))
    assert np.diff(around).max() <= np.pi / degree
    assert len(theta) >= (1.0 if whole else 0.5) * (degree + 1) ** 2


@pytest.mark.parametrize("tolerance", [0.0, -1e-3, 1e-9, 0.5, np.nan, np.inf])
def test_settings__a_tolerance_out_of_range_is_refused(tolerance):
    with pytest.raises(ModelRangeError, match=r"tolerance .*: expected 1e-6 to 0.1"):
        ReductionSettings(tolerance)


@pytest.mark.parametrize(
    ("key", "value"),
    [("cut_factor", 0.0), ("cut_factor", np.nan), ("skeleton_factor", -1.0), ("skeleton_factor", np.inf), ("neighbour_pairs", -1),
     ("skeleton_distances_m", (0.3, 0.0)), ("skeleton_distances_m", (np.nan,))],
)  # fmt: skip
def test_settings__numbers_without_sense_are_refused_by_their_key(key, value):
    with pytest.raises(ModelRangeError, match=f"{key} .*: expected"):
        ReductionSettings(**{key: value})


def test_settings__without_skeletons_all_pairs_are_done_in_full():
    d = discretise(cluster(3), FREQUENCY_HZ)
    with_them, without = (solve_reduced(d, ReductionSettings(1e-4, **o)) for o in ({}, {"skeleton_distances_m": ()}))
    expected = without[0].loaded_admittance
    found = with_them[0].loaded_admittance
    assert 0.0 < np.linalg.norm(found - expected) < with_them[2].port_matrix_error * np.linalg.norm(expected)


@pytest.mark.parametrize("ground", [FreeSpace(), PerfectGround()], ids=["free space", "perfect ground"])
def test_bases__finer_tolerances_take_more_functions(ground):
    d = discretise(cluster(3, ground=isinstance(ground, PerfectGround)), FREQUENCY_HZ)
    counts = [solve_reduced(d, ReductionSettings(t))[2].n_functions for t in (1e-2, 1e-3, 1e-5)]
    assert counts[0] < counts[1] < counts[2] < d.n_unknowns


def test_answers__are_the_same_from_several_threads():
    # LAPACK's wrapper changes the pivots it is given while it works: shared ones once ended in corrupted memory.
    d = discretise(Station([Placed(crossed())], PerfectGround()), FREQUENCY_HZ)
    answers = KindAnswers(d, 100.0)
    excitation = random_complex(d.n_unknowns, 2)
    expected = answers.to(0, excitation)
    np.testing.assert_allclose(answers.product(0, expected), excitation, atol=1e-9 * np.abs(excitation).max())
    with ThreadPoolExecutor(4) as pool:
        for found in pool.map(lambda _: answers.to(0, excitation), range(200)):
            np.testing.assert_array_equal(found, expected)
