"""The tables of a job file as pydantic models: which keys there are, their defaults, and what each may hold.

What the keys mean is told in `elbowroom.job.jobfile`.
"""

from __future__ import annotations

import math
from collections import Counter
from typing import Annotated, Any, Literal

from pydantic import AfterValidator, Field, ValidationInfo, model_validator

from elbowroom.geometry.layouts import LARGEST_COORDINATE_M
from elbowroom.job.tomlfile import Table, near_miss, shown

LOWEST_HZ, HIGHEST_HZ = 1e6, 1e9
"""Frequencies outside are taken for a wrong unit: antennas of metres are made for 50 to 350 MHz."""

CLOSEST_FREQUENCIES_HZ = 1.0
"""Files and pictures tell frequencies apart to the hertz."""

MOST_FREQUENCIES = 100_000

OnePort = float | complex | str
"""Termination of one port: ohms, ``"open"`` or ``"short"``."""

_UNITS = {"kHz": 1e3, "MHz": 1e6, "GHz": 1e9}


def _frequency(value: float) -> float:
    if not value > 0.0:
        msg = f"{value:g} Hz: expected a positive frequency"
        raise ValueError(msg)
    if LOWEST_HZ <= value <= HIGHEST_HZ:
        return value
    # 60 to 300 in MHz and 60000 in kHz are what a slip looks like; 0.15 is GHz
    plausible = [unit for unit, factor in _UNITS.items() if 3e7 <= value * factor <= HIGHEST_HZ and value < LOWEST_HZ]
    guess = f"; {plausible[0]} given for Hz? {value:g} {plausible[0]} is {value * _UNITS[plausible[0]]:g} Hz" if plausible else ""
    msg = f"{value:g} Hz: expected {LOWEST_HZ:g} to {HIGHEST_HZ:g} Hz{guess}"
    raise ValueError(msg)


def _impedance(value: Any, *, negative: bool = False) -> OnePort:
    expected = 'expected ohms, [resistance, reactance] in ohms, "open" or "short"'
    if isinstance(value, str):
        if value in ("open", "short"):
            return value
        msg = f"{shown(value)} is not known; {expected}; {near_miss(value, ('open', 'short'), 'words')}"
        raise ValueError(msg)
    parts = value if isinstance(value, list) else [value]
    if len(parts) not in (1, 2) or (isinstance(value, list) and len(parts) != 2):
        msg = f"{shown(value)}: {expected}"
        raise ValueError(msg)
    if not all(isinstance(p, int | float) and not isinstance(p, bool) for p in parts):
        msg = f"{shown(value)}: {expected}"
        raise ValueError(msg)
    if not all(math.isfinite(p) for p in parts):
        msg = f'{shown(value)} is not finite; use "open" for an open port'
        raise ValueError(msg)
    if parts[0] < 0.0 and not negative:
        msg = f"{shown(value)}: a resistance of {parts[0]:g} ohm is negative; a passive termination expected"
        raise ValueError(msg)
    return complex(parts[0], parts[1]) if len(parts) == 2 else float(parts[0])


def _negative_meant(info: ValidationInfo) -> bool:
    return bool(info.data.get("allow_negative_resistance"))


def _table_impedance(value: Any, info: ValidationInfo) -> OnePort:
    return _impedance(value, negative=_negative_meant(info))


def _table_resistance(value: float, info: ValidationInfo) -> float:
    return float(_impedance(value, negative=_negative_meant(info)).real)  # type: ignore[union-attr]


def _value_or_table(value: Any) -> Any:
    return value if isinstance(value, dict) else _impedance(value)


def _step_divides(value: float) -> float:
    intervals = round(90.0 / value) if 0.0 < value <= 90.0 else 0
    if intervals == 0 or abs(intervals * value - 90.0) > 1e-6 or value < 0.05:
        msg = f"{value:g} deg: expected a step of at least 0.05 that divides 90 degrees, as 1, 0.5 or 7.5 do"
        raise ValueError(msg)
    return value


def _plain_name(value: str) -> str:
    if not value or value != value.strip() or not value.isprintable() or "/" in value:
        msg = f"{shown(value)}: expected a name without slashes, line ends or outer spaces"
        raise ValueError(msg)
    return value


