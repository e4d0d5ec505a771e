"""What shapes have in common: numbers checked by their key, pairs turned by a right angle, wires that must not touch."""

from __future__ import annotations

from collections.abc import Sequence
from numbers import Real

import numpy as np

from elbowroom.base.arrays import FloatArray
from elbowroom.base.errors import GeometryError
from elbowroom.geometry.wires import Wire, segment_distances, wire_end_points

CLEARANCE_RADII = 8.0
"""Distance of axes in radii that shapes keep where none is given: nearer, charge is no longer even round the wires."""


def check_positive(antenna: str, **values: float) -> None:
    """Raise GeometryError for the first value that is not a positive finite number, naming its key."""
    for key, value in values.items():
        if not (_is_number(value) and 0.0 < value < np.inf):
            msg = f"antenna {antenna!r}: {key} {value!r} must be positive and finite"
            raise GeometryError(msg)


def check_positive_if_given(antenna: str, **values: float | None) -> None:
    """Raise GeometryError for the first value that is neither None nor a positive finite number, naming its key."""
    check_positive(antenna, **{key: value for key, value in values.items() if value is not None})


def check_between(antenna: str, low: float, high: float, **values: float) -> None:
    """Raise GeometryError for the first value that is not a number from low to high, naming its key."""
    for key, value in values.items():
        if not (_is_number(value) and low <= value <= high):
            found = f"{value:g}" if _is_number(value) else repr(value)
            msg = f"antenna {antenna!r}: {key} {found} must lie between {low:g} and {high:g}"
            raise GeometryError(msg)


def check_not_given(antenna: str, reason: str, **values: float | None) -> None:
    """Raise GeometryError if any value is given that would have no effect, naming its key and the reason."""
    for key, value in values.items():
        if value is not None:
            msg = f"antenna {antenna!r}: {key} {value!r} has no effect {reason}"
            raise GeometryError(msg)


def check_count(antenna: str, least: int, **values: int) -> None:
    """Raise GeometryError for the first value that is not a whole number of at least so many, naming its key."""
    for key, value in values.items():
        if isinstance(value, bool) or not isinstance(value, (int, np.integer)) or value < least:
            msg = f"antenna {antenna!r}: {key} {value!r}: expected a whole number of at least {least}"
            raise GeometryError(msg)


def check_choice(antenna: str, choices: Sequence[str], **values: str) -> None:
    """Raise GeometryError for the first value that is none of the choices, naming its key."""
    for key, value in values.items():
        if value not in choices:
            msg = f"antenna {antenna!r}: {key} {value!r}: expected {' or '.join(map(repr, choices))}"
            raise GeometryError(msg)


def check_above_origin(antenna: str, wires: Sequence[Wire], advice: str) -> None:
    """Raise GeometryError if a wire comes nearer than its radius to the level of the antenna's origin, or below it."""
    for index, wire in enumerate(wires):
        lowest = min(wire.start[2], wire.end[2])
        if lowest <= wire.radius:
            msg = f"antenna {antenna!r}: wire {index} reaches down to {lowest:g} m; {advice}"
            raise GeometryError(msg)


def check_clear(antenna: str, wires: Sequence[Wire], advice: str) -> None:
    """Raise GeometryError if two wires that are not joined come nearer than the sum of their radii.

    Parameters
    ----------
    antenna : str
        Name of the design, for messages.
    wires : sequence of Wire
        All wires; two are joined where an end of one lies on the axis of the other.
    advice : str
        Which keys to change.
    """
    start, end = wire_end_points(wires)
    radius = np.array([w.radius for w in wires])
    total = radius[:, None] + radius[None]
    distance = segment_distances(start[:, None], end[:, None], start[None], end[None])
    same = 1e-9 * max(float(np.abs(start).max()), float(np.abs(end).max()))
    joined = (_distances_to_wires(start, start, end) <= same) | (_distances_to_wires(end, start, end) <= same)
    joined |= joined.T
    for i, j in np.argwhere(np.triu((distance < total * (1.0 - 1e-9)) & ~joined, 1)):
        msg = (
            f"antenna {antenna!r}: wires {i} and {j} come within {distance[i, j]:.4g} m of one another, less than the sum of "
            f"their radii ({total[i, j]:.4g} m); {advice}"
        )
        raise GeometryError(msg)


def _distances_to_wires(points: FloatArray, start: FloatArray, end: FloatArray) -> FloatArray:
    """Return the distance (N, W) of each point (N, 3) from each wire's axis (W, 3)."""
    along = end - start
    away = points[:, None] - start[None]
    share = np.clip(np.sum(away * along, axis=-1) / np.sum(along * along, axis=-1), 0.0, 1.0)
    return np.asarray(np.linalg.norm(away - share[..., None] * along, axis=-1))


def quarter_turned(wires: Sequence[Wire], drop: float) -> list[Wire]:
    """Return wires turned by 90 degrees about z, from x towards y, and lowered by a height [m]."""

    def moved(point: tuple[float, float, float]) -> tuple[float, float, float]:
        return (0.0 - point[1], point[0], point[2] - drop)

    return [Wire(moved(w.start), moved(w.end), w.radius, w.conductivity, w.relative_permeability) for w in wires]


def _is_number(value: object) -> bool:
    return isinstance(value, Real) and not isinstance(value, bool)
