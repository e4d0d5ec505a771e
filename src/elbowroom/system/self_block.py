"""Impedance matrix of one antenna by itself: near and self terms to the accuracy of the basis.

Elements on one axis interact through the exact circumferentially averaged kernel; all other pairs of the antenna
through currents spread over both circumferences.  The two agree as the angle between two wires goes to zero, and on straight
wires both conserve power with the far field of a tube, whose pattern carries J0(ka sin psi).  Where a wire bends, the rims of
the two tubes do not meet all round, so that current and charge differ there: 0.03 to 0.07 (ka)^2 of the resistance goes
unaccounted for in the transverse far field.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from elbowroom.base.arrays import ComplexArray, FloatArray
from elbowroom.base.constants import IMPEDANCE_OF_VACUUM, wavenumber_of
from elbowroom.geometry.antennas import Antenna
from elbowroom.geometry.mesh import Mesh
from elbowroom.kernels.basis import current_coefficients, overlap_matrix, slope_coefficients
from elbowroom.kernels.quadrature import gauss_table
from elbowroom.kernels.reactions_numba import angled_moments, coaxial_moments
from elbowroom.kernels.wire_metal import internal_impedance


@dataclass(frozen=True)
class NearSettings:
    """Accuracy of near reactions.

    Parameters
    ----------
    tolerance : float
        Relative accuracy of the quadrature of pairs that do not touch.
    ring_points : int
        Points of the trapezoidal rule on the smooth part of a ring's kernel.
    touching_points : int
        Gauss points along panels whose tubes touch; twice as many go round the circumference.
    """

    tolerance: float = 1e-8
    ring_points: int = 6
    touching_points: int = 6


def _coaxial(mesh: Mesh, i: int, start2: FloatArray, end2: FloatArray, tangent: FloatArray) -> FloatArray | None:
    """Return the coordinates along element i's axis of a second element on the same axis, or None."""
    slack = 1e-7 * max(mesh.length[i], float(np.linalg.norm(end2 - start2)))
    along = []
    for point in (start2, end2):
        offset = point - mesh.start[i]
        s = float(offset @ tangent)
        if np.linalg.norm(offset - s * tangent) > slack:
            return None
        along.append(s)
    return np.array(along)


def element_moments(
    mesh: Mesh, wavenumber: float, settings: NearSettings, mirror_height: float | None = None, tilt: FloatArray | None = None
) -> tuple[ComplexArray, FloatArray]:
    """Return the Legendre moments of all element pairs, and the products of their tangents.

    Parameters
    ----------
    mesh : Mesh
        Elements, in the antenna's own frame.
    wavenumber : float
        [rad/m].
    settings : NearSettings
        Accuracy.
    mirror_height : float, optional
        If given, the second element of each pair is replaced by its mirror image in the plane z = 0, the antenna's
        origin standing at this height [m].
    tilt : float64 (3, 3), optional
        Attitude of the antenna above the mirror.

    Returns
    -------
    moments : complex128 (E, E, p+1, p+1)
    cosines : float64 (E, E, 3)
        x, y and z parts of the product of the two tangents (the mirrored tangent as geometry gives it: z reversed).
    """
    nodes, weights = gauss_table()
    start, end = mesh.start, mesh.end
    if mirror_height is not None:
        if tilt is not None:
            start, end = start @ tilt.T, end @ tilt.T
        start, end = start + [0.0, 0.0, mirror_height], end + [0.0, 0.0, mirror_height]
        mesh = Mesh(
            mesh.order, start, end, mesh.radius, mesh.wire, mesh.expansion, mesh.gap_vectors, mesh.load_vectors, mesh.grounded
        )
        flip = np.array([1.0, 1.0, -1.0])
        start2, end2 = start * flip, end * flip
        # A foot on the ground touches its image exactly, whatever rounding the placement brought.
        start2[mesh.grounded[:, 0]] = start[mesh.grounded[:, 0]]
        end2[mesh.grounded[:, 1]] = end[mesh.grounded[:, 1]]
    else:
        start2, end2 = start, end
    n, p1 = mesh.n_elements, mesh.order + 1
    moments = np.zeros((n, n, p1, p1), dtype=complex)
    length2 = np.linalg.norm(end2 - start2, axis=1)
    tangent, tangent2 = mesh.tangent, (end2 - start2) / length2[:, None]
    parallel = np.abs(tangent @ tangent2.T) > 1.0 - 1e-10
    out = np.empty((p1, p1), dtype=complex)
    for i in range(n):
        for j in range(i, n):
            along = _coaxial(mesh, i, start2[j], end2[j], tangent[i]) if parallel[i, j] else None
            if along is not None:
                coaxial_moments(
                    0.0, mesh.length[i], along[0], along[1], mesh.radius[i], mesh.radius[j], wavenumber,
                    p1 - 1, p1 - 1, nodes, weights, settings.ring_points, out,
                )  # fmt: skip
            else:
                angled_moments(
                    start[i], end[i], start2[j], end2[j], mesh.radius[i], mesh.radius[j], wavenumber,
                    settings.tolerance, settings.touching_points, nodes, weights, out,
                )  # fmt: skip
            moments[i, j] = out
            moments[j, i] = out.T
    return moments, tangent[:, None, :] * tangent2[None, :, :]


