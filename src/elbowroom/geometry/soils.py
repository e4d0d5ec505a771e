"""What soil is made of: even or in layers, its constants known, measured over frequency, or following from its moisture."""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import ClassVar

import numpy as np

from elbowroom.base.constants import IMPEDANCE_OF_VACUUM
from elbowroom.base.errors import ModelRangeError

TABLE_TOLERANCE = 1e-5
"""Error of a real ground's kernels times distance that their tables are made for, unless a ground says otherwise."""

TOLERANCE_RANGE = (1e-8, 1e-3)

LARGEST_PERMITTIVITY, LARGEST_CONDUCTIVITY = 100.0, 1e4
"""Beyond water, and two thousand times beyond the sea [-], [S/m]: another unit, a slip, or a perfect plane."""

MOST_LAYERS, THICKNESS_RANGE_M = 10, (1e-3, 100.0)
"""Layers of :class:`LayeredSoil`."""

LEAST_ECHO = 1e-4
"""Amplitude below which what comes back from under a layer of soil is left out when widths in frequency are planned."""

MOST_MOISTURE = 0.55
"""Largest volumetric water content of the polynomial of :class:`MoistSoil`."""

MOISTURE_RANGE_HZ = (1e6, 1e9)
"""Frequencies that the polynomial of :class:`MoistSoil` was measured at [Hz]."""


def checked_number(name: str, value: float, low: float, high: float) -> float:
    """Return a number from a range; raise ModelRangeError naming it if it is not."""
    number = float(value)
    if not (np.isfinite(number) and low <= number <= high):
        msg = f"{name} {number!r}: expected a number from {low:g} to {high:g}"
        raise ModelRangeError(msg)
    return number


@dataclass(frozen=True)
class Soil:
    """Even soil without end below z = 0, the same at every frequency.

    Parameters
    ----------
    relative_permittivity : float
        Real part of the relative permittivity, 1 to 100 [-].
    conductivity_s_per_m : float
        Conductivity, all losses included [S/m].
    tolerance : float, optional
        Error of the kernels times distance, relative to the direct kernel's; 1e-8 to 1e-3.

    Raises
    ------
    ModelRangeError
        If a number is out of range.
    """

    relative_permittivity: float
    conductivity_s_per_m: float
    tolerance: float = TABLE_TOLERANCE

    name: ClassVar[str] = "soil"
    open_below: ClassVar[bool] = False
    conducting: ClassVar[bool] = False
    lossy: ClassVar[bool] = True
    kinks_hz: ClassVar[tuple[float, ...]] = ()
    echo_path_m: ClassVar[float] = 0.0

    def __post_init__(self) -> None:
        ranges = {
            "relative_permittivity": (1.0, LARGEST_PERMITTIVITY),
            "conductivity_s_per_m": (0.0, LARGEST_CONDUCTIVITY),
            "tolerance": TOLERANCE_RANGE,
        }
        for key, (low, high) in ranges.items():
            object.__setattr__(self, key, checked_number(key, getattr(self, key), low, high))

    @property
    def strata(self) -> tuple[tuple[float, Soil], ...]:
        """Thickness [m] and soil from the surface down; the last has no end."""
        return ((np.inf, self),)

    def at(self, frequency_hz: float) -> Soil:
        """Return the ground as it is at a frequency [Hz]."""
        return self

    def describe(self) -> str:
        """Return one line for people."""
        return f"soil, relative permittivity {self.relative_permittivity:.6g}, {self.conductivity_s_per_m:.6g} S/m"


