"""A few functions for each antenna in place of its unknowns: macro basis functions, cut by a tolerance.

They are the antenna's own answers to all that can excite it in the station: its ports, the fields of its nearest neighbours as
they stand there, and plane waves from the whole sky, the horizon included.  Port quantities err by the product of two errors of
the currents; with plane waves among the answers, so do patterns.  The answers are weighed against one another by how strongly
they occur, made orthogonal in the mean square of current and charge along the wires, and cut where what is left out is smaller
than the tolerance asks for.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from elbowroom.base.arrays import FloatArray
from elbowroom.base.errors import ModelRangeError
from elbowroom.geometry.mesh import Mesh
from elbowroom.kernels.basis import overlap_matrix, slope_coefficients


@dataclass(frozen=True)
class ReductionSettings:
    """Accuracy of the reduced solver.

    Parameters
    ----------
    tolerance : float
        Error of every embedded pattern that is aimed at, relative to its own peak; 1e-5 to 1e-1.
    cut_factor : float
        Functions are dropped once what they carry is below this times the square root of the tolerance: pattern errors are
        products of two current errors.
    neighbour_pairs : int
        Nearest pairs of antennas of each design whose fields are among the answers.
    skeleton_factor : float
        Tolerance of interactions between antennas, as a part of the tolerance.
    skeleton_distances_m : tuple of float
        Distances between wires from which each set of skeletons serves [m]; nearer pairs are done in full.
    """

    tolerance: float = 1e-3
    cut_factor: float = 0.03
    neighbour_pairs: int = 24
    skeleton_factor: float = 0.05
    skeleton_distances_m: tuple[float, ...] = (0.3, 1.0)

    def __post_init__(self) -> None:
        if not 1e-6 <= self.tolerance <= 0.1:
            msg = f"tolerance {self.tolerance!r}: expected 1e-6 to 0.1"
            raise ModelRangeError(msg)


def current_weights(mesh: Mesh, wavenumber: float) -> FloatArray:
    """Return the matrix (N, N) of the mean square of current plus that of charge over k^2, along the wires [m].

    The norm in which the energy of both the magnetic and the electric near field is of one size.
    """
    currents = overlap_matrix(mesh.order)
    slopes = slope_coefficients(mesh.order)
    charges = slopes @ np.diag(2.0 / (2.0 * np.arange(mesh.order + 1) + 1.0)) @ slopes.T
    total = np.zeros((mesh.n_unknowns, mesh.n_unknowns))
    for e in range(mesh.n_elements):
        half = 0.5 * mesh.length[e]
        local = half * currents + charges / (half * wavenumber**2)
        total += mesh.expansion[e].T @ local @ mesh.expansion[e]
    return total


def sky_samples(radius: float, wavenumber: float, whole_sphere: bool) -> tuple[FloatArray, FloatArray]:
    """Return zenith angles and azimuths [rad] that resolve every plane wave an antenna of that radius [m] can tell apart."""
    degree = int(np.ceil(wavenumber * radius)) + 6
    step = np.pi / degree
    last = np.pi if whole_sphere else 0.5 * np.pi
    theta, phi = [], []
    for t in np.linspace(0.0, last, int(np.ceil(last / step)) + 1):
        count = max(1, int(np.ceil(2.0 * degree * np.sin(t))))
        theta += [t] * count
        phi += list(2.0 * np.pi * np.arange(count) / count + t)
    return np.array(theta), np.array(phi)
