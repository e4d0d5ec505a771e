"""Directions: identities of spherical coordinates, exactness of the rules, polarisation bases."""

import math

import numpy as np
import pytest
from numpy.testing import assert_allclose
from scipy.spatial.transform import Rotation
from scipy.special import eval_legendre, gammaln, lpmv

from elbowroom.base.errors import GeometryError
from elbowroom.geometry.directions import (
    Directions,
    azimuth_deg,
    cut,
    hemisphere_grid,
    ludwig3,
    rotated,
    sphere_quadrature,
    spherical_basis,
    unit_vectors,
)

# a few operations on numbers of order one
ROUNDING = 1e-14


def random_directions(count=200, seed=5):
    rng = np.random.default_rng(seed)
    return np.arccos(rng.uniform(-1, 1, count)), rng.uniform(-np.pi, 3 * np.pi, count)


def spherical_harmonic(degree, order, theta, phi):
    """Orthonormal Y_l^m for m >= 0, from scipy's associated Legendre functions."""
    log_norm = math.log((2 * degree + 1) / (4 * np.pi)) + gammaln(degree - order + 1) - gammaln(degree + order + 1)
    return np.exp(0.5 * log_norm) * lpmv(order, degree, np.cos(theta)) * np.exp(1j * order * phi)


def test_unit_vectors__axes_of_the_station_frame():
    quarter = np.pi / 2
    found = unit_vectors([quarter, quarter, 0.0], [0.0, quarter, 0.0])
    assert_allclose(found, np.eye(3), rtol=0, atol=ROUNDING)


def test_spherical_basis__orthonormal_and_right_handed():
    theta, phi = random_directions()
    theta_hat, phi_hat = spherical_basis(theta, phi)
    r_hat = unit_vectors(theta, phi)
    triad = np.stack([r_hat, theta_hat, phi_hat], axis=1)
    gram = triad @ np.swapaxes(triad, 1, 2)
    assert_allclose(gram, np.broadcast_to(np.eye(3), gram.shape), rtol=0, atol=ROUNDING)
    assert_allclose(np.cross(theta_hat, phi_hat), r_hat, rtol=0, atol=ROUNDING)


def test_spherical_basis__follows_growing_angles():
    theta, phi = random_directions()
    theta_hat, phi_hat = spherical_basis(theta, phi)
    # central difference: error step^2/6 = 2e-9 plus rounding 1e-16/step
    step = 1e-4
    along_theta = (unit_vectors(theta + step, phi) - unit_vectors(theta - step, phi)) / (2 * step)
    along_phi = (unit_vectors(theta, phi + step) - unit_vectors(theta, phi - step)) / (2 * step)
    assert_allclose(along_theta, theta_hat, rtol=0, atol=3e-9)
    assert_allclose(along_phi, np.sin(theta)[:, None] * phi_hat, rtol=0, atol=3e-9)


def test_spherical_basis__defined_at_the_zenith_by_phi():
    theta_hat, phi_hat = spherical_basis(0.0, np.radians([0.0, 30.0]))
    assert_allclose(theta_hat[1], [math.cos(np.pi / 6), 0.5, 0.0], rtol=0, atol=ROUNDING)
    assert_allclose(phi_hat[0], [0.0, 1.0, 0.0], rtol=0, atol=ROUNDING)


@pytest.mark.parametrize(
    ("phi", "azimuth"),
    [(90.0, 0.0), (0.0, 90.0), (-90.0, 180.0), (180.0, 270.0), (-180.0, 270.0), (450.0, 0.0), (45.0, 45.0)],
)
def test_azimuth_deg__north_through_east(phi, azimuth):
    found = float(azimuth_deg(np.radians(phi)))
    assert abs((found - azimuth + 180.0) % 360.0 - 180.0) < 1e-12
    assert 0.0 <= found < 360.0


def test_azimuth_deg__stays_below_360_just_west_of_north():
    found = azimuth_deg(np.nextafter(np.pi / 2, 2.0) + np.arange(5) * 1e-16)
    assert np.all((found >= 0.0) & (found < 360.0))


