"""Skeletons: the few quadrature points of an antenna that stand for all of them, seen from a distance.

The field of currents sampled at Q points, beyond a distance d from every wire, is determined by its values on surfaces at
that distance.  An interpolative decomposition of the kernel from the Q points to proxy points on such surfaces finds J of
them whose fields span those of all; the weights of the currents go over to them by a fixed matrix.  An antenna that is moved,
turned or mirrored takes its skeleton along.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.linalg import qr, solve_triangular

from elbowroom.base.arrays import ComplexArray, FloatArray
from elbowroom.geometry.antennas import Antenna
from elbowroom.geometry.mesh import Mesh
from elbowroom.kernels.points import free_kernel
from elbowroom.kernels.quadrature import points_per_element, sample_mesh

SHELLS = (1.0, 2.5)
"""Distances of the proxy surfaces, in multiples of the smallest distance served."""


@dataclass(frozen=True, eq=False)
class Skeleton:
    """Skeleton points of one design and the weights that its unknowns have on them, in the antenna's own frame.

    Attributes
    ----------
    distance : float
        Smallest distance from the wires at which it serves [m].
    points : float64 (J, 3)
        [m]
    currents : complex128 (3, J, N)
        Weights of the x, y, z currents [m].
    charge : complex128 (J, N)
        Weights of the charge [1].
    """

    distance: float
    points: FloatArray
    currents: ComplexArray
    charge: ComplexArray

    @property
    def n_points(self) -> int:
        """Number of points J."""
        return len(self.points)


def proxy_points(antenna: Antenna, distance: float, wavelength: float) -> FloatArray:
    """Return points (M, 3) [m] on surfaces around the wires of an antenna, none nearer to a wire than a distance [m].

    Their spacing is half the distance, or an eighth of the wavelength if that is less.
    """
    starts = np.array([w.start for w in antenna.wires])
    ends = np.array([w.end for w in antenna.wires])
    found: list[FloatArray] = []
    for shell in SHELLS:
        radius = distance * shell
        step = min(0.5 * radius, 0.125 * wavelength)
        around = max(8, int(np.ceil(2.0 * np.pi * radius / max(step, 0.6 * radius))))
        for start, end in zip(starts, ends, strict=True):
            length = float(np.linalg.norm(end - start))
            along = (end - start) / length
            first = np.cross(along, np.eye(3)[int(np.argmin(np.abs(along)))])
            first /= np.linalg.norm(first)
            second = np.cross(along, first)
            for i, s in enumerate(np.linspace(-radius, length + radius, int(np.ceil((length + 2.0 * radius) / step)) + 1)):
                beyond = max(-s, s - length, 0.0)
                ring = np.sqrt(max(radius**2 - beyond**2, 0.0))
                angle = 2.0 * np.pi * (np.arange(around if ring > 0.3 * radius else 4) + 0.5 * (i % 2)) / around
                found.append(start + s * along + ring * (np.cos(angle)[:, None] * first + np.sin(angle)[:, None] * second))
    points = np.concatenate(found)
    clear = np.full(len(points), np.inf)
    for start, end in zip(starts, ends, strict=True):
        along = np.clip((points - start) @ (end - start) / np.sum((end - start) ** 2), 0.0, 1.0)
        np.minimum(clear, np.linalg.norm(points - start - along[:, None] * (end - start), axis=1), out=clear)
    return points[clear > 0.97 * distance]


def skeleton_of(antenna: Antenna, mesh: Mesh, wavenumber: float, distance: float, tolerance: float) -> Skeleton:
    """Return the skeleton of one design for sources and observers beyond a distance.

    Parameters
    ----------
    antenna : Antenna
        The design.
    mesh : Mesh
        Its elements.
    wavenumber : float
        [rad/m].
    distance : float
        Smallest distance from the wires [m].
    tolerance : float
        Relative accuracy of the kernel in the mean over the proxy points; single points at just the smallest distance may be
        tens of times worse.

    References
    ----------
    .. [1] H. Cheng, Z. Gimbutas, P. G. Martinsson, V. Rokhlin, "On the compression of low rank matrices", SIAM J. Sci. Comput.
       26 (2005) 1389-1404.
    .. [2] P. G. Martinsson, V. Rokhlin, "A fast direct solver for boundary integral equations in two dimensions", J. Comput.
       Phys. 205 (2005) 1-23 (proxy surfaces).
    """
    sampled = sample_mesh(mesh, points_per_element(mesh, distance, wavenumber, tolerance))
    proxies = proxy_points(antenna, distance, 2.0 * np.pi / wavenumber)
    rng = np.random.default_rng(len(proxies))
    rows = sampled.n_points + 20
    if rows < len(proxies):
        # Random combinations of the proxies keep the column space and cost a fraction.
        kernel = np.zeros((rows, sampled.n_points), dtype=complex)
        for first in range(0, len(proxies), 4096):
            part = proxies[first : first + 4096]
            kernel += rng.normal(size=(rows, len(part))) @ free_kernel(part.T, sampled.points.T, wavenumber)
    else:
        kernel = free_kernel(proxies.T, sampled.points.T, wavenumber)
    _, triangle, order = qr(kernel, mode="economic", pivoting=True)
    size = np.abs(np.diagonal(triangle))
    count = max(1, int(np.count_nonzero(size > tolerance * size[0])))
    transfer = np.empty((count, sampled.n_points), dtype=complex)
    transfer[:, order[:count]] = np.eye(count)
    transfer[:, order[count:]] = solve_triangular(triangle[:count, :count], triangle[:count, count:])
    return Skeleton(
        distance,
        sampled.points[order[:count]],
        np.einsum("jq,cqn->cjn", transfer, sampled.current_weights, optimize=True),
        np.asarray(transfer @ sampled.charge_weights, dtype=complex),
    )
