"""Grounds in job files: ``[station] ground`` as a word, or ``[station.ground]`` as a table."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Annotated, Literal

from pydantic import Field, model_validator

from elbowroom.base.errors import JobFileError, ModelRangeError
from elbowroom.geometry.grounds import (
    GROUNDS,
    TABLE_TOLERANCE,
    Ground,
    MeshOnSoil,
    MoistSoil,
    PerfectGround,
    Soil,
    TabulatedSoil,
)
from elbowroom.geometry.soil_tables import read_soil_table
from elbowroom.job.tomlfile import Table, validate_table

_SOIL_KEYS = ("relative_permittivity", "water_content", "file", "conductivity_s_per_m", "tolerance")
_MESH_KEYS = ("pitch_m", "wire_radius_m", "wire_conductivity_s_per_m", "wire_relative_permeability")


class GroundTable(Table):
    """What the station stands on."""

    kind: Literal["perfect", "free-space", "soil", "mesh-on-soil"]
    relative_permittivity: float | None = None
    conductivity_s_per_m: float | None = None
    water_content: float | None = None
    file: Annotated[str, Field(min_length=1)] | None = None
    tolerance: float = TABLE_TOLERANCE
    pitch_m: float | None = None
    wire_radius_m: float | None = None
    wire_conductivity_s_per_m: float | None = None
    wire_relative_permeability: float = 1.0

    @model_validator(mode="after")
    def _whole(self) -> GroundTable:
        given = self.model_fields_set
        if self.kind in GROUNDS:
            extra = [key for key in (*_SOIL_KEYS, *_MESH_KEYS) if key in given]
            if extra:
                msg = f'{extra[0]} is given, which kind = "{self.kind}" has no use for'
                raise ValueError(msg)
            return self
        ways = [key for key in ("relative_permittivity", "water_content", "file") if getattr(self, key) is not None]
        if len(ways) != 1:
            found = " and ".join(ways) if ways else "none"
            msg = f"{found} given; expected one of relative_permittivity, water_content and file"
            raise ValueError(msg)
        if (self.file is None) != (self.conductivity_s_per_m is not None):
            msg = (
                f"conductivity_s_per_m is missing beside {ways[0]}"
                if self.file is None
                else "conductivity_s_per_m is given beside file, which has a column of it"
            )
            raise ValueError(msg)
        if self.kind == "soil":
            extra = [key for key in _MESH_KEYS if key in given]
            if extra:
                msg = f'{extra[0]} is given, which kind = "soil" has no use for; kind = "mesh-on-soil" expected'
                raise ValueError(msg)
        else:
            absent = [key for key in ("pitch_m", "wire_radius_m") if getattr(self, key) is None]
            if absent:
                msg = f'{" and ".join(absent)} missing beside kind = "mesh-on-soil"'
                raise ValueError(msg)
        return self

    def ground(self, folder: Path) -> Ground:
        """Return the ground; raise JobFileError or ModelRangeError if it cannot be."""
        if self.kind in GROUNDS:
            return GROUNDS[self.kind]
        soil: Soil | TabulatedSoil | MoistSoil
        if self.file is not None:
            soil = read_soil_table(folder / self.file, self.tolerance)
        elif self.water_content is not None:
            soil = MoistSoil(self.water_content, self.conductivity_s_per_m or 0.0, self.tolerance)
        else:
            soil = Soil(self.relative_permittivity or 0.0, self.conductivity_s_per_m or 0.0, self.tolerance)
        if self.kind == "soil":
            return soil
        assert self.pitch_m is not None
        assert self.wire_radius_m is not None
        return MeshOnSoil(soil, self.pitch_m, self.wire_radius_m, self.wire_conductivity_s_per_m, self.wire_relative_permeability)


def read_ground(folder: Path, table: object, frequencies_hz: Sequence[float], problems: list[str]) -> Ground:
    """Return the ground that a table ``[station.ground]`` describes; what is wrong joins the problems.

    Parameters
    ----------
    folder : Path
        Where relative paths count from.
    table : object
        What the job file says there.
    frequencies_hz : sequence of float
        Frequencies at which it must be known [Hz].
    problems : list of str
        Lengthened by one line for each problem; a perfect plane is returned then.
    """
    where = ("station", "ground")
    found = validate_table(GroundTable, table, problems, where)
    if found is None:
        return PerfectGround()
    try:
        ground = found.ground(folder)
    except JobFileError as cause:
        problems.append(f"station.ground.file: {str(cause).splitlines()[0]}")
        problems.extend(f"station.ground.file: {p}" for p in cause.problems)
        return PerfectGround()
    except ModelRangeError as cause:
        problems.append(f"station.ground: {cause}")
        return PerfectGround()
    for frequency in frequencies_hz:
        try:
            ground.at(frequency)
        except ModelRangeError as cause:
            problems.append(f"station.ground: {cause}")
            break
    return ground
