"""Directions that integrate the power of any field of a station, over grounds whose reflection turns quickly, too."""

from __future__ import annotations

import warnings
from collections.abc import Callable

import numpy as np
from scipy.fft import dct

from elbowroom.base.arrays import ComplexArray, FloatArray
from elbowroom.base.errors import ModelRangeWarning
from elbowroom.geometry.directions import Directions, sphere_quadrature
from elbowroom.system.discretisation import Discretisation

LEAST_LOSSY_ZENITH_ANGLES = 49
"""Zenith angles of the quadrature over the sky above a lossy ground, at least: its reflection turns quickly near the horizon."""

REFLECTION_TOLERANCE = 1e-5
"""What the reflection coefficients may lack in the polynomials that the quadrature integrates exactly."""

MOST_REFLECTION_DEGREE = 1000
"""Degree in cos(theta) to which the turns of a reflection are followed: 500 zenith angles beyond those of the station.  60 m of
dry sand at 350 MHz ask for 730, 100 m that lose next to nothing for 2,300."""

REFLECTION_SAMPLES = 2048


def reflection_degree(reflection: Callable[[FloatArray], tuple[ComplexArray, ComplexArray]]) -> tuple[int, float]:
    """Return the degree in cos(theta) of what a ground's reflection makes of power, and what is left out there.

    Power holds both coefficients and the squares of their magnitudes.  Their Chebyshev series over cos(theta) from 0 to 1 tells
    the degree from which their terms sum up to less than `REFLECTION_TOLERANCE`.  Echoes of layers turn with the phase along
    their paths, but it is their repeated bounces near the horizon, where the surface lets little through, that ask for most.

    Parameters
    ----------
    reflection : callable
        Returns (Gh, Ge) at zenith angles (D,) [rad].

    Returns
    -------
    degree : int
        At most `MOST_REFLECTION_DEGREE`.
    missing : float
        Sum of the magnitudes of the terms left out, of the worst of the four.
    """
    nodes = 0.5 + 0.5 * np.cos(np.pi * (np.arange(REFLECTION_SAMPLES) + 0.5) / REFLECTION_SAMPLES)
    both = np.stack(reflection(np.arccos(nodes)))
    terms = np.concatenate([np.hypot(dct(both.real), dct(both.imag)), np.abs(dct(np.abs(both) ** 2))]) / REFLECTION_SAMPLES
    # missing[d]: of all terms of degree d + 1 and more
    missing = np.max(np.cumsum(terms[:, :0:-1], axis=1)[:, ::-1], axis=0)
    degree = min(int(np.argmax(missing < REFLECTION_TOLERANCE)), MOST_REFLECTION_DEGREE)
    if not missing[degree] < REFLECTION_TOLERANCE:
        degree = MOST_REFLECTION_DEGREE
    return degree, float(missing[degree])


def unresolved_reflection(degree: int, missing: float) -> str | None:
    """Return what to say of a :func:`reflection_degree` that was cut off; None if it was not."""
    if missing < REFLECTION_TOLERANCE:
        return None
    return (
        f"the ground's reflection turns so quickly with the zenith angle that polynomials of degree {degree} in its cosine, "
        f"where the quadrature of radiated power ends, leave out {missing:.1g} of it (expected: {REFLECTION_TOLERANCE:g}); "
        "radiated power, what the ground takes and directivity may be wrong by up to that"
    )


def power_sphere(discretisation: Discretisation, electrical_radius: float, digits: float) -> Directions:
    """Return directions and weights that integrate power, over the sky only above a ground.

    The degree follows the rule L = ka + 1.8 d^(2/3) (ka)^(1/3) for fields of sources within a radius a to d digits (Chew, Jin,
    Michielssen, Song (eds.), Fast and Efficient Algorithms in Computational Electromagnetics, 2001, section 3.3; from memory);
    power takes twice that.  Above a lossy ground there are more zenith angles: as many as 2 ka and :func:`reflection_degree`
    together ask for, and at least `LEAST_LOSSY_ZENITH_ANGLES`.

    Parameters
    ----------
    discretisation : Discretisation
        The meshed station, whose ground counts.
    electrical_radius : float
        ka of the smallest sphere about its sources and their images.
    digits : float
        d.

    Warns
    -----
    ModelRangeWarning
        If the reflection turns too quickly to be followed.
    """
    ground, size = discretisation.station.ground, electrical_radius
    degree = 2 * (int(np.ceil(size + 1.8 * digits ** (2.0 / 3.0) * size ** (1.0 / 3.0))) + 2)
    if not ground.lossy:
        return sphere_quadrature(degree, hemisphere=not ground.open_below)

    def reflection(theta_rad: FloatArray) -> tuple[ComplexArray, ComplexArray]:
        both = discretisation.ground.reflection(theta_rad, discretisation.wavenumber)
        assert both is not None  # of a lossy ground
        return both

    turns, missing = reflection_degree(reflection)
    doubt = unresolved_reflection(turns, missing)
    if doubt is not None:
        warnings.warn(f"{discretisation.frequency_hz / 1e6:.6g} MHz: {doubt}", ModelRangeWarning, stacklevel=2)
    together = int(np.ceil(2.0 * size)) + turns
    zenith_angles = max(degree // 2 + 1, together // 2 + 1, LEAST_LOSSY_ZENITH_ANGLES)
    return sphere_quadrature(degree, hemisphere=True, zenith_angles=zenith_angles)
