"""Far fields of whole stations, in bulk: receive vectors of each kind, phases of each antenna, one matrix product."""

from __future__ import annotations

import numpy as np

from elbowroom.base.arrays import ComplexArray
from elbowroom.system.discretisation import Discretisation
from elbowroom.system.plane_waves import DirectionFrame, KindWaves, phases
from elbowroom.system.spaces import CurrentSpace, all_unknowns

CHUNK_DIRECTIONS = 1024
"""Directions handled at a time: keeps the work arrays of a chunk in cache and memory use flat."""


def station_patterns(
    discretisation: Discretisation,
    currents: ComplexArray,
    frame: DirectionFrame,
    *,
    space: CurrentSpace | None = None,
    circumference: bool = True,
    out: ComplexArray | None = None,
) -> ComplexArray:
    """Return the receive vectors of some current distributions of the whole station.

    Parameters
    ----------
    discretisation : Discretisation
        The meshed station.
    currents : complex128 (N, P)
        One column of coordinates a pattern.
    frame : DirectionFrame
        Directions.
    space : CurrentSpace, optional
        What the coordinates are; unknowns by default.
    circumference : bool, optional
        See :class:`KindWaves`.
    out : complex128 (P, D, 2), optional
        Where to put the result.

    Returns
    -------
    complex128 (P, D, 2)
        [m times the unit of the currents]
    """
    d, space = discretisation, space or all_unknowns(discretisation)
    n_patterns = currents.shape[1]
    if out is None:
        out = np.empty((n_patterns, frame.count, 2), dtype=complex)
    positions = d.station.positions * [1.0, 1.0, 0.0]
    by_kind = []
    for k in range(len(d.kinds)):
        antennas = d.antennas_of(k)
        amounts = np.ascontiguousarray(currents[space.rows_of(antennas)].T)
        waves = KindWaves(d.kinds[k], d.ground, d.wavenumber, circumference=circumference, basis=space.bases[k])
        by_kind.append((waves, antennas, amounts.reshape(n_patterns, len(antennas), -1)))
    for first in range(0, frame.count, CHUNK_DIRECTIONS):
        rows_d = slice(first, min(first + CHUNK_DIRECTIONS, frame.count))
        part = frame.part(rows_d)
        total = np.zeros((n_patterns, part.count * 2), dtype=complex)
        for waves, antennas, amounts in by_kind:
            vectors = waves.at(part)
            turn = phases(part.unit, positions[antennas], d.wavenumber)
            n = vectors.shape[0]
            # A few antennas share one product, so that its inner dimension is long enough for full rate.
            batch = max(1, 512 // n)
            for b in range(0, len(antennas), batch):
                shifted = turn[b : b + batch, None, :, None] * vectors[None]
                left = amounts[:, b : b + batch].reshape(n_patterns, -1)
                total += left @ shifted.reshape(-1, part.count * 2)
        out[:, rows_d] = total.reshape(n_patterns, part.count, 2)
    return out
