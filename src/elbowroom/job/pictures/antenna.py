"""Pictures of one antenna alone: what it looks like, its impedance, gain and patterns, and how converged they are."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
from matplotlib.lines import Line2D
from matplotlib.ticker import FuncFormatter, NullFormatter

from elbowroom.base.arrays import FloatArray
from elbowroom.base.constants import wavelength_of
from elbowroom.base.errors import ModelRangeError
from elbowroom.geometry.directions import azimuth_deg
from elbowroom.geometry.grounds import Ground
from elbowroom.geometry.stations import Station
from elbowroom.job.oneantenna import AntennaFigures, PatternCut
from elbowroom.job.pictures.layouts import draw_from_above, draw_from_side, port_colours
from elbowroom.job.pictures.sheets import (
    PORT_COLOURS,
    band_text,
    frequency_text,
    ground_text,
    legend_above,
    legend_of,
    one_termination_text,
    printable,
    sheet,
    shortened,
)

if TYPE_CHECKING:
    from matplotlib.axes import Axes

_PLANE_WORDS = {"along": "the co-polarisation", "across": "the co-polarisation", "diagonal": "to the co-polarisation"}
_MOST_DOTS = 40
_LEAST_DB = -80.0
"""Levels below this are of rounding or of symmetry, and would squeeze everything else."""


def draw_antenna(station: Station, path: str | Path, *, title: str = "", frequencies_hz: Sequence[float] = ()) -> Path:
    """Draw an antenna from above, from the south and from the east, with its gaps, loads and the ground.

    Parameters
    ----------
    station : Station
        With one antenna.
    path : str or Path
        The PNG file.
    title : str, optional
        Name of the antenna.
    frequencies_hz : sequence of float, optional
        Frequencies [Hz], at the ends of which the size is told in wavelengths.

    Returns
    -------
    Path
        The file.

    Raises
    ------
    ExportError
        If the file cannot be written.
    """
    placed = station.placed[0]
    design = placed.antenna
    points = placed.to_station(np.array([(w.start, w.end) for w in design.wires])).reshape(-1, 3)
    size = np.ptp(points, axis=0)
    details = [title, f"{size[0]:.4g} x {size[1]:.4g} x {size[2]:.4g} m (east, north, up)"]
    if len(frequencies_hz):
        largest = float(np.linalg.norm(size))
        waves = [f"{largest / wavelength_of(f):.2g}" for f in sorted({min(frequencies_hz), max(frequencies_hz)})]
        details.append(f"diagonal {largest:.3g} m = {' to '.join(waves)} wavelengths")
    radii = sorted({wire.radius * 1e3 for wire in design.wires})
    network = design.network
    counts = (
        ("line", network.lines), ("stub", network.stubs), ("branch", network.branches), ("transformer", network.transformers)
    )  # fmt: skip
    plural = {"branch": "branches"}
    inside = [f"{len(e)} {name if len(e) == 1 else plural.get(name, name + 's')}" for name, e in counts if e]
    caption = [
        band_text(frequencies_hz),
        f"{len(design.wires)} wire{'' if len(design.wires) == 1 else 's'}, radius {radii[0]:.3g}"
        + (f" to {radii[-1]:.3g} mm" if len(radii) > 1 else " mm"),
        f"network, not drawn: {', '.join(inside)}" if inside else "",
        "squares: ports; small circles: gaps that the network joins" if design.feeds else "squares: ports",
        "diamonds: lumped loads" if design.loads else "",
    ]
    colours = port_colours(station)
    with sheet(path, "The antenna", details, caption, size=(13.0, 5.8)) as figure:
        panels = figure.subplots(1, 3)
        handles = draw_from_above(panels[0], station, colours, named=False)
        panels[0].set_title("from above", loc="left")
        for axes, direction in zip(panels[1:], ("south", "east"), strict=True):
            draw_from_side(axes, station, design, direction, colours, named=False)
        legend_above(figure, handles, [str(handle.get_label()) for handle in handles])
    return Path(path)


def _by_port(rows: Sequence[AntennaFigures]) -> dict[str, list[AntennaFigures]]:
    """Return the rows of each port in rising order of frequency."""
    if not rows:
        msg = "antenna picture: expected one solved frequency at least"
        raise ModelRangeError(msg)
    found: dict[str, list[AntennaFigures]] = {}
    for row in sorted(rows, key=lambda r: r.frequency_hz):
        found.setdefault(row.port, []).append(row)
    return found


def _colours(names: Sequence[str]) -> dict[str, str]:
    return {name: PORT_COLOURS[i % len(PORT_COLOURS)] for i, name in enumerate(names)}


def _values(rows: Sequence[AntennaFigures], name: str) -> FloatArray:
    return np.array([getattr(row, name) for row in rows], dtype=float)


class _Curves:
    """Draws quantities of every port over frequency, one panel after another."""

    def __init__(self, rows: Sequence[AntennaFigures]) -> None:
        self.ports = _by_port(rows)
        self.colours = _colours(list(self.ports))

    def panel(
        self,
        axes: Axes,
        title: str,
        label: str,
        *quantities: tuple[str, str, str],
        least: float | None = None,
        change: Callable[[FloatArray], FloatArray] | None = None,
    ) -> None:
        """Draw some quantities: name, line style and how it is called beside the port's name."""
        shown = False
        for k, (port, rows) in enumerate(self.ports.items()):
            x = _values(rows, "frequency_hz") / 1e6
            for name, style, called in quantities:
                y = _values(rows, name)
                y = y if change is None else change(y)
                y = y if least is None else np.where(y < least, np.nan, y)
                if not np.any(np.isfinite(y)):
                    continue
                shown = True
                label_of = f"port {printable(shortened(port, 12))}" + (f", {called}" if called else "")
                # Ports alike lie on one another; later ones are thinner, so that both show.
                axes.plot(
                    x, y, style, color=self.colours[port], lw=2.2 - 0.9 * min(k, 1), label=label_of,
                    marker="o" if len(x) <= _MOST_DOTS else "", ms=max(4.5 - 1.3 * k, 2.0),
                )  # fmt: skip
        axes.set_title(title, loc="left")
        axes.set_ylabel(label)
        axes.set_xlabel("frequency [MHz]")
        axes.grid(color="0.92", lw=0.6)
        axes.margins(x=0.02)
        if not shown:
            axes.set_xticks([])
            axes.set_yticks([])
            axes.text(0.5, 0.5, "nothing to show", transform=axes.transAxes, ha="center", va="center", color="0.4")


