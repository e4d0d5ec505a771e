"""Kernels over real ground: quadrature against identities and limits, tables against quadrature, the fill against its twin."""

import math

import numpy as np
import pytest
from scipy.integrate import quad_vec

from elbowroom.base.constants import VACUUM_PERMITTIVITY, wavenumber_of
from elbowroom.base.errors import ModelRangeError, SolveError
from elbowroom.kernels.point_kernels import Workspace
from elbowroom.kernels.soil import table as table_module
from elbowroom.kernels.soil.fill import fill_soil
from elbowroom.kernels.soil.response import GroundResponse, MeshSheet, bare_soil, layered_soil, mesh_on_soil, under_mesh
from elbowroom.kernels.soil.sommerfeld import GroundQuadrature, kernels_at
from elbowroom.kernels.soil.splines import even_spline_coefficients, spline_basis, spline_weights
from elbowroom.kernels.soil.table import SoilTable, build_table

K = wavenumber_of(150e6)
RHO = np.array([0.0, 0.02, 0.4, 1.4, 1.6, 5.0, 17.0, 40.0])
Z = np.array([0.1, 0.35, 1.0, 6.0])


def soil(relative, conductivity, frequency_hz=150e6):
    """Return the response of bare soil."""
    eps = relative - 1j * conductivity / (2.0 * math.pi * frequency_hz * VACUUM_PERMITTIVITY)
    return bare_soil(wavenumber_of(frequency_hz), eps)


MOIST = soil(10.0, 0.01)
GROUNDS = {
    "moist": MOIST,
    "dry": soil(3.0, 1e-4, 50e6),
    "wet": soil(30.0, 0.001, 350e6),
    "mesh": mesh_on_soil(K, MOIST.permittivity, 0.1, 1e-3, 0.05 + 0.05j),
    "layers": layered_soil(K, [(0.4, 4.0 - 0.05j), (math.inf, 20.0 - 2.0j)]),
    "mesh on layers": under_mesh(layered_soil(K, [(0.4, 4.0 - 0.3j), (math.inf, 20.0 - 2.0j)]), 0.1, 1e-3, 0.05 + 0.05j),
}


# --- quadrature


@pytest.mark.parametrize("name", GROUNDS)
def test_quadrature__equals_a_general_one_on_a_raised_path(name):
    """scipy's adaptive rule along L = x + jy above all singularities, J0 of complex argument by scipy as well."""
    from scipy.special import jv

    response = GROUNDS[name]
    k, rho, z = response.wavenumber, 2.3, 0.7
    top = 1.5 * np.sqrt(response.permittivity * (2.0 if response.layers else 1.0) + 1.0).real * k + (
        60.0 if response.layers else 0.0
    )

    def integrand(x):
        level, slope = (
            x + 0.15j * k * math.sin(math.pi * x / top),
            1.0 + 0.15j * k * math.pi / top * math.cos(math.pi * x / top),
        )
        if x > top:
            level, slope = x + 0j, 1.0
        u0 = np.sqrt(level**2 - k**2)
        gh, ge, w = (complex(c) for c in response.coefficients(np.array(u0)))
        common = level / u0 * jv(0, level * rho) * np.exp(-u0 * z) * slope
        return common * np.array([gh, k**2 * w - gh, k**2 * w - ge, -u0 * w])

    expected = quad_vec(integrand, 0.0, top, epsabs=1e-11, epsrel=1e-11, limit=400)[0]
    expected += quad_vec(integrand, top * (1 + 1e-15), top + 40.0 / z, epsabs=1e-11, epsrel=1e-11, limit=400)[0]
    found = kernels_at(response, [rho], [z])[:, 0, 0]
    np.testing.assert_allclose(found, expected, atol=2e-9)
    assert np.all(np.abs(found - expected[[1, 2, 3, 0]]) > 1e-3)


def test_quadrature__near_and_far_paths_meet():
    for name, response in GROUNDS.items():
        quadrature = GroundQuadrature(response, 0.1)
        below = quadrature._group(np.array([1.5]), Z, near=True)
        beyond = quadrature._group(np.array([1.5]), Z, near=False)
        assert np.abs(below - beyond).max() < 1e-10, name
        assert np.abs(below).max() > 0.05


def test_quadrature__of_a_perfect_plane_is_the_image():
    found = GroundQuadrature(GroundResponse(K, 10.0 - 1.0j, MeshSheet(0.0, 0.0)), 0.1).kernels(RHO, Z)
    for kernel, image in zip(found, (-1.0, 1.0, -1.0, 0.0), strict=True):
        assert np.abs(kernel - image).max() < 1e-9


