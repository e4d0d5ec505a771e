"""What each ground does to the fields: kernels between points, self terms, reflection of far fields.

Assembly and patterns ask the object that :func:`ground_kernels` returns and never look at which ground it is.
Interactions carry the horizontal current, the vertical current and the charge in separate kernels, because a real
ground treats them differently.  A new ground is a class here beside a description in ``geometry.grounds``.
"""

from __future__ import annotations

from collections.abc import Callable
from typing import Protocol

import numpy as np

from elbowroom.base.arrays import ComplexArray, FloatArray
from elbowroom.geometry.grounds import FreeSpace, Ground, MeshOnSoil, PerfectGround
from elbowroom.geometry.soils import LayeredSoil, MoistSoil, Soil, TabulatedSoil
from elbowroom.kernels.lossy_grounds import LossyGroundKernels
from elbowroom.kernels.point_kernels import Extent, PointKernels, Workspace, distinct_kernels
from elbowroom.kernels.points_numba import fill_free, fill_image

__all__ = ["Extent", "GroundKernels", "PointKernels", "Workspace", "distinct_kernels", "ground_kernels"]


class GroundKernels(Protocol):
    """What a ground must be able to say."""

    conducting_surface: bool
    """Whether wires may end on z = 0, their current flowing on into an image."""
    has_correction: bool
    """Whether the ground adds a smooth part to the direct kernel, by :meth:`correction`, in place of images."""

    def fill(self, points: FloatArray, points2: FloatArray, wavenumber: float, work: Workspace) -> PointKernels:
        """Return the kernels between points (3, Q) and (3, Q') in the station frame, direct part included."""
        ...

    def reflection(self, theta_rad: FloatArray, wavenumber: float) -> tuple[ComplexArray, ComplexArray] | None:
        """Return the reflection coefficients (Gh, Ge) at zenith angles, or None where nothing is reflected.

        Gh is that of the horizontal electric field (-1 on a perfect conductor), Ge that of the vertical
        polarisation in the magnetic-field sense (+1).
        """
        ...

    def at(self, frequency_hz: float) -> GroundKernels:
        """Return the fields of the same ground at another frequency [Hz]."""
        ...

    def serving(self, extent: Extent) -> GroundKernels:
        """Return the fields of the same ground for points within an extent: the same object if it serves already."""
        ...

    def tables(self) -> dict[str, np.ndarray] | None:
        """Return what was worked out beforehand for this ground, for a store to keep, or None where there is nothing such."""
        ...

    def use_tables(self, arrays: dict[str, np.ndarray]) -> None:
        """Take what :meth:`tables` returned for the same ground, frequency and extent instead of working it out."""
        ...

    def self_images(self) -> tuple[float, float, float] | None:
        """Return what the mirror image of an antenna counts in its own block, or None.

        The three numbers multiply the horizontal currents, the vertical currents and the charge of the mirror image.
        """
        ...

    def correction(self, points: FloatArray, points2: FloatArray, wavenumber: float, work: Workspace) -> PointKernels | None:
        """Return what the ground adds to the direct kernel between points, or None where there is nothing or images say it all.

        It is smooth for points above the ground, so that an antenna's own block and pairs that nearly touch take it by plain
        quadrature.
        """
        ...


class FreeSpaceKernels:
    """No ground."""

    conducting_surface = False
    has_correction = False

    def fill(self, points: FloatArray, points2: FloatArray, wavenumber: float, work: Workspace) -> PointKernels:
        """Return exp(-jkR)/R between all points."""
        kernel = work.array("free", (2, points.shape[1], points2.shape[1]))
        fill_free(*points, *points2, wavenumber, kernel[0], kernel[1])
        return PointKernels(kernel, kernel, kernel)

    def reflection(self, theta_rad: FloatArray, wavenumber: float) -> None:
        """Return None: nothing is reflected."""
        return

    def at(self, frequency_hz: float) -> FreeSpaceKernels:
        """Return itself."""
        return self

    def serving(self, extent: Extent) -> FreeSpaceKernels:
        """Return itself."""
        return self

    def tables(self) -> None:
        """Return None: there is nothing to keep."""
        return

    def use_tables(self, arrays: dict[str, np.ndarray]) -> None:
        """Take nothing."""

    def self_images(self) -> None:
        """Return None: there is no image."""
        return

    def correction(self, points: FloatArray, points2: FloatArray, wavenumber: float, work: Workspace) -> None:
        """Return None: nothing is added."""
        return


class PerfectGroundKernels:
    """A perfectly conducting plane: image theory."""

    conducting_surface = True
    has_correction = False

    def fill(self, points: FloatArray, points2: FloatArray, wavenumber: float, work: Workspace) -> PointKernels:
        """Return g - g_image for horizontal currents and charges, g + g_image for vertical currents."""
        shape = (2, points.shape[1], points2.shape[1])
        total, difference = work.array("sum", shape), work.array("difference", shape)
        fill_image(*points, *points2, wavenumber, total[0], total[1], difference[0], difference[1])
        return PointKernels(difference, total, difference)

    def reflection(self, theta_rad: FloatArray, wavenumber: float) -> tuple[ComplexArray, ComplexArray]:
        """Return (-1, +1) at every angle."""
        ones = np.ones(np.shape(theta_rad), dtype=complex)
        return -ones, ones

    def at(self, frequency_hz: float) -> PerfectGroundKernels:
        """Return itself."""
        return self

    def serving(self, extent: Extent) -> PerfectGroundKernels:
        """Return itself."""
        return self

    def tables(self) -> None:
        """Return None: there is nothing to keep."""
        return

    def use_tables(self, arrays: dict[str, np.ndarray]) -> None:
        """Take nothing."""

    def self_images(self) -> tuple[float, float, float]:
        """Return (-1, +1, -1): the image of a horizontal current runs backwards, its charge is opposite."""
        return -1.0, 1.0, -1.0

    def correction(self, points: FloatArray, points2: FloatArray, wavenumber: float, work: Workspace) -> None:
        """Return None: images say it all."""
        return


_KERNELS: dict[type, Callable[[Ground, float, Extent], GroundKernels]] = {
    FreeSpace: lambda ground, frequency_hz, extent: FreeSpaceKernels(),
    PerfectGround: lambda ground, frequency_hz, extent: PerfectGroundKernels(),
    Soil: LossyGroundKernels,
    TabulatedSoil: LossyGroundKernels,
    MoistSoil: LossyGroundKernels,
    LayeredSoil: LossyGroundKernels,
    MeshOnSoil: LossyGroundKernels,
}


def ground_kernels(ground: Ground, frequency_hz: float, extent: Extent) -> GroundKernels:
    """Return the fields of a ground description.

    Parameters
    ----------
    ground : Ground
        Which.
    frequency_hz : float
        [Hz].
    extent : Extent
        Where points may lie that kernels are asked for.

    Raises
    ------
    ModelRangeError
        If the ground is not known at that frequency.
    """
    return _KERNELS[type(ground)](ground, frequency_hz, extent)