@dataclass(frozen=True)
class TabulatedSoil:
    """Even soil whose constants were measured at some frequencies; between them they are interpolated linearly.

    Parameters
    ----------
    frequency_hz : tuple of float
        Rising [Hz].
    relative_permittivity, conductivity_s_per_m : tuple of float
        As in :class:`Soil`, one for each frequency.
    tolerance : float, optional
        As in :class:`Soil`.

    Raises
    ------
    ModelRangeError
        If the lists do not fit one another or a number is out of range.
    """

    frequency_hz: tuple[float, ...]
    relative_permittivity: tuple[float, ...]
    conductivity_s_per_m: tuple[float, ...]
    tolerance: float = TABLE_TOLERANCE

    name: ClassVar[str] = "soil"
    open_below: ClassVar[bool] = False
    conducting: ClassVar[bool] = False
    lossy: ClassVar[bool] = True
    echo_path_m: ClassVar[float] = 0.0

    def __post_init__(self) -> None:
        for key in ("frequency_hz", "relative_permittivity", "conductivity_s_per_m"):
            object.__setattr__(self, key, tuple(float(v) for v in getattr(self, key)))
        f = np.array(self.frequency_hz)
        if f.size < 1 or not len(self.relative_permittivity) == len(self.conductivity_s_per_m) == f.size:
            msg = (
                f"soil table: expected one permittivity and conductivity for each frequency, got {f.size} frequencies, "
                f"{len(self.relative_permittivity)} and {len(self.conductivity_s_per_m)}"
            )
            raise ModelRangeError(msg)
        if not (np.all(np.isfinite(f)) and np.all(f > 0.0) and np.all(np.diff(f) > 0.0)):
            msg = "soil table: expected positive frequencies that rise"
            raise ModelRangeError(msg)
        for permittivity, conductivity in zip(self.relative_permittivity, self.conductivity_s_per_m, strict=True):
            Soil(permittivity, conductivity, self.tolerance)

    @property
    def kinks_hz(self) -> tuple[float, ...]:
        """Frequencies of the table [Hz]: its constants bend there."""
        return self.frequency_hz

    def at(self, frequency_hz: float) -> Soil:
        """Return the soil at a frequency [Hz].

        Raises
        ------
        ModelRangeError
            If the table does not reach that far.
        """
        f = self.frequency_hz
        if not f[0] * (1.0 - 1e-9) <= frequency_hz <= f[-1] * (1.0 + 1e-9):
            msg = (
                f"soil table: {frequency_hz / 1e6:.10g} MHz lies outside its {f[0] / 1e6:.10g} to {f[-1] / 1e6:.10g} MHz; "
                "nothing is extrapolated"
            )
            raise ModelRangeError(msg)
        return Soil(
            float(np.interp(frequency_hz, f, self.relative_permittivity)),
            float(np.interp(frequency_hz, f, self.conductivity_s_per_m)),
            self.tolerance,
        )

    def describe(self) -> str:
        """Return one line for people."""
        f = self.frequency_hz
        return f"soil, table of {len(f)} frequencies from {f[0] / 1e6:.6g} to {f[-1] / 1e6:.6g} MHz"


@dataclass(frozen=True)
class MoistSoil:
    r"""Even soil whose permittivity follows from its water content; its conductivity has to be measured.

    .. math:: \varepsilon_r = 3.03 + 9.3 \theta + 146 \theta^2 - 76.7 \theta^3

    for mineral soils, from 1 MHz to 1 GHz and water contents up to 0.55 m^3/m^3.  The authors state about 0.013 m^3/m^3 for the
    water content that the inverse relation gives: 0.8 of a permittivity of 10.1 at a water content of 0.2.

    Parameters
    ----------
    water_content : float
        Volume of water over volume of soil, 0 to 0.55 [m^3/m^3].
    conductivity_s_per_m : float
        As in :class:`Soil` [S/m].
    tolerance : float, optional
        As in :class:`Soil`.

    Raises
    ------
    ModelRangeError
        If a number is out of range.

    References
    ----------
    .. [1] G. C. Topp, J. L. Davis, A. P. Annan, "Electromagnetic determination of soil water content: measurements in coaxial
       transmission lines", Water Resources Research 16 (1980) 574-582; coefficients and ranges from memory.
    """

    water_content: float
    conductivity_s_per_m: float
    tolerance: float = TABLE_TOLERANCE

    name: ClassVar[str] = "soil"
    open_below: ClassVar[bool] = False
    conducting: ClassVar[bool] = False
    lossy: ClassVar[bool] = True
    kinks_hz: ClassVar[tuple[float, ...]] = ()
    echo_path_m: ClassVar[float] = 0.0

    def __post_init__(self) -> None:
        object.__setattr__(self, "water_content", checked_number("water_content", self.water_content, 0.0, MOST_MOISTURE))
        object.__setattr__(self, "conductivity_s_per_m", self._soil().conductivity_s_per_m)

    def _soil(self) -> Soil:
        t = self.water_content
        return Soil(3.03 + 9.3 * t + 146.0 * t**2 - 76.7 * t**3, self.conductivity_s_per_m, self.tolerance)

    def at(self, frequency_hz: float) -> Soil:
        """Return the soil at a frequency [Hz].

        Raises
        ------
        ModelRangeError
            If the polynomial was not measured there.
        """
        low, high = MOISTURE_RANGE_HZ
        if not low <= frequency_hz <= high:
            msg = f"soil of known water content: {frequency_hz / 1e6:g} MHz lies outside {low / 1e6:g} to {high / 1e6:g} MHz"
            raise ModelRangeError(msg)
        return self._soil()

    def describe(self) -> str:
        """Return one line for people."""
        return (
            f"soil, water content {self.water_content:.4g} m^3/m^3 (relative permittivity "
            f"{self._soil().relative_permittivity:.4g}), {self.conductivity_s_per_m:.6g} S/m"
        )


EvenSoil = Soil | TabulatedSoil | MoistSoil
"""Soil that is the same at every depth."""


