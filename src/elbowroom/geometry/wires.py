"""Straight thin wires and the distances between them."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from elbowroom.base.arrays import FloatArray, check_array
from elbowroom.base.errors import GeometryError

LARGEST_CONDUCTIVITY, LARGEST_PERMEABILITY = 1e12, 1e7
"""Far beyond any metal, and small enough for every formula to stay finite [S/m], [-]."""


@dataclass(frozen=True)
class Wire:
    """A straight round wire.

    Parameters
    ----------
    start, end : sequence of 3 floats
        End points of the axis [m]; the reference direction of the current runs from start to end.
    radius : float
        Wire radius [m].
    conductivity : float, optional
        Conductivity of the metal [S/m]; ``None`` means a perfect conductor.
    relative_permeability : float, optional
        Relative permeability of the metal, for the loss of steel wires.

    Raises
    ------
    GeometryError
        If a coordinate is not finite, the length is zero, or the radius is not positive and below half the length.
    """

    start: tuple[float, float, float]
    end: tuple[float, float, float]
    radius: float
    conductivity: float | None = None
    relative_permeability: float = 1.0

    def __post_init__(self) -> None:
        for name in ("start", "end"):
            point = check_array(f"wire {name} [m]", getattr(self, name), (3,), error=GeometryError)
            object.__setattr__(self, name, tuple(float(v) for v in point))
        radius = float(check_array("wire radius [m]", self.radius, (), error=GeometryError))
        object.__setattr__(self, "radius", radius)
        if self.length == 0.0:
            msg = f"wire of zero length at {self.start}: start and end must differ"
            raise GeometryError(msg)
        if not radius > 0.0:
            msg = f"wire radius {radius:g} m: must be positive"
            raise GeometryError(msg)
        if radius >= 0.5 * self.length:
            msg = (
                f"wire radius {radius:g} m is too large for a length of {self.length:g} m: "
                "the thin-wire model needs a radius below half the length"
            )
            raise GeometryError(msg)
        if self.conductivity is not None and not 0.0 < float(self.conductivity) <= LARGEST_CONDUCTIVITY:
            msg = (
                f"wire conductivity {self.conductivity!r} S/m: must be positive and at most {LARGEST_CONDUCTIVITY:g}, "
                "or left out for a perfect conductor"
            )
            raise GeometryError(msg)
        if not 0.0 < float(self.relative_permeability) <= LARGEST_PERMEABILITY:
            msg = (
                f"wire relative_permeability {self.relative_permeability!r}: must be positive and at most "
                f"{LARGEST_PERMEABILITY:g}"
            )
            raise GeometryError(msg)

    @property
    def length(self) -> float:
        """Length of the axis [m]."""
        return float(np.linalg.norm(np.subtract(self.end, self.start)))

    @property
    def direction(self) -> FloatArray:
        """Unit vector from start to end, (3,)."""
        return np.subtract(self.end, self.start) / self.length

    def point(self, distance: float) -> FloatArray:
        """Return the point (3,) at a distance [m] from the start along the axis."""
        return np.asarray(self.start) + distance * self.direction


def wire_end_points(wires: Sequence[Wire]) -> tuple[FloatArray, FloatArray]:
    """Return the start and end points (W, 3) [m] of some wires."""
    return np.array([w.start for w in wires], dtype=float), np.array([w.end for w in wires], dtype=float)


def segment_distances(start: FloatArray, end: FloatArray, start2: FloatArray, end2: FloatArray) -> FloatArray:
    """Return the smallest distances between the axes of two sets of segments.

    The unconstrained closest points of the two lines are clamped to the segments and the end-point candidates
    are taken too, so that parallel and degenerate pairs need no case of their own.

    Parameters
    ----------
    start, end, start2, end2 : float64 (..., 3)
        End points [m]; the leading shapes broadcast.

    Returns
    -------
    float64 (...)
        Distances [m].
    """
    d1, d2 = end - start, end2 - start2
    a, e = np.sum(d1 * d1, -1), np.sum(d2 * d2, -1)
    b = np.sum(d1 * d2, -1)
    r = start - start2
    c, f = np.sum(d1 * r, -1), np.sum(d2 * r, -1)
    denominator = a * e - b * b
    with np.errstate(divide="ignore", invalid="ignore"):
        s0 = np.where(denominator > 1e-12 * a * e, (b * f - c * e) / denominator, 0.0)
    best = np.full(np.broadcast_shapes(a.shape, e.shape), np.inf)
    for candidate in (s0, np.zeros_like(s0), np.ones_like(s0)):
        s = np.clip(candidate, 0.0, 1.0)
        t = np.clip((b * s + f) / e, 0.0, 1.0)
        s = np.clip((b * t - c) / a, 0.0, 1.0)
        gap = r + s[..., None] * d1 - t[..., None] * d2
        best = np.minimum(best, np.sqrt(np.sum(gap * gap, -1)))
    return best