def _wide(axes: Axes, least: float) -> None:
    """Give the vertical scale at least this range, so that rounding does not fill a panel."""
    low, high = axes.get_ylim()
    lacking = max(least - (high - low), 0.0)
    axes.set_ylim(low - 0.5 * lacking, high + 0.5 * lacking)


def _decades(axes: Axes) -> None:
    """Make the vertical scale logarithmic over whole decades, labelled with plain numbers."""
    values = np.concatenate([np.asarray(line.get_ydata(), dtype=float) for line in axes.lines])
    known = values[np.isfinite(values) & (values > 0.0)]
    axes.set_yscale("log")
    if known.size:
        low, high = np.floor(np.log10(known.min())), np.ceil(np.log10(known.max()))
        axes.set_ylim(10.0**low, 10.0 ** max(high, low + 1.0))
    axes.yaxis.set_major_formatter(FuncFormatter(lambda value, _: f"{value:g}"))
    axes.yaxis.set_minor_formatter(NullFormatter())


def _ground(ground: Ground | None) -> str:
    return "" if ground is None else ground_text(ground)


def _styles_below(axes: Axes, *styles: tuple[str, str]) -> None:
    """Say below the axis of a panel, where nothing lies on curves, what line styles are; colours are those of ports."""
    lines = [Line2D([], [], color="0.25", ls=style, lw=1.8, label=called) for style, called in styles]
    axes.legend(
        handles=lines, loc="upper center", bbox_to_anchor=(0.5, -0.14), ncols=len(lines), handlelength=3.6, columnspacing=1.6
    )


def _seen_text(termination: complex) -> str:
    return f"every port terminated with {one_termination_text(termination)}"


