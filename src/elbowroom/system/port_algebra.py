"""Port matrices and terminations from one solve under a reference termination.

The ports of the structure are loaded with a resistance R each; Y_R holds the port currents for 1 V behind each R.
Everything else is algebra with S = 1 - 2 R Y_R, which stays bounded for every passive structure.  Impedance exists where
1 - S can be inverted, and no termination, open and short included, asks for it.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from elbowroom.base.arrays import ComplexArray
from elbowroom.base.errors import ModelRangeError


def scattering_from_loaded(loaded_admittance: ComplexArray, reference_ohm: float) -> ComplexArray:
    """Return S (P, P) for the reference resistance [ohm] itself, from the loaded admittance [S]."""
    return np.eye(len(loaded_admittance)) - 2.0 * reference_ohm * loaded_admittance


def impedance_from_loaded(loaded_admittance: ComplexArray, reference_ohm: float) -> ComplexArray:
    """Return Z (P, P) [ohm]: what the ports show without the reference resistances."""
    return np.linalg.inv(loaded_admittance) - reference_ohm * np.eye(len(loaded_admittance))


def admittance_from_loaded(loaded_admittance: ComplexArray, reference_ohm: float) -> ComplexArray:
    """Return Y (P, P) [S] of the ports: Y_R (1 - R Y_R)^-1, finite where Z is not."""
    n = len(loaded_admittance)
    return np.linalg.solve((np.eye(n) - reference_ohm * loaded_admittance).T, loaded_admittance.T).T


def scattering_from_impedance(impedance: ComplexArray, reference: ArrayLike) -> ComplexArray:
    r"""Return the power-wave scattering matrix for complex reference impedances.

    .. math:: S = F (Z - Z_r^*) (Z + Z_r)^{-1} F^{-1}, \quad F = (2 \sqrt{\Re Z_r})^{-1}

    Parameters
    ----------
    impedance : complex128 (P, P)
        [ohm]
    reference : complex or complex (P,)
        Reference impedances [ohm], with positive real part.

    References
    ----------
    .. [1] K. Kurokawa, "Power waves and the scattering matrix", IEEE Trans. MTT 13(2), 1965, 194-202.
    """
    n = len(impedance)
    values = np.broadcast_to(np.asarray(reference, dtype=complex), (n,))
    if np.any(values.real <= 0.0):
        msg = "reference impedance: expected a positive real part"
        raise ModelRangeError(msg)
    root = np.sqrt(values.real)
    inner = np.linalg.solve((impedance + np.diag(values)).T, (impedance - np.diag(values.conj())).T).T
    return inner * root[None, :] / root[:, None]


def response_matrix(loaded_admittance: ComplexArray, reference_ohm: float, reflection: ComplexArray) -> ComplexArray:
    """Return T (P, P) [ohm]: port voltages under a termination from port currents under the reference.

    With c the port currents that a wave drives through the reference resistances, V = T c.  The row of a shorted port
    gives its short-circuit current instead, and is then dimensionless.

    Parameters
    ----------
    loaded_admittance : complex128 (P, P)
        Y_R [S].
    reference_ohm : float
        R [ohm].
    reflection : complex128 (P,)
        Reflection coefficients of the terminations against R.
    """
    n = len(reflection)
    waves = np.eye(n) - scattering_from_loaded(loaded_admittance, reference_ohm) * reflection[None, :]
    inverse = np.linalg.inv(waves)
    shorted = reflection == -1.0
    factor = np.where(shorted, 1.0 - reflection, -reference_ohm * (1.0 + reflection))
    return factor[:, None] * inverse
