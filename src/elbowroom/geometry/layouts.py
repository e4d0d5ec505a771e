"""Layouts: where the antennas of a station stand, how each is turned, and files that say so.

- `Layout`: the data; `closest_spacing`, `diameter`, `layout_statistics`: figures of one
- `read_layout`, `write_layout`: CSV files with named columns and units

Layouts made by rule (random, rings, spiral, grid) are in `elbowroom.geometry.arrangements`.
"""

from __future__ import annotations

import contextlib
import csv
import io
import math
import os
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, field
from itertools import product
from pathlib import Path

import numpy as np

from elbowroom.base.arrays import FloatArray, check_array
from elbowroom.base.errors import ExportError, GeometryError
from elbowroom.geometry.csvtable import counted, fail_table, read_rows

SAME_PLACE_M = 1e-3
"""[m]; two antennas nearer than this are taken for one entered twice."""

LARGEST_COORDINATE_M = 1e4
"""[m]; a station is tens of metres wide, so a larger value is in the wrong unit."""

_NUMBER_DEFAULTS: dict[str, float | None] = {
    "east_m": None,
    "north_m": None,
    "up_m": 0.0,
    "rotation_deg": 0.0,
    "tilt_east_deg": 0.0,
    "tilt_north_deg": 0.0,
}
_REQUIRED = ("name", "east_m", "north_m")
_COORDINATES = ("east_m", "north_m", "up_m")
_COLUMNS = ("name", *_NUMBER_DEFAULTS, "antenna")


@dataclass(frozen=True, eq=False)
class Layout:
    """Names, places and attitudes of the antennas of a station.

    Layouts compare equal when every name and number is the same.

    Parameters
    ----------
    names : tuple of str
        One for each of the A antennas; distinct, printable, not starting with ``#``.
    positions : float64 (A, 3)
        East, north and up of each antenna's reference point [m].
    rotation_deg : float64 (A,), optional
        Turn about the vertical, from east towards north [deg]; one number holds for all antennas.
    tilt_east_deg, tilt_north_deg : float64 (A,), optional
        Lean of the antenna's axis towards the east and the north, after the turn [deg].
    antenna : tuple of str, optional
        Name of the design of each antenna, ``""`` where the layout does not say; one string holds for all.

    Raises
    ------
    GeometryError
        With every problem found: lengths that disagree, numbers that are not finite, empty, repeated or
        unusable names, coordinates beyond 10 km, two antennas within 1 mm.
    """

    names: tuple[str, ...]
    positions: FloatArray
    rotation_deg: FloatArray = field(default=0.0)  # type: ignore[assignment,arg-type]
    tilt_east_deg: FloatArray = field(default=0.0)  # type: ignore[assignment,arg-type]
    tilt_north_deg: FloatArray = field(default=0.0)  # type: ignore[assignment,arg-type]
    antenna: tuple[str, ...] = ()

    def __post_init__(self) -> None:
        names = (self.names,) if isinstance(self.names, str) else tuple(self.names)
        count = len(names)
        if count == 0:
            msg = "layout: no antennas"
            raise GeometryError(msg)
        antenna = (self.antenna,) * count if isinstance(self.antenna, str) else tuple(self.antenna) or ("",) * count
        if len(antenna) != count:
            msg = f"antenna: expected {count} design names, one for each antenna, got {len(antenna)}"
            raise GeometryError(msg)
        positions = np.array(check_array("positions", self.positions, (count, 3), error=GeometryError))
        positions.setflags(write=False)
        for key in ("rotation_deg", "tilt_east_deg", "tilt_north_deg"):
            value = getattr(self, key)
            value = np.full(count, value) if np.ndim(value) == 0 else np.array(value)
            value = check_array(key, value, (count,), error=GeometryError)
            value.setflags(write=False)
            object.__setattr__(self, key, value)
        object.__setattr__(self, "names", names)
        object.__setattr__(self, "positions", positions)
        object.__setattr__(self, "antenna", antenna)
        labels = [f"antenna {i + 1}" for i in range(count)]
        found = [*_text_problems(labels, names, antenna), *_place_problems(labels, names, positions)]
        if found:
            msg = f"layout: {counted(len(found), 'problem')}"
            raise GeometryError(msg, problems=tuple(f"{labels[i]}: {text}" for i, text in sorted(found)))

    def __len__(self) -> int:
        return len(self.names)

    def __eq__(self, other: object) -> bool:
        if not isinstance(other, Layout):
            return NotImplemented
        return (
            self.names == other.names
            and self.antenna == other.antenna
            and all(
                np.array_equal(getattr(self, key), getattr(other, key))
                for key in ("positions", "rotation_deg", "tilt_east_deg", "tilt_north_deg")
            )
        )

    __hash__ = None  # type: ignore[assignment]


