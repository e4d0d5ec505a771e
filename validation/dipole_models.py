"""Small solves and published antenna theory that the dipole checks share.  Lengths are in wavelengths: 1 m at c hertz."""

from __future__ import annotations

from dataclasses import dataclass
from math import pi

import numpy as np
from numpy.polynomial.legendre import leggauss

from elbowroom.base.constants import IMPEDANCE_OF_VACUUM, SPEED_OF_LIGHT
from elbowroom.geometry.antennas import Antenna, Port
from elbowroom.geometry.grounds import FreeSpace
from elbowroom.geometry.mesh import Mesh, MeshSettings
from elbowroom.geometry.stations import Placed, Station
from elbowroom.geometry.wires import Wire
from elbowroom.kernels.quadrature import points_per_element, sample_mesh
from elbowroom.radiation.patterns import station_patterns
from elbowroom.system.discretisation import Discretisation, discretise
from elbowroom.system.plane_waves import direction_frame
from elbowroom.system.port_algebra import admittance_from_loaded
from elbowroom.system.solving import REFERENCE_OHM, solve_isolated

K = 2.0 * pi
FREQUENCY_HZ = SPEED_OF_LIGHT


def dipole(half_length, radius, *, centre=(0.0, 0.0, 0.0), direction=(0.0, 0.0, 1.0), conductivity=None, gap=None):
    """Return a centre-fed straight dipole."""
    c, t = np.asarray(centre, dtype=float), np.asarray(direction, dtype=float)
    wire = Wire(c - half_length * t, c + half_length * t, radius, conductivity)
    return Antenna("dipole", [wire], [Port("p", 0, gap=gap)])


@dataclass(frozen=True)
class Alone:
    """One antenna by itself, solved."""

    discretisation: Discretisation
    currents: np.ndarray
    """Unknowns (N, P) per volt at each port, the other ports shorted [A/V]."""
    admittance: np.ndarray

    @property
    def mesh(self) -> Mesh:
        return self.discretisation.kinds[0].mesh

    @property
    def block(self) -> np.ndarray:
        return self.discretisation.kinds[0].self_block


def solve_alone(antenna, *, mesh: str | MeshSettings = "refined", ground=None, height=0.0, frequency_hz=FREQUENCY_HZ) -> Alone:
    """Solve one antenna by the program's own steps."""
    station = Station([Placed(antenna, (0.0, 0.0, height))], ground or FreeSpace())
    d = discretise(station, frequency_hz, mesh=mesh)
    loaded = solve_isolated(d)[0]
    admittance = admittance_from_loaded(loaded.loaded_admittance, REFERENCE_OHM)
    # Currents per volt at the port: those per volt behind the resistance, times Y of the first over Y of the second.
    return Alone(d, loaded.currents @ np.linalg.solve(loaded.loaded_admittance, admittance), admittance)


def admittance(antenna, **options) -> complex:
    """Return the input admittance [S] of an antenna with one port."""
    return complex(solve_alone(antenna, **options).admittance[0, 0])


def integral_of_current(solved: Alone, port: int = 0):
    """Return the integral (3,) of the current along all wires [A m/V]."""
    mesh = solved.mesh
    sampled = sample_mesh(mesh, points_per_element(mesh, np.inf, K, 1e-8))
    return np.einsum("cqn,n->c", sampled.current_weights, solved.currents[:, port])


def sinusoid(mesh: Mesh, centre, half_length, wires, direction):
    """Return the unknowns (N,) of sin(k(h - |s|)) on some wires: nodal values, and bubbles by projection of the slope.

    The slopes of the bubbles are orthonormal Legendre polynomials, so each coefficient is one integral.
    """
    order = mesh.order
    u, w = leggauss(24)
    legendre = np.polynomial.legendre.legvander(u, order)
    local = np.zeros((mesh.n_elements, order + 1))
    for e in np.flatnonzero(np.isin(mesh.wire, wires)):
        points = mesh.start[e] + 0.5 * (u[:, None] + 1.0) * (mesh.end[e] - mesh.start[e])
        sign = float(np.sign(mesh.tangent[e] @ direction))
        s, first, last = ((p - np.asarray(centre)) @ direction for p in (points, mesh.start[e], mesh.end[e]))
        local[e, 0], local[e, 1] = (sign * np.sin(K * (half_length - abs(x))) for x in (first, last))
        slope = -sign * np.sign(s) * K * np.cos(K * (half_length - abs(s))) * sign * 0.5 * mesh.length[e]
        for n in range(2, order + 1):
            local[e, n] = np.sqrt(0.5 * (2 * n - 1)) * np.sum(w * slope * legendre[:, n - 1])
    flat = mesh.expansion.reshape(-1, mesh.n_unknowns)
    unknowns, *_ = np.linalg.lstsq(flat, local.ravel(), rcond=None)
    # A current that the unknowns cannot carry (a jump at a node) would be lost here without a sound.
    np.testing.assert_allclose(flat @ unknowns, local.ravel(), atol=1e-12)
    return unknowns


