"""Layouts made by rule: spacing honoured, same for a seed, clear refusal of the impossible."""

import math

import numpy as np
import pytest
from numpy.testing import assert_allclose, assert_array_equal
from scipy.spatial.distance import pdist
from scipy.stats import kstest

from elbowroom.base.errors import GeometryError
from elbowroom.geometry.arrangements import grid, random_disc, rings, spiral
from elbowroom.geometry.layouts import closest_spacing, diameter


def horizontal_radii(layout):
    return np.hypot(layout.positions[:, 0], layout.positions[:, 1])


class TestRandomDisc:
    @pytest.mark.parametrize(
        ("count", "radius", "spacing"),
        [
            (1, 5.0, 3.0),
            (240, 19.0, 1.6),
            (256, 17.5, 1.4),
            (40, 10.0, 2.5),  # packing density 0.49
            (256, 17.5, 2.0),  # packing density 0.75
        ],
    )
    def test_random_disc__honours_spacing_and_radius_exactly(self, count, radius, spacing):
        layout = random_disc(count, radius, spacing, seed=11)
        assert len(layout) == count
        assert np.all(layout.positions[:, 2] == 0.0)
        assert closest_spacing(layout) >= spacing
        assert pdist(layout.positions).min(initial=math.inf) >= spacing
        assert horizontal_radii(layout).max() <= radius

    def test_random_disc__same_seed_same_layout(self):
        first = random_disc(60, 10.0, 1.5, seed=3)
        assert random_disc(60, 10.0, 1.5, seed=3) == first
        assert random_disc(60, 10.0, 1.5, seed=4) != first

    def test_random_disc__relaxed_layout_is_the_same_again(self):
        assert random_disc(50, 10.0, 2.3, seed=3) == random_disc(50, 10.0, 2.3, seed=3)

    def test_random_disc__fills_the_disc_evenly(self):
        # with a spacing far below the mean one, the squared radius is uniform and so is the angle
        layout = random_disc(2000, 100.0, 0.01, seed=1)
        assert kstest((horizontal_radii(layout) / 100.0) ** 2, "uniform").pvalue > 0.01
        angle = np.arctan2(layout.positions[:, 1], layout.positions[:, 0])
        assert kstest(angle / (2 * np.pi) + 0.5, "uniform").pvalue > 0.01
        # the same test notices places uniform in radius
        assert kstest(horizontal_radii(layout) / 100.0, "uniform").pvalue < 1e-6

    def test_random_disc__numbered_from_the_middle_outwards(self):
        layout = random_disc(30, 10.0, 1.0, seed=2)
        assert layout.names[:2] == ("A001", "A002")
        assert np.all(np.diff(horizontal_radii(layout)) >= 0)

    def test_random_disc__random_turns_leave_places_alone(self):
        still = random_disc(200, 19.0, 1.6, seed=5, antenna="crossed")
        turned = random_disc(200, 19.0, 1.6, seed=5, turn="random")
        assert_array_equal(turned.positions, still.positions)
        assert still.antenna == ("crossed",) * 200
        assert kstest(turned.rotation_deg / 360.0, "uniform").pvalue > 0.01
        assert random_disc(200, 19.0, 1.6, seed=5, turn="random") == turned

    def test_random_disc__says_what_is_impossible(self):
        with pytest.raises(GeometryError, match=r"impossible; at most 234 .*packing density asked for 0\.97"):
            random_disc(256, 17.5, 2.3, seed=1)

    def test_random_disc__bound_admits_the_hexagon_of_seven(self):
        # seven points one radius apart do exist, so they must not be called impossible
        with pytest.raises(GeometryError, match=r"not found in 4 attempts; .* density asked for is 0.78"):
            random_disc(7, 10.0, 10.0, seed=1)
        assert len(random_disc(7, 10.0, 9.8, seed=1)) == 7
        with pytest.raises(GeometryError, match="impossible; at most 7"):
            random_disc(8, 10.0, 10.0, seed=1)

    @pytest.mark.parametrize(
        ("arguments", "text"),
        [
            ((0, 10.0, 1.0, 1), "count: expected a whole number, 1 or more"),
            ((2.5, 10.0, 1.0, 1), "count"),
            ((5, 0.0, 1.0, 1), "radius_m: expected a length above 0 m"),
            ((5, math.nan, 1.0, 1), "radius_m"),
            ((5, 10.0, 0.0, 1), "minimum_spacing_m: expected a length of at least 0.001 m"),
            ((5, 10.0, "1 m", 1), "minimum_spacing_m"),
            ((5, 10.0, 1.0, -1), "seed: expected a whole number, 0 or more"),
            ((5, 10.0, 1.0, None), "seed"),
        ],
    )
    def test_random_disc__refuses_bad_input(self, arguments, text):
        with pytest.raises(GeometryError, match=text):
            random_disc(*arguments)


class TestRings:
    def test_rings__given_counts(self):
        layout = rings([1, 6, 12], 2.0)
        assert_allclose(horizontal_radii(layout), np.repeat([0.0, 2.0, 4.0], [1, 6, 12]), rtol=1e-14)
        assert_allclose(layout.positions[7], [4.0, 0.0, 0.0], rtol=0, atol=1e-14)  # first of a ring is east
        assert_allclose(layout.positions[8, :2], [4 * math.cos(np.pi / 6), 2.0], rtol=1e-14)

    def test_rings__without_a_centre(self):
        assert_allclose(horizontal_radii(rings([0, 5], 3.0)), 3.0, rtol=1e-14)

    def test_rings__number_of_rings_keeps_the_spacing(self):
        layout = rings(5, 1.5)
        radii = np.rint(horizontal_radii(layout) / 1.5).astype(int)
        # floor(pi / asin(1 / 2 k)): the hexagon, then 12.43, 18.76, 25.07, 31.36
        assert_array_equal(np.bincount(radii), [1, 6, 12, 18, 25, 31])
        assert closest_spacing(layout) >= 1.5 * (1 - 1e-14)

    @pytest.mark.parametrize(
        ("arguments", "text"),
        [
            ((0, 1.0), "counts"),
            (([], 1.0), "counts"),
            (([0, 0], 1.0), "counts"),
            (([2, 6], 1.0), "0 or 1 for the centre"),
            (([1, -6], 1.0), r"counts\[1\]"),
            (([1, 6], -1.0), "spacing_m"),
        ],
    )
    def test_rings__refuses_bad_input(self, arguments, text):
        with pytest.raises(GeometryError, match=text):
            rings(*arguments)


