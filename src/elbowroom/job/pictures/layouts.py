"""A picture of a station: where its antennas stand, seen from above, and what one of each design looks like."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
from matplotlib.collections import LineCollection
from matplotlib.layout_engine import ConstrainedLayoutEngine
from matplotlib.lines import Line2D

from elbowroom.base.arrays import FloatArray
from elbowroom.base.constants import wavelength_of
from elbowroom.geometry.antennas import Antenna
from elbowroom.geometry.stations import Placed, Station
from elbowroom.job.damage import AMPLIFIER_OFF, OPEN, SHORTED, Damage
from elbowroom.job.pictures.sheets import (
    HALO,
    PORT_COLOURS,
    band_text,
    legend_above,
    printable,
    sheet,
    shortened,
    termination_text,
)
from elbowroom.system.terminations import PortTermination, Termination

if TYPE_CHECKING:
    from matplotlib.axes import Axes

    from elbowroom.job.jobmodel import Job

_FEW_ANTENNAS = 30
_NAMED_ANTENNAS = 60
_MOST_DESIGNS = 3
_MARK = "#b3123f"
_BROKEN = "#7a1fa2"
_STATE_MARKS = {OPEN: "o", SHORTED: "X", AMPLIFIER_OFF: "s"}


def missing_antennas(job: Job) -> tuple[Placed, ...]:
    """Return the antennas that a job says are missing, where they would stand."""
    if not job.damage.missing:
        return ()
    whole = replace(job, damage=Damage()).station()
    return tuple(placed for placed in whole if placed.name in job.damage.missing)


def draw_layout(
    station: Station,
    path: str | Path,
    *,
    title: str = "",
    frequencies_hz: Sequence[float] = (),
    termination: Termination | Sequence[PortTermination] | None = None,
    damage: Damage | None = None,
    missing: Sequence[Placed] = (),
) -> Path:
    """Draw a station as seen from above, and one antenna of each design from the side.

    Parameters
    ----------
    station : Station
        What to draw; nothing is solved.
    path : str or Path
        The PNG file.
    title : str, optional
        Title of the job.
    frequencies_hz : sequence of float, optional
        Frequencies of the job [Hz]; the spacing is told in wavelengths at the lowest and the highest one.
    termination : optional
        What the ports see [ohm], or terminations that change over frequency.
    damage : Damage, optional
        Ports that are dead, to be marked.
    missing : sequence of Placed, optional
        Antennas that are no part of the station, and where they would stand; see `missing_antennas`.

    Returns
    -------
    Path
        The file.

    Raises
    ------
    ExportError
        If the file cannot be written.
    """
    pair, spacing, diameter = _extent(station)
    n_ports = len(station.port_names)
    counts = f"{_counted(len(station), 'antenna')}, {_counted(n_ports, 'port')}"
    dead = _dead_ports(station, damage)
    details = [
        title,
        counts,
        _spacing_text(station, pair, spacing, diameter, frequencies_hz),
    ]
    caption = [band_text(frequencies_hz), "east and north from the reference point of the layout"]
    if termination is not None:
        caption.append(termination_text(termination))
    colours = port_colours(station)
    shown = station.designs[:_MOST_DESIGNS]
    radii = sorted({wire.radius * 1e3 for design in station.designs for wire in design.wires})
    if AMPLIFIER_OFF in dead.values():
        caption.append("off: amplifier off")
    caption.append(f"wire radius {radii[0]:.3g}" + (f" to {radii[-1]:.3g} mm" if len(radii) > 1 else " mm"))
    if len(station.designs) > len(shown):
        caption.append(f"side views of {len(shown)} of {len(station.designs)} designs")
    views = [(design, direction) for design in shown for direction in ("south", "east")]
    if len(shown) > 2:
        views = [(design, "south") for design in shown]
    with sheet(path, "Station layout", details, caption, size=(12.0, 8.0)) as figure:
        engine = figure.get_layout_engine()
        assert isinstance(engine, ConstrainedLayoutEngine)
        # Titles of lower side views must not touch the labels above them.
        engine.set(hspace=0.1)
        grid = figure.add_gridspec(len(views), 2, width_ratios=(1.75, 1.0))
        plan = figure.add_subplot(grid[:, 0])
        handles = draw_from_above(plan, station, colours, pair)
        legend_above(figure, handles, [str(handle.get_label()) for handle in handles])
        plan.set_title("seen from above", loc="left")
        marks = _mark_damage(plan, station, dead, missing)
        if marks:
            plan.legend(handles=marks, loc="lower right", bbox_to_anchor=(1.0, 1.0), ncols=len(marks), borderaxespad=0.1,
                        columnspacing=1.1, handletextpad=0.2, fontsize=8.0)  # fmt: skip
        for row, (design, direction) in enumerate(views):
            axes = figure.add_subplot(grid[row, 1])
            draw_from_side(axes, station, design, direction, colours, len(views))
    return Path(path)


def _counted(count: int, noun: str) -> str:
    return f"{count} {noun}{'' if count == 1 else 's'}"


def _dead_ports(station: Station, damage: Damage | None) -> dict[int, str]:
    """Return what is wrong with dead ports, by their row."""
    if damage is None:
        return {}
    return {row: state for row, name in enumerate(station.port_names) if (state := damage.state(name)) is not None}


def _mark_damage(axes: Axes, station: Station, dead: dict[int, str], missing: Sequence[Placed]) -> list[Line2D]:
    """Mark dead ports at the tips of their arrows and missing antennas where they would stand; return what a legend needs."""
    handles = []
    few = len(station) <= _FEW_ANTENNAS
    size = 7.0 if few else 5.5
    tips = _port_tips(station)
    # Ports that look one way would hide one another's marks; antennas of many ports do so anyway.
    for state, marker in _STATE_MARKS.items():
        rows = [row for row, found in dead.items() if found == state]
        if rows:
            hollow = state == OPEN
            (line,) = axes.plot(
                *tips[rows].T, marker, ms=size + (2.5 if state == SHORTED else 0.0), color=_BROKEN, mew=1.3 if hollow else 0.6,
                mfc="white" if hollow else _BROKEN, mec=_BROKEN if hollow else "white", zorder=6,
                label=f"{_counted(len(rows), 'port')} {'off' if state == AMPLIFIER_OFF else state}",
            )  # fmt: skip
            handles.append(line)
    if missing:
        places = np.array([placed.position[:2] for placed in missing])
        ends = np.concatenate([_wire_ends(placed) for placed in missing])[:, :, :2]
        axes.add_collection(LineCollection(list(ends), colors="0.6", linewidths=1.0, linestyles=":", zorder=2))
        (line,) = axes.plot(*places.T, "x", ms=size + 3.0, color=_BROKEN, mew=2.2, zorder=6,
                          label=f"{_counted(len(missing), 'antenna')} missing")  # fmt: skip
        handles.append(line)
        _fit(axes, ends.reshape(-1, 2))
    # In large stations only what is broken has a name.
    owners = sorted({int(station.port_antennas[row]) for row in dead}) if len(station) > _NAMED_ANTENNAS else []
    _name(axes, [*missing, *(station.placed[i] for i in owners)][:_NAMED_ANTENNAS], _BROKEN, 8.5 if few else 7.0)
    return handles


def _extent(station: Station) -> tuple[tuple[int, int] | None, float, float]:
    """Return the closest pair, its distance and the largest distance between two antennas [m]."""
    from scipy.spatial import cKDTree

    places = station.positions
    if len(places) == 1:
        return None, np.inf, 0.0
    distance, index = cKDTree(places).query(places, k=2)
    # Of antennas in one place either may come first; the farther column is never the antenna itself then.
    first = int(np.argmin(distance[:, 1]))
    second = int(index[first, 1]) if index[first, 1] != first else int(index[first, 0])
    diameter = max(float(np.max(np.linalg.norm(places[i:] - places[i], axis=1))) for i in range(len(places)))
    return (first, second), float(distance[first, 1]), diameter


def _spacing_text(
    station: Station, pair: tuple[int, int] | None, spacing: float, diameter: float, frequencies_hz: Sequence[float]
) -> str:
    if pair is None:
        return ""
    names = " and ".join(printable(shortened(station.placed[i].name, 16)) for i in pair)
    waves = ""
    if len(frequencies_hz):
        waves = " to ".join(f"{spacing / wavelength_of(f):.2f}" for f in sorted({min(frequencies_hz), max(frequencies_hz)}))
        waves = f" = {waves} wavelengths"
    return f"closest pair {names}: {spacing:.3g} m{waves}; diameter {diameter:.3g} m"


def port_colours(station: Station) -> dict[str, str]:
    """Return a colour for each port name, in order of first use."""
    names = dict.fromkeys(n.port for n in station.port_names)
    return {name: PORT_COLOURS[i % len(PORT_COLOURS)] for i, name in enumerate(names)}


def _wire_ends(placed: Placed) -> FloatArray:
    """Return the ends of the wires of a placed antenna in the station frame, (W, 2, 3) [m]."""
    return placed.to_station(np.array([(w.start, w.end) for w in placed.antenna.wires]))


def draw_from_above(
    axes: Axes,
    station: Station,
    colours: dict[str, str],
    pair: tuple[int, int] | None = None,
    *,
    named: bool = True,
) -> list[Line2D]:
    """Draw wires and ports as seen from above, and return what a legend needs; the closest pair is marked if given."""
    wires = [_wire_ends(placed) for placed in station]
    flat = np.concatenate(wires)[:, :, :2]
    few = len(station) <= _FEW_ANTENNAS
    axes.add_collection(LineCollection(list(flat), colors="0.45", linewidths=1.6 if few else 0.8, zorder=2))
    middle_of_gap, level = _port_places(station)
    tips = _port_tips(station)
    port_of = np.array([n.port for n in station.port_names])
    for name, colour in colours.items():
        mine = level & (port_of == name)
        axes.quiver(
            *middle_of_gap[mine, :2].T,
            *(tips - middle_of_gap[:, :2])[mine].T,
            angles="xy", scale_units="xy", scale=1.0, units="dots", width=2.6 if few else 1.4,
            headwidth=4.0, headlength=4.5, headaxislength=4.0, color=colour, zorder=3,
        )  # fmt: skip
        upright = ~level & (port_of == name)
        axes.plot(*middle_of_gap[upright, :2].T, "o", ms=5 if few else 3, mfc="none", mec=colour, zorder=3)
    if pair is not None:
        axes.plot(*station.positions[list(pair), :2].T, "-", color=_MARK, lw=1.2, zorder=4)
        axes.plot(*station.positions[list(pair), :2].T, "o", ms=11 if few else 8, mfc="none", mec=_MARK, mew=1.1, zorder=4)
    if named and len(station) <= _NAMED_ANTENNAS:
        _name(axes, station.placed, "0.15", 8.5 if few else 7.0)
    shown = np.concatenate([flat.reshape(-1, 2), tips[level]])
    _fit(axes, shown)
    axes.set_aspect("equal")
    axes.set_xlabel("east [m]")
    axes.set_ylabel("north [m]")
    axes.grid(color="0.92", lw=0.6)
    axes.set_axisbelow(True)
    arrow_style = {"arrowstyle": "-|>,head_width=0.3,head_length=0.6", "color": "0.1", "lw": 1.4}
    axes.annotate(
        "", xy=(1.03, 0.96), xytext=(1.03, 0.87), xycoords="axes fraction", textcoords="axes fraction", arrowprops=arrow_style
    )
    axes.text(1.03, 0.965, "N", transform=axes.transAxes, ha="center", va="bottom", fontweight="bold")
    handles = [Line2D([], [], color="0.45", lw=1.6, label="wires")]
    handles += [
        Line2D([], [], color=colour, lw=2.0, label=f"port {printable(shortened(name, 16))}: co-polarisation")
        if np.any(level[port_of == name])
        else Line2D([], [], ls="", marker="o", mfc="none", mec=colour, label=f"port {printable(shortened(name, 16))}: vertical")
        for name, colour in colours.items()
    ]
    if pair is not None:
        handles.append(Line2D([], [], color=_MARK, marker="o", mfc="none", lw=1.2, label="closest pair"))
    return handles


def _fit(axes: Axes, points: FloatArray) -> None:
    """Give a plan limits that show some points (N, 2) [m], and what it was made to show before, in a square."""
    if axes.get_autoscale_on():
        low, high = points.min(axis=0), points.max(axis=0)
    else:
        inner = np.array([axes.get_xlim(), axes.get_ylim()])
        low, high = np.minimum(inner[:, 0], points.min(axis=0)), np.maximum(inner[:, 1], points.max(axis=0))
        if np.all(low == inner[:, 0]) and np.all(high == inner[:, 1]):
            return
    half = max(0.54 * float(np.max(high - low)), 0.3)
    middle = 0.5 * (low + high)
    axes.set_xlim(middle[0] - half, middle[0] + half)
    axes.set_ylim(middle[1] - half, middle[1] + half)


def _name(axes: Axes, antennas: Sequence[Placed], colour: str, size: float = 8.5) -> None:
    """Write the names of antennas beside them."""
    for placed in antennas:
        # At 45 degrees between the arms of a crossed antenna there is room.
        where = np.asarray(placed.position[:2]) + 0.25 * _reach(placed) * np.array([1.0, -1.0])
        axes.annotate(
            printable(shortened(placed.name, 12)), (where[0], where[1]), xytext=(4, -4), textcoords="offset points",
            ha="left", va="top", fontsize=size, color=colour, zorder=5, path_effects=HALO,
        )  # fmt: skip


def _reach(placed: Placed) -> float:
    """Return how far an antenna's wires reach from its place, seen from above [m]."""
    return float(np.max(np.linalg.norm(_wire_ends(placed)[:, :, :2] - placed.position[:2], axis=-1)))


