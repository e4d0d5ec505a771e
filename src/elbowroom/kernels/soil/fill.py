"""Kernels between points over real ground, from a table."""

from __future__ import annotations

import numpy as np
from numba import config

from elbowroom.base.arrays import FloatArray
from elbowroom.base.errors import ModelRangeError
from elbowroom.kernels.point_kernels import PointKernels, Workspace
from elbowroom.kernels.soil.fill_numba import fill_pairs, reach
from elbowroom.kernels.soil.table import SoilTable

_LANES = 16

_BLOCK = 128
"""Points of the second set worked on at a time: what is kept for them, and their part of the table, stay in the cache."""


def fill_soil(table: SoilTable, points: FloatArray, points2: FloatArray, work: Workspace, *, direct: bool) -> PointKernels:
    """Return the kernels between two sets of points above a real ground.

    Parameters
    ----------
    table : SoilTable
        The ground's part.
    points, points2 : float64 (3, Q), (3, Q')
        Points in the station frame [m].
    work : Workspace
        Where the kernels are put; they last until it is used again.
    direct : bool
        Whether exp(-jkR)/R is part of the horizontal, vertical and charge kernels.

    Returns
    -------
    PointKernels
        Horizontal, vertical and charge kernels [1/m], cross kernel [1], each (2, Q, Q').

    Raises
    ------
    ModelRangeError
        If points lie where the table does not reach.
    """
    _check_reach(table, points, points2)
    rows, count = points.shape[1], points2.shape[1]
    # Planes whose distance is a large power of two would share the same few lines of the cache.
    plane = -(-rows * count // 16) * 16 + 80
    flat = work.array("soil", (8 * plane + 16,))
    begin = -flat.ctypes.data % 64 // flat.itemsize
    flat = flat[begin : begin + 8 * plane]
    kernels = flat.reshape(8, plane)[:, : rows * count].reshape(4, 2, rows, count)
    if config.DISABLE_JIT:  # type: ignore[attr-defined]
        _fill_plainly(table, points, points2, kernels, direct=direct)
        return PointKernels(kernels[0], kernels[1], kernels[2], kernels[3])
    turns, grid = table.scales
    padded = np.empty((3, -(-count // _LANES) * _LANES))
    np.multiply(points2, turns, out=padded[:, :count])
    padded[:, count:] = padded[:, count - 1 : count]
    nodes, stride, odd = table.aligned
    n_rho, n_z, _ = table.coefficients.shape
    sizes = np.array([n_rho - 4, n_z - 4, stride, odd, _BLOCK], dtype=np.int32)
    kind = nodes.dtype
    scratch = (
        np.empty(2 * _BLOCK, dtype=kind),
        np.empty(2 * _BLOCK, dtype=flat.dtype) if direct else None,
        np.empty(8 * _BLOCK, dtype=kind),
        np.empty(_BLOCK, dtype=np.int32),
    )
    x, y, z = turns * points
    fill_pairs(x, y, z, *padded, count, turns, grid, sizes, nodes, flat, plane, *scratch, np.empty(64, dtype=flat.dtype))
    return PointKernels(kernels[0], kernels[1], kernels[2], kernels[3])


def _fill_plainly(table: SoilTable, points: FloatArray, points2: FloatArray, kernels: FloatArray, *, direct: bool) -> None:
    """Fill (4, 2, Q, Q') without compiled code, whose vector instructions have no meaning when compilation is turned off."""
    offset = points[:, :, None] - points2[:, None, :]
    made = np.array(table.kernels(np.hypot(offset[0], offset[1]), points[2][:, None] + points2[2]))
    if direct:
        distance = np.linalg.norm(offset, axis=0)
        made[:3] += np.exp(-1j * table.wavenumber * distance) / distance
    kernels[:, 0], kernels[:, 1] = made.real, made.imag


def _check_reach(table: SoilTable, points: FloatArray, points2: FloatArray) -> None:
    low, high, diagonal = reach(points, points2)
    slack = 1e-9 * (1.0 + table.z_max_m)
    if not (low >= table.z_min_m - slack and high <= table.z_max_m + slack):
        msg = (
            f"sums of heights above the ground: expected {table.z_min_m:g} to {table.z_max_m:g} m, which the ground's table "
            f"covers, got {low:g} to {high:g} m"
        )
        raise ModelRangeError(msg)
    if diagonal <= table.rho_max_m:
        return
    # The boxes' corners may be farther apart than any pair.
    farthest = max(float(np.hypot(points[0, i] - points2[0], points[1, i] - points2[1]).max()) for i in range(points.shape[1]))
    if not farthest <= table.rho_max_m * (1.0 + 1e-9):
        msg = (
            f"horizontal distance of points: expected at most {table.rho_max_m:g} m, which the ground's table covers, "
            f"got {farthest:g} m"
        )
        raise ModelRangeError(msg)