_Hertz = Annotated[float, AfterValidator(_frequency)]
_FileName = Annotated[str, Field(min_length=1)]
_ValueOrTable = Annotated[Any, AfterValidator(_value_or_table)]
"""A termination as a value, or as a table that `PortTerminationTable` describes."""


class DamageTable(Table):
    """What is broken: antennas by name, ports as antenna/port."""

    missing: list[str] = Field(default_factory=list)
    open: list[str] = Field(default_factory=list)
    shorted: list[str] = Field(default_factory=list)
    amplifier_off: list[str] = Field(default_factory=list)


class StationTable(Table):
    """Where antennas stand and what they are."""

    layout: _FileName
    antenna: _FileName | None = None
    antennas: dict[str, _FileName] = Field(default_factory=dict)
    ground: Literal["perfect", "free-space"] = "perfect"
    turn_deg: Annotated[float, Field(ge=-360.0, le=360.0)] = 0.0
    shift_east_m: Annotated[float, Field(ge=-LARGEST_COORDINATE_M, le=LARGEST_COORDINATE_M)] = 0.0
    shift_north_m: Annotated[float, Field(ge=-LARGEST_COORDINATE_M, le=LARGEST_COORDINATE_M)] = 0.0
    as_built: _FileName | None = None
    damage: dict[str, Any] = Field(default_factory=dict)
    """A `DamageTable`, looked into once antennas are known."""


class BandTable(Table):
    """Frequencies: a list, or start, stop and step."""

    frequency_hz: list[_Hertz] | None = None
    start_hz: _Hertz | None = None
    stop_hz: _Hertz | None = None
    step_hz: Annotated[float, Field(gt=0.0)] | None = None
    segments: Literal["auto", "none"] = "auto"
    solve_step_hz: Annotated[float, Field(gt=0.0)] | None = None

    @model_validator(mode="after")
    def _whole(self) -> BandTable:
        self.frequencies()
        if self.segments == "none" and self.solve_step_hz is not None:
            msg = 'solve_step_hz needs segments, which are switched off by segments = "none"'
            raise ValueError(msg)
        return self

    def frequencies(self) -> tuple[float, ...]:
        """Return the frequencies in rising order; raise ValueError if the keys do not make a band."""
        steps = {"start_hz": self.start_hz, "stop_hz": self.stop_hz, "step_hz": self.step_hz}
        given = [key for key, value in steps.items() if value is not None]
        if self.frequency_hz is not None:
            if given:
                msg = f"both frequency_hz and {given[0]} are given; expected the list, or start_hz, stop_hz and step_hz"
                raise ValueError(msg)
            return self._listed(self.frequency_hz)
        if not given:
            msg = "no frequencies; expected frequency_hz = [...], or start_hz, stop_hz and step_hz"
            raise ValueError(msg)
        if self.start_hz is None or self.stop_hz is None or self.step_hz is None:
            absent = [key for key in steps if key not in given]
            msg = f"{' and '.join(absent)} missing beside {' and '.join(given)}"
            raise ValueError(msg)
        if self.stop_hz < self.start_hz:
            msg = f"stop_hz = {self.stop_hz:g} lies below start_hz = {self.start_hz:g}; expected start_hz <= stop_hz"
            raise ValueError(msg)
        # a stop that is whole steps away but for rounding belongs to the band
        steps_float = (self.stop_hz - self.start_hz) / self.step_hz
        if steps_float >= MOST_FREQUENCIES:
            self._too_many(int(min(steps_float, 1e15)) + 1)
        count = math.floor(steps_float + 1e-9) + 1
        return tuple(self.start_hz + i * self.step_hz for i in range(count))

    @staticmethod
    def _too_many(count: int) -> None:
        msg = f"{count} frequencies; expected at most {MOST_FREQUENCIES}; take a larger step_hz"
        raise ValueError(msg)

    @classmethod
    def _listed(cls, values: list[float]) -> tuple[float, ...]:
        if not values:
            msg = "frequency_hz = []: expected at least one frequency"
            raise ValueError(msg)
        if len(values) > MOST_FREQUENCIES:
            cls._too_many(len(values))
        twice = [value for value, n in Counter(values).items() if n > 1]
        if twice:
            msg = f"frequency_hz: {', '.join(f'{v:g}' for v in twice[:5])} Hz appears more than once"
            raise ValueError(msg)
        rising = tuple(sorted(values))
        for low, high in zip(rising, rising[1:], strict=False):
            if high - low < CLOSEST_FREQUENCIES_HZ:
                msg = f"frequency_hz: {low:.10g} and {high:.10g} Hz differ by less than {CLOSEST_FREQUENCIES_HZ:g} Hz"
                raise ValueError(msg)
        return rising


