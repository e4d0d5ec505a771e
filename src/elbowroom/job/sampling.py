"""How many functions the reduced solver will take for a station, found by its own first steps.

The number decides what a unit weighs in memory and on disk, and depends on the design, on how close antennas stand and on
frequency in ways that no formula of ours tells to better than a third.  Functions are cheap beside a solve: they are made at a
few frequencies, with the trial on a few antennas that decides how many serve, and interpolated between.
"""

from __future__ import annotations

import copy
from collections.abc import Sequence

import numpy as np

from elbowroom.geometry.mesh import MeshSettings
from elbowroom.geometry.stations import Station
from elbowroom.system.discretisation import discretise
from elbowroom.system.reduction import ReductionSettings
from elbowroom.system.solving_reduced import ReducedStation

MOST_SAMPLES = 3
"""Frequencies at which functions are made."""


class _FirstSteps(ReducedStation):
    """A reduced station that stops once it knows how many functions it takes."""

    count: int

    def _solve_until_good(self) -> None:
        kind_of = self.discretisation.kind_of
        self.count = sum(self.candidates[k].count(self.cut) for k in kind_of)


def functions_needed(station: Station, frequency_hz: float, mesh: str | MeshSettings, tolerance: float) -> int:
    """Return how many functions of all antennas together the reduced solver takes at a frequency [Hz].

    A solve takes more only if its stated error exceeds the tolerance at the first attempt.

    Raises
    ------
    GeometryError, ModelRangeError
        As the solve would.
    """
    return _FirstSteps(discretise(station, frequency_hz, mesh=mesh), ReductionSettings(tolerance)).count


class FunctionCounts:
    """Numbers of functions over frequency.

    Parameters
    ----------
    station : Station
        The station.
    frequencies_hz : sequence of float
        Rising frequencies of interest [Hz]; the first, the last and one between are sampled.
    mesh : str or MeshSettings
        Mesh.
    tolerance : float
        Of the reduced solver.
    """

    def __init__(self, station: Station, frequencies_hz: Sequence[float], mesh: str | MeshSettings, tolerance: float) -> None:
        chosen = np.unique(np.linspace(0, len(frequencies_hz) - 1, min(MOST_SAMPLES, len(frequencies_hz))).astype(int))
        self._frequencies_hz = np.array([frequencies_hz[i] for i in chosen])
        self._counts = np.array([functions_needed(station, f, mesh, tolerance) for f in self._frequencies_hz], dtype=float)

    def scaled(self, factor: float) -> FunctionCounts:
        """Return the numbers for a station of so many times the antennas."""
        other = copy.copy(self)
        other._counts = factor * self._counts
        return other

    def at(self, frequency_hz: float) -> float:
        """Return the number at a frequency [Hz], linear between samples."""
        return float(np.interp(frequency_hz, self._frequencies_hz, self._counts))
