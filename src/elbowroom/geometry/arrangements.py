"""Layouts made by rule: random with a least spacing, rings, spirals, grids.

All stand on flat ground (up = 0) with the station's reference point in the middle, are named ``A001``,
``A002``, ... and are the same again for the same arguments, seed included.

The argument ``turn`` of each is the rotation of all antennas [deg], or ``"random"`` for an independent,
uniformly distributed rotation of each, which needs a seed.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from typing import Literal

import numpy as np

from elbowroom.base.arrays import FloatArray
from elbowroom.base.errors import GeometryError
from elbowroom.geometry.layouts import SAME_PLACE_M, Layout

Turn = float | Literal["random"]

_ATTEMPTS = 4
_SWEEPS = 4000
_BATCH = 64
_BATCHES = 50
# spacings are met to spare by more than the rounding of any way to compute a distance
_ROUNDING = 1e-12
# relaxation aims a little high, so that it ends after finitely many sweeps
_OVERSHOOT = 1e-4
# moves per sweep, in spacings, below which nothing will change any more
_STANDSTILL = 1e-9


def random_disc(
    count: int,
    radius_m: float,
    minimum_spacing_m: float,
    seed: int,
    *,
    turn: Turn = 0.0,
    antenna: str = "",
) -> Layout:
    """Return antennas at random places in a disc, no two nearer than a given spacing.

    Places are drawn one after another, keeping those that respect the spacing.  Where that no longer finds
    room, the rest is dropped in anywhere and all antennas push each other apart until the spacing holds.
    This reaches packing densities of about 0.75, less for a handful of antennas; the denser, the less
    irregular the result.

    Parameters
    ----------
    count : int
        Number of antennas.
    radius_m : float
        Radius of the disc that holds the antennas' centres [m].
    minimum_spacing_m : float
        Least distance between two centres [m], at least 1 mm; honoured exactly.
    seed : int
        Seed of the random generator.
    turn : float or "random"
        Rotation [deg]; a random one does not change the places drawn for a seed.
    antenna : str
        Name of the design, the same for all.

    Returns
    -------
    Layout
        Antennas numbered from the middle outwards.

    Raises
    ------
    GeometryError
        If no layout can exist (by Groemer's bound [1]_), or none was found; the message gives the packing
        density asked for (area of circles of the spacing as diameter over that of the disc holding them).

    References
    ----------
    .. [1] H. Groemer, "Über die Einlagerung von Kreisen in einen konvexen Bereich", Math. Z. 73 (1960)
       285-294: N points with mutual distances of at least s in a convex region of area A and perimeter L
       satisfy N <= 2 A / (sqrt(3) s^2) + L / (2 s) + 1.
    """
    _check_count("count", count)
    _check_length("radius_m", radius_m)
    _check_length("minimum_spacing_m", minimum_spacing_m, least=SAME_PLACE_M)
    places_rng, _ = _generators(seed)
    ratio = radius_m / minimum_spacing_m
    most = 2.0 / math.sqrt(3.0) * math.pi * ratio**2 + math.pi * ratio + 1.0
    density = count * 0.25 / (ratio + 0.5) ** 2
    asked = f"{count} antennas {minimum_spacing_m:g} m apart in a disc of radius {radius_m:g} m"
    if count > most + 1e-9:
        msg = (
            f"{asked}: impossible; at most {math.floor(most)} can stand there, whatever their arrangement "
            f"(packing density asked for {density:.2f}); widen the disc or lower the spacing"
        )
        raise GeometryError(msg)
    best = 0.0
    for _ in range(_ATTEMPTS):
        places = _draw(count, radius_m, minimum_spacing_m, places_rng)
        places, reached = _push_apart(places, radius_m, minimum_spacing_m)
        if reached >= minimum_spacing_m:
            order = np.argsort(np.hypot(places[:, 0], places[:, 1]), kind="stable")
            return _layout(places[order], turn, seed, antenna)
        best = max(best, reached)
    msg = (
        f"{asked}: not found in {_ATTEMPTS} attempts; the packing density asked for is {density:.2f}, many "
        f"antennas reach about 0.75 (the closest pair stayed {minimum_spacing_m - best:.2g} m short); widen "
        f"the disc, lower the spacing or use a regular layout"
    )
    raise GeometryError(msg)


def rings(
    counts: int | Sequence[int],
    spacing_m: float,
    *,
    turn: Turn = 0.0,
    seed: int | None = None,
    antenna: str = "",
) -> Layout:
    """Return antennas on concentric rings, the first of each ring towards the east.

    Parameters
    ----------
    counts : int or sequence of int
        Antennas on each ring from the centre outwards.  The first entry is the centre itself (0 or 1), entry
        k the ring of radius k * spacing.  A single number n means one antenna in the centre and n rings, each
        with as many antennas as stand at least one spacing apart.
    spacing_m : float
        Difference of the radii [m].
    turn : float or "random"
        Rotation [deg].
    seed : int, optional
        Seed for random rotations.
    antenna : str
        Name of the design, the same for all.

    Returns
    -------
    Layout
        Antennas ring by ring, from east towards north.

    Raises
    ------
    GeometryError
        If a count or the spacing makes no sense.
    """
    _check_length("spacing_m", spacing_m, least=SAME_PLACE_M)
    if isinstance(counts, int | np.integer):
        _check_count("counts", counts)
        # a chord of ring k spans 2 k sin(pi / n) spacings; six fit the first ring to the last digit
        each = [1, *(int(math.pi / math.asin(0.5 / k) + 1e-9) for k in range(1, int(counts) + 1))]
    else:
        each = list(counts)
        for k, number in enumerate(each):
            _check_count(f"counts[{k}]", number, least=0)
        if not each or each[0] > 1 or sum(each) == 0:
            msg = f"counts: expected 0 or 1 for the centre, then the antennas of each ring, got {each}"
            raise GeometryError(msg)
    radius = np.repeat(np.arange(len(each)) * float(spacing_m), each)
    angle = np.concatenate([np.arange(n) * (2.0 * np.pi / max(n, 1)) for n in each])
    return _layout(_polar(radius, angle), turn, seed, antenna)


def spiral(
    count: int,
    radius_m: float,
    arms: int | None = None,
    *,
    inner_radius_m: float | None = None,
    winding_deg: float = 360.0,
    turn: Turn = 0.0,
    seed: int | None = None,
    antenna: str = "",
) -> Layout:
    """Return antennas on a spiral: Fermat's with the golden angle, or equal logarithmic arms.

    Parameters
    ----------
    count : int
        Number of antennas; with arms, a multiple of their number.
    radius_m : float
        Radius of the outermost antenna [m].
    arms : int, optional
        Number of logarithmic arms.  Without it, antenna k = 0, 1, ... stands at the angle k times the golden
        angle and a radius that grows with the square root of k + 1/2, which covers the disc evenly [1]_.
    inner_radius_m : float, optional
        Radius at which the arms begin [m]; a tenth of the outer one by default.  Only with arms.
    winding_deg : float
        Angle through which an arm turns from its inner to its outer end [deg]; only with arms.
    turn : float or "random"
        Rotation of the antennas [deg].
    seed : int, optional
        Seed for random rotations.
    antenna : str
        Name of the design, the same for all.

    Returns
    -------
    Layout
        Antennas from the inside outwards.

    Raises
    ------
    GeometryError
        If a number makes no sense.

    References
    ----------
    .. [1] H. Vogel, "A better way to construct the sunflower head", Math. Biosciences 44 (1979) 179-189.
    """
    _check_count("count", count)
    _check_length("radius_m", radius_m)
    if arms is None:
        if inner_radius_m is not None:
            msg = "inner_radius_m: has a meaning only for a spiral with arms"
            raise GeometryError(msg)
        k = np.arange(count)
        golden_angle = math.pi * (3.0 - math.sqrt(5.0))
        return _layout(_polar(radius_m * np.sqrt((k + 0.5) / (count - 0.5)), k * golden_angle), turn, seed, antenna)
    _check_count("arms", arms)
    if count % arms:
        msg = f"count: expected a multiple of the number of arms, got {count} antennas on {arms} arms"
        raise GeometryError(msg)
    inner = 0.1 * radius_m if inner_radius_m is None else inner_radius_m
    _check_length("inner_radius_m", inner)
    if inner >= radius_m or not math.isfinite(winding_deg):
        msg = (
            f"spiral: expected inner_radius_m below radius_m and a finite winding_deg, "
            f"got {inner:g}, {radius_m:g} and {winding_deg:g}"
        )
        raise GeometryError(msg)
    step, arm = np.divmod(np.arange(count), arms)
    along = step / max(count // arms - 1, 1) if count > arms else np.ones(count)
    angle = 2.0 * np.pi * arm / arms + math.radians(winding_deg) * along
    return _layout(_polar(inner * (radius_m / inner) ** along, angle), turn, seed, antenna)


def grid(
    columns: int,
    rows: int,
    spacing_m: float | tuple[float, float],
    *,
    turn: Turn = 0.0,
    seed: int | None = None,
    antenna: str = "",
) -> Layout:
    """Return antennas on a rectangular grid, its middle at the reference point.

    Parameters
    ----------
    columns, rows : int
        Antennas along east and along north.
    spacing_m : float or tuple of float
        Spacing [m], or the spacings along east and along north.
    turn : float or "random"
        Rotation [deg].
    seed : int, optional
        Seed for random rotations.
    antenna : str
        Name of the design, the same for all.

    Returns
    -------
    Layout
        Antennas row by row from the south-west corner.

    Raises
    ------
    GeometryError
        If a count or a spacing makes no sense.
    """
    _check_count("columns", columns)
    _check_count("rows", rows)
    spacings = spacing_m if isinstance(spacing_m, tuple) else (spacing_m, spacing_m)
    if len(spacings) != 2:
        msg = f"spacing_m: expected one spacing or two (east, north), got {len(spacings)}"
        raise GeometryError(msg)
    for spacing in spacings:
        _check_length("spacing_m", spacing, least=SAME_PLACE_M)
    row, column = np.divmod(np.arange(columns * rows), columns)
    east = (column - 0.5 * (columns - 1)) * spacings[0]
    north = (row - 0.5 * (rows - 1)) * spacings[1]
    return _layout(np.column_stack([east, north]), turn, seed, antenna)


def _check_count(name: str, value: int, least: int = 1) -> None:
    if isinstance(value, bool) or not isinstance(value, int | np.integer) or value < least:
        msg = f"{name}: expected a whole number, {least} or more, got {value!r}"
        raise GeometryError(msg)


def _check_length(name: str, value: float, least: float = 0.0) -> None:
    number = isinstance(value, int | float | np.integer | np.floating) and not isinstance(value, bool)
    if not number or not math.isfinite(value) or value < least or value <= 0.0:
        bound = f"of at least {least:g} m" if least else "above 0 m"
        msg = f"{name}: expected a length {bound}, got {value!r}"
        raise GeometryError(msg)


def _generators(seed: int | None) -> tuple[np.random.Generator, np.random.Generator]:
    """Independent generators of places and of rotations."""
    _check_count("seed", seed, least=0)  # type: ignore[arg-type]
    places, turns = np.random.SeedSequence(seed).spawn(2)
    return np.random.default_rng(places), np.random.default_rng(turns)


def _polar(radius: FloatArray, angle: FloatArray) -> FloatArray:
    return np.column_stack([radius * np.cos(angle), radius * np.sin(angle)])


def _layout(places: FloatArray, turn: Turn, seed: int | None, antenna: str) -> Layout:
    count = len(places)
    width = max(3, len(str(count)))
    if isinstance(turn, str):
        if turn != "random":
            msg = f"turn: expected a number of degrees or 'random', got {turn!r}"
            raise GeometryError(msg)
        if seed is None:
            msg = "seed: random rotations need a seed, so that the layout can be made again"
            raise GeometryError(msg)
        rotation = _generators(seed)[1].uniform(0.0, 360.0, count)
    else:
        rotation = np.full(count, turn, dtype=float)
    names = tuple(f"A{i:0{width}d}" for i in range(1, count + 1))
    return Layout(names, np.column_stack([places, np.zeros(count)]), rotation, antenna=(antenna,) * count)


def _draw(count: int, radius: float, spacing: float, rng: np.random.Generator) -> FloatArray:
    """Places kept one by one if they respect the spacing; once no room is found, the rest falls anywhere."""
    places = np.empty((count, 2))
    free_squared = (spacing * (1.0 + _ROUNDING)) ** 2
    for i in range(count):
        for batch in range(_BATCHES):
            # while there is much room, one of the first few will do
            candidates = _uniform_in_disc(_BATCH if batch else 4, radius, rng)
            apart = candidates[:, None, :] - places[None, :i, :]
            clear = np.all(np.einsum("cpx,cpx->cp", apart, apart) >= free_squared, axis=1)
            if clear.any():
                places[i] = candidates[np.argmax(clear)]
                break
        else:
            places[i:] = _uniform_in_disc(count - i, radius, rng)
            break
    return places


def _uniform_in_disc(count: int, radius: float, rng: np.random.Generator) -> FloatArray:
    return _polar(radius * (1.0 - _ROUNDING) * np.sqrt(rng.random(count)), 2.0 * np.pi * rng.random(count))


def _push_apart(places: FloatArray, radius: float, spacing: float) -> tuple[FloatArray, float]:
    """Move pairs that stand too near apart, again and again; return places and their closest spacing."""
    from scipy.spatial import cKDTree

    target = spacing * (1.0 + _OVERSHOOT)
    closest = 0.0
    for _ in range(_SWEEPS):
        pairs = cKDTree(places).query_pairs(target, output_type="ndarray")
        apart = places[pairs[:, 0]] - places[pairs[:, 1]]
        distance = np.hypot(apart[:, 0], apart[:, 1])
        closest = float(distance.min(initial=target))
        if closest >= spacing * (1.0 + _ROUNDING):
            return places, closest
        # each of a pair takes half of what is missing, a little less so that crowds do not swing
        push = (0.45 * (target - distance) / np.maximum(distance, _ROUNDING * spacing))[:, None] * apart
        move = np.zeros_like(places)
        np.add.at(move, pairs[:, 0], push)
        np.subtract.at(move, pairs[:, 1], push)
        moved = places + move
        outside = np.hypot(moved[:, 0], moved[:, 1]) / (radius * (1.0 - _ROUNDING))
        moved /= np.maximum(outside, 1.0)[:, None]
        jammed = float(np.max(np.abs(moved - places))) < _STANDSTILL * spacing
        places = moved
        if jammed:
            break
    return places, min(closest, spacing * (1.0 - _ROUNDING))
