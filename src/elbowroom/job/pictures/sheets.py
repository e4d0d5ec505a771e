"""What all pictures share: the sheet with its title and caption, file names, decibels, colours, words for terminations.

Figures are drawn without a screen and without the plotting state of the process: the settings below hold only while a
sheet is open.
"""

from __future__ import annotations

import hashlib
import re
import unicodedata
from collections import Counter
from collections.abc import Iterable, Iterator, Sequence
from contextlib import contextmanager
from functools import cache
from pathlib import Path
from typing import Any

import numpy as np
from matplotlib import rc_context
from matplotlib.artist import Artist
from matplotlib.axes import Axes
from matplotlib.backends.backend_agg import FigureCanvasAgg
from matplotlib.figure import Figure
from matplotlib.font_manager import findfont, get_font
from matplotlib.layout_engine import ConstrainedLayoutEngine
from matplotlib.patheffects import withStroke
from numpy.typing import ArrayLike

from elbowroom.base.arrays import FloatArray
from elbowroom.base.errors import ModelRangeError
from elbowroom.geometry.grounds import FreeSpace, Ground, MeshOnSoil, PerfectGround
from elbowroom.geometry.soils import LayeredSoil, MoistSoil, Soil
from elbowroom.job.files import written_whole
from elbowroom.system.solving import ORIGINS
from elbowroom.system.terminations import ParallelCircuit, PortTermination, SampledReflection, SeriesCircuit, Termination

NOT_MEASURED = "model, not a measurement"
"""Said at the foot of every picture."""

INTERPOLATED = ORIGINS[2]
"""Origin of channels that were not solved."""

COUPLED, ISOLATED, DIFFERENCE = "#1b4f9c", "#c8501e", "#4d4d4d"
"""Colours of the coupled result, the isolated one and their difference; told apart in any kind of colour vision."""

PORT_COLOURS = ("#1b6ca8", "#d9801a", "#2a8c5a", "#8a4fa3", "#8c6d31", "#b03a5b")
"""Colours of ports by the order of their names."""

MADE = "#7a1fa2"
"""Colour of marks of channels that were not solved."""

HALO = [withStroke(linewidth=2.5, foreground="white")]
"""Path effects of text on lines."""

_DOTS_PER_INCH = 130
_LONGEST_NAME = 60
_LETTERS_PER_INCH = 12.5
_FONT = "DejaVu Sans"
_STYLE: dict[Any, Any] = {
    "font.family": _FONT,
    "font.size": 9.5,
    "axes.titlesize": 10.0,
    "axes.labelsize": 9.5,
    "axes.grid": False,
    "axes.linewidth": 0.8,
    "axes.spines.top": False,
    "axes.spines.right": False,
    "xtick.labelsize": 8.5,
    "ytick.labelsize": 8.5,
    "legend.fontsize": 8.5,
    "legend.frameon": False,
    "figure.facecolor": "white",
    "savefig.facecolor": "white",
    # Names come from users: a dollar sign is a dollar sign.
    "text.parse_math": False,
    "text.usetex": False,
    "axes.formatter.use_mathtext": False,
    "axes.formatter.useoffset": False,
}


@contextmanager
def sheet(
    path: str | Path, title: str, details: Sequence[str], caption: Sequence[str] = (), *, size: tuple[float, float] = (11.0, 7.0)
) -> Iterator[Figure]:
    """Give a figure with title and caption to draw on; write it as PNG when the block ends well.

    Parameters
    ----------
    path : str or Path
        The file; its folder is made if need be.  Replaced only once the new picture is whole.
    title : str
        What the picture shows.
    details : sequence of str
        Second line: job, frequency, beam and the like; empty ones are left out.
    caption : sequence of str, optional
        Line at the foot, behind the reminder that this is a model; what does not fit on a line goes on the next.
    size : tuple of float, optional
        Width and height [inch].

    Yields
    ------
    Figure
        With constrained layout, to add axes to.

    Raises
    ------
    ExportError
        If the file cannot be written.
    """
    with rc_context(_STYLE):
        width, height = size
        subtitle = printable(
            _one_line([" ".join(text.split()) for text in details if text.strip()], int(width * _LETTERS_PER_INCH))
        )
        foot = _lines([NOT_MEASURED, *(printable(text) for text in caption if text)], int(width * 15.0))
        # Title and caption own strips of the sheet [inch], which the layout of the axes leaves free.
        above, below, side = 0.76, 0.20 + 0.16 * len(foot.splitlines()), 0.12
        strips = (side / width, below / height, 1.0 - 2.0 * side / width, 1.0 - (above + below) / height)
        engine = ConstrainedLayoutEngine(w_pad=0.09, h_pad=0.07, wspace=0.02, hspace=0.04, rect=strips)
        figure = Figure(figsize=size, dpi=_DOTS_PER_INCH, layout=engine)
        canvas = FigureCanvasAgg(figure)
        figure.text(0.15 / width, 1.0 - 0.12 / height, printable(title), va="top", fontsize=13, fontweight="bold")
        figure.text(0.15 / width, 1.0 - 0.43 / height, subtitle, va="top", fontsize=9.5, color="0.25")
        figure.text(0.15 / width, 0.09 / height, foot, va="bottom", fontsize=8, color="0.35", linespacing=1.35)
        for text in figure.texts:
            text.set_in_layout(False)
        yield figure
        with written_whole(path) as temporary:
            canvas.print_png(str(temporary), metadata={"Software": None, "Description": f"{title}; {NOT_MEASURED}"})


