"""Beams: weights first, then currents, then the field.  A beam never needs all the element patterns."""

from __future__ import annotations

from concurrent.futures import ThreadPoolExecutor

import numpy as np

from elbowroom.base.arrays import ComplexArray, FloatArray
from elbowroom.base.errors import ModelRangeError
from elbowroom.base.threads import loop_threads
from elbowroom.kernels.points_numba import accumulate_phases
from elbowroom.radiation.patterns import CHUNK_DIRECTIONS
from elbowroom.system.assembly import single_threaded_blas
from elbowroom.system.discretisation import Discretisation
from elbowroom.system.plane_waves import DirectionFrame, KindWaves
from elbowroom.system.spaces import CurrentSpace, all_unknowns


def pointing_weights(
    positions: FloatArray,
    theta_rad: float,
    phi_rad: float,
    wavenumber: float,
    *,
    amplitudes: FloatArray | None = None,
    delay_step_s: float | None = None,
) -> ComplexArray:
    """Return weights w_i = a_i exp(-jk r0_hat . r_i) that point a beam.

    Parameters
    ----------
    positions : float64 (P, 3)
        Where each weighted port's antenna stands [m].
    theta_rad, phi_rad : float
        Direction to point at: zenith angle, azimuth from east towards north [rad].
    wavenumber : float
        [rad/m].
    amplitudes : float64 (P,), optional
        Amplitudes a_i; 1 by default, 0 leaves a port out of the beam.
    delay_step_s : float, optional
        If given, delays are rounded to multiples of this [s].

    Returns
    -------
    complex128 (P,)
    """
    unit = np.array([np.sin(theta_rad) * np.cos(phi_rad), np.sin(theta_rad) * np.sin(phi_rad), np.cos(theta_rad)])
    path = np.asarray(positions, dtype=float) @ unit
    if delay_step_s is not None:
        from elbowroom.base.constants import SPEED_OF_LIGHT

        if not 0.0 < delay_step_s < np.inf:
            msg = f"delay_step_s {delay_step_s!r}: expected a positive time"
            raise ModelRangeError(msg)
        step = delay_step_s * SPEED_OF_LIGHT
        path = np.round(path / step) * step
    weights = np.exp(-1j * wavenumber * path)
    return weights if amplitudes is None else weights * amplitudes


def current_beams(
    discretisation: Discretisation,
    currents: ComplexArray,
    frame: DirectionFrame,
    *,
    space: CurrentSpace | None = None,
    circumference: bool = True,
) -> ComplexArray:
    """Return the far field of whole-station current distributions, one a beam.

    Parameters
    ----------
    discretisation : Discretisation
        The meshed station.
    currents : complex128 (N, B)
        Weighted sums of port currents.
    frame : DirectionFrame
        Directions.
    space : CurrentSpace, optional
        What the coordinates are; unknowns by default.
    circumference : bool, optional
        Whether currents fill their tubes.

    Returns
    -------
    complex128 (B, D, 2)
    """
    d, space = discretisation, space or all_unknowns(discretisation)
    n_beams = currents.shape[1]
    out = np.zeros((n_beams, frame.count, 2), dtype=complex)
    positions = np.ascontiguousarray(d.station.positions * [1.0, 1.0, 0.0])
    amounts, waves = [], []
    for k, kind in enumerate(d.kinds):
        waves.append(KindWaves(kind, d.ground, d.wavenumber, circumference=circumference, basis=space.bases[k]))
        antennas = d.antennas_of(k)
        # (B, antennas, coordinates of one antenna)
        amounts.append(np.ascontiguousarray(currents[space.rows_of(antennas)].T).reshape(n_beams, len(antennas), -1))

    def add(first: int) -> None:
        rows_d = slice(first, min(first + CHUNK_DIRECTIONS, frame.count))
        part = frame.part(rows_d)
        unit = np.ascontiguousarray(part.unit)
        for k in range(len(d.kinds)):
            vectors = waves[k].at(part)
            flat = vectors.reshape(len(vectors), -1)
            place = positions[d.antennas_of(k)]
            for beam in range(n_beams):
                each = (amounts[k][beam] @ flat).reshape(len(place), part.count, 2)
                out[beam, rows_d] += accumulate_phases(unit, place, d.wavenumber, each)

    chunks = range(0, frame.count, CHUNK_DIRECTIONS)
    if len(chunks) < 2:
        for first in chunks:
            add(first)
        return out
    # Products of a chunk are too small for BLAS to share among threads.
    with single_threaded_blas(), ThreadPoolExecutor(loop_threads()) as pool:
        list(pool.map(add, chunks))
    return out
