"""Grounds in job files: ``[station] ground`` as a word, or ``[station.ground]`` as a table."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path
from typing import Annotated, Literal

from pydantic import Field, model_validator

from elbowroom.base.errors import JobFileError, ModelRangeError
from elbowroom.geometry.grounds import GROUNDS, Ground, MeshOnSoil, PerfectGround
from elbowroom.geometry.soil_tables import read_soil_table
from elbowroom.geometry.soils import TABLE_TOLERANCE, AnySoil, EvenSoil, LayeredSoil, MoistSoil, Soil
from elbowroom.job.tomlfile import Table, validate_table

_WAYS = ("relative_permittivity", "water_content", "file", "layers")
_SOIL_KEYS = (*_WAYS, "conductivity_s_per_m", "tolerance")
_MESH_KEYS = ("pitch_m", "wire_radius_m", "wire_conductivity_s_per_m", "wire_relative_permeability")


class SoilTable(Table):
    """Even soil, in one of three ways."""

    relative_permittivity: float | None = None
    conductivity_s_per_m: float | None = None
    water_content: float | None = None
    file: Annotated[str, Field(min_length=1)] | None = None

    def check_way(self, ways: tuple[str, ...] = _WAYS[:3]) -> str:
        """Return the one key that describes the soil; raise ValueError if it is not one, or its conductivity is not said."""
        given = [key for key in ways if getattr(self, key) is not None]
        if len(given) != 1:
            found = " and ".join(given) if given else "none"
            msg = f"{found} given; expected one of {', '.join(ways[:-1])} and {ways[-1]}"
            raise ValueError(msg)
        (way,) = given
        if way == "file" and self.conductivity_s_per_m is not None:
            msg = "conductivity_s_per_m is given beside file, which has a column of it"
            raise ValueError(msg)
        if way in ("relative_permittivity", "water_content") and self.conductivity_s_per_m is None:
            msg = f"conductivity_s_per_m is missing beside {way}"
            raise ValueError(msg)
        return way

    def even_soil(self, folder: Path, tolerance: float) -> EvenSoil:
        """Return the soil; raise JobFileError or ModelRangeError if it cannot be."""
        if self.file is not None:
            return read_soil_table(folder / self.file, tolerance)
        if self.water_content is not None:
            return MoistSoil(self.water_content, self.conductivity_s_per_m or 0.0, tolerance)
        return Soil(self.relative_permittivity or 0.0, self.conductivity_s_per_m or 0.0, tolerance)


class LayerTable(SoilTable):
    """One layer of soil; the last has no thickness."""

    thickness_m: float | None = None

    @model_validator(mode="after")
    def _whole(self) -> LayerTable:
        self.check_way()
        return self


class GroundTable(SoilTable):
    """What the station stands on."""

    kind: Literal["perfect", "free-space", "soil", "mesh-on-soil"]
    layers: Annotated[list[LayerTable], Field(min_length=2)] | None = None
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
        way = self.check_way(_WAYS)
        if way == "layers" and self.conductivity_s_per_m is not None:
            msg = "conductivity_s_per_m is given beside layers, each of which has its own"
            raise ValueError(msg)
        self._check_layers()
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

    def _check_layers(self) -> None:
        """Raise ValueError unless all layers but the last have a thickness."""
        for number, layer in enumerate(self.layers or [], start=1):
            last = number == len(self.layers or [])
            if last and layer.thickness_m is not None:
                msg = f"thickness_m of layer {number} is given; the last one reaches down without end and has none"
                raise ValueError(msg)
            if not last and layer.thickness_m is None:
                msg = f"thickness_m of layer {number} is missing; all but the last have one"
                raise ValueError(msg)

    def soil(self, folder: Path) -> AnySoil:
        """Return the soil; raise JobFileError or ModelRangeError if it cannot be."""
        if self.layers is None:
            return self.even_soil(folder, self.tolerance)
        even = []
        for number, layer in enumerate(self.layers, start=1):
            try:
                even.append(layer.even_soil(folder, self.tolerance))
            except ModelRangeError as cause:
                msg = f"layer {number}: {cause}"
                raise ModelRangeError(msg) from cause
        thick = [layer.thickness_m or 0.0 for layer in self.layers[:-1]]
        return LayeredSoil(tuple(zip(thick, even[:-1], strict=True)), even[-1], self.tolerance)

    def ground(self, folder: Path) -> Ground:
        """Return the ground; raise JobFileError or ModelRangeError if it cannot be."""
        if self.kind in GROUNDS:
            return GROUNDS[self.kind]
        soil = self.soil(folder)
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
        key = "station.ground.file" if found.layers is None else "station.ground.layers"
        problems.append(f"{key}: {str(cause).splitlines()[0]}")
        problems.extend(f"{key}: {p}" for p in cause.problems)
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


def ground_files(folder: Path, table: object) -> tuple[Path, ...]:
    """Return the files that a table ``[station.ground]`` of a job without problems reads."""
    if not isinstance(table, dict):
        return ()
    return tuple(folder / part["file"] for part in (table, *table.get("layers", [])) if "file" in part)