def draw_antenna_impedance(
    rows: Sequence[AntennaFigures],
    path: str | Path,
    *,
    termination: complex = 100.0,
    title: str = "",
    ground: Ground | None = None,
) -> Path:
    """Draw impedance, reflection and coupling of the ports over frequency.

    Parameters
    ----------
    rows : sequence of AntennaFigures
        Of all ports and frequencies.
    path : str or Path
        The PNG file.
    termination : complex, optional
        What the ports see [ohm].
    title : str, optional
        Name of the antenna.
    ground : Ground, optional
        What it stands on, to be told.

    Raises
    ------
    ModelRangeError
        If there are no rows.
    ExportError
        If the file cannot be written.
    """
    curves = _Curves(rows)
    frequencies = sorted({row.frequency_hz for row in rows})
    coupled = len(curves.ports) > 1
    # Ports that a symmetry keeps apart would leave a panel empty.
    apart = coupled and not any(np.any(_values(r, "coupling_db") >= _LEAST_DB) for r in curves.ports.values())
    caption = [_seen_text(termination), "reflection: of power waves, |(Z - conj(Z_T))/(Z + Z_T)|"]
    if apart:
        caption.append(f"coupling between ports: below {_LEAST_DB:g} dB everywhere")
    elif not coupled:
        caption.append("circles: reflections of 0, -6 and -10 dB")
    details = [title, band_text(frequencies), _ground(ground)]
    with sheet(path, "Impedance and reflection of the antenna", details, caption, size=(13.0, 5.2)) as figure:
        panels = figure.subplots(1, 2 if apart else 3)
        curves.panel(panels[0], "impedance", "R and X [ohm]", ("resistance_ohm", "-", "R"), ("reactance_ohm", "--", "X"))
        panels[0].axhline(0.0, color="0.6", lw=0.8, zorder=0)
        curves.panel(panels[1], "reflection at the termination", "reflection [dB]", ("reflection_db", "-", ""), least=_LEAST_DB)
        panels[1].set_ylim(top=max(0.0, panels[1].get_ylim()[1]))
        if coupled and not apart:
            curves.panel(
                panels[2],
                "largest coupling to another port",
                "power wave out over in [dB]",
                ("coupling_db", "-", ""),
                least=_LEAST_DB,
            )
        elif not coupled:
            _reflection_plane(panels[2], curves, termination)
        _styles_below(panels[0], ("-", "R"), ("--", "X"))
        legend_above(figure, *_port_handles(curves))
    return Path(path)


def _port_handles(curves: _Curves) -> tuple[list[Line2D], list[str]]:
    labels = [f"port {printable(shortened(name, 16))}" for name in curves.ports]
    return [Line2D([], [], color=curves.colours[n], lw=2.0) for n in curves.ports], labels


def _reflection_plane(axes: Axes, curves: _Curves, termination: complex) -> None:
    """Draw the reflection coefficient in the complex plane, frequencies at the ends named."""
    turn = np.linspace(0.0, 2.0 * np.pi, 181)
    for radius in (1.0, 10.0**-0.3, 10.0**-0.5):
        axes.plot(radius * np.cos(turn), radius * np.sin(turn), color="0.3" if radius == 1.0 else "0.85", lw=0.9, zorder=0)
    seen = complex(termination)
    for port, rows in curves.ports.items():
        z = _values(rows, "resistance_ohm") + 1j * _values(rows, "reactance_ohm")
        gamma = (z - seen.conjugate()) / (z + seen)
        axes.plot(gamma.real, gamma.imag, "-o", color=curves.colours[port], lw=1.4, ms=3.5)
        for k in {0, len(rows) - 1}:
            axes.annotate(
                frequency_text(rows[k].frequency_hz), (gamma[k].real, gamma[k].imag), xytext=(5, 5),
                textcoords="offset points", fontsize=8,
            )  # fmt: skip
    axes.axhline(0.0, color="0.85", lw=0.8, zorder=0)
    axes.axvline(0.0, color="0.85", lw=0.8, zorder=0)
    axes.set_xlim(-1.08, 1.08)
    axes.set_ylim(-1.08, 1.08)
    axes.set_aspect("equal")
    axes.set_title("reflection in the complex plane", loc="left")
    axes.set_xlabel("real part")
    axes.set_ylabel("imaginary part")