@dataclass(frozen=True)
class LayoutStatistics:
    """Figures by which a person recognises a layout.

    Parameters
    ----------
    antennas : int
        Number of antennas.
    designs : dict
        Number of antennas of each design name.
    closest_spacing_m : float
        Distance of the closest pair [m]; infinite for one antenna.
    closest_pair : tuple of str
        Names of that pair; empty for one antenna.
    median_neighbour_m : float
        Median over antennas of the distance to the nearest other one [m]; infinite for one antenna.
    diameter_m : float
        Largest distance between two antennas [m].
    centre : tuple of float
        Mean east, north and up [m].
    radius_m : float
        Largest horizontal distance from that centre [m].
    lowest_m, highest_m : float
        Range of heights [m].
    """

    antennas: int
    designs: dict[str, int]
    closest_spacing_m: float
    closest_pair: tuple[str, ...]
    median_neighbour_m: float
    diameter_m: float
    centre: tuple[float, float, float]
    radius_m: float
    lowest_m: float
    highest_m: float


def closest_spacing(layout: Layout) -> float:
    """Return the distance of the closest pair of antennas [m]; infinite for one antenna."""
    return float(np.min(_nearest(layout)[0]))


def diameter(layout: Layout) -> float:
    """Return the largest distance between two antennas [m]; 0 for one antenna."""
    points = layout.positions
    return max(float(np.max(np.linalg.norm(points[i:] - points[i], axis=1))) for i in range(len(points)))


def layout_statistics(layout: Layout) -> LayoutStatistics:
    """Return the figures of a layout."""
    nearest, partner = _nearest(layout)
    closest = int(np.argmin(nearest))
    pair = (layout.names[closest], layout.names[partner[closest]]) if len(layout) > 1 else ()
    centre = layout.positions.mean(axis=0)
    heights = layout.positions[:, 2]
    return LayoutStatistics(
        antennas=len(layout),
        designs=dict(Counter(layout.antenna)),
        closest_spacing_m=float(nearest[closest]),
        closest_pair=pair,
        median_neighbour_m=float(np.median(nearest)),
        diameter_m=diameter(layout),
        centre=(float(centre[0]), float(centre[1]), float(centre[2])),
        radius_m=float(np.max(np.linalg.norm((layout.positions - centre)[:, :2], axis=1))),
        lowest_m=float(heights.min()),
        highest_m=float(heights.max()),
    )


def _nearest(layout: Layout) -> tuple[FloatArray, np.ndarray]:
    """Distance to, and index of, the nearest other antenna."""
    from scipy.spatial import cKDTree

    if len(layout) == 1:
        return np.array([math.inf]), np.array([0])
    distance, index = cKDTree(layout.positions).query(layout.positions, k=2)
    return distance[:, 1], index[:, 1]


def read_layout(path: str | Path) -> Layout:
    """Read a layout from a CSV file.

    The first line that is neither blank nor a comment names the columns: ``name``, ``east_m`` and
    ``north_m`` are required; ``up_m``, ``rotation_deg``, ``tilt_east_deg``, ``tilt_north_deg`` (0 if absent)
    and ``antenna`` (``""`` if absent) are optional; their order is free.  Lines starting with ``#`` are
    comments.  A byte-order mark, either kind of line end, spaces round cells, blank lines and lines of
    nothing but commas do no harm.

    Parameters
    ----------
    path : str or Path
        The file, UTF-8.

    Returns
    -------
    Layout
        Antennas in the order of the file.

    Raises
    ------
    JobFileError
        With every problem found and its line number.
    """
    file = Path(path)
    rows = read_rows(file, "layout", _NUMBER_DEFAULTS, ("name", "antenna"), _REQUIRED)
    names, antenna = rows.texts["name"], rows.texts["antenna"]
    labels = [f"line {line}" for line in rows.lines]
    found = _place_problems(labels, names, rows.numbers[:, :3])
    if "name" in rows.header:
        found += _text_problems(labels, names, antenna)
    problems = [*rows.problems, *((rows.lines[i], text) for i, text in found)]
    if problems:
        fail_table(file, "layout", problems)
    table = rows.numbers
    return Layout(names, table[:, :3], table[:, 3], table[:, 4], table[:, 5], antenna)


