"""Port matrices and terminations from one solve under a reference termination.

The ports of the structure are loaded with a resistance R each; Y_R holds the port currents for 1 V behind each R.
Everything else is algebra with S = 1 - 2 R Y_R, which stays bounded for every passive structure.  Impedance exists where
1 - S can be inverted, and no termination, open and short included, asks for it.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import ArrayLike

from elbowroom.base.arrays import ComplexArray, FloatArray
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


def scattering_renormalised(scattering: ComplexArray, reference_ohm: float, reference: ArrayLike) -> ComplexArray:
    r"""Return the power-wave scattering matrix for other, complex, reference impedances; finite for every passive structure.

    From V = sqrt(R) (1 + S) a and I = (1 - S) a/sqrt(R), without an impedance matrix:

    .. math:: S' = B A^{-1}, \quad A = F (V + Z_r I), \quad B = F (V - Z_r^* I), \quad F = (2 \sqrt{\Re Z_r})^{-1}

    Parameters
    ----------
    scattering : complex128 (P, P)
        S against the resistance R.
    reference_ohm : float
        R [ohm].
    reference : complex or complex (P,)
        Reference impedances wanted [ohm], with positive real part.

    Raises
    ------
    ModelRangeError
        If a reference impedance is not finite or has no positive real part.

    References
    ----------
    .. [1] K. Kurokawa, "Power waves and the scattering matrix", IEEE Trans. MTT 13(2), 1965, 194-202.
    """
    n = len(scattering)
    values = np.broadcast_to(np.asarray(reference, dtype=complex), (n,))
    if not np.all(np.isfinite(values)) or np.any(values.real <= 0.0):
        msg = "reference impedance: expected a positive real part"
        raise ModelRangeError(msg)
    voltage = np.sqrt(reference_ohm) * (np.eye(n) + scattering)
    current = (np.eye(n) - scattering) / np.sqrt(reference_ohm)
    scale = 0.5 / np.sqrt(values.real)
    forward = scale[:, None] * (voltage + values[:, None] * current)
    backward = scale[:, None] * (voltage - values.conj()[:, None] * current)
    return np.linalg.solve(forward.T, backward.T).T


def scattering_of_ports(scattering: ComplexArray, ports: ArrayLike, reflection: ComplexArray) -> ComplexArray:
    r"""Return the scattering matrix (K, K) of some ports, all others terminated.

    .. math:: S_{kk} + S_{kt} \Gamma_t (1 - S_{tt} \Gamma_t)^{-1} S_{tk}

    with k the ports kept and t the terminated ones; finite for open and short circuits.

    Parameters
    ----------
    scattering : complex128 (P, P)
        S of all ports against one resistance.
    ports : int (K,)
        Ports kept, in the order wanted.
    reflection : complex128 (P,)
        Reflection coefficients of all terminations against that resistance; those of the ports kept are not looked at.
    """
    kept = np.asarray(ports, dtype=int)
    rest = np.setdiff1d(np.arange(len(scattering)), kept)
    own = scattering[np.ix_(kept, kept)]
    if rest.size == 0:
        return own
    load = reflection[rest]
    waves = np.eye(rest.size) - scattering[np.ix_(rest, rest)] * load[None, :]
    return own + (scattering[np.ix_(kept, rest)] * load[None, :]) @ np.linalg.solve(waves, scattering[np.ix_(rest, kept)])


def impedance_from_scattering(scattering: ComplexArray, reference_ohm: float) -> ComplexArray:
    """Return Z (P, P) = R (1 + S)(1 - S)^-1 [ohm]."""
    one = np.eye(len(scattering))
    return reference_ohm * np.linalg.solve((one - scattering).T, (one + scattering).T).T


def admittance_from_scattering(scattering: ComplexArray, reference_ohm: float) -> ComplexArray:
    """Return Y (P, P) = (1 - S)(1 + S)^-1/R [S]."""
    one = np.eye(len(scattering))
    return np.linalg.solve((one + scattering).T, (one - scattering).T).T / reference_ohm


def driven_ports(
    scattering: ComplexArray, reference_ohm: float, reflection: ComplexArray, weights: ComplexArray
) -> tuple[ComplexArray, ComplexArray]:
    r"""Return voltages [V] and currents [A] (B, P) into ports that are all driven at once through their terminations.

    The source of port p sends the power wave w_p: the voltage :math:`2 w_p \sqrt{\Re Z_{T,p}}` behind the impedance
    :math:`Z_{T,p}`.  An open termination stands for a source of the current w_p without a termination, a shorted one for
    a source of the voltage w_p.  In waves against R, with e those of the sources:

    .. math:: a = (1 - \Gamma S)^{-1} e, \quad V = \sqrt{R} (1 + S) a, \quad I = (1 - S) a/\sqrt{R}

    Parameters
    ----------
    scattering : complex128 (P, P)
        S against R.
    reference_ohm : float
        R [ohm].
    reflection : complex128 (P,)
        Reflection coefficients of the terminations against R.
    weights : complex128 (B, P)
        w [W^1/2, A or V]; zero where a port is only terminated.

    Raises
    ------
    ModelRangeError
        If a weighted port's termination can send no wave (no resistance, or a negative one), or weighted ports mix open
        or shorted ones with others.
    """
    root = np.sqrt(reference_ohm)
    used = np.any(weights != 0.0, axis=0)
    opened, shorted = reflection == 1.0, reflection == -1.0
    # Re Z_T = R (1 - |Gamma|^2)/|1 - Gamma|^2; e = V_g (1 - Gamma)/(2 sqrt(R)) with V_g = 2 w sqrt(Re Z_T)
    power = 1.0 - np.abs(reflection) ** 2
    ideal = opened | shorted
    if np.any(used & ~ideal & (power <= 1e-12)):
        port = int(np.flatnonzero(used & ~ideal & (power <= 1e-12))[0])
        msg = f"weights: port {port} is driven, but its termination has no positive resistance through which a source could send"
        raise ModelRangeError(msg)
    if len({(bool(o), bool(s)) for o, s in zip(opened[used], shorted[used], strict=True)}) > 1:
        msg = "weights: driven ports mix current sources (open), voltage sources (short) and sources behind an impedance"
        raise ModelRangeError(msg)
    gap = np.where(ideal, 1.0, 1.0 - reflection)
    source: FloatArray | ComplexArray = np.where(opened, root, np.sqrt(np.maximum(power, 0.0)) * gap / np.abs(gap))
    source = np.where(shorted, 1.0 / root, source)
    n = len(reflection)
    sent = np.linalg.solve(np.eye(n) - reflection[:, None] * scattering, (weights * source[None, :]).T)
    back = scattering @ sent
    return (root * (sent + back)).T, ((sent - back) / root).T


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


def is_passive(loaded_admittance: ComplexArray, reference_ohm: float, tolerance: float) -> bool:
    """Return whether no wave sent into the ports comes back larger than by a tolerance.

    The largest singular value of S is at most 1 + tolerance exactly if (1 + tolerance)^2 - S^H S has a Cholesky factor.
    """
    s = scattering_from_loaded(loaded_admittance, reference_ohm)
    if not np.all(np.isfinite(s)):
        return False
    try:
        np.linalg.cholesky((1.0 + tolerance) ** 2 * np.eye(len(s)) - s.conj().T @ s)
    except np.linalg.LinAlgError:
        return False
    return True