def draw_antenna_gain(
    rows: Sequence[AntennaFigures],
    path: str | Path,
    *,
    termination: complex = 100.0,
    title: str = "",
    ground: Ground | None = None,
    free_space: bool = False,
) -> Path:
    """Draw directivity, gain, half-power widths, cross-polarisation, efficiency and, in free space, front-to-back ratio.

    Parameters are those of :func:`draw_antenna_impedance`, and whether the antenna stands in free space.
    """
    curves = _Curves(rows)
    frequencies = sorted({row.frequency_hz for row in rows})
    caption = [
        _seen_text(termination),
        "over isotropic; realised gain: with the mismatch at the termination",
        "widths: of the lobe with the largest value in the vertical planes along and across the co-polarisation; "
        "none where the horizon cuts it",
        "cross-polarisation: largest within half power of the peak, Ludwig's third definition",
        "efficiency: radiated over accepted power" + (", what other ports take counted as lost" if len(curves.ports) > 1 else ""),
    ]
    details = [title, band_text(frequencies), _ground(ground)]
    with sheet(path, "Gain and patterns of the antenna over frequency", details, caption, size=(13.0, 8.6)) as figure:
        panels = figure.subplots(2, 3)
        curves.panel(
            panels[0, 0], "directivity", "dB over isotropic", ("peak_directivity_db", "-", "peak"),
            ("zenith_directivity_db", ":", "zenith"), least=_LEAST_DB,
        )  # fmt: skip
        curves.panel(
            panels[0, 1], "realised gain", "dB over isotropic", ("peak_realised_gain_db", "-", "peak of directivity"),
            ("zenith_realised_gain_db", ":", "zenith"), least=_LEAST_DB,
        )  # fmt: skip
        curves.panel(
            panels[0, 2],
            "half-power width",
            "width [deg]",
            ("width_along_deg", "-", "along"),
            ("width_across_deg", "--", "across"),
        )
        curves.panel(
            panels[1, 0], "cross-polarisation in the half-power beam", "below co-polar [dB]", ("cross_polar_db", "-", "")
        )
        curves.panel(
            panels[1, 1], "radiation efficiency", "radiated over accepted power [%]", ("radiation_efficiency", "-", ""),
            change=lambda y: 100.0 * y,
        )  # fmt: skip
        if free_space:
            curves.panel(panels[1, 2], "front to back", "peak over opposite direction [dB]", ("front_to_back_db", "-", ""))
            _wide(panels[1, 2], 1.0)
        else:
            curves.panel(panels[1, 2], "where the peak lies", "zenith angle [deg]", ("peak_zenith_angle_deg", "-", ""))
            _wide(panels[1, 2], 5.0)
        for axes in (panels[0, 0], panels[0, 1], panels[1, 0]):
            _wide(axes, 1.0)
        _wide(panels[0, 2], 5.0)
        _wide(panels[1, 1], 1.0)
        for axes in panels[0]:
            if any(np.any(np.isfinite(line.get_ydata())) for line in axes.lines):
                axes.legend(loc="best", fontsize=8.0, handlelength=3.4)
        legend_above(figure, *_port_handles(curves))
    return Path(path)


def draw_antenna_convergence(
    rows: Sequence[AntennaFigures], path: str | Path, *, title: str = "", ground: Ground | None = None
) -> Path:
    """Draw what changes on the finer mesh: impedance, reflection, directivity and pattern, over frequency.

    Parameters are those of :func:`draw_antenna_impedance`.
    """
    curves = _Curves(rows)
    frequencies = sorted({row.frequency_hz for row in rows})
    unknowns = sorted({row.unknowns for row in rows}), sorted({row.finer_unknowns for row in rows})
    words = ["-".join(str(n) for n in dict.fromkeys((every[0], every[-1]))) for every in unknowns]
    caption = [
        "change of each result when the mesh is refined: about its error on the coarser one",
        f"unknowns: {words[0]}, finer {words[1]}",
        "pattern: largest change of the terminated response over the sky, below its peak",
    ]
    details = [title, band_text(frequencies), _ground(ground)]
    with sheet(path, "Convergence of the antenna's mesh", details, caption, size=(13.0, 5.2)) as figure:
        panels = figure.subplots(1, 3)
        curves.panel(
            panels[0], "impedance and reflection", "change [-]", ("impedance_change", "-", "|Z'/Z - 1|"),
            ("reflection_change", ":", "|change of reflection|"),
        )  # fmt: skip
        _decades(panels[0])
        _styles_below(panels[0], ("-", "|Z'/Z - 1|"), (":", "|change of reflection|"))
        curves.panel(panels[1], "directivity at the peak", "change [dB]", ("directivity_change_db", "-", ""))
        _wide(panels[1], 1e-3)
        curves.panel(panels[2], "pattern", "largest change below the peak [dB]", ("pattern_change_db", "-", ""))
        _wide(panels[2], 10.0)
        legend_above(figure, *_port_handles(curves))
    return Path(path)