def write_layout(layout: Layout, path: str | Path, header_comment: str = "") -> None:
    """Write a layout to a CSV file that `read_layout` reads back without the loss of a digit.

    Parameters
    ----------
    layout : Layout
        What to write.
    path : str or Path
        The file; replaced if it exists, and only once the new one is complete.
    header_comment : str
        Text put above the columns, each line behind ``#``.

    Raises
    ------
    ExportError
        If the file cannot be written.
    """
    text = io.StringIO()
    for comment in header_comment.splitlines():
        text.write(f"# {comment}".rstrip() + "\n")
    writer = csv.writer(text, lineterminator="\n")
    writer.writerow(_COLUMNS)
    attitudes = np.column_stack([layout.rotation_deg, layout.tilt_east_deg, layout.tilt_north_deg])
    for name, place, attitude, design in zip(layout.names, layout.positions, attitudes, layout.antenna, strict=True):
        writer.writerow([name, *(repr(float(x)) for x in (*place, *attitude)), design])
    unfinished = Path(f"{path}.{os.getpid()}.unfinished")
    try:
        unfinished.write_bytes(text.getvalue().encode("utf-8"))
        os.replace(unfinished, path)
    except (OSError, ValueError) as cause:
        with contextlib.suppress(OSError, ValueError):
            unfinished.unlink()
        msg = f"{path}: cannot write the layout: {getattr(cause, 'strerror', None) or cause}"
        raise ExportError(msg) from cause


def _text_problems(labels: Sequence[str], names: Sequence[str], antenna: Sequence[str]) -> list[tuple[int, str]]:
    problems = []
    first: dict[str, int] = {}
    for i, (name, design) in enumerate(zip(names, antenna, strict=True)):
        if not isinstance(name, str) or not isinstance(design, str):
            problems.append((i, f"name and design must be text, got {name!r} and {design!r}"))
            continue
        if not name:
            problems.append((i, "the name is empty"))
        elif name in first:
            problems.append((i, f"name {name!r} is already used ({labels[first[name]]})"))
        first.setdefault(name, i)
        for what, text in (("name", name), ("antenna", design)):
            # such text would come back changed from a file
            if not text.isprintable() or text != text.strip() or (what == "name" and (text.startswith("#") or "/" in text)):
                problems.append((i, f"{what} {text!r} has unprintable characters, outer spaces, a slash or a leading '#'"))
    return problems


def _place_problems(labels: Sequence[str], names: Sequence[str], positions: FloatArray) -> list[tuple[int, str]]:
    """Coordinates beyond reason, and antennas at the place of an earlier one; rows with NaN are left out."""
    problems = []
    cells: dict[tuple[int, ...], list[int]] = {}
    for i, place in enumerate(positions):
        large = [
            f"{key} = {value:.10g}: metres expected; millimetres?"
            for key, value in zip(_COORDINATES, place, strict=True)
            if abs(value) > LARGEST_COORDINATE_M
        ]
        problems += [(i, text) for text in large]
        if large or not np.all(np.isfinite(place)):
            continue
        # cubes of the forbidden distance: an antenna too near stands in the same cube or a neighbouring one;
        # offenders are not entered, so that a cube never fills and the search stays linear
        cube = tuple(math.floor(x / SAME_PLACE_M) for x in place)
        near = (j for step in product((-1, 0, 1), repeat=3) for j in cells.get(_moved(cube, step), ()))
        twin = min(near, key=lambda j: math.dist(place, positions[j]), default=None)
        if twin is not None and math.dist(place, positions[twin]) < SAME_PLACE_M:
            distance = math.dist(place, positions[twin])
            where = "at the same place as" if distance == 0.0 else f"{distance * 1e3:.2g} mm from"
            problems.append((i, f"{names[i]!r} stands {where} {names[twin]!r} ({labels[twin]})"))
        else:
            cells.setdefault(cube, []).append(i)
    return problems


def _moved(cube: tuple[int, ...], step: tuple[int, ...]) -> tuple[int, ...]:
    return (cube[0] + step[0], cube[1] + step[1], cube[2] + step[2])