class TestHemisphereGrid:
    def test_hemisphere_grid__rows_and_columns(self):
        grid = hemisphere_grid(7.5)
        assert grid.shape == (13, 48)
        theta, phi = (np.degrees(x).reshape(grid.shape) for x in (grid.theta_rad, grid.phi_rad))
        assert_allclose(theta[:, 5], np.arange(13) * 7.5, rtol=0, atol=1e-12)
        assert_allclose(phi[3], np.arange(48) * 7.5, rtol=0, atol=1e-12)

    @pytest.mark.parametrize("step", [90.0, 30.0, 5.0, 1.0])
    def test_hemisphere_grid__weights_add_up_to_half_a_sphere(self, step):
        grid = hemisphere_grid(step)
        assert_allclose(grid.weights_sr.sum(), 2 * np.pi, rtol=1e-12)
        # the plain product sin(theta) dtheta dphi is not exact: the tolerance tells them apart
        plain = np.sin(grid.theta_rad).sum() * np.radians(step) ** 2
        assert abs(plain / (2 * np.pi) - 1) > 1e-3
        assert grid.weights_sr.min() > 0

    @pytest.mark.parametrize("step", [45.0, 10.0, 1.0])
    def test_hemisphere_grid__exact_for_linear_in_zenith_angle(self, step):
        # integral of theta sin(theta) from 0 to pi/2 is 1
        grid = hemisphere_grid(step)
        assert_allclose(grid.integrate(grid.theta_rad), 2 * np.pi, rtol=1e-12)

    def test_hemisphere_grid__second_order_for_smooth_patterns(self):
        # integral of cos^2(theta) over the hemisphere is 2 pi / 3
        errors = []
        for step in (10.0, 5.0, 2.5):
            grid = hemisphere_grid(step)
            errors.append(abs(grid.integrate(np.cos(grid.theta_rad) ** 2) - 2 * np.pi / 3))
        orders = np.log2(np.array(errors[:-1]) / errors[1:])
        # next term of the error is of relative size step^2 < 0.03
        assert_allclose(orders, 2.0, rtol=0, atol=0.05)

    def test_hemisphere_grid__fourier_terms_of_phi_vanish(self):
        grid = hemisphere_grid(30.0)
        found = [abs(grid.integrate(np.exp(1j * m * grid.phi_rad))) for m in range(1, 13)]
        assert max(found[:-1]) < 1e-13
        assert found[11] > 6.0  # the twelfth is an alias of the constant

    @pytest.mark.parametrize("step", [0.0, -1.0, 7.0, 91.0, 180.0, math.nan, math.inf, "1 deg"])
    def test_hemisphere_grid__refuses_a_bad_step(self, step):
        with pytest.raises(GeometryError, match="step_deg"):
            hemisphere_grid(step)