@dataclass(frozen=True)
class LayeredSoil:
    """Soil in level layers without end sideways: dry above wet, sand above clay.

    Parameters
    ----------
    layers : tuple of (float, Soil, TabulatedSoil or MoistSoil)
        Thickness [m], 1 mm to 100 m, and soil of each layer from the surface down.
    bottom : Soil, TabulatedSoil or MoistSoil
        What lies below all of them.
    tolerance : float, optional
        As in :class:`Soil`; those of the layers do not count.

    Raises
    ------
    ModelRangeError
        If there is no layer or more than `MOST_LAYERS`, or a number is out of range.
    """

    layers: tuple[tuple[float, EvenSoil], ...]
    bottom: EvenSoil
    tolerance: float = TABLE_TOLERANCE

    name: ClassVar[str] = "soil"
    open_below: ClassVar[bool] = False
    conducting: ClassVar[bool] = False
    lossy: ClassVar[bool] = True

    def __post_init__(self) -> None:
        object.__setattr__(self, "tolerance", checked_number("tolerance", self.tolerance, *TOLERANCE_RANGE))
        if not 1 <= len(self.layers) <= MOST_LAYERS:
            msg = f"layers of soil: expected 1 to {MOST_LAYERS} above the last, which has no end, got {len(self.layers)}"
            raise ModelRangeError(msg)
        layers = []
        for number, (thickness, soil) in enumerate(self.layers, start=1):
            thick = checked_number(f"thickness of layer {number} [m]", thickness, *THICKNESS_RANGE_M)
            layers.append((thick, self._even(f"layer {number}", soil)))
        object.__setattr__(self, "layers", tuple(layers))
        object.__setattr__(self, "bottom", self._even("layer without end", self.bottom))

    def _even(self, which: str, soil: EvenSoil) -> EvenSoil:
        if not isinstance(soil, EvenSoil):
            msg = f"{which} {soil!r}: expected Soil, TabulatedSoil or MoistSoil"
            raise ModelRangeError(msg)
        return replace(soil, tolerance=self.tolerance)

    @property
    def kinks_hz(self) -> tuple[float, ...]:
        """Frequencies [Hz] at which constants of a layer bend."""
        return tuple(sorted({f for soil in (*(s for _, s in self.layers), self.bottom) for f in soil.kinks_hz}))

    @property
    def echo_path_m(self) -> float:
        """Optical path [m] of one echo down to the deepest layer that is seen through those above it, and back.

        Seen is what comes back with `LEAST_ECHO`, by the attenuation sigma eta/(2 sqrt(eps_r)) and the speed c/sqrt(eps_r) of
        soil of little loss.  Where loss is not little, waves are attenuated less and are slower, and echoes that come back with
        some hundredths may be left out; so are second and further echoes and waves that run along a layer.  It serves to choose
        widths of segments, and bounds nothing.
        """
        amplitude, path, longest = 1.0, 0.0, 0.0
        for thickness, soil in self.layers:
            permittivity, conductivity = _slowest(soil)
            root = np.sqrt(permittivity)
            amplitude *= float(np.exp(-thickness * conductivity * IMPEDANCE_OF_VACUUM / root))
            path += 2.0 * thickness * float(root)
            if amplitude < LEAST_ECHO:
                break
            longest = path
        return longest

    @property
    def strata(self) -> tuple[tuple[float, EvenSoil], ...]:
        """Thickness [m] and soil from the surface down; the last has no end."""
        return (*self.layers, (np.inf, self.bottom))

    def at(self, frequency_hz: float) -> LayeredSoil:
        """Return the ground as it is at a frequency [Hz].

        Raises
        ------
        ModelRangeError
            If a layer is not known there.
        """
        soils = []
        for number, (_, soil) in enumerate(self.strata, start=1):
            try:
                soils.append(soil.at(frequency_hz))
            except ModelRangeError as cause:
                msg = f"layer {number}: {cause}"
                raise ModelRangeError(msg) from cause
        layers = tuple((thickness, soil) for (thickness, _), soil in zip(self.layers, soils[:-1], strict=True))
        return replace(self, layers=layers, bottom=soils[-1])

    def describe(self) -> str:
        """Return one line for people."""
        above = "; ".join(f"{thickness:.4g} m of {soil.describe()}" for thickness, soil in self.layers)
        return f"layers of soil: {above}; below them {self.bottom.describe()}"


def _slowest(soil: EvenSoil) -> tuple[float, float]:
    """Return the largest permittivity and the smallest conductivity that a soil has at any frequency."""
    if isinstance(soil, TabulatedSoil):
        return max(soil.relative_permittivity), min(soil.conductivity_s_per_m)
    here = soil.at(MOISTURE_RANGE_HZ[0])
    return here.relative_permittivity, here.conductivity_s_per_m


AnySoil = EvenSoil | LayeredSoil
"""Soil of any make, without a mesh."""
