"""What a station can stand on.

These classes only say which ground it is and what follows for geometry; the fields they cause are in
``elbowroom.kernels.grounds``.  A new ground model is one class here and one there, and everything else asks their properties.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import ClassVar, get_args

from elbowroom.base.errors import ModelRangeError
from elbowroom.geometry.soils import AnySoil, EvenSoil, LayeredSoil, Soil, checked_number

THINNEST_WIRE_M, WORST_METAL_S_PER_M = 1e-6, 1.0
"""Of meshes: a micrometre, and a hundred thousand times below what any metal conducts; another unit, or a slip."""


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
    kinks_hz: ClassVar[tuple[float, ...]] = ()
    """Frequencies at which its constants change their course: no polynomial in frequency passes over them."""
    echo_path_m: ClassVar[float] = 0.0
    """Longest detour of single echoes through it that come back with an amplitude that counts, as planned with."""

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
    kinks_hz: ClassVar[tuple[float, ...]] = ()
    echo_path_m: ClassVar[float] = 0.0

    def at(self, frequency_hz: float) -> PerfectGround:
        """Return the ground as it is at a frequency [Hz]."""
        return self

    def describe(self) -> str:
        """Return one line for people."""
        return self.name


@dataclass(frozen=True)
class MeshOnSoil:
    """A square mesh of wires, joined where they cross, that lies on soil and covers all of it.

    Parameters
    ----------
    soil : Soil, TabulatedSoil, MoistSoil or LayeredSoil
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

    soil: AnySoil
    pitch_m: float
    wire_radius_m: float
    wire_conductivity_s_per_m: float | None = None
    wire_relative_permeability: float = 1.0

    name: ClassVar[str] = "mesh-on-soil"
    open_below: ClassVar[bool] = False
    conducting: ClassVar[bool] = False
    lossy: ClassVar[bool] = True

    def __post_init__(self) -> None:
        if not isinstance(self.soil, AnySoil):
            msg = f"soil {self.soil!r}: expected Soil, TabulatedSoil, MoistSoil or LayeredSoil"
            raise ModelRangeError(msg)
        pitch = checked_number("pitch_m", self.pitch_m, 1e-3, 10.0)
        object.__setattr__(self, "pitch_m", pitch)
        # The averaged boundary condition takes its wires for thin against the pitch.
        radius = checked_number("wire_radius_m", self.wire_radius_m, THINNEST_WIRE_M, 0.1 * pitch)
        object.__setattr__(self, "wire_radius_m", radius)
        if self.wire_conductivity_s_per_m is not None:
            metal = checked_number("wire_conductivity_s_per_m", self.wire_conductivity_s_per_m, WORST_METAL_S_PER_M, 1e9)
            object.__setattr__(self, "wire_conductivity_s_per_m", metal)
        permeability = checked_number("wire_relative_permeability", self.wire_relative_permeability, 1.0, 1e5)
        object.__setattr__(self, "wire_relative_permeability", permeability)

    @property
    def tolerance(self) -> float:
        """Error of the kernels times distance."""
        return self.soil.tolerance

    @property
    def kinks_hz(self) -> tuple[float, ...]:
        """Frequencies [Hz] at which constants of the soil bend."""
        return self.soil.kinks_hz

    @property
    def echo_path_m(self) -> float:
        """As the soil's [m]."""
        return self.soil.echo_path_m

    @property
    def strata(self) -> tuple[tuple[float, EvenSoil], ...]:
        """Thickness [m] and soil below the mesh, as :class:`LayeredSoil` has them, of a ground that is known at a frequency."""
        assert isinstance(self.soil, Soil | LayeredSoil)
        return self.soil.strata

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


Ground = FreeSpace | PerfectGround | AnySoil | MeshOnSoil

GROUND_TYPES: tuple[type, ...] = get_args(Ground)

GROUNDS: dict[str, Ground] = {ground.name: ground for ground in (PerfectGround(), FreeSpace())}
"""Grounds that need no numbers, by the names that job files and commands use."""