def expand_moments_between(
    mesh: Mesh, mesh2: Mesh, moments: ComplexArray, products: FloatArray, charge_count: float, wavenumber: float
) -> ComplexArray:
    """Turn element moments into the impedance block between the unknowns of two meshes.

    Z = j k eta/(4 pi) sum (t . t') J[f, f'] + eta/(4 pi j k) J[f', f'], the second with derivatives along the wire.

    Parameters
    ----------
    mesh, mesh2 : Mesh
        Elements and unknowns.
    moments : complex128 (E, E', p+1, p'+1)
        Legendre moments of all element pairs.
    products : float64 (E, E')
        Products of the tangents, as they count.
    charge_count : float
        +1, or what the charge of an image counts.
    wavenumber : float
        [rad/m].

    Returns
    -------
    complex128 (N, N')
        [ohm]
    """
    factor = 1j * wavenumber * IMPEDANCE_OF_VACUUM / (4.0 * np.pi)
    charge = charge_count * IMPEDANCE_OF_VACUUM / (4.0j * np.pi * wavenumber)
    local = (factor * products)[:, :, None, None] * (
        current_coefficients(mesh.order) @ moments @ current_coefficients(mesh2.order).T
    )
    slopes = slope_coefficients(mesh.order) @ moments @ slope_coefficients(mesh2.order).T
    local += (charge * (2.0 / mesh.length)[:, None] * (2.0 / mesh2.length)[None, :])[:, :, None, None] * slopes
    rows, columns = mesh.n_elements * (mesh.order + 1), mesh2.n_elements * (mesh2.order + 1)
    flat = local.transpose(0, 2, 1, 3).reshape(rows, columns)
    return mesh.expansion.reshape(rows, -1).T @ flat @ mesh2.expansion.reshape(columns, -1)


def free_self_block(mesh: Mesh, frequency_hz: float, settings: NearSettings) -> ComplexArray:
    """Return the free-space impedance matrix (N, N) [ohm] of one antenna, without loss or loads."""
    wavenumber = wavenumber_of(frequency_hz)
    moments, cosines = element_moments(mesh, wavenumber, settings)
    return expand_moments_between(mesh, mesh, moments, cosines.sum(axis=-1), 1.0, wavenumber)


def image_self_block(
    mesh: Mesh,
    frequency_hz: float,
    settings: NearSettings,
    height: float,
    attitude: FloatArray,
    counts: tuple[float, float, float],
) -> ComplexArray:
    """Return what a mirror image below z = 0 adds to the matrix of one antenna, (N, N) [ohm].

    Parameters
    ----------
    mesh : Mesh
        Elements, in the antenna's own frame.
    frequency_hz : float
        [Hz].
    settings : NearSettings
        Accuracy.
    height : float
        Height of the antenna's origin above the ground [m].
    attitude : float64 (3, 3)
        From the antenna's frame to the station's.
    counts : tuple of 3 floats
        What the image's horizontal currents, vertical currents and charge count: (-1, 1, -1) on a perfect conductor.
    """
    wavenumber = wavenumber_of(frequency_hz)
    moments, cosines = element_moments(mesh, wavenumber, settings, height, attitude)
    # cosines hold t . (mirrored t'), whose z is reversed: the current that counts as unreversed has the opposite sign.
    products = counts[0] * (cosines[..., 0] + cosines[..., 1]) - counts[1] * cosines[..., 2]
    return expand_moments_between(mesh, mesh, moments, products, counts[2], wavenumber)


def loss_and_loads(antenna: Antenna, mesh: Mesh, frequency_hz: float) -> ComplexArray:
    """Return the distributed wire loss and the lumped loads of one antenna as a matrix (N, N) [ohm]."""
    return wire_loss(antenna, mesh, frequency_hz) + lumped_loads(antenna, mesh, frequency_hz)


def wire_loss(antenna: Antenna, mesh: Mesh, frequency_hz: float) -> ComplexArray:
    """Return what the metal of one antenna's wires adds to its matrix, (N, N) [ohm]."""
    matrix = np.zeros((mesh.n_unknowns, mesh.n_unknowns), dtype=complex)
    overlap = overlap_matrix(mesh.order)
    for e in range(mesh.n_elements):
        wire = antenna.wires[mesh.wire[e]]
        if wire.conductivity is None:
            continue
        per_metre = internal_impedance(wire.radius, wire.conductivity, wire.relative_permeability, frequency_hz)
        matrix += per_metre * 0.5 * mesh.length[e] * (mesh.expansion[e].T @ overlap @ mesh.expansion[e])
    return matrix


def lumped_loads(antenna: Antenna, mesh: Mesh, frequency_hz: float) -> ComplexArray:
    """Return what the lumped loads of one antenna add to its matrix, (N, N) [ohm]."""
    matrix = np.zeros((mesh.n_unknowns, mesh.n_unknowns), dtype=complex)
    for load, vector in zip(antenna.loads, mesh.load_vectors, strict=True):
        matrix += load.impedance(2.0 * np.pi * frequency_hz) * np.outer(vector, vector)
    return matrix
