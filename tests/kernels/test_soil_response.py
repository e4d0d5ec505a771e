"""Reflection by real ground: limits, identities between kinds of ground, and Fresnel's and Kontorovich's coefficients."""

import math

import numpy as np
import pytest

from elbowroom.base.constants import IMPEDANCE_OF_VACUUM
from elbowroom.base.errors import ElbowroomError, ModelRangeError
from elbowroom.kernels.soil.response import GroundResponse, MeshSheet, bare_soil, layered_soil, mesh_on_soil, under_mesh

K = 3.1
EPS = 12.0 - 1.4j
THETA = np.linspace(0.0, 0.5 * np.pi, 19)
ANYWHERE = np.array([1j * K, 2.9j, 0.7j, 1e-3, 0.4, 3.0 + 0.2j, 60.0])

GROUNDS = {
    "soil": bare_soil(K, EPS),
    "mesh": mesh_on_soil(K, EPS, 0.1, 1e-3, 0.3 + 0.3j),
    "layers": layered_soil(K, [(0.3, 5.0 - 0.2j), (0.5, 25.0 - 2.0j), (math.inf, 9.0 - 0.3j)]),
    "mesh on layers": under_mesh(layered_soil(K, [(0.3, 5.0 - 0.2j), (math.inf, 25.0 - 2.0j)]), 0.1, 1e-3, 0.3 + 0.3j),
}


def fresnel(theta, eps):
    """Return Fresnel's coefficients: electric field of perpendicular, magnetic field of parallel polarisation."""
    cos, root = np.cos(theta), np.sqrt(eps - np.sin(theta) ** 2)
    return (cos - root) / (cos + root), (eps * cos - root) / (eps * cos + root)


def test_bare_soil__is_fresnel():
    for found, expected in zip(GROUNDS["soil"].reflection(THETA), fresnel(THETA, EPS), strict=True):
        np.testing.assert_allclose(found, expected, rtol=1e-13)
    assert np.abs(np.array(GROUNDS["soil"].reflection(THETA)) - np.array(fresnel(THETA, EPS.conjugate()))).max() > 0.01


@pytest.mark.parametrize("name", GROUNDS)
def test_coupling_coefficient__is_the_sum_of_both_over_the_squared_wavenumber(name):
    gh, ge, w = GROUNDS[name].coefficients(ANYWHERE)
    squared = ANYWHERE**2 + K**2
    np.testing.assert_allclose(w[1:] * squared[1:], (ge + gh)[1:], rtol=1e-12)
    # At L = 0 both polarisations are one, and w stays finite: it must be the limit.
    near = 1j * K * np.array([1.0, math.sqrt(1.0 - 1e-6)])
    limit = GROUNDS[name].coefficients(near)[2]
    assert abs(gh[0] + ge[0]) < 1e-13
    assert abs(limit[0] / limit[1] - 1.0) < 1e-5


@pytest.mark.parametrize("mesh", [None, (0.1, 1e-3, 0.3 + 0.3j)])
def test_coupling_coefficient__of_many_layers_keeps_its_digits_at_large_wavenumbers(mesh):
    profile = [(0.05 + 0.03 * n, 4.0 + 1.7 * n - (0.1 + 4.0 * (n % 3)) * 1j) for n in range(10)]
    ground = layered_soil(K, [*profile, (math.inf, 22.0 - 2.0j)])
    if mesh is not None:
        ground = under_mesh(ground, *mesh)
    u0 = np.array([10.0, 100.0, 300.0, 1e3, 1e4, 1e5, 300.0 - 200.0j])
    gh, ge, w = ground.coefficients(u0)
    np.testing.assert_allclose(w * (u0 * u0 + K * K), ge + gh, rtol=1e-11)


@pytest.mark.parametrize("mesh", [None, (0.1, 1e-3)])
@pytest.mark.parametrize("strata", [[(0.1, 1.0), (math.inf, EPS)], [(0.3, 4.0), (math.inf, 1.0)]])
def test_reflection__of_layers_of_air_ends_at_minus_one(strata, mesh):
    ground = layered_soil(K, strata)
    if mesh is not None:
        ground = under_mesh(ground, *mesh)
    near, level = np.array(ground.reflection(np.array([0.5 * np.pi - 1e-9, 0.5 * np.pi]))).T
    np.testing.assert_allclose(level, -1.0, atol=1e-9)
    np.testing.assert_allclose(near, level, atol=1e-6)


