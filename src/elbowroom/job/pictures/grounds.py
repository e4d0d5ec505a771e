"""Pictures of how much the ground matters."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from pathlib import Path

import numpy as np
from matplotlib.axes import Axes
from matplotlib.ticker import MaxNLocator

from elbowroom.base.errors import ModelRangeError
from elbowroom.job.groundcomparison import GroundFigures
from elbowroom.job.pictures.sheets import PORT_COLOURS, band_text, legend_above, legend_of, sheet

_EXPLAINED = (
    "coupling: change of the scattering between antennas over its size on the perfect plane",
    "beams: solid, rms change over the sky; dashed, largest change in the main lobe after the best complex factor; of several "
    "beams the largest change and the mean efficiency",
)


def draw_grounds(rows: Sequence[GroundFigures], path: str | Path, *, title: str = "", about: Sequence[str] = ()) -> Path:
    """Draw coupling, beams and efficiency on each ground over frequency.

    Parameters
    ----------
    rows : sequence of GroundFigures
        From :func:`elbowroom.job.groundcomparison.compare_grounds`, of one frequency or more.
    path : str or Path
        The PNG file.
    title : str, optional
        Title of the job.
    about : sequence of str, optional
        What the grounds are, told at the foot.

    Raises
    ------
    ModelRangeError
        If there is nothing to draw.
    ExportError
        If the file cannot be written.
    """
    if not rows:
        msg = "grounds: nothing to draw"
        raise ModelRangeError(msg)
    grounds = list(dict.fromkeys(row.ground for row in rows))
    frequencies = sorted({row.frequency_hz for row in rows})
    with sheet(
        path, "How much the ground matters", [title, band_text(frequencies)], [*about, *_EXPLAINED], size=(14.0, 5.4)
    ) as figure:
        panels = figure.subplots(1, 3)
        beams = any(row.beam for row in rows)
        pattern = "beam_difference_db" if beams else "element_difference_db"

        def drawn(
            axes: Axes, ground: str, name: str, gather: Callable[[list[float]], float], label: str | None, **style: object
        ) -> None:
            x, y = [], []
            for frequency in frequencies:
                values = [getattr(r, name) for r in rows if r.ground == ground and r.frequency_hz == frequency]
                finite = [v for v in values if np.isfinite(v)]
                if finite:
                    x.append(frequency / 1e6)
                    y.append(gather(finite))
            marker = "o" if len(frequencies) <= 25 else ""
            axes.plot(x, y, marker=marker, ms=4.5, label=label, color=colours[ground], **style)  # type: ignore[arg-type]

        colours = {ground: PORT_COLOURS[(i + 2) % len(PORT_COLOURS)] for i, ground in enumerate(grounds)}
        colours[grounds[0]] = "0.35"
        for ground in grounds:
            if ground != grounds[0]:
                drawn(panels[0], ground, "coupling_difference", max, None, lw=1.8)
                drawn(panels[1], ground, pattern, max, None, lw=1.8)
                if beams:
                    drawn(panels[1], ground, "main_lobe_shape_difference_db", max, None, lw=1.2, ls="--")
            drawn(panels[2], ground, "radiation_efficiency", lambda v: float(np.mean(v)), ground, lw=1.8)
        for axes, quantity in zip(
            panels,
            (
                "change of coupling against a perfect plane [-]",
                "change of beams against a perfect plane [dB]" if beams else "rms change of embedded patterns [dB]",
                "radiated over accepted power [-]",
            ),
            strict=True,
        ):
            axes.set_xlabel("frequency [MHz]")
            axes.set_ylabel(quantity)
            axes.grid(color="0.92", lw=0.6)
            axes.margins(x=0.05)
            axes.xaxis.set_major_locator(MaxNLocator(nbins=8, min_n_ticks=1))
        panels[0].set_ylim(bottom=0.0)
        panels[2].set_ylim(0.0, 1.05)
        legend_above(figure, *legend_of(panels))
    return Path(path)
