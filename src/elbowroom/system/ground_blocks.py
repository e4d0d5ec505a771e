"""What a ground without images adds to the block of one antenna, or of two that nearly touch.

The ground's part of the kernels is smooth between points above it, so that Gauss points along the wires serve, as many as the
distance to where an image would be asks for.  Currents are spread round the wires as they are in the direct part: the mean over
n points of a circle is that over all of it up to terms of order n in its radius over the distance.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from elbowroom.base.arrays import ComplexArray, FloatArray
from elbowroom.base.constants import IMPEDANCE_OF_VACUUM
from elbowroom.geometry.mesh import Mesh
from elbowroom.kernels.grounds import GroundKernels, Workspace
from elbowroom.kernels.quadrature import points_per_element, sample_mesh

RING_COUNTS = (3, 5, 7, 9)
"""Points round a wire: three for wires more than 10 radii above the ground, more for thicker or lower ones."""

RING_TOLERANCE = 1e-4
"""What means over rings of points may lack of the logarithmic kernel of a parallel wire; see :func:`ring_count`."""

MOST_KERNELS = 2_000_000
"""Pairs of points whose kernels are worked out at a time, to keep the memory small."""


@dataclass(frozen=True, eq=False)
class RingSamples:
    """Quadrature points round the wires of an antenna in the station frame.

    Attributes
    ----------
    points : float64 (3, Q, R)
        R of them round a wire at each quadrature point [m].
    currents : float64 (3, Q, N)
        Weights of the x, y and z currents [m].
    charge : float64 (Q, N)
        Weights of the charge [1].
    """

    points: FloatArray
    currents: FloatArray
    charge: FloatArray


def _across(tangent: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return two unit vectors (E, 3) across each of some unit vectors (E, 3), the first of them level."""
    upright = np.abs(tangent[:, 2]) > 1.0 - 1e-9
    first = np.cross(tangent, np.where(upright[:, None], [1.0, 0.0, 0.0], [0.0, 0.0, 1.0]))
    first /= np.linalg.norm(first, axis=1)[:, None]
    return first, np.cross(tangent, first)


def ring_count(radius: FloatArray, distance: FloatArray) -> int:
    r"""Return how many points round wires stand for whole circles, seen from some distances.

    The mean of the logarithm of the distance to n points of a circle of radius a differs from that to all of it by

    .. math:: \frac{1}{n} \ln \left|1 - (a / z)^n \right|

    at a complex place z, the first point's direction taken as real, an exact identity (the roots of unity).  Kernels have such a
    ring at both ends.  Straight above, where the image of the wire itself is seen and most counts, (a/z)^n is imaginary for odd
    n and a first point to the side: what is left is of order 2 n.

    Parameters
    ----------
    radius : float64 (E,)
        a [m].
    distance : float64 (E,)
        abs(z), from the axis of a wire to where its image would be [m].
    """
    ratio = float(np.max(radius / distance))
    return next((n for n in RING_COUNTS if 2.0 / n * ratio**n <= RING_TOLERANCE), RING_COUNTS[-1])


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
    n_ring = ring_count(mesh.radius, clear)
    angle = 2.0 * np.pi * np.arange(n_ring) / n_ring
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
    n, n2 = samples.charge.shape[1], samples2.charge.shape[1]
    rings, rings2 = samples.points.shape[2], samples2.points.shape[2]
    flat2 = samples2.points.reshape(3, -1)
    level2 = np.concatenate([current * samples2.currents[0], current * samples2.currents[1]], axis=1)
    upright2, charge2 = current * samples2.currents[2], charge * samples2.charge
    crossed2 = wavenumber * np.concatenate([upright2, charge2], axis=1)
    total = np.zeros((2, n, n2))
    work = Workspace()
    step = max(1, MOST_KERNELS // (rings * flat2.shape[1]))
    for first in range(0, samples.points.shape[1], step):
        rows = slice(first, first + step)
        points = np.ascontiguousarray(samples.points[:, rows].reshape(3, -1))
        kernels = ground.correction(points, flat2, wavenumber, work)
        assert kernels is not None  # of a ground that has one
        # Weights are real: real and imaginary parts of the kernels meet them apart.
        level = _ring_mean(kernels.horizontal, rings, rings2) @ level2
        upright = _ring_mean(kernels.vertical, rings, rings2) @ upright2
        charges = _ring_mean(kernels.charge, rings, rings2) @ charge2
        if kernels.cross is not None:
            crossed = _ring_mean(kernels.cross, rings, rings2) @ crossed2
            charges = charges + crossed[..., :n2]
            upright = upright - crossed[..., n2:]
        for part, weights in ((level[..., :n2], samples.currents[0]), (level[..., n2:], samples.currents[1])):
            total += (current * weights[rows]).T @ part
        total += (current * samples.currents[2][rows]).T @ upright - (charge * samples.charge[rows]).T @ charges
    # Both factors of Z are imaginary: Z = j (sum of kernels).
    return np.asarray(1j * (total[0] + 1j * total[1]))


def _ring_mean(kernel: FloatArray, rings: int, rings2: int) -> FloatArray:
    """Return the mean (2, Q, Q') of a kernel over the rings, of so many points each, of both its points."""
    last = kernel.reshape(2, -1, rings, kernel.shape[2] // rings2, rings2)
    # Sums of a few strided parts: half the time of a mean over two axes.
    inner = sum((last[..., p] for p in range(1, rings2)), last[..., 0])
    return np.asarray(sum((inner[:, :, p] for p in range(1, rings)), inner[:, :, 0]) / (rings * rings2))