class TestSphereQuadrature:
    def test_sphere_quadrature__harmonics_orthonormal(self):
        top = 9
        rule = sphere_quadrature(2 * top)
        modes = np.array([spherical_harmonic(l, m, rule.theta_rad, rule.phi_rad) for l in range(top + 1) for m in range(l + 1)])
        gram = (modes * rule.weights_sr) @ modes.conj().T
        assert_allclose(gram, np.eye(len(modes)), rtol=0, atol=1e-12)

    def test_sphere_quadrature__two_degrees_less_are_not_enough(self):
        rule = sphere_quadrature(16)
        mode = spherical_harmonic(9, 0, rule.theta_rad, rule.phi_rad)
        assert abs(rule.integrate(abs(mode) ** 2) - 1) > 1e-3

    @pytest.mark.parametrize("hemisphere", [False, True])
    @pytest.mark.parametrize("degree", [0, 1, 2, 7, 20, 151])
    def test_sphere_quadrature__every_harmonic_up_to_the_degree(self, degree, hemisphere):
        rule = sphere_quadrature(degree, hemisphere=hemisphere)
        assert rule.shape == (degree // 2 + 1, degree + 1)
        assert_allclose(rule.weights_sr.sum(), (2 if hemisphere else 4) * np.pi, rtol=1e-13)
        for l in sorted({0, 1, degree - 1, degree} & set(range(degree + 1))):
            # orders above 60 overflow in lpmv
            for m in sorted({0, 1, l // 2, l} & set(range(min(l, 60) + 1))):
                found = rule.integrate(spherical_harmonic(l, m, rule.theta_rad, rule.phi_rad))
                expected = 0.0
                if m == 0 and hemisphere:
                    # (2 l + 1) P_l = P'_(l+1) - P'_(l-1), integrated from 0 to 1 (P_-1 = 1, P_l(1) = 1)
                    below = eval_legendre(l - 1, 0.0) if l else 1.0
                    integral = (below - eval_legendre(l + 1, 0.0)) / (2 * l + 1) if l else 1.0
                    expected = math.sqrt(np.pi * (2 * l + 1)) * integral
                elif l == 0:
                    expected = math.sqrt(4 * np.pi)
                assert_allclose(found, expected, rtol=0, atol=1e-12)

    def test_sphere_quadrature__direction_cosines_on_the_hemisphere(self):
        # integral of x^2 z: pi times integral of (1 - u^2) u from 0 to 1 = pi/4
        rule = sphere_quadrature(3, hemisphere=True)
        x, _, z = rule.unit_vectors().T
        assert_allclose(rule.integrate(x**2 * z), np.pi / 4, rtol=1e-14)

    def test_sphere_quadrature__zenith_first_and_above_the_horizon(self):
        rows = sphere_quadrature(12, hemisphere=True).theta_rad[::13]
        assert np.all(np.diff(rows) > 0)
        assert rows[-1] < np.pi / 2
        assert sphere_quadrature(12).theta_rad[-1] > np.pi / 2

    @pytest.mark.parametrize("degree", [-1, 2.5, "4", True, None])
    def test_sphere_quadrature__refuses_a_bad_degree(self, degree):
        with pytest.raises(GeometryError, match="degree: expected a whole number"):
            sphere_quadrature(degree)

    def test_sphere_quadrature__more_zenith_angles_raise_the_degree_in_their_cosine(self):
        rule = sphere_quadrature(4, hemisphere=True, zenith_angles=20)
        assert rule.shape == (20, 5)
        z = np.cos(rule.theta_rad)
        assert_allclose(rule.integrate(z**39), 2.0 * np.pi / 40.0, rtol=1e-13)
        few = sphere_quadrature(4, hemisphere=True)
        assert abs(few.integrate(np.cos(few.theta_rad) ** 39) - 2.0 * np.pi / 40.0) > 1e-3
        with pytest.raises(GeometryError, match="zenith_angles: expected at least 3 for degree 4, got 2"):
            sphere_quadrature(4, zenith_angles=2)


class TestCut:
    def test_cut__lies_in_its_plane_from_horizon_to_horizon(self):
        directions, signed = cut(30.0, 0.5)
        assert len(directions) == 361
        assert_allclose(signed, np.arange(-180, 181) * 0.5, rtol=0, atol=1e-12)
        angle = np.radians(signed)
        along = [np.cos(np.pi / 6), np.sin(np.pi / 6), 0.0]
        expected = np.sin(angle)[:, None] * along + np.cos(angle)[:, None] * [0.0, 0.0, 1.0]
        assert_allclose(directions.unit_vectors(), expected, rtol=0, atol=ROUNDING)

    def test_cut__zenith_angle_never_negative_and_no_weights(self):
        directions, _ = cut(0.0, 15.0)
        assert directions.theta_rad.min() == 0.0
        with pytest.raises(GeometryError, match="no solid-angle weights"):
            directions.integrate(np.ones(len(directions)))

    @pytest.mark.parametrize(
        ("phi", "step", "text"), [(0.0, 0.0, "step_deg"), (0.0, 8.0, "step_deg"), (math.nan, 1.0, "phi_deg")]
    )
    def test_cut__refuses_bad_input(self, phi, step, text):
        with pytest.raises(GeometryError, match=text):
            cut(phi, step)


class TestLudwig3:
    def test_ludwig3__keeps_the_power(self):
        rng = np.random.default_rng(3)
        e = rng.normal(size=(2, 4, 50)) + 1j * rng.normal(size=(2, 4, 50))
        co, cross = ludwig3(e[0], e[1], rng.uniform(0, 7, 50), 0.3)
        assert_allclose(abs(co) ** 2 + abs(cross) ** 2, (abs(e) ** 2).sum(axis=0), rtol=1e-13)

    @pytest.mark.parametrize("nominal", [0.0, 0.4, np.pi / 2, -2.0])
    def test_ludwig3__short_dipole_is_purely_copolar_at_the_zenith(self, nominal):
        phi = np.linspace(0, 2 * np.pi, 17)
        theta_hat, phi_hat = spherical_basis(0.0, phi)
        dipole = np.array([math.cos(nominal), math.sin(nominal), 0.0])
        co, cross = ludwig3(theta_hat @ dipole, phi_hat @ dipole, phi, nominal)
        assert_allclose(co, 1.0, rtol=0, atol=ROUNDING)
        assert_allclose(cross, 0.0, rtol=0, atol=ROUNDING)

    def test_ludwig3__cross_polar_vector_is_north_for_an_east_port(self):
        theta_hat, phi_hat = spherical_basis(0.0, 1.1)
        north = np.array([0.0, 1.0, 0.0])
        co, cross = ludwig3(theta_hat @ north, phi_hat @ north, 1.1, 0.0)
        assert_allclose([co, cross], [0.0, 1.0], rtol=0, atol=ROUNDING)

    def test_ludwig3__crossed_electric_and_magnetic_dipoles_have_no_cross_polarisation(self):
        # Ludwig (1973): the third definition is that of a Huygens source, in every direction
        theta, phi = random_directions()
        r_hat = unit_vectors(theta, phi)
        east, north = np.eye(3)[:2]
        field = east - (r_hat @ east)[:, None] * r_hat + np.cross(north, r_hat)
        theta_hat, phi_hat = spherical_basis(theta, phi)
        e_theta, e_phi = (np.einsum("dx,dx->d", hat, field) for hat in (theta_hat, phi_hat))
        co, cross = ludwig3(e_theta, e_phi, phi, 0.0)
        assert_allclose(cross, 0.0, rtol=0, atol=ROUNDING)
        assert_allclose(co, 1 + np.cos(theta), rtol=0, atol=ROUNDING)
        # the electric dipole alone does have some: the check can fail
        alone = east - (r_hat @ east)[:, None] * r_hat
        _, leak = ludwig3(*(np.einsum("dx,dx->d", hat, alone) for hat in (theta_hat, phi_hat)), phi, 0.0)
        assert abs(leak).max() > 0.5


class TestRotated:
    def test_rotated__same_direction_and_same_field_in_space(self):
        matrix = Rotation.random(random_state=8).as_matrix()
        theta, phi = random_directions()
        local_theta, local_phi, to_station = rotated(theta, phi, matrix)
        assert_allclose(unit_vectors(local_theta, local_phi) @ matrix.T, unit_vectors(theta, phi), rtol=0, atol=ROUNDING)
        local = np.random.default_rng(1).normal(size=(len(theta), 2))
        station = np.einsum("dij,dj->di", to_station, local)
        local_pair = np.stack(spherical_basis(local_theta, local_phi), axis=1) @ matrix.T
        station_pair = np.stack(spherical_basis(theta, phi), axis=1)
        assert_allclose(
            np.einsum("di,dix->dx", station, station_pair),
            np.einsum("di,dix->dx", local, local_pair),
            rtol=0,
            atol=10 * ROUNDING,
        )
        assert_allclose(np.linalg.det(to_station), 1.0, rtol=0, atol=ROUNDING)

    def test_rotated__identity_changes_nothing_even_at_the_poles(self):
        theta = np.array([0.0, 0.0, 0.7, np.pi, 1e-9])
        phi = np.array([0.4, -2.0, 1.0, 0.3, 2.5])
        local_theta, local_phi, to_station = rotated(theta, phi, np.eye(3))
        assert_allclose(local_theta, theta, rtol=1e-14)
        assert_allclose(local_phi, phi, rtol=1e-14)
        assert_allclose(to_station, np.broadcast_to(np.eye(2), (5, 2, 2)), rtol=0, atol=ROUNDING)

    def test_rotated__turn_about_the_vertical_lowers_phi_by_the_turn(self):
        turn = 0.6
        matrix = Rotation.from_euler("z", turn).as_matrix()
        theta = np.array([0.0, 1e-10, 0.5, np.pi / 2, np.pi])
        local_theta, local_phi, to_station = rotated(theta, np.full(5, 1.0), matrix)
        assert_allclose(local_theta, theta, rtol=1e-14)
        assert_allclose(local_phi, 1.0 - turn, rtol=1e-14)
        assert_allclose(to_station, np.broadcast_to(np.eye(2), (5, 2, 2)), rtol=0, atol=ROUNDING)

    def test_rotated__zenith_of_a_tilted_antenna_turns_the_components(self):
        # the station's zenith, seen from a frame leaning towards the east by a quarter turn: its -x axis
        matrix = Rotation.from_euler("y", 90, degrees=True).as_matrix()
        theta, phi, to_station = rotated(0.0, np.pi / 2, matrix)
        assert_allclose([theta[0], abs(phi[0])], [np.pi / 2, np.pi], rtol=1e-14)
        # there the local theta_hat points west and phi_hat south; the station's (phi = 90 deg) north and west
        assert_allclose(to_station[0], [[0.0, -1.0], [1.0, 0.0]], rtol=0, atol=ROUNDING)

    @pytest.mark.parametrize("pole", [1.0, -1.0])
    def test_rotated__local_poles_are_finite_and_consistent(self, pole):
        matrix = Rotation.random(random_state=3).as_matrix()
        x, y, z = pole * matrix[:, 2]
        theta, phi, to_station = rotated(math.acos(z), math.atan2(y, x), matrix)
        assert_allclose(theta[0], 0.0 if pole > 0 else np.pi, rtol=0, atol=1e-7)
        pair = np.stack(spherical_basis(theta, phi), axis=1) @ matrix.T
        station_pair = np.stack(spherical_basis([math.acos(z)], [math.atan2(y, x)]), axis=1)
        assert_allclose(np.swapaxes(to_station, 1, 2) @ station_pair, pair, rtol=0, atol=1e-7)

    def test_rotated__two_turns_are_one(self):
        first, second = (Rotation.random(random_state=k).as_matrix() for k in (1, 2))
        theta, phi = random_directions(20)
        step_theta, step_phi, outer = rotated(theta, phi, first)
        end_theta, end_phi, inner = rotated(step_theta, step_phi, second)
        once_theta, once_phi, both = rotated(theta, phi, first @ second)
        assert_allclose(end_theta, once_theta, rtol=0, atol=1e-12)
        assert_allclose(np.exp(1j * end_phi), np.exp(1j * once_phi), rtol=0, atol=1e-12)
        assert_allclose(outer @ inner, both, rtol=0, atol=1e-12)

    @pytest.mark.parametrize(
        ("matrix", "text"),
        [
            (np.diag([1.0, 1.0, -1.0]), "reflection"),
            (2 * np.eye(3), "orthonormal"),
            (np.eye(2), "shape"),
            (np.full((3, 3), math.nan), "finite"),
        ],
    )
    def test_rotated__refuses_what_is_no_rotation(self, matrix, text):
        with pytest.raises(GeometryError, match=text):
            rotated(0.1, 0.2, matrix)


class TestDirections:
    def test_directions__arrays_cannot_be_changed(self):
        directions = Directions([0.1, 0.2], [0.3, 0.4])
        with pytest.raises(ValueError, match="read-only"):
            directions.theta_rad[0] = 1.0

    def test_directions__integrates_the_last_axis(self):
        rule = sphere_quadrature(2)
        values = np.stack([np.ones(len(rule)), 1j * np.cos(rule.theta_rad) ** 2])
        assert_allclose(rule.integrate(values), [4 * np.pi, 4j * np.pi / 3], rtol=1e-13)
        with pytest.raises(GeometryError, match="last axis of 6 directions"):
            rule.integrate(np.ones(5))

    @pytest.mark.parametrize(
        ("arguments", "text"),
        [
            (([0.1, 0.2], [0.1]), "phi_rad: expected an array of shape"),
            (([0.1, math.nan], [0.1, 0.2]), "theta_rad: expected finite"),
            (([-0.1], [0.0]), "from 0 to pi"),
            (([45.0], [0.0]), r"degrees\?"),
            (([0.1], [0.0], [1.0, 2.0]), "weights_sr"),
            (([0.1, 0.2], [0.0, 0.0], None, (2, 2)), "2 rows of 2 do not hold 2"),
        ],
    )
    def test_directions__refuses_bad_input(self, arguments, text):
        with pytest.raises(GeometryError, match=text):
            Directions(*arguments)
