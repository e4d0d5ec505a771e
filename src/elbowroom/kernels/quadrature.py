"""Gauss-Legendre rules: one padded table for compiled loops, and rules sampled along a mesh."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache

import numpy as np

from elbowroom.base.arrays import FloatArray
from elbowroom.geometry.mesh import Mesh
from elbowroom.kernels.basis import local_values

LARGEST_RULE = 24


@cache
def gauss_table() -> tuple[FloatArray, FloatArray]:
    """Return nodes and weights (25, 24): row n holds the n-point rule on [-1, 1], padded with zeros."""
    nodes = np.zeros((LARGEST_RULE + 1, LARGEST_RULE))
    weights = np.zeros_like(nodes)
    for n in range(1, LARGEST_RULE + 1):
        nodes[n, :n], weights[n, :n] = np.polynomial.legendre.leggauss(n)
    return nodes, weights


@dataclass(frozen=True)
class SampledCurrents:
    """Unknowns of one antenna sampled at quadrature points: the form in which distant currents interact.

    Attributes
    ----------
    points : float64 (Q, 3)
        Quadrature points on the axes, in the antenna's own frame [m].
    current_weights : float64 (3, Q, N)
        Weight times current times tangent, for the x, y and z components [m].
    charge_weights : float64 (Q, N)
        Weight times d/ds of the current [1].
    wire : int (Q,)
        Wire of each point.
    """

    points: FloatArray
    current_weights: FloatArray
    charge_weights: FloatArray
    wire: np.ndarray

    @property
    def n_points(self) -> int:
        """Number of points Q."""
        return self.points.shape[0]


def points_per_element(mesh: Mesh, distance: float | FloatArray, wavenumber: float, tolerance: float) -> np.ndarray:
    """Return how many Gauss points each element needs towards sources at a distance.

    The kernel's nearest singularity beside the middle of an element of length h is 2 distance/h half lengths away,
    which bounds the error of an n-point rule by rho^(p - 2n), rho = x + sqrt(x^2 + 1); its phase along the element is
    resolved when 2n exceeds k h / 2 plus the digits asked for, which the same count is raised to meet.

    Parameters
    ----------
    mesh : Mesh
        The elements.
    distance : float, or float64 (E,)
        Smallest distance of the other currents, for all elements or for each [m].
    wavenumber : float
        [rad/m].
    tolerance : float
        Relative accuracy.

    Returns
    -------
    int (E,)
    """
    ratio = 2.0 * distance / mesh.length
    rho = ratio + np.sqrt(ratio**2 + 1.0)
    n_static = (-np.log(tolerance) / np.log(rho) + mesh.order) / 2.0
    # Taylor remainder of exp(-jkx) on half an element: (kh/2)^m / m! (2^m)^-1 below tolerance, m = 2n - p.
    half_phase = 0.25 * wavenumber * mesh.length
    m = np.ones(mesh.n_elements)
    term = half_phase.copy()
    for step in range(2, 2 * LARGEST_RULE):
        open_ = term > tolerance
        if not np.any(open_):
            break
        term = np.where(open_, term * half_phase / step, term)
        m = np.where(open_, step, m)
    n_phase = (m + mesh.order) / 2.0
    count = np.ceil(np.maximum(n_static, n_phase)).astype(int)
    return np.clip(count, mesh.order // 2 + 1, LARGEST_RULE)


def sample_mesh(mesh: Mesh, counts: np.ndarray, panels: np.ndarray | None = None) -> SampledCurrents:
    """Sample the unknowns of a mesh with the given number of Gauss points on each element.

    Parameters
    ----------
    mesh : Mesh
        Elements and unknowns.
    counts : int (E,)
        Points on each element, or on each of its panels.
    panels : int (E,), optional
        Equal panels that each element is cut into; one by default.

    Returns
    -------
    SampledCurrents
    """
    nodes, weights = gauss_table()
    points, current, charge, wire = [], [], [], []
    length, tangent = mesh.length, mesh.tangent
    for e in range(mesh.n_elements):
        n = int(counts[e])
        u, w = nodes[n, :n], weights[n, :n]
        if panels is not None and panels[e] > 1:
            cut = int(panels[e])
            u = ((u + 1.0 + 2.0 * np.arange(cut)[:, None]) / cut - 1.0).ravel()
            w = np.tile(w / cut, cut)
        values, slopes = local_values(mesh.order, u)
        points.append(mesh.start[e] + 0.5 * (u[:, None] + 1.0) * (mesh.end[e] - mesh.start[e]))
        along = (0.5 * length[e] * w[:, None] * values) @ mesh.expansion[e]
        current.append(tangent[e][:, None, None] * along)
        # ds = (h/2) du cancels the h/2 of the derivative.
        charge.append((w[:, None] * slopes) @ mesh.expansion[e])
        wire.append(np.full(u.size, mesh.wire[e]))
    return SampledCurrents(
        points=np.concatenate(points),
        current_weights=np.concatenate(current, axis=1),
        charge_weights=np.concatenate(charge),
        wire=np.concatenate(wire),
    )
