"""Soil, and wire mesh on soil, as antennas meet them: kernels from tables made once, reflection in closed form."""

from __future__ import annotations

from threading import Lock
from typing import TYPE_CHECKING

import numpy as np

from elbowroom.base.arrays import ComplexArray, FloatArray
from elbowroom.base.constants import VACUUM_PERMITTIVITY, wavenumber_of
from elbowroom.geometry.grounds import Ground, MeshOnSoil
from elbowroom.geometry.soils import LayeredSoil, Soil
from elbowroom.kernels.point_kernels import Extent, PointKernels, Workspace
from elbowroom.kernels.wire_metal import internal_impedance

if TYPE_CHECKING:
    from elbowroom.kernels.soil.response import GroundResponse
    from elbowroom.kernels.soil.table import SoilTable


def relative_permittivity(soil: Soil, frequency_hz: float) -> complex:
    """Return eps_r - j sigma/(omega eps0) of a soil at a frequency [Hz]."""
    return soil.relative_permittivity - 1j * soil.conductivity_s_per_m / (2.0 * np.pi * frequency_hz * VACUUM_PERMITTIVITY)


def ground_response(ground: Ground, frequency_hz: float) -> GroundResponse:
    """Return the reflection coefficients of soil, or of mesh on soil, at a frequency [Hz]."""
    from elbowroom.kernels.soil.response import layered_soil, under_mesh

    here = ground.at(frequency_hz)
    assert isinstance(here, Soil | LayeredSoil | MeshOnSoil)
    strata = [(thickness, relative_permittivity(soil.at(frequency_hz), frequency_hz)) for thickness, soil in here.strata]
    response = layered_soil(wavenumber_of(frequency_hz), strata)
    if not isinstance(here, MeshOnSoil):
        return response
    metal = 0.0 + 0.0j
    if here.wire_conductivity_s_per_m is not None:
        metal = internal_impedance(
            here.wire_radius_m, here.wire_conductivity_s_per_m, here.wire_relative_permeability, frequency_hz
        )
    return under_mesh(response, here.pitch_m, here.wire_radius_m, metal)


class LossyGroundKernels:
    """A ground whose field is not that of images, at one frequency.

    Its tables are made when first asked for, and then serve everyone who shares the object.

    Parameters
    ----------
    ground : Soil, TabulatedSoil, MoistSoil, LayeredSoil or MeshOnSoil
        Which.
    frequency_hz : float
        [Hz].
    extent : Extent
        Where points may lie.

    Raises
    ------
    ModelRangeError
        If the ground is not known at that frequency.
    """

    conducting_surface = False
    has_correction = True

    def __init__(self, ground: Ground, frequency_hz: float, extent: Extent) -> None:
        self.ground, self.frequency_hz, self.extent = ground, frequency_hz, extent
        self.response = ground_response(ground, frequency_hz)
        self._table: SoilTable | None = None
        self._lock = Lock()

    def table(self) -> SoilTable:
        """Return the tables of the ground's kernels, made once."""
        from elbowroom.kernels.soil.table import build_table

        with self._lock:
            if self._table is None:
                tolerance = self.ground.tolerance  # type: ignore[union-attr]
                low, high = 2.0 * self.extent.lowest_m, 2.0 * self.extent.highest_m
                self._table = build_table(self.response, self.extent.widest_m, low, high, tolerance=tolerance)
            return self._table

    def tables(self) -> dict[str, np.ndarray]:
        """Return the tables as arrays, made now if need be."""
        return self.table().to_arrays()

    def use_tables(self, arrays: dict[str, np.ndarray]) -> None:
        """Take tables made before for the same ground, frequency and extent."""
        from elbowroom.kernels.soil.table import SoilTable

        with self._lock:
            self._table = SoilTable.from_arrays(arrays)

    def fill(self, points: FloatArray, points2: FloatArray, wavenumber: float, work: Workspace) -> PointKernels:
        """Return the direct kernel with what the ground adds, for horizontal and vertical currents and for charges."""
        from elbowroom.kernels.soil.fill import fill_soil

        self._same(wavenumber)
        return fill_soil(self.table(), points, points2, work, direct=True)

    def correction(self, points: FloatArray, points2: FloatArray, wavenumber: float, work: Workspace) -> PointKernels:
        """Return what the ground adds to the direct kernel."""
        from elbowroom.kernels.soil.fill import fill_soil

        self._same(wavenumber)
        return fill_soil(self.table(), points, points2, work, direct=False)

    def reflection(self, theta_rad: FloatArray, wavenumber: float) -> tuple[ComplexArray, ComplexArray]:
        """Return (Gh, Ge) of plane waves at zenith angles; both are -1 at the horizon."""
        self._same(wavenumber)
        return self.response.reflection(np.minimum(theta_rad, 0.5 * np.pi))

    def _same(self, wavenumber: float) -> None:
        """See to it that nobody asks one frequency's ground about another."""
        assert abs(wavenumber - self.response.wavenumber) < 1e-9 * wavenumber

    def at(self, frequency_hz: float) -> LossyGroundKernels:
        """Return the fields of the same ground at another frequency [Hz]; itself at its own."""
        return self if frequency_hz == self.frequency_hz else LossyGroundKernels(self.ground, frequency_hz, self.extent)

    def serving(self, extent: Extent) -> LossyGroundKernels:
        """Return kernels for points within an extent: itself if its tables reach as far."""
        mine = self.extent
        if extent.widest_m <= mine.widest_m and mine.lowest_m <= extent.lowest_m and extent.highest_m <= mine.highest_m:
            return self
        return LossyGroundKernels(self.ground, self.frequency_hz, extent)

    def self_images(self) -> None:
        """Return None: the field is not that of a mirror image."""
        return