def _port_tips(station: Station) -> FloatArray:
    """Return where the arrows of ports end, (P, 2) [m]: as far as their antennas reach; the gap itself for upright ports."""
    middle, level = _port_places(station)
    arrow = np.where(level, np.maximum([_reach(placed) for placed in station], 1e-3)[station.port_antennas], 0.0)
    heading = station.port_nominal_phi_rad
    return np.asarray(middle[:, :2] + arrow[:, None] * np.array([np.cos(heading), np.sin(heading)]).T)


def _port_places(station: Station) -> tuple[FloatArray, np.ndarray]:
    """Return the middle of each port's gap, (P, 3) [m], and whether the port has a direction in the horizontal plane, (P,)."""
    places, level = [], []
    for placed in station:
        for port, gap in zip(placed.antenna.ports, placed.antenna.port_gaps, strict=True):
            wire = placed.antenna.wires[gap.wire]
            places.append(placed.to_station(wire.point(0.5 * (gap.low + gap.high))))
            along = placed.to_station(np.array([wire.start, wire.end]))
            across = float(np.hypot(*(along[1] - along[0])[:2]))
            level.append(port.nominal_azimuth_deg is not None or across > 1e-6 * wire.length)
    return np.array(places), np.array(level)


def draw_from_side(
    axes: Axes,
    station: Station,
    design: Antenna,
    direction: str,
    colours: dict[str, str],
    rows: int = 1,
    *,
    named: bool = True,
) -> None:
    """Draw the first antenna of a design as seen from the south or the east, with its gaps and the ground.

    Parameters
    ----------
    axes : Axes
        Where to.
    station : Station
        That has the antenna.
    design : Antenna
        Which.
    direction : "south" or "east"
        Where it is seen from.
    colours : dict of str to str
        Of ports by name.
    rows : int, optional
        How many of these panels lie on top of one another.
    named : bool, optional
        Whether its title names antenna and design.
    """
    placed = next(p for p in station if p.antenna is design or p.antenna == design)
    ends = _wire_ends(placed)
    # From the south east lies on the right, from the east north does.
    across = 0 if direction == "south" else 1
    offset = placed.position[across]
    lines = np.stack([ends[:, :, across] - offset, ends[:, :, 2]], axis=-1)
    axes.add_collection(LineCollection(list(lines), colors="0.35", linewidths=2.0, capstyle="round", zorder=2))
    count = sum(p.antenna == design for p in station)
    points = lines.reshape(-1, 2)
    width = max(float(np.ptp(points[:, 0])), 0.05)
    grounded = not station.ground.open_below
    bottom = min(0.0, float(points[:, 1].min())) if grounded else float(points[:, 1].min())
    top = float(points[:, 1].max())
    height = max(top - bottom, 0.05)
    for i, (port, gap) in enumerate(zip(design.ports, design.port_gaps, strict=True)):
        middle = placed.to_station(design.wires[gap.wire].point(0.5 * (gap.low + gap.high)))
        at = (middle[across] - offset, middle[2])
        axes.plot(*at, "s", ms=5.5, mfc="white", mec=colours[port.name], mew=1.6, zorder=4)
        axes.annotate(
            printable(shortened(port.name, 12)), at, xytext=(9, 8) if i % 2 == 0 else (-11, 13),
            textcoords="offset points", ha="left" if i % 2 == 0 else "right", va="center",
            color=colours[port.name], fontweight="bold", zorder=5,
        )  # fmt: skip
    for gap in design.gaps[len(design.gaps) - len(design.feeds) :]:
        middle = placed.to_station(design.wires[gap.wire].point(0.5 * (gap.low + gap.high)))
        axes.plot(middle[across] - offset, middle[2], "o", ms=3, mfc="white", mec="0.2", mew=0.9, zorder=3)
    for gap in design.load_gaps:
        middle = placed.to_station(design.wires[gap.wire].point(0.5 * (gap.low + gap.high)))
        axes.plot(middle[across] - offset, middle[2], "D", ms=5, color="0.1", zorder=4)
    middle_x = 0.5 * (points[:, 0].min() + points[:, 0].max())
    # Rows of more than two designs are low and wide.
    half = max(0.62 * width, (0.6 if rows <= 2 else 1.0) * height)
    axes.set_xlim(middle_x - half, middle_x + half)
    if grounded:
        axes.axhspan(bottom - 0.2 * height, 0.0, facecolor="0.93", edgecolor="0.7", hatch="////", lw=0.0, zorder=0)
        axes.axhline(0.0, color="0.2", lw=1.3, zorder=1)
        axes.text(0.985, 0.02, f"{station.ground.name} ground", transform=axes.transAxes, ha="right", va="bottom", fontsize=8,
                  bbox={"facecolor": "white", "edgecolor": "none", "pad": 1.5})  # fmt: skip
    axes.set_ylim(bottom - (0.16 if grounded else 0.1) * height, top + 0.18 * height)
    axes.set_aspect("equal", anchor="W")
    which = printable(shortened(placed.name, 14)) + (f", one of {count}" if count > 1 else "")
    space = "" if grounded else " in free space"
    seen = f"{space}, from the {direction} ({which})"
    name = printable(shortened(design.name, max(min(24, 52 - len(seen)), 8))) + seen
    axes.set_title(name if named else f"from the {direction}{space}", loc="left", fontsize=9 if named else None)
    axes.set_xlabel(f"{'east' if direction == 'south' else 'north'} of its centre [m]")
    axes.set_ylabel("height [m]")
