"""What grounds and those who ask them hand to one another: kernels between points, buffers, and where the points lie."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from elbowroom.base.arrays import FloatArray


@dataclass(frozen=True)
class PointKernels:
    """Scalar kernels between two sets of points, real and imaginary parts apart, each float64 (2, Q, Q').

    ``horizontal`` multiplies the x and y currents, ``vertical`` the z currents, ``charge`` the charges.  Equal kernels
    may be one and the same array, which lets the caller do their products together.  ``cross`` (dimensionless) joins z
    currents and charges, -j k eta/(4 pi) cross (f_z q' + q f_z'); None where the ground has no such kernel.
    """

    horizontal: FloatArray
    vertical: FloatArray
    charge: FloatArray
    cross: FloatArray | None = None


def distinct_kernels(kernels: PointKernels) -> list[FloatArray]:
    """Return each different array of some kernels once."""
    arrays = (kernels.horizontal, kernels.vertical, kernels.charge, kernels.cross)
    return list({id(array): array for array in arrays if array is not None}.values())


@dataclass(frozen=True)
class Extent:
    """Where points lie that kernels are asked for.

    Attributes
    ----------
    widest_m : float
        Largest horizontal distance of two points [m].
    lowest_m, highest_m : float
        Lowest and highest point above the ground [m].
    """

    widest_m: float
    lowest_m: float
    highest_m: float


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