class TestSpiral:
    def test_spiral__covers_the_disc_evenly(self):
        layout = spiral(256, 17.5)
        radii = horizontal_radii(layout)
        assert_allclose(radii[-1], 17.5, rtol=1e-14)
        # equal areas: as many antennas within half the area as outside it, to one
        assert abs(np.count_nonzero(radii < 17.5 / math.sqrt(2)) - 128) <= 1
        # the densest packing has one antenna per sqrt(3)/2 spacing^2; an even cover is not far from it
        densest = math.sqrt(2 * np.pi / math.sqrt(3) / 256) * 17.5
        assert 0.8 * densest < closest_spacing(layout) < densest

    def test_spiral__golden_angle(self):
        x, y = spiral(5, 1.0).positions[:, :2].T
        steps = np.degrees(np.diff(np.arctan2(y, x))) % 360.0
        assert_allclose(steps, 180.0 * (3 - math.sqrt(5)), rtol=1e-12)  # 137.5 deg

    def test_spiral__arms_are_turned_copies(self):
        layout = spiral(24, 20.0, arms=3, inner_radius_m=2.0, winding_deg=120.0)
        points = (layout.positions[:, 0] + 1j * layout.positions[:, 1]).reshape(8, 3)
        turn = np.exp(2j * np.pi / 3)
        assert_allclose(points[:, 1:], points[:, :-1] * turn, rtol=1e-13)
        # logarithmic: a constant complex ratio from one antenna of an arm to the next
        ratio = 10.0 ** (1 / 7) * np.exp(1j * np.radians(120.0) / 7)
        assert_allclose(points[1:, 0] / points[:-1, 0], ratio, rtol=1e-13)
        assert_allclose(abs(points[[0, -1], 0]), [2.0, 20.0], rtol=1e-13)

    def test_spiral__one_antenna_an_arm_stands_at_the_rim(self):
        assert_allclose(horizontal_radii(spiral(3, 5.0, arms=3)), 5.0, rtol=1e-14)

    @pytest.mark.parametrize(
        ("arguments", "options", "text"),
        [
            ((0, 5.0), {}, "count"),
            ((5, -5.0), {}, "radius_m"),
            ((10, 5.0, 3), {}, "10 antennas on 3 arms"),
            ((10, 5.0, 0), {}, "arms"),
            ((10, 5.0), {"inner_radius_m": 1.0}, "only for a spiral with arms"),
            ((10, 5.0, 2), {"inner_radius_m": 5.0}, "inner_radius_m below radius_m"),
            ((10, 5.0, 2), {"winding_deg": math.nan}, "finite winding_deg"),
        ],
    )
    def test_spiral__refuses_bad_input(self, arguments, options, text):
        with pytest.raises(GeometryError, match=text):
            spiral(*arguments, **options)


class TestGrid:
    def test_grid__centred_and_numbered_from_the_south_west(self):
        layout = grid(3, 2, (2.0, 3.0))
        assert_allclose(layout.positions[0], [-2.0, -1.5, 0.0], rtol=0, atol=0)
        assert_allclose(layout.positions[1], [0.0, -1.5, 0.0], rtol=0, atol=0)
        assert_allclose(layout.positions[-1], [2.0, 1.5, 0.0], rtol=0, atol=0)
        assert layout.names == ("A001", "A002", "A003", "A004", "A005", "A006")

    def test_grid__figures(self):
        layout = grid(16, 16, 2.0)
        assert_allclose(closest_spacing(layout), 2.0, rtol=1e-14)
        assert_allclose(diameter(layout), 30.0 * math.sqrt(2), rtol=1e-14)

    def test_grid__names_widen_past_999(self):
        names = grid(40, 26, 1.0).names
        assert (names[0], names[-1]) == ("A0001", "A1040")

    def test_grid__turns(self):
        assert_array_equal(grid(2, 1, 1.0, turn=-30.0).rotation_deg, [-30.0, -30.0])
        turned = grid(30, 30, 1.0, turn="random", seed=2).rotation_deg
        assert kstest(turned / 360.0, "uniform").pvalue > 0.01
        assert_array_equal(turned, grid(30, 30, 1.0, turn="random", seed=2).rotation_deg)

    @pytest.mark.parametrize(
        ("arguments", "options", "text"),
        [
            ((0, 2, 1.0), {}, "columns"),
            ((2, True, 1.0), {}, "rows"),
            ((2, 2, 0.0), {}, "spacing_m"),
            ((2, 2, (1.0, 2.0, 3.0)), {}, "one spacing or two"),
            ((2, 2, 1.0), {"turn": "random"}, "random rotations need a seed"),
            ((2, 2, 1.0), {"turn": "rnadom"}, "degrees or 'random'"),
            ((2, 2, 1.0), {"turn": math.nan}, "rotation_deg"),
            ((2, 2, 1e5), {}, "millimetres"),
        ],
    )
    def test_grid__refuses_bad_input(self, arguments, options, text):
        with pytest.raises(GeometryError, match=text):
            grid(*arguments, **options)