def radiated_power(discretisation: Discretisation, currents, *, upper_half_only=False, n=48):
    """Return the power [W] that peak currents (N,) radiate: (eta k^2/32 pi^2) times the integral of |l|^2 over all directions.

    Gauss points in cos(theta), evenly spaced ones in azimuth: exact for patterns of antennas of a few wavelengths.
    """
    x, w = leggauss(n)
    if upper_half_only:
        x, w = 0.5 * (x + 1.0), 0.5 * w
    phi = 2.0 * pi * np.arange(n) / n
    theta, azimuth = np.meshgrid(np.arccos(x), phi, indexing="ij")
    frame = direction_frame(theta, azimuth)
    length = station_patterns(discretisation, np.asarray(currents)[:, None], frame)[0]
    density = np.sum(np.abs(length) ** 2, axis=-1).reshape(n, n)
    return IMPEDANCE_OF_VACUUM * discretisation.wavenumber**2 / (32.0 * pi**2) * np.sum(w[:, None] * density) * 2.0 * pi / n


def hallen_admittance(half_length, radius, *, order=1):
    """Return the input admittance [S] of a thin dipole by Hallen's expansion, and its parameter Omega = 2 ln(2h/a).

    E. Hallen, Nova Acta Reg. Soc. Sci. Upsaliensis 11(4), 1938; R. W. P. King, The Theory of Linear Antennas, 1956, chapter II
    (from memory; derived anew here).  The equation

        integral of I(z') exp(-jkR)/R dz' = -(4 pi j/eta) (C cos kz + (V/2) sin k|z|)

    is solved for I by taking Omega I(z) out of its left side, iterated once, with C from I(h) = 0.  The result is a ratio of
    two first-order sums, so its error is of the second order in 1/Omega where numerator and denominator stay away from zero.
    """
    k, h = K, half_length
    omega = 2.0 * np.log(2.0 * h / radius)
    x, w = leggauss(60)
    t, w = 0.5 * h * (x + 1.0), 0.5 * h * w
    at_feed, at_end, start = [], [], []
    for shape in (lambda z: np.cos(k * z) - np.cos(k * h), lambda z: np.sin(k * z) - np.sin(k * h)):
        near, far = np.exp(-1j * k * (h - t)) / (h - t), np.exp(-1j * k * (h + t)) / (h + t)
        at_end.append(np.sum(w * shape(t) * (near + far)))
        at_feed.append(2.0 * np.sum(w * (shape(t) * np.exp(-1j * k * t) - shape(0.0)) / t))
        start.append(shape(0.0))
    step = order / omega
    constant = -0.5 * (np.sin(k * h) - step * at_end[1]) / (np.cos(k * h) - step * at_end[0])
    shapes = [start[i] - step * (at_feed[i] - at_end[i]) for i in range(2)]
    return complex(-4j * pi / (IMPEDANCE_OF_VACUUM * omega) * (constant * shapes[0] + 0.5 * shapes[1])), float(omega)


SLENDER = 10.0 ** -np.arange(4.0, 8.6, 0.5)
"""Radii from which limits of vanishing thickness are worked out."""


def limits(omega, values, first):
    """Return the leading coefficient of values = sum c_n/Omega^n, n from ``first``, and how far it is uncertain.

    Fits of three, four and five terms; the middle one is taken and the largest change is its uncertainty.
    """
    found = []
    for terms in (3, 4, 5):
        table = np.array([omega ** -float(n) for n in range(first, first + terms)]).T
        found.append(np.linalg.lstsq(table, np.array(values), rcond=None)[0][0])
    return found[1], max(abs(found[0] - found[1]), abs(found[2] - found[1]))


LIGHT = MeshSettings(order=3, end_radii=4.0, gap_radii=6.0, floor_wavelengths=0.01)
"""For many thin dipoles: elements that suffice for gains to 0.05 dB and half the time of the default."""


def directivity(solved: Alone, theta=0.0, phi=0.0, frequency=1.0, power=None) -> float:
    """Return the directivity of port 0 in a direction, by the power it takes in unless another is given."""
    k = K * frequency
    frame = direction_frame(np.array([theta]), np.array([phi]))
    length = station_patterns(solved.discretisation, solved.currents[:, :1], frame)[0]
    radiated = 0.5 * solved.admittance[0, 0].real if power is None else power
    return float(IMPEDANCE_OF_VACUUM * k**2 / (8.0 * pi) * np.sum(np.abs(length) ** 2) / radiated)


def decibels(ratio) -> float:
    """Return a ratio of powers in dB."""
    return float(10.0 * np.log10(ratio))