def test_quadrature__tends_to_the_image_as_soil_conducts_and_to_nothing_as_it_thins():
    images = np.array([-1.0, 1.0, -1.0, 0.0])[:, None, None]
    errors = [
        np.abs(GroundQuadrature(bare_soil(K, 1.0 - 1j * c), 0.3).kernels(RHO[1:5], Z[1:]) - images).max() for c in (1e6, 1e8)
    ]
    assert errors[1] < 0.02
    # The surface impedance falls with the root of the conductivity, and with it all that is left.
    assert 8.0 < errors[0] / errors[1] < 12.0
    thin = [np.abs(GroundQuadrature(bare_soil(K, 1.0 + c), 0.1).kernels(RHO, Z)).max() for c in (1e-3, 1e-5)]
    assert 0.0 < thin[1] < 0.05 * thin[0] < 0.05


def test_quadrature__static_limit_is_the_image_in_a_dielectric():
    # Charges above a dielectric see -(eps - 1)/(eps + 1) of their image (Jackson, Classical Electrodynamics, section 4.4); what
    # is left of N and P is of the order of kR.
    eps = 6.0
    found = GroundQuadrature(bare_soil(1e-5, eps), 0.2).kernels(np.array([0.0, 0.3, 1.0, 4.0]), np.array([0.2, 0.5, 2.0]))
    assert np.abs(found[2] + (eps - 1.0) / (eps + 1.0)).max() < 1e-3
    assert np.abs(found[0]).max() < 1e-3


@pytest.mark.parametrize("name", GROUNDS)
def test_quadrature__far_away_is_fresnels_wave_and_the_rest_falls_with_distance(name):
    response = GROUNDS[name]
    k, theta = response.wavenumber, 0.9
    gh, ge, w = (complex(c) for c in response.coefficients(np.array(1j * k * math.cos(theta))))
    expected = np.array([gh, k**2 * w - gh, k**2 * w - ge, -1j * k**2 * math.cos(theta) * w])
    errors = []
    for distance in (60.0 / k, 240.0 / k, 960.0 / k):
        rho, z = distance * math.sin(theta), distance * math.cos(theta)
        errors.append(np.abs(GroundQuadrature(response, z).kernels(np.array([rho]), np.array([z]))[:, 0, 0] - expected))
    errors = np.array(errors)
    assert errors[-1].max() < 0.02
    orders = np.log(errors[:-1] / errors[1:]) / math.log(4.0)
    assert np.all(np.abs(orders[-1] - 1.0) < 0.12)


def test_quadrature__answers_one_distance_as_it_answers_many():
    many = GroundQuadrature(MOIST, 0.1).kernels(RHO[::-1], Z)
    for n, rho in enumerate(RHO[::-1]):
        one = GroundQuadrature(MOIST, 0.1).kernels(np.array([rho]), Z)
        assert np.abs(one[:, 0] - many[:, n]).max() < 1e-10


def test_quadrature__refuses_echoes_too_many_to_follow():
    deep = layered_soil(wavenumber_of(350e6), [(100.0, 4.0), (math.inf, 80.0 - 200.0j)])
    with pytest.raises(SolveError, match="panels of their integral stay unresolved"):
        GroundQuadrature(deep, 0.1)


def test_quadrature__knows_guided_waves_without_loss():
    # A mesh without loss on soil without loss guides a wave whose pole lies on the path: a little loss must change little.
    free, lossy = (GroundQuadrature(mesh_on_soil(K, eps, 0.1, 1e-3), 0.2).kernels(RHO, Z[1:]) for eps in (4.0, 4.0 - 1e-5j))
    assert 0.0 < np.abs(free - lossy).max() < 1e-4


# --- splines and tables


def test_splines__follow_a_smooth_function_to_the_fourth_power_of_the_step():
    errors = []
    for n in (40, 80, 160):
        step = 2.0 / n
        coefficients = even_spline_coefficients(np.cos(3.0 * step * np.arange(n + 12)))
        position = np.linspace(0.0, n, 501)
        index = np.floor(position).astype(int)
        value = sum(w * coefficients[index + a] for a, w in enumerate(spline_weights(position - index)))
        errors.append(np.abs(value - np.cos(3.0 * step * position)).max())
        np.testing.assert_allclose(spline_basis(n + 12, position) @ coefficients, value, atol=1e-13)
    assert 14.0 < errors[0] / errors[1] < 18.0
    assert 14.0 < errors[1] / errors[2] < 18.0


def held_out_error(table, response):
    """Return the largest error on points that took no part in building, with the lowest height always among them."""
    rng = np.random.default_rng(99)
    far, low, high = table.rho_max_m, table.z_min_m, table.z_max_m
    rho = np.concatenate([[0.0, far], far * rng.random(60), np.minimum(far, 10.0 * low) * rng.random(60)])
    z = np.concatenate([[low, 1.01 * low, high], low * (high / low) ** rng.random(7)])
    exact = GroundQuadrature(response, low).kernels(rho, z)
    found = np.moveaxis(table.smooth(rho[:, None], z), -1, 0)
    found[3] *= response.wavenumber
    return np.abs(found - exact).max()


