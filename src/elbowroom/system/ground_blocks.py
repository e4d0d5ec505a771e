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
    # Long elements close to the ground are cut into panels twice as long as the way to the image.
    panels = np.ceil(0.5 * placed.length / clear).astype(int)
    counts = points_per_element(placed, clear * panels, wavenumber, tolerance)
    sampled = sample_mesh(placed, counts, panels)
    element = np.repeat(np.arange(mesh.n_elements), counts * panels)
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
    n, n2, count2 = samples.charge.shape[1], samples2.charge.shape[1], samples2.points.shape[1]
    flat2 = samples2.points.reshape(3, -1)
    level2 = np.concatenate([current * samples2.currents[0], current * samples2.currents[1]], axis=1)
    upright2, charge2 = current * samples2.currents[2], charge * samples2.charge
    crossed2 = wavenumber * np.concatenate([upright2, charge2], axis=1)
    total = np.zeros((2, n, n2))
    work = Workspace()
    step = max(1, MOST_KERNELS // (RING_POINTS * flat2.shape[1]))
    for first in range(0, samples.points.shape[1], step):
        rows = slice(first, first + step)
        points = np.ascontiguousarray(samples.points[:, rows].reshape(3, -1))
        kernels = ground.correction(points, flat2, wavenumber, work)
        assert kernels is not None  # of a ground that has one
        # Weights are real: real and imaginary parts of the kernels meet them apart.
        level = _ring_mean(kernels.horizontal, count2) @ level2
        upright = _ring_mean(kernels.vertical, count2) @ upright2
        charges = _ring_mean(kernels.charge, count2) @ charge2
        if kernels.cross is not None:
            crossed = _ring_mean(kernels.cross, count2) @ crossed2
            charges = charges + crossed[..., :n2]
            upright = upright - crossed[..., n2:]
        for part, weights in ((level[..., :n2], samples.currents[0]), (level[..., n2:], samples.currents[1])):
            total += (current * weights[rows]).T @ part
        total += (current * samples.currents[2][rows]).T @ upright - (charge * samples.charge[rows]).T @ charges
    # Both factors of Z are imaginary: Z = j (sum of kernels).
    return np.asarray(1j * (total[0] + 1j * total[1]))


def _ring_mean(kernel: FloatArray, count2: int) -> FloatArray:
    """Return the mean (2, Q, Q') of a kernel over the rings of both its points."""
    last = kernel.reshape(2, -1, RING_POINTS, count2, RING_POINTS)
    # Sums of a few strided parts: half the time of a mean over two axes.
    inner = last[..., 0] + last[..., 1] + last[..., 2]
    return np.asarray((inner[:, :, 0] + inner[:, :, 1] + inner[:, :, 2]) / RING_POINTS**2)