@pytest.mark.parametrize("name", GROUNDS)
def test_reflection__never_gains_and_ends_at_minus_one(name):
    gh, ge = GROUNDS[name].reflection(THETA)
    assert np.all(np.abs(gh) <= 1.0 + 1e-12)
    assert np.all(np.abs(ge) <= 1.0 + 1e-12)
    assert abs(gh[-1] + 1.0) < 1e-12
    assert abs(ge[-1] + 1.0) < 1e-12


def test_soil__without_contrast_reflects_nothing():
    for found in bare_soil(K, 1.0).coefficients(ANYWHERE):
        assert np.abs(found).max() < 1e-15
    gh, ge = bare_soil(K, 1.0 + 1e-6).reflection(THETA[:10])
    assert 0.0 < np.abs(gh).max() < 1e-6
    assert 0.0 < np.abs(ge).max() < 1e-6


def test_soil__that_conducts_well_is_a_perfect_plane():
    # Off by 2 (u0 - ...)/u1: of the order of 2/sqrt(eps).
    for conductivity in (1e8, 1e12):
        gh, ge, w = bare_soil(K, 1.0 - 1j * conductivity).coefficients(ANYWHERE[:4])
        assert np.abs(gh + 1.0).max() < 3.0 / math.sqrt(conductivity)
        assert np.abs(ge - 1.0)[:3].max() < 20.0 / math.sqrt(conductivity)
        assert np.abs(w)[:3].max() * K**2 < 100.0 / math.sqrt(conductivity)


def test_soil__without_loss_transmits_waves_that_travel_down():
    lossless, hardly_lossy = bare_soil(K, 5.0).coefficients(ANYWHERE), bare_soil(K, 5.0 - 1e-9j).coefficients(ANYWHERE)
    for a, b in zip(lossless, hardly_lossy, strict=True):
        np.testing.assert_allclose(a, b, rtol=1e-7)


def test_layers__alike_are_one_soil():
    alike = layered_soil(K, [(0.2, EPS), (3.0, EPS), (math.inf, EPS)]).coefficients(ANYWHERE)
    for a, b in zip(alike, GROUNDS["soil"].coefficients(ANYWHERE), strict=True):
        np.testing.assert_allclose(a, b, rtol=1e-12)
    assert layered_soil(K, [(math.inf, EPS)]) == GROUNDS["soil"]


def test_mesh__on_layers_alike_is_a_mesh_on_one_soil():
    alike = under_mesh(layered_soil(K, [(0.2, EPS), (math.inf, EPS)]), 0.1, 1e-3, 0.3 + 0.3j).coefficients(ANYWHERE)
    for a, b, bare in zip(alike, GROUNDS["mesh"].coefficients(ANYWHERE), GROUNDS["soil"].coefficients(ANYWHERE), strict=True):
        np.testing.assert_allclose(a, b, rtol=1e-11)
        assert np.abs(a - bare).max() > 0.1


def test_layers__thick_hide_what_is_below_and_thin_vanish():
    below = 30.0 - 3.0j
    thick = layered_soil(K, [(40.0, EPS), (math.inf, below)]).coefficients(ANYWHERE)
    for a, b in zip(thick, GROUNDS["soil"].coefficients(ANYWHERE), strict=True):
        np.testing.assert_allclose(a, b, rtol=1e-9)
    thin = layered_soil(K, [(1e-9, EPS), (math.inf, below)]).coefficients(ANYWHERE)
    for a, b in zip(thin, bare_soil(K, below).coefficients(ANYWHERE), strict=True):
        np.testing.assert_allclose(a, b, rtol=1e-6)


def test_layer__at_normal_incidence_is_airys_formula():
    thickness, top, below = 0.3, 5.0 - 0.2j, 20.0 - 1.0j
    n1, n2 = np.sqrt(top), np.sqrt(below)
    r01, r12, turn = (1.0 - n1) / (1.0 + n1), (n1 - n2) / (n1 + n2), np.exp(-2j * K * n1 * thickness)
    expected = (r01 + r12 * turn) / (1.0 + r01 * r12 * turn)
    gh, ge = layered_soil(K, [(thickness, top), (math.inf, below)]).reflection(np.array(0.0))
    assert abs(gh - expected) < 1e-13
    assert abs(ge + expected) < 1e-13
    assert abs(bare_soil(K, top).reflection(np.array(0.0))[0] - expected) > 0.05