@pytest.mark.parametrize("name", GROUNDS)
def test_table__holds_its_tolerance_where_it_was_not_built(name):
    table = build_table(GROUNDS[name], 41.0, 0.1, 6.0)
    error = held_out_error(table, GROUNDS[name])
    assert error < table.tolerance == 1e-5
    assert table.error < table.tolerance
    assert 1e-9 < error
    assert table.nbytes < 1.6e6


def test_table__finer_where_asked():
    table = build_table(MOIST, 41.0, 0.2, 6.0, tolerance=1e-7)
    assert table.coefficients.dtype == np.float64
    assert held_out_error(table, MOIST) < 1e-7


@pytest.mark.parametrize(("far", "low", "high"), [(1e-3, 0.5, 0.5), (0.8, 0.3, 2.0), (41.0, 1.0, 1.0), (150.0, 2.0, 30.0)])
def test_table__of_any_extent(far, low, high):
    assert held_out_error(build_table(MOIST, far, low, high), MOIST) < 1e-5


def test_table__follows_echoes_from_deep_dry_sand_under_low_wires():
    deep = layered_soil(wavenumber_of(350e6), [(10.0, 3.0 - 0.005j), (math.inf, 30.0 - 5.0j)])
    assert held_out_error(build_table(deep, 15.0, 0.1, 6.0), deep) < 1e-5


def test_table__survives_being_taken_apart():
    table = build_table(MOIST, 10.0, 0.3, 2.0)
    again = SoilTable.from_arrays(table.to_arrays())
    assert [getattr(again, name) for name in ("rho_max_m", "z_min_m", "z_max_m", "tolerance", "error")] == [
        table.rho_max_m, table.z_min_m, table.z_max_m, table.tolerance, table.error,
    ]  # fmt: skip
    np.testing.assert_array_equal(
        again.kernels(np.array([0.0, 3.0]), np.array([0.3, 1.7])), table.kernels([0.0, 3.0], [0.3, 1.7])
    )


def test_table__kernels_are_those_of_the_quadrature_in_their_units():
    rho, z = np.array([0.3, 2.0, 9.0]), np.array([0.4, 1.5])
    table = build_table(MOIST, 10.0, 0.3, 2.0)
    expected = kernels_at(MOIST, rho, z)
    found = table.kernels(rho[:, None], z)
    distance = np.hypot(rho[:, None], z)
    assert (np.abs(found - expected) * distance).max() < 2e-5 / K
    assert np.all(np.abs(expected) * distance > 1e-3)


def test_table__that_misses_its_tolerance_is_made_again_and_then_refused(monkeypatch):
    good = build_table(MOIST, 41.0, 0.3, 2.0)
    # A plan that takes the error of splines for a ten-thousandth of what it is asks for a tenth of the nodes.
    monkeypatch.setattr(table_module, "_SPLINE_ERROR", 1e-4 / 384.0)
    monkeypatch.setattr(table_module, "_ATTEMPTS", 12)
    again = build_table(MOIST, 41.0, 0.3, 2.0)
    assert again.error < again.tolerance
    assert again.coefficients.shape[0] > 0.5 * good.coefficients.shape[0]
    monkeypatch.setattr(table_module, "_ATTEMPTS", 1)
    with pytest.raises(SolveError, match=r"held-out points, expected 1\.0e-05"):
        build_table(MOIST, 41.0, 0.3, 2.0)


BAD = {
    "height zero": (40.0, 0.0, 3.0, 1e-5),
    "height below ground": (40.0, -0.1, 3.0, 1e-5),
    "height nan": (40.0, math.nan, 3.0, 1e-5),
    "out of order": (40.0, 3.0, 1.0, 1e-5),
    "distance zero": (0.0, 0.2, 3.0, 1e-5),
    "distance infinite": (math.inf, 0.2, 3.0, 1e-5),
    "tolerance": (40.0, 0.2, 3.0, 1e-12),
    "tolerance nan": (40.0, 0.2, 3.0, math.nan),
}


@pytest.mark.parametrize("case", BAD)
def test_table__refuses(case):
    far, low, high, tolerance = BAD[case]
    with pytest.raises(ModelRangeError, match="expected"):
        build_table(MOIST, far, low, high, tolerance)


@pytest.mark.parametrize(("rho", "z"), [([math.nan], [1.0]), ([-1.0], [1.0]), ([1.0], [0.0]), ([1.0], [math.inf])])
def test_quadrature__refuses(rho, z):
    with pytest.raises(ModelRangeError, match="expected"):
        kernels_at(MOIST, rho, z)


