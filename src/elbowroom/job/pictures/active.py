"""Pictures of ports that are driven at once: active impedance and reflection, over frequency and over pointing."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from matplotlib.ticker import MaxNLocator
from numpy.typing import ArrayLike

from elbowroom.base.arrays import FloatArray
from elbowroom.base.errors import ModelRangeError
from elbowroom.geometry.grounds import Ground
from elbowroom.job.pictures.sheets import (
    COUPLED,
    INTERPOLATED,
    ISOLATED,
    band_text,
    frequency_text,
    ground_text,
    interpolated_caption,
    legend_above,
    legend_of,
    mark_interpolated,
    name_ticks,
    origin_text,
    printable,
    sheet,
    shortened,
    termination_text,
)
from elbowroom.job.portmatrices import ActivePorts

if TYPE_CHECKING:
    from matplotlib.axes import Axes

_SINGLE_LINES = 12
_EXPLAINED = (
    "active: all ports of the beam driven at once, each by its weight as a wave behind its termination; others terminated",
    "returned power: of all that is sent into the beam's ports, the part that comes back to them",
)


def draw_active(
    active: ActivePorts,
    beam: int,
    path: str | Path,
    *,
    terminations: Sequence[Any] | None = None,
    title: str = "",
    ground: Ground | None = None,
) -> Path:
    """Draw active impedance and reflection of the ports of one beam over frequency.

    Parameters
    ----------
    active : ActivePorts
        At one frequency or more.
    beam : int
        Which of the beams.
    path : str or Path
        The PNG file.
    terminations : sequence, optional
        What each port sees, to be told.
    title : str, optional
        Title of the job.
    ground : Ground, optional
        What the station stands on, to be told.

    Raises
    ------
    ModelRangeError
        If no port has weight in the beam.
    ExportError
        If the file cannot be written.
    """
    one = active.beams[beam]
    rows = _driven(active, beam)
    pointing = f"zenith angle {one.zenith_angle_deg:.5g}\u00b0, azimuth {one.azimuth_deg % 360.0:.5g}\u00b0"
    details = [
        title,
        f"beam {shortened(one.name, 32)}: port {shortened(one.port, 16)} of {rows.size}, {pointing}",
        band_text(active.frequency_hz),  # type: ignore[arg-type]
        "" if ground is None else ground_text(ground),
    ]
    z, gamma = active.impedance_ohm[:, beam, rows], np.abs(active.reflection[:, beam, rows])
    single = active.frequency_hz.size == 1
    x: FloatArray = np.arange(1.0, rows.size + 1) if single else active.frequency_hz / 1e6
    label = "antenna, in the order of the layout" if single else "frequency [MHz]"
    returned = active.returned_power()[:, beam]
    antennas = [active.port_names[row].antenna for row in rows]
    _draw(
        path, "Active impedance and reflection", details, terminations, x, label, z, gamma, returned, single, active.origins,
        antennas,
    )  # fmt: skip
    return Path(path)


def draw_scan(
    active: ActivePorts,
    signed_zenith_deg: ArrayLike,
    azimuth_deg: float,
    path: str | Path,
    *,
    name: str = "",
    terminations: Sequence[Any] | None = None,
    title: str = "",
    ground: Ground | None = None,
) -> Path:
    """Draw active impedance and reflection over the pointing of a beam in one vertical plane, at one frequency.

    Parameters
    ----------
    active : ActivePorts
        At one frequency, a beam a pointing.
    signed_zenith_deg : array_like (B,)
        Zenith angles of the pointings, rising, positive towards the azimuth [deg].
    azimuth_deg : float
        Of the plane, north through east [deg].
    path : str or Path
        The PNG file.
    name : str, optional
        Name of the beam that is pointed.
    terminations : sequence, optional
        What each port sees, to be told.
    title : str, optional
        Title of the job.
    ground : Ground, optional
        What the station stands on, to be told.

    Raises
    ------
    ModelRangeError
        If there is not one pointing a beam and one frequency, or no port has weight.
    ExportError
        If the file cannot be written.
    """
    angle = np.asarray(signed_zenith_deg, dtype=float)
    if angle.shape != (len(active.beams),) or active.frequency_hz.size != 1:
        found = f"{active.frequency_hz.size} and {angle.shape}"
        msg = f"scan picture: expected one frequency and {len(active.beams)} angles, got {found}"
        raise ModelRangeError(msg)
    rows = _driven(active, 0)
    details = [
        title,
        f"beam {shortened(name or active.beams[0].name, 32)}: port {shortened(active.beams[0].port, 16)} of {rows.size}, "
        f"pointed along azimuth {azimuth_deg % 360.0:.5g}\u00b0",
        frequency_text(float(active.frequency_hz[0])),
        "" if ground is None else ground_text(ground),
        origin_text(active.origins[0]) if active.origins else "",
    ]
    z, gamma = active.impedance_ohm[0][:, rows], np.abs(active.reflection[0][:, rows])
    label = f"zenith angle pointed at [deg], positive towards azimuth {azimuth_deg % 360.0:.5g}\u00b0"
    _draw(
        path, "Active impedance and reflection over pointing", details, terminations, angle, label, z, gamma,
        active.returned_power()[0], angle.size == 1,
    )  # fmt: skip
    return Path(path)


def _driven(active: ActivePorts, beam: int) -> np.ndarray:
    rows = np.flatnonzero(np.any(active.weights[:, beam] != 0.0, axis=0))
    if not rows.size:
        msg = f"beam {active.beams[beam].name!r}: no port takes part in it"
        raise ModelRangeError(msg)
    return rows


def _draw(
    path: str | Path,
    title: str,
    details: Sequence[str],
    terminations: Sequence[Any] | None,
    x: FloatArray,
    label: str,
    impedance: np.ndarray,
    reflection: FloatArray,
    returned: FloatArray,
    single: bool,
    origins: Sequence[str] = (),
    antennas: Sequence[str] = (),
) -> None:
    caption = ["" if terminations is None else termination_text(terminations), *_EXPLAINED]
    made = list(origins).count(INTERPOLATED)
    if made:
        caption.append(interpolated_caption(made, single=single))
    infinite = int(np.sum(~np.isfinite(impedance)))
    if infinite:
        caption.append(f"{infinite} values without current are not drawn")
    shown = np.where(np.isfinite(impedance), impedance, np.nan)
    with sheet(path, title, details, caption, size=(14.0, 5.2)) as figure:
        panels = figure.subplots(1, 3)
        for axes, values, quantity in (
            (panels[0], shown.real, "active resistance [ohm]"),
            (panels[1], shown.imag, "active reactance [ohm]"),
            (panels[2], reflection, "|active reflection| [-]"),
        ):
            _spread(axes, x, values[0] if single else values)
            if not single:
                mark_interpolated(axes, x, origins)
            axes.set_xlabel(label)
            axes.set_ylabel(quantity)
            axes.grid(color="0.92", lw=0.6)
            if single and antennas:
                name_ticks(axes, antennas)
            elif single:
                axes.xaxis.set_major_locator(MaxNLocator(integer=True, nbins=8, min_n_ticks=1))
        back = np.sqrt(returned)
        if single:
            panels[2].axhline(back[0], color=ISOLATED, lw=1.6, ls="--", label="root of the returned power")
        else:
            panels[2].plot(x, back, color=ISOLATED, lw=1.8, ls="--", label="root of the returned power")
        largest = float(np.nanmax(np.concatenate([reflection.ravel(), back])))
        panels[2].set_ylim(0.0, 1.0 if largest <= 1.0 else 1.05 * largest)
        if largest > 1.0:
            panels[2].axhline(1.0, color="0.4", lw=0.9, ls=":", zorder=0)
        if np.any(np.nanmin(shown.real) < 0.0):
            panels[0].axhline(0.0, color="0.4", lw=0.9, ls=":", zorder=0)
        legend_above(figure, *legend_of(panels))


def _spread(axes: Axes, x: FloatArray, values: FloatArray) -> None:
    """Draw values (X, P) of many ports as bands, median and single lines, or those (P,) of one place as dots."""
    if values.ndim == 1:
        axes.plot(x, values, "o", ms=6 if x.size <= 40 else 3, color=COUPLED, mec="white", mew=0.3, label="each port")
        axes.axhline(float(np.nanmedian(values)), color=COUPLED, lw=1.0, alpha=0.7, label="median", zorder=1)
        return
    count = values.shape[1]
    if count > 1:
        axes.fill_between(x, values.min(axis=1), values.max(axis=1), color=COUPLED, alpha=0.15, lw=0, label="all ports")
    if count > _SINGLE_LINES:
        low, high = np.percentile(values, (10.0, 90.0), axis=1)
        axes.fill_between(x, low, high, color=COUPLED, alpha=0.22, lw=0, label="10 to 90 %")
    chosen = range(count) if count <= _SINGLE_LINES else np.unique(np.linspace(0, count - 1, 5).round().astype(int))
    for i, port in enumerate(chosen):
        called = printable("each port" if count <= _SINGLE_LINES else "five of the ports")
        axes.plot(x, values[:, port], color=COUPLED, lw=0.6, alpha=0.65, label=called if i == 0 else None)
    axes.plot(x, np.median(values, axis=1), color=COUPLED, lw=2.0, marker="o" if x.size <= 25 else "", ms=4, label="median")
    axes.margins(x=0.02)