def draw_antenna_cuts(
    cuts: Sequence[PatternCut],
    path: str | Path,
    *,
    termination: complex = 100.0,
    title: str = "",
    ground: Ground | None = None,
    floor_db: float = -40.0,
) -> Path:
    """Draw patterns in vertical planes along, across and diagonal to the co-polarisation, a column a frequency.

    Parameters
    ----------
    cuts : sequence of PatternCut
        Of a few frequencies; see :func:`elbowroom.job.oneantenna.pattern_cuts`.
    path : str or Path
        The PNG file.
    termination : complex, optional
        What the ports see [ohm].
    title : str, optional
        Name of the antenna.
    ground : Ground, optional
        What it stands on, to be told.
    floor_db : float, optional
        Lower end of the scales, below the largest value of each frequency [dB].

    Raises
    ------
    ModelRangeError
        If there are no cuts.
    ExportError
        If the file cannot be written.
    """
    if not cuts:
        msg = "antenna picture: expected the cuts of one frequency at least"
        raise ModelRangeError(msg)
    frequencies = sorted({cut.frequency_hz for cut in cuts})
    colours = _colours(list(dict.fromkeys(cut.port for cut in cuts)))
    reach = float(max(cut.angle_deg.max() for cut in cuts))
    caption = [
        _seen_text(termination),
        "realised gain of each component over isotropic; co and cross: Ludwig's third definition",
        "planes of symmetry have no cross-polarisation",
    ]
    for plane in _PLANE_WORDS:
        towards = {
            cut.port: f"{float(azimuth_deg(np.radians(cut.azimuth_phi_deg))):.4g}\u00b0 (port {shortened(cut.port, 12)})"
            for cut in cuts
            if cut.plane == plane
        }
        caption.append(f"{plane}: angles positive towards azimuth {', '.join(towards.values())}")
    size = (max(4.0 + 3.2 * len(frequencies), 8.6), 9.6)
    details = [title, band_text(frequencies), _ground(ground)]
    with sheet(path, "Patterns of the antenna", details, caption, size=size) as figure:
        panels = figure.subplots(3, len(frequencies), squeeze=False, sharex=True, sharey="col")
        for column, frequency in zip(panels.T, frequencies, strict=True):
            here = [cut for cut in cuts if cut.frequency_hz == frequency]
            top = 10.0 * np.log10(max(float(max(cut.co_gain.max(), cut.cross_gain.max())) for cut in here))
            for axes, plane in zip(column, ("along", "across", "diagonal"), strict=True):
                for cut in here:
                    if cut.plane == plane:
                        _draw_cut(axes, cut, colours)
                axes.set_xlim(-reach, reach)
                axes.set_xticks(np.arange(-reach, reach + 1.0, 30.0 if reach <= 90.0 else 60.0))
                axes.grid(color="0.92", lw=0.6)
                axes.set_title(f"{frequency_text(frequency)}, {plane} {_PLANE_WORDS[plane]}", loc="left")
            column[0].set_ylim(np.floor(top + floor_db), np.ceil(top + 1.5))
            column[-1].set_xlabel("zenith angle [deg]")
        for row in panels:
            row[0].set_ylabel("realised gain [dB]")
        legend_above(figure, *legend_of([panels[0, 0]]))
    return Path(path)


def _draw_cut(axes: Axes, cut: PatternCut, colours: dict[str, str]) -> None:
    k = list(colours).index(cut.port)
    name = printable(shortened(cut.port, 12))
    for gain, style, kind in ((cut.co_gain, "-", "co"), (cut.cross_gain, ":", "cross")):
        level = 10.0 * np.log10(np.maximum(gain, 1e-30))
        axes.plot(cut.angle_deg, level, style, color=colours[cut.port], lw=2.2 - 0.9 * min(k, 1), label=f"port {name}, {kind}")