def legend_above(figure: Figure, handles: Sequence[Artist], labels: Sequence[str]) -> None:
    """Put one line of legend into the strip of the title, at its right end."""
    width, height = figure.get_size_inches()
    legend = figure.legend(
        list(handles), list(labels), loc="upper right", ncols=max(1, len(labels)), borderaxespad=0.0, columnspacing=1.4,
        bbox_to_anchor=(1.0 - 0.12 / width, 1.0 - 0.08 / height),
    )  # fmt: skip
    legend.set_in_layout(False)


def legend_of(axes: Iterable[Axes]) -> tuple[list[Artist], list[str]]:
    """Return the labelled things on some axes, each label once."""
    found: dict[str, Artist] = {}
    for panel in axes:
        for handle, label in zip(*panel.get_legend_handles_labels(), strict=True):
            found.setdefault(label, handle)
    return list(found.values()), list(found)


def _one_line(parts: Sequence[str], longest: int) -> str:
    """Join parts to one line; if it gets too long, the first part, a title, gives way first."""
    between = "   |   "
    line = between.join(parts)
    if len(line) > longest and len(parts) > 1:
        room = max(longest - len(line) + len(parts[0]), 12)
        line = between.join([shortened(parts[0], room), *parts[1:]])
    return shortened(line, longest)


def _lines(parts: Sequence[str], width: int) -> str:
    """Join parts to lines that are no wider than so many characters, breaking between parts."""
    lines = [parts[0]]
    for part in parts[1:]:
        if len(lines[-1]) + len(part) + 3 > width:
            lines.append(part)
        else:
            lines[-1] += f" \u00b7 {part}"
    return "\n".join(lines)


@cache
def _drawable() -> frozenset[int]:
    return frozenset(get_font(findfont(_FONT)).get_charmap())


def printable(text: str) -> str:
    """Return a text with what the font cannot draw replaced by an empty square; lines stay."""
    return "".join(c if c == "\n" or (ord(c) in _drawable() and ord(c) >= 32) else "\u25a1" for c in text)


def shortened(text: str, longest: int) -> str:
    """Return a text, its end replaced by three dots if it has more characters than allowed."""
    return text if len(text) <= longest else text[: longest - 1].rstrip() + "\u2026"


def frequency_text(frequency_hz: float) -> str:
    """Return a frequency in MHz to the hertz, as ``110.25 MHz``."""
    return f"{_megahertz(frequency_hz)} MHz"


def origin_text(origin: str) -> str:
    """Return what a picture of one channel says of where it comes from; nothing if the station was solved there."""
    return "currents interpolated between solved channels" if origin == INTERPOLATED else ""


def interpolated_caption(count: int, *, single: bool = False) -> str:
    """Return what the caption says of some channels made from solved ones; ``single`` where the picture shows nothing else."""
    if single:
        return origin_text(INTERPOLATED)
    return f"triangles along the lower edge: {count} channels whose currents were interpolated between solved ones"


def mark_interpolated(axes: Axes, x: FloatArray, origins: Sequence[str]) -> None:
    """Mark channels at x (F,) that were made from solved ones by triangles along the lower edge; no origins: all were solved."""
    made = [place for place, origin in zip(x, origins, strict=False) if origin == INTERPOLATED]
    if made:
        # Strokes would be taken for ticks of the axis.
        axes.plot(
            made, np.full(len(made), 0.022), "^", transform=axes.get_xaxis_transform(), color=MADE, ms=5.0, mew=0.0,
            label="interpolated channel", zorder=4,
        )  # fmt: skip


