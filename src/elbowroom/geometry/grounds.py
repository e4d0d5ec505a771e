"""What a station can stand on.

These classes only say which ground it is and what follows for geometry; the fields they cause are in
``elbowroom.kernels.grounds``.  A new ground model is one class here and one there, and everything else asks their properties.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import ClassVar, get_args

import numpy as np

from elbowroom.base.errors import ModelRangeError

TABLE_TOLERANCE = 1e-5
"""Error of a real ground's kernels times distance that their tables are made for, unless a ground says otherwise."""

TOLERANCE_RANGE = (1e-8, 1e-3)

LARGEST_PERMITTIVITY, LARGEST_CONDUCTIVITY = 100.0, 1e4
"""Beyond water, and two thousand times beyond the sea [-], [S/m]: another unit, a slip, or a perfect plane."""

MOST_MOISTURE = 0.55
"""Largest volumetric water content of the polynomial of :class:`MoistSoil`."""

MOISTURE_RANGE_HZ = (1e6, 1e9)
"""Frequencies that the polynomial of :class:`MoistSoil` was measured at [Hz]."""


def _checked(name: str, value: float, low: float, high: float, *, open_low: bool = False) -> float:
    number = float(value)
    if not (np.isfinite(number) and low <= number <= high and not (open_low and number == low)):
        msg = f"{name} {value!r}: expected a number from {'above ' if open_low else ''}{low:g} to {high:g}"
        raise ModelRangeError(msg)
    return number


@dataclass(frozen=True)
class FreeSpace:
    """No ground at all."""

    name: ClassVar[str] = "free-space"
    open_below: ClassVar[bool] = True
    """Whether waves arrive from, and go, below the horizon, and wires may reach below z = 0."""
    conducting: ClassVar[bool] = False
    """Whether wires may end on z = 0 and are joined to the ground there."""
    lossy: ClassVar[bool] = False
    """Whether power is lost in it."""

    def at(self, frequency_hz: float) -> FreeSpace:
        """Return the ground as it is at a frequency [Hz]: numbers only, what a solution depends on."""
        return self

    def describe(self) -> str:
        """Return one line for people."""
        return self.name


@dataclass(frozen=True)
class PerfectGround:
    """A perfectly conducting plane at z = 0 without end."""

    name: ClassVar[str] = "perfect"
    open_below: ClassVar[bool] = False
    conducting: ClassVar[bool] = True
    lossy: ClassVar[bool] = False

    def at(self, frequency_hz: float) -> PerfectGround:
        """Return the ground as it is at a frequency [Hz]."""
        return self

    def describe(self) -> str:
        """Return one line for people."""
        return self.name


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

    def __post_init__(self) -> None:
        ranges = {
            "relative_permittivity": (1.0, LARGEST_PERMITTIVITY),
            "conductivity_s_per_m": (0.0, LARGEST_CONDUCTIVITY),
            "tolerance": TOLERANCE_RANGE,
        }
        for key, (low, high) in ranges.items():
            object.__setattr__(self, key, _checked(key, getattr(self, key), low, high))

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

    def __post_init__(self) -> None:
        object.__setattr__(self, "water_content", _checked("water_content", self.water_content, 0.0, MOST_MOISTURE))
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


@dataclass(frozen=True)
class MeshOnSoil:
    """A square mesh of wires, joined where they cross, that lies on soil and covers all of it.

    Parameters
    ----------
    soil : Soil, TabulatedSoil or MoistSoil
        What lies below.
    pitch_m : float
        Distance of the wires [m].
    wire_radius_m : float
        Radius of the wires [m]; less than a tenth of the pitch.
    wire_conductivity_s_per_m : float, optional
        Conductivity of their metal [S/m]; no loss by default.
    wire_relative_permeability : float, optional
        Of their metal [-].

    Raises
    ------
    ModelRangeError
        If a number is out of range.
    """

    soil: Soil | TabulatedSoil | MoistSoil
    pitch_m: float
    wire_radius_m: float
    wire_conductivity_s_per_m: float | None = None
    wire_relative_permeability: float = 1.0

    name: ClassVar[str] = "mesh-on-soil"
    open_below: ClassVar[bool] = False
    conducting: ClassVar[bool] = False
    lossy: ClassVar[bool] = True

    def __post_init__(self) -> None:
        if not isinstance(self.soil, Soil | TabulatedSoil | MoistSoil):
            msg = f"soil {self.soil!r}: expected Soil, TabulatedSoil or MoistSoil"
            raise ModelRangeError(msg)
        pitch = _checked("pitch_m", self.pitch_m, 1e-3, 10.0)
        object.__setattr__(self, "pitch_m", pitch)
        # The averaged boundary condition takes its wires for thin against the pitch.
        radius = _checked("wire_radius_m", self.wire_radius_m, 0.0, 0.1 * pitch, open_low=True)
        object.__setattr__(self, "wire_radius_m", radius)
        if self.wire_conductivity_s_per_m is not None:
            metal = _checked("wire_conductivity_s_per_m", self.wire_conductivity_s_per_m, 0.0, 1e9, open_low=True)
            object.__setattr__(self, "wire_conductivity_s_per_m", metal)
        permeability = _checked("wire_relative_permeability", self.wire_relative_permeability, 1.0, 1e5)
        object.__setattr__(self, "wire_relative_permeability", permeability)

    @property
    def tolerance(self) -> float:
        """Error of the kernels times distance."""
        return self.soil.tolerance

    def at(self, frequency_hz: float) -> MeshOnSoil:
        """Return the ground as it is at a frequency [Hz]."""
        return replace(self, soil=self.soil.at(frequency_hz))

    def describe(self) -> str:
        """Return one line for people."""
        metal = "" if self.wire_conductivity_s_per_m is None else f", {self.wire_conductivity_s_per_m:.3g} S/m"
        return (
            f"bonded square mesh, pitch {self.pitch_m * 1e3:.4g} mm, wire radius {self.wire_radius_m * 1e3:.4g} mm{metal}, "
            f"on {self.soil.describe()}"
        )


Ground = FreeSpace | PerfectGround | Soil | TabulatedSoil | MoistSoil | MeshOnSoil

GROUND_TYPES: tuple[type, ...] = get_args(Ground)

GROUNDS: dict[str, Ground] = {ground.name: ground for ground in (PerfectGround(), FreeSpace())}
"""Grounds that need no numbers, by the names that job files and commands use."""