# --- fill


@pytest.fixture(scope="module")
def tables():
    """Return one table in each precision."""
    return {tolerance: build_table(MOIST, 20.0, 0.2, 4.0, tolerance) for tolerance in (1e-5, 1e-7)}


def scattered(rng, count, east):
    points = rng.uniform(-1.0, 1.0, (3, count))
    points[0] += east
    points[2] = rng.uniform(0.11, 1.9, count)
    return points


@pytest.mark.parametrize("single", [False, True])
@pytest.mark.parametrize("tolerance", [1e-5, 1e-7])
@pytest.mark.parametrize("count", [1, 7, 8, 9, 16, 37, 128, 129, 300])
def test_fill__equals_its_twin(tables, tolerance, single, count):
    rng = np.random.default_rng(count)
    table = tables[tolerance]
    a, b = scattered(rng, 5, 0.0), scattered(rng, count, 8.0)
    offset = a[:, :, None] - b[:, None, :]
    rho, distance = np.hypot(offset[0], offset[1]), np.linalg.norm(offset, axis=0)
    expected = table.kernels(rho, a[2][:, None] + b[2])
    direct = np.exp(-1j * K * distance) / distance
    # Single precision: a phase of half a turn to 2e-7, products and polynomials to as much, for each of two waves.
    allowed = 1e-6 if single or tolerance > 1e-6 else 2e-9
    work = Workspace(single)
    for with_direct in (True, False):
        filled = fill_soil(table, a, b, work, direct=with_direct)
        found = [filled.horizontal, filled.vertical, filled.charge, filled.cross]
        for n, kernel in enumerate(found):
            assert kernel.shape == (2, 5, count)
            assert kernel.dtype == work.dtype
            reference = expected[n] + (direct if with_direct and n < 3 else 0.0)
            assert (np.abs(kernel[0] + 1j * kernel[1] - reference) * distance).max() < allowed
            assert (np.abs(kernel[0] - 1j * kernel[1] - reference) * distance).max() > 1e-4


def test_fill__without_the_direct_kernel_is_smooth_where_points_coincide(tables):
    rng = np.random.default_rng(5)
    points = scattered(rng, 20, 0.0)
    filled = fill_soil(tables[1e-5], points, points, Workspace(), direct=False)
    found = filled.horizontal[0] + 1j * filled.horizontal[1]
    expected = kernels_at(MOIST, [0.0], 2.0 * points[2])[0, 0]
    assert np.abs((np.diagonal(found) - expected) * 2.0 * points[2]).max() < 1e-5
    np.testing.assert_allclose(found, found.T, atol=1e-6)


def test_fill__keeps_planes_that_matrix_products_take(tables):
    rng = np.random.default_rng(6)
    a, b = scattered(rng, 4, 0.0), scattered(rng, 21, 6.0)
    filled = fill_soil(tables[1e-5], a, b, Workspace(), direct=True)
    for kernel in (filled.horizontal, filled.cross):
        assert kernel[0].flags.c_contiguous
        np.testing.assert_allclose(np.swapaxes(kernel, 1, 2) @ np.ones(4), kernel.sum(axis=1), rtol=1e-12)


@pytest.mark.parametrize(
    ("shift", "what"),
    [
        ((0, 30.0), "distance"),
        ((2, 5.0), "heights"),
        ((2, -0.4), "heights"),
        ((2, math.nan), "heights"),
        ((0, math.nan), "nan"),
    ],
)
def test_fill__refuses_points_the_table_does_not_reach(tables, shift, what):
    points = np.array([[0.0, 1.0], [0.0, 0.0], [0.3, 1.0]])
    moved = points.copy()
    moved[shift[0], 1] += shift[1]
    if shift == (2, -0.4):
        moved[2] = 0.05
        points = moved
    with pytest.raises(ModelRangeError, match=what):
        fill_soil(tables[1e-5], points, moved, Workspace(), direct=True)


def test_fill__takes_points_whose_boxes_reach_farther_than_any_pair(tables):
    # Two strings of points along a diagonal: the corners of their boxes are 28 m apart, no pair more than 20 m.
    a = np.array([[0.0, 0.0], [0.0, 10.0], [0.5, 0.5]])
    b = np.array([[19.0, 14.0], [0.0, 10.0], [0.5, 0.5]])
    assert np.hypot(19.0, 10.0) > 20.0
    with pytest.raises(ModelRangeError, match="distance"):
        fill_soil(tables[1e-5], a, b, Workspace(), direct=True)
    b[1] = [10.0, 5.0]
    a[1] = [5.0, 10.0]
    assert np.all(np.isfinite(fill_soil(tables[1e-5], a, b, Workspace(), direct=True).horizontal))
