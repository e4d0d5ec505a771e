"""As built against as designed: how far antennas stand, turn and lean from where the layout puts them.

- `Offsets`: the data; `read_offsets`: from a CSV file; `displaced`: a layout as built
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np

from elbowroom.base.arrays import FloatArray, check_array
from elbowroom.base.errors import GeometryError
from elbowroom.geometry.csvtable import counted, fail_table, read_rows
from elbowroom.geometry.layouts import Layout

LARGEST_OFFSET_M = 5.0
"""[m]; antennas are built within centimetres of their places, so a larger offset is in the wrong unit."""

_COLUMNS: dict[str, float | None] = {
    "offset_east_m": 0.0,
    "offset_north_m": 0.0,
    "offset_up_m": 0.0,
    "offset_rotation_deg": 0.0,
    "offset_tilt_east_deg": 0.0,
    "offset_tilt_north_deg": 0.0,
}


@dataclass(frozen=True, eq=False)
class Offsets:
    """How some antennas differ from a layout: added to its places and angles, in its frame.

    Parameters
    ----------
    names : tuple of str
        A antennas, each once.
    shifts : float64 (A, 3)
        East, north and up [m].
    rotation_deg, tilt_east_deg, tilt_north_deg : float64 (A,), optional
        Added to the angles of the same name [deg]; 0 by default.

    Raises
    ------
    GeometryError
        If lengths disagree, a number is not finite, a name is used twice or a shift exceeds 5 m.
    """

    names: tuple[str, ...]
    shifts: FloatArray
    rotation_deg: FloatArray = field(default=0.0)  # type: ignore[assignment,arg-type]
    tilt_east_deg: FloatArray = field(default=0.0)  # type: ignore[assignment,arg-type]
    tilt_north_deg: FloatArray = field(default=0.0)  # type: ignore[assignment,arg-type]

    def __post_init__(self) -> None:
        names = tuple(self.names)
        shifts = check_array("shifts [m]", self.shifts, (len(names), 3), error=GeometryError)
        object.__setattr__(self, "names", names)
        object.__setattr__(self, "shifts", shifts)
        for key in ("rotation_deg", "tilt_east_deg", "tilt_north_deg"):
            value = np.broadcast_to(np.asarray(getattr(self, key), dtype=float), (len(names),))
            object.__setattr__(self, key, check_array(key, value, (len(names),), error=GeometryError))
        found = _problems([f"antenna {i + 1}" for i in range(len(names))], names, shifts)
        if found:
            msg = f"offsets: {counted(len(found), 'problem')}"
            raise GeometryError(msg, problems=tuple(f"antenna {i + 1}: {text}" for i, text in found))

    def __len__(self) -> int:
        return len(self.names)

    @property
    def largest_m(self) -> float:
        """Length of the largest shift [m]; 0 if there is none."""
        return float(np.max(np.linalg.norm(self.shifts, axis=1), initial=0.0))


def _problems(labels: Sequence[str], names: Sequence[str], shifts: FloatArray) -> list[tuple[int, str]]:
    problems = []
    first: dict[str, int] = {}
    for i, (name, shift) in enumerate(zip(names, shifts, strict=True)):
        if not name:
            problems.append((i, "the name is empty"))
        elif name in first:
            problems.append((i, f"name {name!r} is already used ({labels[first[name]]})"))
        first.setdefault(name, i)
        problems += [
            (i, f"{key} = {value:.10g}: at most {LARGEST_OFFSET_M:g} m expected; millimetres?")
            for key, value in zip(_COLUMNS, shift, strict=False)
            if abs(value) > LARGEST_OFFSET_M
        ]
    return problems


def read_offsets(path: str | Path) -> Offsets:
    """Read offsets from a CSV file with a column ``name`` and any of the offset columns.

    ``offset_east_m``, ``offset_north_m``, ``offset_up_m``, ``offset_rotation_deg``, ``offset_tilt_east_deg`` and
    ``offset_tilt_north_deg`` are 0 if absent; otherwise as :func:`elbowroom.geometry.layouts.read_layout`.

    Parameters
    ----------
    path : str or Path
        The file, UTF-8.

    Raises
    ------
    JobFileError
        With every problem found and its line number.
    """
    file = Path(path)
    rows = read_rows(file, "file of offsets", _COLUMNS, ("name",), ("name",))
    names, table = rows.texts["name"], rows.numbers
    labels = [f"line {line}" for line in rows.lines]
    found = _problems(labels, names, table[:, :3]) if "name" in rows.header else []
    problems = [*rows.problems, *((rows.lines[i], text) for i, text in found)]
    if not problems and not any(key in rows.header for key in _COLUMNS):
        problems.append((0, f"no column of offsets; at least one expected of {', '.join(_COLUMNS)}"))
    if problems:
        fail_table(file, "file of offsets", problems)
    return Offsets(names, table[:, :3], table[:, 3], table[:, 4], table[:, 5])


def displaced(layout: Layout, offsets: Offsets) -> Layout:
    """Return a layout with offsets added to its places and angles.

    Parameters
    ----------
    layout : Layout
        As designed.
    offsets : Offsets
        Of some of its antennas, in any order.

    Raises
    ------
    GeometryError
        If the layout has no antenna of a name, or two antennas end up in one place.
    """
    index = {name: i for i, name in enumerate(layout.names)}
    unknown = [name for name in offsets.names if name not in index]
    if unknown:
        msg = f"offsets of {unknown[0]!r}: the layout has no such antenna"
        raise GeometryError(msg)
    rows = [index[name] for name in offsets.names]
    positions = layout.positions.copy()
    positions[rows] += offsets.shifts
    angles = {key: getattr(layout, key).copy() for key in ("rotation_deg", "tilt_east_deg", "tilt_north_deg")}
    for key, values in angles.items():
        values[rows] += getattr(offsets, key)
    return Layout(layout.names, positions, **angles, antenna=layout.antenna)