def test_mesh__fine_is_a_perfect_plane_and_wide_is_bare_soil():
    fine = GroundResponse(K, EPS, MeshSheet(0.0, 1e-9)).coefficients(ANYWHERE[:6])
    for found, expected in zip(fine, (-1.0, 1.0, 0.0), strict=True):
        assert np.abs(found - expected)[:3].max() < 1e-6
    # On the way the distance from a perfect plane falls with the pitch, faster than in proportion times its logarithm.
    distance = [
        np.abs(np.array(mesh_on_soil(K, EPS, pitch, 1e-4).reflection(THETA[:15])) - np.array([[-1.0], [1.0]])).max()
        for pitch in (0.04, 0.02, 0.01, 0.005)
    ]
    assert all(0.3 < b / a < 0.5 for a, b in zip(distance, distance[1:], strict=False))
    wide = GroundResponse(K, EPS, MeshSheet(0.0, 1e9)).coefficients(ANYWHERE)
    for a, b in zip(wide, GROUNDS["soil"].coefficients(ANYWHERE), strict=True):
        np.testing.assert_allclose(a, b, rtol=1e-6)


def test_mesh__loss_of_its_wire_stands_in_series():
    lossless, lossy = (
        mesh_on_soil(K, EPS, 0.1, 1e-3, z).coefficients(ANYWHERE) for z in (0.0, 1j * K * IMPEDANCE_OF_VACUUM / (2 * np.pi) * 0.1)
    )
    # An internal reactance of omega mu0/(2 pi) times 0.1 is what a wire thinner by exp(0.1) has, in the TE sheet at least.
    thinner = mesh_on_soil(K, EPS, 0.1, 1e-3 * math.exp(-0.1)).coefficients(ANYWHERE)
    np.testing.assert_allclose(lossy[0], thinner[0], rtol=1e-12)
    assert np.abs(lossy[0] - lossless[0]).max() > 1e-3


BAD = {
    "wavenumber zero": lambda: bare_soil(0.0, EPS),
    "wavenumber nan": lambda: bare_soil(math.nan, EPS),
    "eps below one": lambda: bare_soil(K, 0.9),
    "eps active": lambda: bare_soil(K, 5.0 + 1.0j),
    "eps nan": lambda: bare_soil(K, complex(math.nan, -1.0)),
    "eps infinite": lambda: bare_soil(K, complex(4.0, -math.inf)),
    "eps text": lambda: bare_soil(K, "wet"),
    "no layers": lambda: layered_soil(K, []),
    "last layer ends": lambda: layered_soil(K, [(0.2, EPS), (1.0, EPS)]),
    "layer without end above": lambda: layered_soil(K, [(math.inf, EPS), (math.inf, EPS)]),
    "layer of nothing": lambda: layered_soil(K, [(0.0, EPS), (math.inf, EPS)]),
    "active layer": lambda: layered_soil(K, [(0.2, 3.0 + 1.0j), (math.inf, EPS)]),
    "pitch of two radii": lambda: mesh_on_soil(K, EPS, 0.002, 1e-3),
    "pitch of six radii": lambda: mesh_on_soil(K, EPS, 0.006, 1e-3),
    "pitch negative": lambda: mesh_on_soil(K, EPS, -0.1, 1e-3),
    "radius zero": lambda: mesh_on_soil(K, EPS, 0.1, 0.0),
    "active wire": lambda: mesh_on_soil(K, EPS, 0.1, 1e-3, -0.1),
    "wire nan": lambda: mesh_on_soil(K, EPS, 0.1, 1e-3, complex(0.0, math.nan)),
}


@pytest.mark.parametrize("case", BAD)
def test_responses__refuse(case):
    with pytest.raises(ModelRangeError, match="expected") as caught:
        BAD[case]()
    assert isinstance(caught.value, ElbowroomError)
