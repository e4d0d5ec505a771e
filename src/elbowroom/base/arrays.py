"""Dimension letters, declarations of arrays, and the one check at the door.

Dimension letters used in every docstring:

====== =====================================================
letter meaning
====== =====================================================
``A``  antennas of a station
``P``  ports of a station (or of an antenna, where said)
``N``  unknowns (basis functions)
``E``  mesh elements
``Q``  quadrature points
``D``  directions
``B``  beams
``F``  frequencies
====== =====================================================
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

FloatArray = NDArray[np.floating[Any]]
ComplexArray = NDArray[np.complexfloating[Any, Any]]
AnyComplexArray = NDArray[np.complexfloating[Any, Any]]


@dataclass(frozen=True)
class ArraySpec:
    """Declaration of one stored or exported array.

    Parameters
    ----------
    name : str
        Dataset name.
    dims : tuple of str
        Named dimensions, in axis order; equal names must have equal lengths within a record.
    kind : str
        numpy kind letters that are allowed, for example ``"c"`` or ``"fi"``.
    unit : str
        Unit, ``"1"`` where there is none.
    doc : str
        One line for the reader of the file.
    required : bool
        Whether a record without it is refused; optional arrays are checked only where present.
    """

    name: str
    dims: tuple[str, ...]
    kind: str
    unit: str
    doc: str
    required: bool = True


def check_array(
    name: str,
    values: ArrayLike,
    shape: tuple[int | None, ...],
    *,
    dtype: type = np.float64,
    error: type[Exception] = ValueError,
) -> NDArray:
    """Return ``values`` as a finite array of the given shape, or raise ``error`` with a message that says why.

    Parameters
    ----------
    name : str
        What the user calls it.
    values : array_like
        The input.
    shape : tuple
        Expected shape; ``None`` accepts any length on that axis.
    dtype : type
        Element type to convert to.
    error : type
        Exception class raised.

    Returns
    -------
    ndarray
        The converted array.
    """
    try:
        array: np.ndarray = np.asarray(values, dtype=dtype)
    except (TypeError, ValueError) as cause:
        msg = f"{name}: expected numbers, got {values!r}"
        raise error(msg) from cause
    wanted = "(" + ", ".join("any" if n is None else str(n) for n in shape) + ")"
    if array.ndim != len(shape) or any(n is not None and n != m for n, m in zip(shape, array.shape, strict=True)):
        msg = f"{name}: expected an array of shape {wanted}, got {array.shape}"
        raise error(msg)
    if not np.all(np.isfinite(array)):
        msg = f"{name}: expected finite numbers, got {np.count_nonzero(~np.isfinite(array))} that are not"
        raise error(msg)
    return array
