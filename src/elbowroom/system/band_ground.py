r"""How many frequencies a segment is assembled at: what paths of waves ask for, and what the ground does.

Layers and meshes resonate, guide waves along the surface, and send back more than one echo: between antennas their kernels may
vary along frequency far more quickly than the paths that `elbowroom.system.band_interpolation.reach_of` counts.  Evaluated at a
few points for some fifty frequencies, which costs less than one matrix, the kernels themselves tell how many intervals they ask
for, and where interpolation errs most.

Errors are those of kernels, with :math:`\exp(-jkd)` taken out, in units of the wavenumber: of reactions as large as those
between antennas :math:`1/k` apart.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.spatial import cKDTree

from elbowroom.base.arrays import ComplexArray, FloatArray
from elbowroom.base.constants import wavenumber_of
from elbowroom.base.errors import SolveError
from elbowroom.geometry.stations import Station
from elbowroom.kernels.lossy_grounds import ground_response
from elbowroom.kernels.soil.sommerfeld import kernels_at
from elbowroom.system.band_interpolation import band_nodes, intervals_for, node_weights, reach_of
from elbowroom.system.discretisation import extent_of

INTERPOLATION_SHARE = 0.02
"""Part of the tolerance that interpolation of blocks may take: errors of many blocks gather in a pattern."""

OWN_FACTOR = 2
"""Intervals of own blocks over those of interactions; the nodes of interactions are among theirs."""

SCANNED, MOST_SCANNED = 48, 192
"""Intervals between scanned frequencies, and up to how many they are doubled where kernels are not resolved."""

DISTANCES = 5
"""Horizontal distances between antennas at which kernels are looked at, from the least to the largest."""

MOST_GROUND_INTERVALS = 18
"""Intervals that a ground may ask for: as many matrices are held at once, and beyond, few channels are left to save on."""

GROUND_SHARE = 0.5
"""Error of kernels between antennas over the tolerance of patterns from which more intervals are taken.  Patterns
erred by no more than kernels did, over five layered grounds with and without mesh."""

OWN_SHARE = 0.01
"""The same for own blocks, whose parts nearly cancel."""

STANDS_OUT = 2.0
"""Ratio of errors, of the worst frequency and of those that are checked, from which the worst is checked too."""


def interpolated(nodes: FloatArray, values: ComplexArray, frequencies_hz: FloatArray) -> ComplexArray:
    """Return the polynomial through values (M, ...) at nodes of `band_nodes`, at other frequencies [Hz]."""
    weights = np.array([node_weights(nodes, float(f)) for f in frequencies_hz])
    return np.asarray(np.tensordot(weights, values, axes=1))


@dataclass(frozen=True, eq=False)
class GroundScan:
    """Kernels of a ground along the frequencies of a segment.

    Attributes
    ----------
    frequencies_hz : float64 (M,)
        Nodes of `band_nodes` [Hz].
    own : complex128 (M, K)
        Kernels within an antenna, over the wavenumber of the middle.
    between : complex128 (M, K)
        Kernels between antennas, the phase of their distance taken out.
    """

    frequencies_hz: FloatArray
    own: ComplexArray
    between: ComplexArray

    def _errors(self, values: ComplexArray, intervals: int) -> FloatArray:
        """Return what interpolation with some intervals leaves at every scanned frequency."""
        f = self.frequencies_hz
        nodes = band_nodes(float(f[0]), float(f[-1]), intervals)
        return np.asarray(np.abs(interpolated(nodes, interpolated(f, values, nodes), f) - values).max(axis=1, initial=0.0))

    def intervals(self, least: int, factor: int, tolerance: float) -> tuple[int, int]:
        """Return how many intervals matrices need, even, and own blocks, a multiple of those.

        Parameters
        ----------
        least : int
            What paths of waves ask for in matrices.
        factor : int
            Own blocks never have less than this many times the least.
        tolerance : float
            Error of embedded patterns that is aimed at.
        """
        count = least
        while count < MOST_GROUND_INTERVALS and self._errors(self.between, count).max() > GROUND_SHARE * tolerance:
            count += 2
        own = count
        while own < factor * least or (
            own < factor * count and self._errors(self.own, own).max() > OWN_SHARE * GROUND_SHARE * tolerance
        ):
            own += count
        return count, own

    def missed_by(self, checked_hz: FloatArray, intervals: int, own_intervals: int, tolerance: float) -> list[float]:
        """Return the frequencies at which interpolation errs far more than at those that are checked [Hz].

        Parameters
        ----------
        checked_hz : float64 (C,)
            Frequencies that are checked.
        intervals, own_intervals : int
            Of matrices and own blocks.
        tolerance : float
            Error of embedded patterns that is aimed at; kernels that err by its `INTERPOLATION_SHARE` need no check.
        """
        floor = INTERPOLATION_SHARE * tolerance
        found: list[float] = []
        f = self.frequencies_hz
        for values, count in ((self.between, intervals), (self.own, own_intervals)):
            errors = self._errors(values, count)
            worst = float(f[np.argmax(errors)])
            if errors.max() <= max(floor, STANDS_OUT * float(np.interp([*checked_hz, *found], f, errors).max())):
                continue
            found.append(worst)
        return found


def _points(station: Station, low_hz: float, high_hz: float) -> tuple[FloatArray, FloatArray]:
    """Return horizontal distances, the first of them zero, and sums of heights [m] at which a ground is looked at."""
    extent = extent_of(station)
    places = station.positions[:, :2]
    distances = np.zeros(1)
    if len(places) > 1:
        nearest = max(float(cKDTree(places).query(places, k=2)[0][:, 1].min()), 0.1 / wavenumber_of(high_hz))
        distances = np.concatenate([distances, np.geomspace(nearest, max(extent.widest_m, 1.01 * nearest), DISTANCES)])
    # Nearer to the ground its static part, which is smooth along frequency, would drown what is not.
    low = max(2.0 * extent.lowest_m, 0.3 / wavenumber_of(low_hz))
    return distances, np.array([low, max(2.0 * extent.highest_m, 1.5 * low)])


def scan_ground(station: Station, low_hz: float, high_hz: float, tolerance: float) -> GroundScan | None:
    """Return the kernels of a station's ground along a segment, or None if images or nothing take their place.

    Parameters
    ----------
    station : Station
        Antennas and ground.
    low_hz, high_hz : float
        Ends of the segment [Hz].
    tolerance : float
        Error of embedded patterns that is aimed at.
    """
    if not station.ground.lossy:
        return None
    distances, heights = _points(station, low_hz, high_hz)
    unit = wavenumber_of(0.5 * (low_hz + high_hz))
    known: dict[int, ComplexArray] = {}

    def at(frequency_hz: float) -> ComplexArray:
        # Every other frequency of a doubled number is there already, up to rounding.
        place = round(frequency_hz)
        if place not in known:
            k = wavenumber_of(frequency_hz)
            kernels = kernels_at(ground_response(station.ground, frequency_hz), distances, heights)
            kernels[3] *= unit
            known[place] = kernels * np.exp(1j * k * distances)[:, None] / unit
        return known[place]

    count = SCANNED
    try:
        while True:
            frequencies = band_nodes(low_hz, high_hz, count)
            values = np.array([at(float(f)) for f in frequencies])
            made = GroundScan(frequencies, values[:, :, 0].reshape(count + 1, -1), values[:, :, 1:].reshape(count + 1, -1))
            if (
                count >= MOST_SCANNED
                or max(made._errors(made.own, count // 2).max(), made._errors(made.between, count // 2).max())
                <= OWN_SHARE * tolerance
            ):
                return made
            count *= 2
    except SolveError:
        # The checks of the segment stay; what cannot be worked out at a channel is told there.
        return None


def segment_intervals(station: Station, low_hz: float, high_hz: float, tolerance: float) -> tuple[int, int, GroundScan | None]:
    """Return the intervals between frequencies at which a segment is assembled, those of its own blocks, and its ground.

    As many as the paths of waves ask for, or more if the kernels of the ground do; these are returned where there are any.

    Parameters
    ----------
    station : Station
        Antennas and ground.
    low_hz, high_hz : float
        Ends of the segment [Hz].
    tolerance : float
        Error of embedded patterns that is aimed at.
    """
    least = intervals_for(high_hz - low_hz, reach_of(station), INTERPOLATION_SHARE * tolerance)
    scan = scan_ground(station, low_hz, high_hz, tolerance)
    if scan is None:
        return least, OWN_FACTOR * least, None
    return *scan.intervals(least, OWN_FACTOR, tolerance), scan
