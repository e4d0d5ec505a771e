"""A picture of what the ports of a station show: impedance and mismatch, in the station and isolated."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np

from elbowroom.base.arrays import ComplexArray, FloatArray
from elbowroom.base.errors import ModelRangeError
from elbowroom.geometry.stations import PortName
from elbowroom.job.pictures.sheets import (
    COUPLED,
    INTERPOLATED,
    ISOLATED,
    band_text,
    ground_text,
    interpolated_caption,
    legend_above,
    legend_of,
    mark_interpolated,
    name_ticks,
    printable,
    sheet,
    shortened,
    termination_text,
)
from elbowroom.radiation.solution import Solution
from elbowroom.system.port_algebra import scattering_from_loaded
from elbowroom.system.solving import ORIGINS
from elbowroom.system.terminations import Termination, reflection_of

if TYPE_CHECKING:
    from matplotlib.axes import Axes

_SINGLE_LINES = 12
_MOST_PORT_NAMES = 4


@dataclass(frozen=True, eq=False)
class PortImpedances:
    """What the ports of a station show at one frequency.

    Attributes
    ----------
    frequency_hz : float
        [Hz]
    port_names : tuple of PortName
        P ports.
    termination : tuple
        What each port sees [ohm], "open" or "short".
    coupled_ohm, isolated_ohm : complex128 (P,)
        Impedance at each port, all others terminated: in the station, and with its antenna alone over the same ground.
    coupled_reflection, isolated_reflection : float64 (P,)
        Amplitude of the power wave that the port's termination reflects: 0 (matched) to 1, and above where the port or the
        termination has a negative resistance.
    origin : str
        Where the solution comes from.
    ground : str
        What the station stands on, in few words.
    """

    frequency_hz: float
    port_names: tuple[PortName, ...]
    termination: tuple[complex | float | str, ...]
    coupled_ohm: ComplexArray
    isolated_ohm: ComplexArray
    coupled_reflection: FloatArray
    isolated_reflection: FloatArray
    origin: str = ORIGINS[0]
    ground: str = ""


def input_reflection(scattering: ComplexArray, termination: ComplexArray) -> ComplexArray:
    r"""Return the reflection coefficient that each port shows while all others are terminated.

    .. math:: \Gamma_p = \frac{T_{pp}}{1 + t_p T_{pp}}, \quad T = (1 - S\,\mathrm{diag}(t))^{-1} S

    T holds the waves from every port with all terminations in place; the denominator takes the port's own one away.

    Parameters
    ----------
    scattering : complex128 (P, P)
        S against one reference resistance.
    termination : complex128 (P,)
        Reflection coefficients t of the terminations against that resistance.
    """
    waves = np.linalg.solve(np.eye(len(termination)) - scattering * termination[None, :], scattering)
    own = np.diagonal(waves)
    return own / (1.0 + termination * own)


def mismatch(reflection: ComplexArray, termination: ComplexArray) -> FloatArray:
    """Return the amplitude of the power wave that a load reflects, from two coefficients against one resistance.

    Equal to abs((Z - conj(Z_T))/(Z + Z_T)); written in reflection coefficients so that open and short circuits need no case.

    Parameters
    ----------
    reflection, termination : complex128 (P,)
        Reflection coefficients of the port and of its load.

    References
    ----------
    .. [1] K. Kurokawa, "Power waves and the scattering matrix", IEEE Trans. MTT 13(2), 1965, 194-202.
    """
    numerator = np.abs(reflection - np.conj(termination))
    denominator = np.abs(1.0 - reflection * termination)
    # Both vanish only where neither port nor load takes any power: all is reflected.
    lossless = denominator < 1e-14
    return np.where(lossless, 1.0, numerator / np.where(lossless, 1.0, denominator))


def port_impedances(solution: Solution, termination: Termination = 100.0) -> PortImpedances:
    """Return what the ports of a solved station show; much smaller than the solution itself.

    Parameters
    ----------
    solution : Solution
        The solved station.
    termination : optional
        What the ports see [ohm].

    Raises
    ------
    ModelRangeError
        If the termination cannot be used.
    """
    reference, n_ports = solution.reference_ohm, len(solution.port_names)
    load = reflection_of(termination, n_ports, reference)
    one = isinstance(termination, str) or np.ndim(termination) == 0
    values: tuple[Any, ...] = (termination,) * n_ports if one else tuple(termination)  # type: ignore[arg-type]
    coupled = input_reflection(scattering_from_loaded(solution.coupled.loaded_admittance, reference), load)
    isolated = np.concatenate(
        [
            input_reflection(
                scattering_from_loaded(alone.loaded_admittance, reference), load[solution.discretisation.ports_of(antenna)]
            )
            for antenna, alone in enumerate(solution.isolated)
        ]
    )

    def impedance(reflection: ComplexArray) -> ComplexArray:
        return reference * (1.0 + reflection) / (1.0 - reflection)

    return PortImpedances(
        solution.frequency_hz, solution.port_names, values, impedance(coupled), impedance(isolated),
        mismatch(coupled, load), mismatch(isolated, load), solution.statistics.origin,
        ground_text(solution.station.ground),
    )  # fmt: skip


def draw_impedance(
    impedances: Sequence[PortImpedances],
    path: str | Path,
    *,
    title: str = "",
    ports: Sequence[str] | None = None,
    dead: Sequence[str] = (),
) -> Path:
    """Draw resistance, reactance and mismatch of the ports over frequency, in the station and isolated.

    Parameters
    ----------
    impedances : sequence of PortImpedances
        One a frequency, of one station, in any order; see `port_impedances`.
    path : str or Path
        The PNG file.
    title : str, optional
        Title of the job.
    ports : sequence of str, optional
        Names of the ports to draw, a row of panels each; the first four by default.
    dead : sequence of str, optional
        Ports, as ``antenna/port``, that are left out, and counted in the caption; if no others have a name that is drawn, they
        are drawn.

    Returns
    -------
    Path
        The file.

    Raises
    ------
    ModelRangeError
        If there is nothing to draw or no antenna has a port of that name.
    ExportError
        If the file cannot be written.
    """
    if not impedances:
        msg = "impedance picture: expected one solved frequency at least"
        raise ModelRangeError(msg)
    every = sorted(impedances, key=lambda item: item.frequency_hz)
    names = every[0].port_names
    if any(item.port_names != names for item in every):
        msg = "impedance picture: the frequencies belong to stations with other ports"
        raise ModelRangeError(msg)
    known = list(dict.fromkeys(n.port for n in names))
    wanted = list(ports) if ports is not None else known[:_MOST_PORT_NAMES]
    for name in wanted:
        if name not in known:
            msg = f"no antenna has a port {name!r}; there are {', '.join(known)}"
            raise ModelRangeError(msg)
    frequencies = np.array([item.frequency_hz for item in every]) / 1e6
    constant = all(item.termination == every[0].termination for item in every)
    caption = [
        termination_text(every[0].termination) if constant else "terminations change over frequency",
        "coupled: in the station, all other ports terminated; isolated: the antenna alone over the same ground",
        "change: |Z coupled / Z isolated - 1|",
    ]
    if len(wanted) < len(known):
        caption.append(f"ports {', '.join(wanted)} of {', '.join(known)}")
    alive = np.array([str(n) not in set(dead) for n in names])
    chosen = {name: np.array([n.port == name for n in names]) for name in wanted}
    left_out = 0
    for name, mine in chosen.items():
        if np.any(mine & alive):
            left_out += int(np.sum(mine & ~alive))
            chosen[name] = mine & alive
    if left_out:
        caption.append(f"{left_out} dead port{'' if left_out == 1 else 's'} left out")
    origins = [item.origin for item in every]
    made = origins.count(INTERPOLATED)
    if made:
        caption.append(interpolated_caption(made, single=len(every) == 1))
    with sheet(
        path,
        "Port impedance and mismatch",
        [title, band_text([item.frequency_hz for item in every]), every[0].ground],
        caption,
        size=(14.5, 1.4 + 3.0 * len(wanted)),
    ) as figure:
        panels = figure.subplots(len(wanted), 4, squeeze=False)
        for row, name in zip(panels, wanted, strict=True):
            mine = chosen[name]
            antennas = [n.antenna for n, is_mine in zip(names, mine, strict=True) if is_mine]
            coupled = np.array([item.coupled_ohm[mine] for item in every])
            isolated = np.array([item.isolated_ohm[mine] for item in every])
            reflected = np.array([item.coupled_reflection[mine] for item in every])
            alone = np.array([item.isolated_reflection[mine] for item in every])
            label = printable(shortened(name, 16))
            change = 100.0 * np.abs(coupled / isolated - 1.0)
            for axes, own, single, quantity in (
                (row[0], coupled.real, isolated.real, "resistance R [ohm]"),
                (row[1], coupled.imag, isolated.imag, "reactance X [ohm]"),
                (row[2], change, None, "change of R + jX by coupling [%]"),
                (row[3], reflected, alone, "|reflection| at the termination [-]"),
            ):
                _draw_spread(axes, frequencies, own, single, antennas)
                if len(every) > 1:
                    mark_interpolated(axes, frequencies, origins)
                axes.set_ylabel(quantity)
                axes.set_title(f"port {label}", loc="left")
            # Differences of rounding and residual are not to fill a panel.
            _widen(row[0], 1e-3 * float(np.abs(isolated).max()))
            _widen(row[1], 1e-3 * float(np.abs(isolated).max()))
            row[2].set_ylim(0.0, max(1.08 * float(change.max()), 0.01))
            # Above 1 a port gives power away, as one next to a termination of negative resistance may.
            largest = max(float(reflected.max()), float(alone.max()))
            if len(every) > 1:
                row[3].set_ylim(0.0, 1.0 if largest <= 1.0 + 1e-9 else 1.05 * largest)
            elif largest <= 1.0 + 1e-9:
                row[3].set_ylim(top=min(row[3].get_ylim()[1], 1.01))
            if largest > 1.0 + 1e-9:
                row[3].axhline(1.0, color="0.4", lw=0.9, ls=":", zorder=0)
        legend_above(figure, *legend_of(panels[0]))
    return Path(path)


def _widen(axes: Axes, least: float) -> None:
    """Give the vertical scale at least this range."""
    low, high = axes.get_ylim()
    lacking = max(least - (high - low), 0.0)
    axes.set_ylim(low - 0.5 * lacking, high + 0.5 * lacking)


def _draw_spread(
    axes: Axes, frequencies_mhz: FloatArray, coupled: FloatArray, isolated: FloatArray | None, antennas: Sequence[str]
) -> None:
    """Draw values (F, ports) of the station as band, median and single lines, those of isolated antennas dashed."""
    count = coupled.shape[1]
    axes.grid(color="0.92", lw=0.6)
    if len(frequencies_mhz) == 1:
        order = np.arange(1, count + 1)
        axes.plot(
            order, coupled[0], "o", ms=6 if count <= 40 else 3, color=COUPLED, mec="white", mew=0.3, label="coupled, each port"
        )
        if isolated is not None:
            axes.plot(order, isolated[0], "_", ms=11 if count <= 40 else 5, mew=2.0, color=ISOLATED, label="isolated")
        axes.axhline(np.median(coupled[0]), color=COUPLED, lw=1.0, alpha=0.7, label="coupled, median", zorder=1)
        axes.set_xlabel("antenna, in the order of the layout")
        name_ticks(axes, antennas)
        axes.set_xlim(1 - max(0.4, 0.01 * count), count + max(0.4, 0.01 * count))
        return
    x = frequencies_mhz
    dots = "o" if len(x) <= 25 else ""
    if count > 1:
        axes.fill_between(
            x, coupled.min(axis=1), coupled.max(axis=1), color=COUPLED, alpha=0.15, lw=0, label="coupled, all ports"
        )
    if count > _SINGLE_LINES:
        low, high = np.percentile(coupled, (10.0, 90.0), axis=1)
        axes.fill_between(x, low, high, color=COUPLED, alpha=0.22, lw=0, label="coupled, 10 to 90 %")
    singles = range(count) if count <= _SINGLE_LINES else np.unique(np.linspace(0, count - 1, 5).round().astype(int))
    for i, port in enumerate(singles):
        named = "coupled, each port" if count <= _SINGLE_LINES else "coupled, five of the ports"
        axes.plot(x, coupled[:, port], color=COUPLED, lw=0.6, alpha=0.65, label=named if i == 0 else None)
    axes.plot(x, np.median(coupled, axis=1), color=COUPLED, lw=2.0, marker=dots, ms=4, label="coupled, median")
    alone = np.empty((0, len(x))) if isolated is None else np.unique(isolated.round(9), axis=1).T[:6]
    for i, curve in enumerate(alone):
        # Dots would close the gaps of the dashes.
        axes.plot(x, curve, color=ISOLATED, lw=1.8, ls=(0, (4, 2)), label="isolated" if i == 0 else None)
    axes.set_xlabel("frequency [MHz]")
    axes.margins(x=0.02)
