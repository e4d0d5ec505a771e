"""Coupled and isolated beams of a job over the sky: worked out once a frequency, then compared, exported and drawn."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from elbowroom.base.arrays import ComplexArray, FloatArray
from elbowroom.base.errors import ModelRangeError
from elbowroom.geometry.directions import Directions
from elbowroom.geometry.stations import Station
from elbowroom.job.jobfile import Beam
from elbowroom.radiation.beams import pointing_weights
from elbowroom.radiation.solution import Solution
from elbowroom.system.terminations import Termination


@dataclass(frozen=True, eq=False)
class BeamFields:
    """Beams at one frequency over one set of directions.

    Attributes
    ----------
    solution : Solution
        What they were made from.
    termination : Termination
        What the ports saw.
    beams : tuple of Beam
        B beams.
    weights : complex128 (B, P)
        Weight of every port in every beam.
    directions : Directions
        D directions.
    coupled, isolated : complex128 (B, D, 2)
        Effective length along theta_hat and phi_hat [m].
    """

    solution: Solution
    termination: Termination
    beams: tuple[Beam, ...]
    weights: ComplexArray
    directions: Directions
    coupled: ComplexArray
    isolated: ComplexArray


def mean_nominal_phi_rad(station: Station, weights: ComplexArray) -> FloatArray:
    """Return the direction of co-polarisation of each beam of the weights (B, P), east towards north [rad].

    The weighted mean over its ports; 0 where they cancel.
    """
    amplitude = np.abs(np.atleast_2d(weights))
    mean = amplitude @ np.exp(1j * station.port_nominal_phi_rad)
    return np.where(np.abs(mean) > 1e-3 * amplitude.sum(axis=1), np.angle(mean), 0.0)


def beam_weights(solution: Solution, beams: Sequence[Beam]) -> ComplexArray:
    """Return the weights of some beams, (B, P), for a solved station."""
    station, wavenumber = solution.station, solution.discretisation.wavenumber
    return np.array(
        [
            pointing_weights(
                station.port_positions,
                *beam.direction_rad,
                wavenumber,
                amplitudes=beam.amplitudes(station),
                delay_step_s=beam.delay_step_s,
            )
            for beam in beams
        ]
    )


def beam_fields(
    solution: Solution, beams: Sequence[Beam], directions: Directions, termination: Termination = 100.0
) -> BeamFields:
    """Return the coupled and the isolated beams of a solved station at some directions.

    Parameters
    ----------
    solution : Solution
        The solved station.
    beams : sequence of Beam
        What to form.
    directions : Directions
        Where.
    termination : optional
        What the ports see [ohm].
    """
    theta, phi = directions.theta_rad, directions.phi_rad
    if not beams:
        none = np.zeros((0, len(directions), 2), dtype=complex)
        return BeamFields(
            solution, termination, (), np.zeros((0, solution.discretisation.n_ports), complex), directions, none, none
        )
    weights = beam_weights(solution, beams)
    return BeamFields(
        solution,
        termination,
        tuple(beams),
        weights,
        directions,
        solution.beam(weights, theta, phi, termination=termination),
        solution.isolated_beam(weights, theta, phi, termination=termination),
    )


def power_shares(fields_: BeamFields) -> dict[str, FloatArray]:
    """Return what becomes of the power that beams accept when they are sent: ``radiated``, ``wires``, ``ground``, each (B,).

    Parts of the accepted power; NaN where the terminations leave no way to drive the ports.
    """
    names = ("radiated", "wires", "ground")

    def shares(weights: ComplexArray) -> FloatArray:
        try:
            parts = fields_.solution.power_parts(weights, termination=fields_.termination, integrate_sky=False)
        except ModelRangeError:
            # Beams that cannot be driven leave the others as they are.
            each = [shares(one[None]) for one in weights] if len(weights) > 1 else []
            return np.concatenate(each, axis=1) if each else np.full((len(names), len(weights)), np.nan)
        return np.array([parts.fraction(name) for name in names])

    return dict(zip(names, shares(fields_.weights), strict=True))
