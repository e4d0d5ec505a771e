"""What a ground without images adds to the block of one antenna, or of two that nearly touch.

The ground's part of the kernels is smooth between points above it, so that Gauss points along the wires serve, as many as the
distance to where an image would be asks for.  Currents are spread round the wires as they are in the direct part: the mean over
three points of a circle is that over all of it up to terms of third order in its radius over the distance.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from elbowroom.base.arrays import ComplexArray, FloatArray
from elbowroom.base.constants import IMPEDANCE_OF_VACUUM
from elbowroom.geometry.mesh import Mesh
from elbowroom.kernels.grounds import GroundKernels, Workspace
from elbowroom.kernels.quadrature import points_per_element, sample_mesh

RING_POINTS = 3

MOST_KERNELS = 2_000_000
"""Pairs of points whose kernels are worked out at a time, to keep the memory small."""


@dataclass(frozen=True, eq=False)
class RingSamples:
    """Quadrature points round the wires of an antenna in the station frame.

    Attributes
    ----------
    points : float64 (3, Q, RING_POINTS)
        [m]
    currents : float64 (3, Q, N)
        Weights of the x, y and z currents [m].
    charge : float64 (Q, N)
        Weights of the charge [1].
    """

    points: FloatArray
    currents: FloatArray
    charge: FloatArray


def _across(tangent: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return two unit vectors (E, 3) across each of some unit vectors (E, 3)."""
    first = np.cross(tangent, np.eye(3)[np.argmin(np.abs(tangent), axis=1)])
    first /= np.linalg.norm(first, axis=1)[:, None]
    return first, np.cross(tangent, first)


def ring_samples(
    mesh: Mesh, start: FloatArray, end: FloatArray, lowest: float, wavenumber: float, tolerance: float
) -> RingSamples:
    """Return the points by which an antenna meets what the ground sends back.

    Parameters
    ----------
    mesh : Mesh
        Elements and unknowns.
    start, end : float64 (E, 3)
        Ends of the elements in the station frame [m].
    lowest : float
        Height of the lowest wire of either antenna [m].
    wavenumber : float
        [rad/m].
    tolerance : float
        Relative accuracy.
    """
    placed = replace(mesh, start=start, end=end)
    clear = np.minimum(start[:, 2], end[:, 2]) + lowest
    counts = points_per_element(placed, clear, wavenumber, tolerance)
    sampled = sample_mesh(placed, counts)
    element = np.repeat(np.arange(mesh.n_elements), counts)
    first, second = _across(placed.tangent)
    angle = 2.0 * np.pi * np.arange(RING_POINTS) / RING_POINTS
    ring = mesh.radius[:, None, None] * (
        np.cos(angle)[None, :, None] * first[:, None] + np.sin(angle)[None, :, None] * second[:, None]
    )
    points = sampled.points[:, None] + ring[element]
    return RingSamples(np.ascontiguousarray(np.moveaxis(points, 2, 0)), sampled.current_weights, sampled.charge_weights)


def ground_block(ground: GroundKernels, samples: RingSamples, samples2: RingSamples, wavenumber: float) -> ComplexArray:
    """Return what a ground that has a correction adds to the impedance block (N, N') [ohm] of two antennas.

    Parameters
    ----------
    ground : GroundKernels
        The ground.
    samples, samples2 : RingSamples
        Points of both, which may be one antenna.
    wavenumber : float
        [rad/m].
    """
    current = np.sqrt(wavenumber * IMPEDANCE_OF_VACUUM / (4.0 * np.pi))
    charge = np.sqrt(IMPEDANCE_OF_VACUUM / (4.0 * np.pi * wavenumber))
    x, y, z = current * samples.currents
    x2, y2, z2 = current * samples2.currents
    q, q2 = charge * samples.charge, charge * samples2.charge
    count2 = samples2.points.shape[1]
    flat2 = samples2.points.reshape(3, -1)
    total: ComplexArray = np.zeros((x.shape[1], x2.shape[1]), dtype=complex)
    work = Workspace()
    step = max(1, MOST_KERNELS // (RING_POINTS * flat2.shape[1]))

    def mean(kernel: FloatArray) -> ComplexArray:
        rings = kernel.reshape(2, -1, RING_POINTS, count2, RING_POINTS).mean(axis=(2, 4))
        return np.asarray(rings[0] + 1j * rings[1])

    for first in range(0, samples.points.shape[1], step):
        rows = slice(first, first + step)
        points = np.ascontiguousarray(samples.points[:, rows].reshape(3, -1))
        kernels = ground.correction(points, flat2, wavenumber, work)
        assert kernels is not None  # of a ground that has one
        level = mean(kernels.horizontal)
        total += x[rows].T @ (level @ x2) + y[rows].T @ (level @ y2)
        total += z[rows].T @ (mean(kernels.vertical) @ z2) - q[rows].T @ (mean(kernels.charge) @ q2)
        if kernels.cross is not None:
            cross = wavenumber * mean(kernels.cross)
            total -= z[rows].T @ (cross @ q2) + q[rows].T @ (cross @ z2)
    # Both factors of Z are imaginary: Z = j (sum of kernels).
    return np.asarray(1j * total)