def name_ticks(axes: Axes, names: Sequence[str]) -> None:
    """Label places 1, 2, ... along the lower edge with names, as many of them as there is room for."""
    words = [printable(shortened(name, 12)) for name in names]
    most = max(2, 36 // (max(len(word) for word in words) + 2))
    step = -(-len(words) // most)
    axes.set_xticks(np.arange(1, len(words) + 1)[::step], words[::step])


def ground_text(ground: Ground) -> str:
    """Return what a station stands on in few words, for the line of facts: `describe` of the ground may be long."""
    if isinstance(ground, FreeSpace):
        return "in free space"
    if isinstance(ground, PerfectGround):
        return "perfect ground"
    if isinstance(ground, MeshOnSoil):
        return f"{ground.pitch_m * 1e3:.4g} mm mesh on {ground_text(ground.soil)}"
    if isinstance(ground, Soil):
        return f"soil, permittivity {ground.relative_permittivity:.4g}, {ground.conductivity_s_per_m:.4g} S/m"
    if isinstance(ground, LayeredSoil):
        return f"{len(ground.layers) + 1} layers of soil"
    if isinstance(ground, MoistSoil):
        return f"soil, {100.0 * ground.water_content:.3g} % water"
    return "soil of a table"


def band_text(frequencies_hz: Sequence[float]) -> str:
    """Return some frequencies [Hz] in words; nothing for none."""
    if not len(frequencies_hz):
        return ""
    if len(frequencies_hz) == 1:
        return frequency_text(frequencies_hz[0])
    low, high = min(frequencies_hz), max(frequencies_hz)
    return f"{len(frequencies_hz)} frequencies, {frequency_text(low)} to {frequency_text(high)}"


def _megahertz(frequency_hz: float) -> str:
    if not np.isfinite(frequency_hz) or frequency_hz <= 0.0:
        msg = f"frequency {frequency_hz!r} Hz: expected a positive number"
        raise ModelRangeError(msg)
    # The frequencies of a job differ by at least a hertz.
    return f"{round(frequency_hz) / 1e6:.6f}".rstrip("0").rstrip(".")


def picture_name(kind: str, name: str = "", frequency_hz: float | None = None) -> str:
    """Return the file name of a picture, such as ``sky_zenith-x_110.25MHz.png``.

    Only a-z, 0-9, dots, hyphens and underscores are kept of a name, in lower case.  If that loses anything, six digits of a
    checksum of the name follow, so that two names never share a file, on systems that ignore case neither.

    Parameters
    ----------
    kind : str
        Kind of picture.
    name : str, optional
        Name of a beam or port, any text.
    frequency_hz : float, optional
        Frequency [Hz]; told apart to the hertz.

    Raises
    ------
    ModelRangeError
        If the frequency is not a positive number.
    """
    parts = [_safe(part) for part in (kind, name) if part]
    if frequency_hz is not None:
        parts.append(f"{_megahertz(frequency_hz)}MHz")
    return "_".join(parts) + ".png"


def _safe(text: str) -> str:
    plain = unicodedata.normalize("NFKD", text).encode("ascii", "ignore").decode().lower()
    kept = re.sub(r"[^a-z0-9._-]+", "-", plain).strip("-._")[:_LONGEST_NAME]
    if kept == text:
        return kept
    mark = hashlib.sha256(text.encode("utf-8", "surrogatepass")).hexdigest()[:6]
    return f"{kept}-{mark}" if kept else mark


def one_termination_text(value: PortTermination) -> str:
    """Return what one port sees in words, as ``100 ohm``, ``75 + 20j ohm`` or the parts of a circuit."""
    if isinstance(value, str | SeriesCircuit | ParallelCircuit | SampledReflection):
        return str(value)
    number = complex(value)
    if number.imag == 0.0:
        return f"{number.real:.6g} ohm"
    return f"{number.real:.6g} {'-' if number.imag < 0.0 else '+'} {abs(number.imag):.6g}j ohm"


def termination_text(termination: Termination | Sequence[PortTermination]) -> str:
    """Return what the ports see in words: one value, or the commonest one and how many ports see another."""
    values = [termination] if isinstance(termination, str) or np.ndim(termination) == 0 else list(termination)  # type: ignore[arg-type]
    counts = Counter(one_termination_text(value) for value in values)  # type: ignore[arg-type]
    (common, count), total = counts.most_common(1)[0], counts.total()
    words = {"open": "ports open", "short": "ports shorted"}.get(common, f"ports terminated with {common}")
    return words if count == total else f"{words}, {total - count} of {total} otherwise"


def decibels(amplitude: ArrayLike, reference: float, floor_db: float = -60.0) -> FloatArray:
    """Return 20 log10(|amplitude|/reference), nowhere below the floor.

    Parameters
    ----------
    amplitude : array_like (...)
        Magnitudes, or complex amplitudes, in the unit of the reference; zero gives the floor.
    reference : float
        Amplitude of 0 dB; with 0 everything is at the floor.
    floor_db : float, optional
        Lowest value returned [dB].

    Raises
    ------
    ModelRangeError
        If an amplitude or the reference is not finite, or the reference is negative.
    """
    size = np.abs(np.asarray(amplitude))
    if not np.all(np.isfinite(size)) or not np.isfinite(reference) or reference < 0.0:
        msg = "decibels: expected finite amplitudes and a reference of 0 or more"
        raise ModelRangeError(msg)
    if reference == 0.0:
        return np.full(size.shape, float(floor_db))
    # A subnormal reference would overflow where an ordinary one cannot.
    with np.errstate(over="ignore"):
        ratio = np.minimum(size / reference, np.finfo(float).max)
    return 20.0 * np.log10(np.maximum(ratio, 10.0 ** (floor_db / 20.0)))
