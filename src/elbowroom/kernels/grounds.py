"""What each ground does to the fields: kernels between points, self terms, reflection of far fields.

Assembly and patterns ask the object that :func:`ground_kernels` returns and never look at which ground it is.
Interactions carry the horizontal current, the vertical current and the charge in separate kernels, because a real
ground treats them differently.  A new ground is a class here beside a description in ``geometry.grounds``.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Protocol

import numpy as np

from elbowroom.base.arrays import ComplexArray, FloatArray
from elbowroom.geometry.grounds import FreeSpace, Ground, PerfectGround
from elbowroom.kernels.points_numba import fill_free, fill_image


@dataclass(frozen=True)
class PointKernels:
    """Scalar kernels between two sets of points, real and imaginary parts apart, each float64 (2, Q, Q').

    ``horizontal`` multiplies the x and y currents, ``vertical`` the z currents, ``charge`` the charges.  Equal kernels
    may be one and the same array, which lets the caller do their products together.
    """

    horizontal: FloatArray
    vertical: FloatArray
    charge: FloatArray


class GroundKernels(Protocol):
    """What a ground must be able to say."""

    conducting_surface: bool
    """Whether wires may end on z = 0, their current flowing on into an image."""

    def fill(self, points: FloatArray, points2: FloatArray, wavenumber: float, work: Workspace) -> PointKernels:
        """Return the kernels between points (3, Q) and (3, Q') in the station frame, direct part included."""
        ...

    def reflection(self, theta_rad: FloatArray, wavenumber: float) -> tuple[ComplexArray, ComplexArray] | None:
        """Return the reflection coefficients (Gh, Ge) at zenith angles, or None where nothing is reflected.

        Gh is that of the horizontal electric field (-1 on a perfect conductor), Ge that of the vertical
        polarisation in the magnetic-field sense (+1).
        """
        ...

    def self_images(self) -> tuple[float, float, float] | None:
        """Return what the mirror image of an antenna counts in its own block, or None.

        The three numbers multiply the horizontal currents, the vertical currents and the charge of the mirror image.
        """
        ...


class Workspace:
    """Reusable buffers for point kernels, one per thread: large allocations cost more than filling them.

    Parameters
    ----------
    single : bool, optional
        Whether kernels are kept in single precision: about 4e-7 of a kernel, and products in half the time.
    """

    def __init__(self, single: bool = False) -> None:
        self.dtype: type = np.float32 if single else np.float64
        self._flat: dict[str, FloatArray] = {}

    def array(self, name: str, shape: tuple[int, ...]) -> FloatArray:
        """Return an uninitialised array of that shape; its contents last until the name is asked for again."""
        size = int(np.prod(shape))
        flat = self._flat.get(name)
        if flat is None or flat.size < size:
            flat = self._flat[name] = np.empty(size, dtype=self.dtype)
        return flat[:size].reshape(shape)


class FreeSpaceKernels:
    """No ground."""

    conducting_surface = False

    def fill(self, points: FloatArray, points2: FloatArray, wavenumber: float, work: Workspace) -> PointKernels:
        """Return exp(-jkR)/R between all points."""
        kernel = work.array("free", (2, points.shape[1], points2.shape[1]))
        fill_free(*points, *points2, wavenumber, kernel[0], kernel[1])
        return PointKernels(kernel, kernel, kernel)

    def reflection(self, theta_rad: FloatArray, wavenumber: float) -> None:
        """Return None: nothing is reflected."""
        return

    def self_images(self) -> None:
        """Return None: there is no image."""
        return


class PerfectGroundKernels:
    """A perfectly conducting plane: image theory."""

    conducting_surface = True

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

    def self_images(self) -> tuple[float, float, float]:
        """Return (-1, +1, -1): the image of a horizontal current runs backwards, its charge is opposite."""
        return -1.0, 1.0, -1.0


_KERNELS: dict[type, Callable[[], GroundKernels]] = {
    FreeSpace: FreeSpaceKernels,
    PerfectGround: PerfectGroundKernels,
}


def ground_kernels(ground: Ground) -> GroundKernels:
    """Return the fields of a ground description."""
    return _KERNELS[type(ground)]()