class PortTerminationTable(Table):
    """What a port sees: a value, a one-port file, or a circuit."""

    # first, because the values below are judged by it
    allow_negative_resistance: bool = False
    impedance_ohm: Annotated[Any, AfterValidator(_table_impedance)] = None
    file: _FileName | None = None
    circuit: Literal["series", "parallel"] | None = None
    resistance_ohm: Annotated[float, AfterValidator(_table_resistance)] | None = None
    # what lies beyond is nanohenries or picofarads given for henries or farads
    inductance_h: Annotated[float, Field(gt=0.0, lt=0.01)] | None = None
    capacitance_f: Annotated[float, Field(gt=0.0, lt=0.001)] | None = None

    @model_validator(mode="after")
    def _one_way(self) -> PortTerminationTable:
        parts = [key for key in ("resistance_ohm", "inductance_h", "capacitance_f") if getattr(self, key) is not None]
        whole = [key for key in ("impedance_ohm", "file", "circuit") if getattr(self, key) is not None]
        if len(whole) > 1:
            msg = f"{' and '.join(whole)} are given; expected one of impedance_ohm, file and circuit"
            raise ValueError(msg)
        if parts and self.circuit is None:
            msg = f'circuit = "series" or "parallel" is missing beside {parts[0]}'
            if whole:
                msg = f"{parts[0]} is given beside {whole[0]}; expected one or the other"
            raise ValueError(msg)
        if self.circuit is not None and not parts:
            msg = f'circuit = "{self.circuit}": resistance_ohm, inductance_h or capacitance_f expected'
            raise ValueError(msg)
        if self.circuit == "parallel" and self.resistance_ohm == 0.0:
            msg = 'resistance_ohm = 0 in parallel is a short circuit; expected impedance_ohm = "short" if it is meant'
            raise ValueError(msg)
        return self


class TerminationTable(PortTerminationTable):
    """What ports see, and exceptions."""

    antennas: dict[str, _ValueOrTable] = Field(default_factory=dict)
    ports: dict[str, _ValueOrTable] = Field(default_factory=dict)
    amplifier_off: _ValueOrTable = None


class SolverTable(Table):
    """How to solve."""

    method: Literal["auto", "direct", "reduced"] = "auto"
    mesh: Literal["default", "refined"] = "default"
    precision: Literal["mixed", "double", "single"] = "mixed"
    tolerance: Annotated[float, Field(ge=1e-6, le=0.1)] = 1e-4


class BeamTable(Table):
    """One beam."""

    name: Annotated[str, AfterValidator(_plain_name)]
    port: str
    zenith_angle_deg: Annotated[float, Field(ge=0.0, le=90.0)] = 0.0
    azimuth_deg: Annotated[float, Field(ge=-360.0, le=360.0)] = 0.0
    antennas: Annotated[list[str], Field(min_length=1)] | None = None
    delay_step_s: Annotated[float, Field(gt=0.0, le=1e-6)] | None = None


class SkyTable(Table):
    """Directions of maps."""

    step_deg: Annotated[float, AfterValidator(_step_divides)] = 1.0


class StoreTable(Table):
    """Where solved currents are kept, and how much of them."""

    folder: _FileName = "store"
    precision: Literal["double", "single"] = "double"
    currents: Literal["keep", "drop"] = "keep"


class OutputTable(Table):
    """Where tables and pictures go."""

    folder: _FileName = "results"


SECTIONS: dict[str, type[Table]] = {
    "station": StationTable,
    "band": BandTable,
    "termination": TerminationTable,
    "solver": SolverTable,
    "sky": SkyTable,
    "store": StoreTable,
    "output": OutputTable,
}
"""Tables by name; ``[[beam]]`` apart, of which there may be several."""
