"""Closed forms from the literature that the field solver is held against.

Everything here comes from published formulas on numpy, scipy and mpmath; of the program itself only the
physical constants are used.  Time factor exp(+j omega t), SI units, impedances in ohm.

Filaments and tubes stand along z.  The current of a centre-fed wire of half-length h is
I(z) = I_max sin(k(h - |z|)), and every impedance is the symmetric reaction

    Z = -(1/(I_1 I_2)) integral of E_1 . I_2 dl,

referred to the current maxima (``reference="maximum"``, finite at every length) or to the feeds
(``reference="feed"``, larger by 1/(sin(k h_1) sin(k h_2))).

References
----------
.. [1] P. S. Carter, "Circuit relations in radiating systems and applications to antenna problems",
   Proc. IRE 20(6), 1932.
.. [2] S. A. Schelkunoff and H. T. Friis, Antennas: Theory and Practice, Wiley, 1952 (field of a sinusoidal
   current as three spherical waves).
.. [3] C. A. Balanis, Antenna Theory, chapters 4 and 8 (printed closed forms, chapter numbers from memory).
"""

from __future__ import annotations

from itertools import pairwise
from math import pi

import mpmath
import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import integrate, special

from elbowroom.base.constants import IMPEDANCE_OF_VACUUM, VACUUM_PERMEABILITY

_UNIT = IMPEDANCE_OF_VACUUM / (4.0 * pi)


def sine_integral(x: ArrayLike) -> NDArray[np.float64]:
    """Return Si(x), the integral of sin(t)/t from 0 to x."""
    return special.sici(x)[0]


def cosine_integral(x: ArrayLike) -> NDArray[np.float64]:
    """Return Ci(x) = gamma + ln x - Cin(x), for x > 0."""
    return special.sici(x)[1]


def entire_cosine_integral(x: ArrayLike) -> NDArray[np.float64]:
    """Return Cin(x), the integral of (1 - cos t)/t from 0 to x > 0."""
    return np.euler_gamma + np.log(x) - special.sici(x)[1]


def refer_impedance(impedance, half_length, half_length2, wavenumber, reference):
    """Return an impedance given at the current maxima at the asked reference, ``"maximum"`` or ``"feed"``."""
    if reference == "maximum":
        return impedance
    if reference == "feed":
        return impedance / (np.sin(wavenumber * half_length) * np.sin(wavenumber * half_length2))
    msg = f"reference must be 'maximum' or 'feed', got {reference!r}"
    raise ValueError(msg)


# --- parallel filaments with sinusoidal currents -----------------------------------------------------------


def _spherical_waves(half_length, wavenumber):
    """Return the sources of the three spherical waves of a sinusoidal filament: place and weight."""
    return (half_length, 1.0), (-half_length, 1.0), (0.0, -2.0 * np.cos(wavenumber * half_length))


def filament_field(half_length, distance, height, wavenumber):
    """Return E_z [V/m per ampere of current maximum] of a sinusoidal filament, three spherical waves [2].

    Parameters
    ----------
    half_length : float
        h [m].
    distance, height : array_like
        Cylindrical coordinates of the observer [m], from the centre of the filament.
    wavenumber : float
        k [rad/m].
    """
    wave = 0.0
    for source, weight in _spherical_waves(half_length, wavenumber):
        r = np.hypot(distance, np.subtract(height, source))
        wave = wave + weight * np.exp(-1j * wavenumber * r) / r
    return -1j * _UNIT * wave


def _exponential_integrals(y, distance, wavenumber):
    """Return E1(j k (R + y)) and E1(j k (R - y)), R^2 = distance^2 + y^2, stable for a small argument.

    On the axis itself one argument vanishes.  There ln(distance^2) is left out of the logarithm: its factor
    is zero in every finite reaction.
    """
    r = np.hypot(distance, y)
    on_axis = distance == 0.0
    large = wavenumber * (r + np.abs(y))
    with np.errstate(divide="ignore", invalid="ignore"):
        small = np.where(on_axis, 1.0, wavenumber * distance**2 / (r + np.abs(y)))
        at_point = r == 0.0
        logarithm = np.log(wavenumber / np.where(at_point, 1.0, 2.0 * r))
    singular = -np.euler_gamma - 0.5j * pi - logarithm
    values = []
    for argument, limit in ((large, at_point), (small, on_axis)):
        si, ci = special.sici(np.where(limit, 1.0, argument))
        values.append(np.where(limit, singular, -ci + 1j * (si - 0.5 * pi)))
    outward = y >= 0.0
    return np.where(outward, values[0], values[1]), np.where(outward, values[1], values[0])


def mutual_impedance(half_length, half_length2, distance, offset, wavenumber, *, reference="maximum"):
    """Return the mutual impedance of two parallel sinusoidal filaments, in closed form.

    Side by side (offset 0), collinear (distance 0) and in echelon; equal or unequal lengths.  Each of the
    three spherical waves of one filament against exp(+-jkz) of the other is an exponential integral of
    imaginary argument, since d(R + z)/(R + z) = dz/R: Carter's integrals [1] without his restriction to equal
    half waves.

    Parameters
    ----------
    half_length, half_length2 : float
        Half-lengths h of the two filaments [m].
    distance : float or array
        Distance of the two axes [m]; 0 for collinear filaments, which may touch but not overlap.
    offset : float or array
        Height of the second centre above the first [m].
    wavenumber : float
        k [rad/m].
    reference : {"maximum", "feed"}
        Currents the impedance is referred to.

    Returns
    -------
    complex or complex128 array
        Impedance [ohm].  Absolute rounding error about 1e-13 ohm times k R.

    Raises
    ------
    ValueError
        If filaments on one axis overlap (the reaction is infinite).
    """
    distance = np.abs(np.asarray(distance, dtype=float))
    offset = np.asarray(offset, dtype=float)
    touching = half_length + half_length2
    if np.any((distance == 0.0) & (np.abs(offset) < touching * (1.0 - 1e-12))):
        msg = "filaments on one axis overlap: their reaction is infinite; give the distance of observation"
        raise ValueError(msg)
    total = 0.0
    for source, weight in _spherical_waves(half_length, wavenumber):
        for side in (1.0, -1.0):
            y0 = side * (offset - source)
            y1 = y0 + half_length2
            # Touching ends must meet exactly, or the logarithm left out on the axis does not cancel.
            y0 = np.where(np.abs(y0) < 1e-12 * touching, 0.0, y0)
            y1 = np.where(np.abs(y1) < 1e-12 * touching, 0.0, y1)
            plus0, minus0 = _exponential_integrals(y0, distance, wavenumber)
            plus1, minus1 = _exponential_integrals(y1, distance, wavenumber)
            turn = np.exp(1j * wavenumber * y1)
            total = total + weight * (turn * (plus0 - plus1) - np.conj(turn) * (minus1 - minus0)) / 2j
    return refer_impedance(1j * _UNIT * total, half_length, half_length2, wavenumber, reference)[()]


def mutual_impedance_by_quadrature(half_length, half_length2, distance, offset, wavenumber, *, reference="maximum"):
    """Return the same quantity by adaptive quadrature of the exact field (scalars, distance > 0)."""

    def integrand(t):
        current = np.sin(wavenumber * (half_length2 - abs(t)))
        return -filament_field(half_length, distance, offset + t, wavenumber) * current

    # Panel ends at the kink of the current and wherever the observer passes a source of a spherical wave.
    cuts = [-half_length2, 0.0, half_length2]
    cuts += [z - offset for z in (-half_length, 0.0, half_length) if abs(z - offset) < half_length2]
    cuts = sorted(set(cuts))
    total = 0.0
    for low, high in pairwise(cuts):
        options = {"epsabs": 1e-11, "epsrel": 1e-11, "limit": 400, "complex_func": True}
        total += integrate.quad(integrand, low, high, **options)[0]
    return refer_impedance(total, half_length, half_length2, wavenumber, reference)


def self_impedance(half_length, radius, wavenumber, *, reference="maximum"):
    """Return the induced-EMF self impedance: current on the axis, field observed at the radius."""
    return mutual_impedance(half_length, half_length, radius, 0.0, wavenumber, reference=reference)


def mutual_impedance_mp(half_length, half_length2, distance, offset, wavenumber):
    """Return `mutual_impedance` at the maximum (distance > 0) in the working precision of mpmath."""
    mp = mpmath.mp
    h, h2, d, z0, k = (mp.mpf(v) for v in (half_length, half_length2, distance, offset, wavenumber))

    def antiderivatives(y):
        r = mp.sqrt(d * d + y * y)
        large, small = k * (r + abs(y)), k * d * d / (r + abs(y))
        pair = [mp.mpc(-mp.ci(u), mp.si(u) - mp.pi / 2) for u in (large, small)]
        return pair if y >= 0 else pair[::-1]

    total = mp.mpc(0)
    for source, weight in ((h, 1), (-h, 1), (mp.mpf(0), -2 * mp.cos(k * h))):
        for side in (1, -1):
            y0 = side * (z0 - source)
            (plus0, minus0), (plus1, minus1) = antiderivatives(y0), antiderivatives(y0 + h2)
            turn = mp.expj(k * (y0 + h2))
            total += weight * (turn * (plus0 - plus1) - (minus1 - minus0) / turn) / 2j
    return mp.mpc(0, 1) * mp.mpf(IMPEDANCE_OF_VACUUM) / (4 * mp.pi) * total


# --- the printed special cases --------------------------------------------------------------------------


def thin_dipole_impedance(half_length, wavenumber, radius=0.0):
    """Return the printed thin-wire self impedance at the current maximum [3].

    The resistance is the limit of zero radius; the radius enters the reactance only, to lowest order, and
    not at all where sin(2kh) = 0.
    """
    kl = 2.0 * wavenumber * half_length
    si, ci = special.sici(kl)
    si2, ci2 = special.sici(2.0 * kl)
    gamma = np.euler_gamma
    bracket = 0.5 * np.cos(kl) * (gamma + np.log(0.5 * kl) + ci2 - 2.0 * ci)
    resistance = 2.0 * _UNIT * (gamma + np.log(kl) - ci + 0.5 * np.sin(kl) * (si2 - 2.0 * si) + bracket)
    at_radius = 0.0
    if abs(np.sin(kl)) > 1e-12:
        at_radius = special.sici(wavenumber * radius**2 / half_length)[1]
    reactance = 2.0 * si + np.cos(kl) * (2.0 * si - si2) - np.sin(kl) * (2.0 * ci - ci2 - at_radius)
    return complex(resistance, _UNIT * reactance)


def half_wave_echelon_impedance(distance, offset, wavenumber):
    """Return Carter's printed mutual impedance of thin half waves in echelon, distance > 0 [1, 3]."""
    length = pi / wavenumber
    total = 0.0
    for shift, weight in ((0.0, 2.0), (-length, -1.0), (length, -1.0)):
        height = offset + shift
        r = np.hypot(distance, height)
        si_up, ci_up = special.sici(wavenumber * (r + height))
        si_down, ci_down = special.sici(wavenumber * (r - height))
        even = ci_up + ci_down - 1j * (si_up + si_down)
        odd = si_up - si_down + 1j * (ci_up - ci_down)
        total = total + weight * (np.cos(wavenumber * offset) * even + np.sin(wavenumber * offset) * odd)
    return 0.5 * _UNIT * total


def half_wave_side_by_side_impedance(distance, wavenumber):
    """Return Carter's printed mutual impedance of two thin half-wave dipoles side by side [1, 3]."""
    length = pi / wavenumber
    r = np.hypot(distance, length)
    si, ci = special.sici(wavenumber * np.array([distance, r + length, r - length]))
    return _UNIT * complex(2.0 * ci[0] - ci[1] - ci[2], -(2.0 * si[0] - si[1] - si[2]))


def half_wave_collinear_impedance(offset, wavenumber):
    """Return Carter's printed mutual impedance of collinear half waves, centres ``offset`` apart [1, 3]."""
    length = pi / wavenumber
    v0 = wavenumber * offset
    si, ci = special.sici(2.0 * wavenumber * np.array([offset, offset + length, offset - length]))
    logarithm = np.log((offset**2 - length**2) / offset**2)
    even = 2.0 * ci[0] - ci[1] - ci[2]
    odd = 2.0 * si[0] - si[1] - si[2]
    resistance = np.cos(v0) * (even + logarithm) + np.sin(v0) * odd
    reactance = -np.cos(v0) * odd + np.sin(v0) * (even - logarithm)
    return 0.5 * _UNIT * complex(resistance, reactance)


# --- tubes: the circumferentially averaged kernel -----------------------------------------------------------


def coaxial_tube_impedance(half_length, half_length2, offset, radius, radius2, wavenumber, *, reference="maximum", n_points=96):
    """Return the reaction of two coaxial tubes with sinusoidal currents: exact thin-wire kernel.

    The kernel averaged around the tube is the mean of filament kernels at the distances
    d^2 = (a - a')^2 + 4 a a' sin^2(phi/2), so the reaction is the same mean of the closed form.  A quartic
    substitution tames the logarithm at phi = 0.

    Parameters
    ----------
    half_length, half_length2 : float
        Half-lengths [m].
    offset : float
        Distance of the centres along the axis [m]; 0 with equal lengths and radii is the self impedance.
    radius, radius2 : float
        Radii [m].
    wavenumber : float
        k [rad/m].
    """
    nodes, weights = np.polynomial.legendre.leggauss(n_points)
    x = 0.5 * (nodes + 1.0)
    distance = np.sqrt((radius - radius2) ** 2 + 4.0 * radius * radius2 * np.sin(0.5 * pi * x**4) ** 2)
    values = mutual_impedance(half_length, half_length2, distance, offset, wavenumber, reference=reference)
    return complex(np.sum(2.0 * weights * x**3 * values))


def tube_self_impedance(half_length, radius, wavenumber, *, reference="maximum"):
    """Return the self reaction of a sinusoid on a tube with the exact (circumferentially averaged) kernel."""
    return coaxial_tube_impedance(half_length, half_length, 0.0, radius, radius, wavenumber, reference=reference)


def tube_self_impedance_mp(half_length, radius, wavenumber):
    """Return `tube_self_impedance` at the maximum, in the working precision of mpmath (a second or so)."""
    mp = mpmath.mp
    a = mp.mpf(radius)

    def integrand(phi):
        return mutual_impedance_mp(half_length, half_length, 2 * a * mp.sin(phi / 2), 0, wavenumber)

    return mp.quad(integrand, [0, mp.pi / 2, mp.pi]) / mp.pi


def ring_kernel_mp(height, radius, wavenumber):
    """Return the mean of exp(-jkR)/R around a tube, R^2 = z^2 + 4 a^2 sin^2(phi/2), in working precision.

    Powers of R are averaged exactly: the mean of (A - B cos phi)^nu is a Legendre function of order nu
    (Laplace's first integral) and obeys its three-term recurrence; half-integer orders start from K and E.
    The exponential series converges for every kR; keep some 0.43 kR digits in hand.
    """
    mp = mpmath.mp
    z, a, k = mp.mpf(height), mp.mpf(radius), mp.mpf(wavenumber)
    far2, mean2, product = z * z + 4 * a * a, z * z + 2 * a * a, z * z * (z * z + 4 * a * a)
    m = 4 * a * a / far2
    # means of R^-1, R^0, R^1, R^2
    means = [
        1 / mp.agm(mp.sqrt(far2), abs(z)),  # = 2 K(m)/(pi far), without loss where m rounds to 1
        mp.mpf(1),
        2 * mp.sqrt(far2) * mp.ellipe(m) / mp.pi,
        mean2,
    ]
    factor, total, n = mp.mpc(1), mp.mpc(0), 0
    while True:
        term = factor * means[n]
        total += term
        if n > 3 and abs(term) < mp.eps * abs(total) / 100:
            return total
        n += 1
        factor *= mp.mpc(0, -1) * k / n
        if n == len(means):
            nu = mp.mpf(n - 1) / 2 - 1
            means.append(((2 * nu + 1) * mean2 * means[n - 2] - nu * product * means[n - 4]) / (nu + 1))


def _cosine_integral_over(mp, phase, rate, low, high):
    """Return the integral of cos(phase + rate z) over [low, high]."""
    if rate == 0:
        return mp.cos(phase) * (high - low)
    return (mp.sin(phase + rate * high) - mp.sin(phase + rate * low)) / rate


def tube_self_impedance_mixed_potential_mp(half_length, radius, wavenumber):
    """Return the tube's self reaction at the maximum from the mixed-potential double integral.

    Z = (j k eta/4 pi) II I I' K + (eta/(4 pi j k)) II dI dI' K.  Both double integrals become one over
    s = z - z' of K against the correlations of the current and of its slope, which are elementary.
    Independent of every sine and cosine integral.
    """
    mp = mpmath.mp
    h, k = mp.mpf(half_length), mp.mpf(wavenumber)

    def correlations(s):
        current = mp.mpf(0)
        slope = mp.mpf(0)
        # z on one arm, z - s on one arm: arm +1 is [0, h] with k(h - z), arm -1 is [-h, 0] with k(h + z).
        for arm in (1, -1):
            for arm2 in (1, -1):
                low = max(0 if arm > 0 else -h, s if arm2 > 0 else s - h)
                high = min(h if arm > 0 else 0, s + h if arm2 > 0 else s)
                if high <= low:
                    continue
                # sin(kh - arm k z) sin(kh - arm2 k (z - s)); slopes are -arm k cos(.) and -arm2 k cos(.)
                difference = _cosine_integral_over(mp, -arm2 * k * s, (arm2 - arm) * k, low, high)
                total = _cosine_integral_over(mp, 2 * k * h + arm2 * k * s, -(arm + arm2) * k, low, high)
                current += (difference - total) / 2
                slope += arm * arm2 * k * k * (difference + total) / 2
        return current, slope

    def integrand(s):
        current, slope = correlations(s)
        return (current - slope / (k * k)) * ring_kernel_mp(s, radius, k)

    cuts = [0, mp.mpf(radius), h / 4, h, 2 * h]
    integral = 2 * mp.quad(integrand, cuts)
    return mp.mpc(0, 1) * k * mp.mpf(IMPEDANCE_OF_VACUUM) / (4 * mp.pi) * integral


def ring_averaged_impedance(
    half_length, half_length2, distance, offset, radius, radius2, wavenumber, *, reference="maximum", n_ring=8
):
    """Return the reaction of two parallel tubes, averaged over both rings, axes ``distance`` > a + a' apart.

    The trapezoidal rule of n_ring x n_ring points converges like ((a + a')/distance)^n_ring.
    """
    angles = 2.0 * pi * np.arange(n_ring) / n_ring
    distance = np.asarray(distance, dtype=float)
    total = 0.0
    for angle in angles:
        for angle2 in angles + pi / n_ring:
            x = distance + radius2 * np.cos(angle2) - radius * np.cos(angle)
            y = radius2 * np.sin(angle2) - radius * np.sin(angle)
            total = total + mutual_impedance(half_length, half_length2, np.hypot(x, y), offset, wavenumber, reference=reference)
    return total / n_ring**2


# --- power: radiation resistance and directivity ---------------------------------------------------------


def short_dipole_resistance(half_length, wavenumber):
    """Return the feed resistance of a short dipole, triangular current: eta (k l)^2/(24 pi), l = 2h.

    With eta = 120 pi this is the handbook's 20 (k h)^2.
    """
    return IMPEDANCE_OF_VACUUM * (2.0 * wavenumber * half_length) ** 2 / (24.0 * pi)


def short_dipole_reactance(half_length, radius, wavenumber):
    """Return the handbook's feed reactance of a short thin dipole, -(eta/pi)(ln(h/a) - 1) cot(kh) [3]."""
    slenderness = np.log(half_length / radius) - 1.0
    return -IMPEDANCE_OF_VACUUM / pi * slenderness / np.tan(wavenumber * half_length)


def small_loop_resistance(area, wavenumber):
    """Return the radiation resistance of a small loop of any shape: eta (k^2 A)^2/(6 pi)."""
    return IMPEDANCE_OF_VACUUM * (wavenumber**2 * area) ** 2 / (6.0 * pi)


def uniform_loop_resistance(radius, wavenumber):
    """Return the radiation resistance of a circular loop of uniform current, any size (Foster 1944; [3]).

    (pi eta/2) k b times the integral of J_2 from 0 to 2kb.
    """
    x = 2.0 * wavenumber * radius
    # integral of J_2 = integral of J_0 - 2 J_1 (DLMF 10.22.5 downwards)
    return 0.25 * pi * IMPEDANCE_OF_VACUUM * x * (special.itj0y0(x)[0] - 2.0 * special.j1(x))


def sinusoid_directivity(half_length, wavenumber):
    """Return the directivity of a thin sinusoidal dipole at right angles to it; half wave: 4/Cin(2 pi)."""
    effective = 1.0 - np.cos(wavenumber * half_length)
    return IMPEDANCE_OF_VACUUM / pi * effective**2 / thin_dipole_impedance(half_length, wavenumber).real


def sinusoid_effective_length(half_length, psi, wavenumber, *, reference="maximum"):
    """Return the transverse effective length [m] of a sinusoidal current at the angle ``psi`` from its axis.

    (2/k) (cos(kh cos psi) - cos kh)/sin psi, positive for current along the axis.
    """
    kh = wavenumber * half_length
    length = 2.0 / wavenumber * (np.cos(kh * np.cos(psi)) - np.cos(kh)) / np.sin(psi)
    return length if reference == "maximum" else length / np.sin(kh)


# --- internal impedance of a round conductor ---------------------------------------------------------------


def skin_depth(frequency_hz, conductivity, permeability=VACUUM_PERMEABILITY):
    """Return the skin depth [m] of a good conductor."""
    return np.sqrt(1.0 / (pi * frequency_hz * permeability * conductivity))


def internal_impedance(frequency_hz, radius, conductivity, permeability=VACUUM_PERMEABILITY):
    """Return the internal impedance per length [ohm/m] of a solid round wire, good conductor (Kelvin 1887).

    g/(2 pi a sigma) I0(g a)/I1(g a) with g = (1 + j)/skin depth.
    """
    g = (1.0 + 1.0j) / skin_depth(frequency_hz, conductivity, permeability)
    ratio = special.ive(0, g * radius) / special.ive(1, g * radius)
    return g / (2.0 * pi * radius * conductivity) * ratio


def internal_impedance_low(frequency_hz, radius, conductivity, permeability=VACUUM_PERMEABILITY):
    """Return its low-frequency form R0 (1 + q^4/48) + j X0 (1 - q^4/96), q = a/skin depth; error q^8."""
    q4 = (radius / skin_depth(frequency_hz, conductivity, permeability)) ** 4
    direct = 1.0 / (pi * radius**2 * conductivity)
    internal = frequency_hz * permeability / 4.0
    return direct * (1.0 + q4 / 48.0) + 1j * internal * (1.0 - q4 / 96.0)


def internal_impedance_high(frequency_hz, radius, conductivity, permeability=VACUUM_PERMEABILITY):
    """Return its high-frequency form, surface impedance with the first curvature term."""
    depth = skin_depth(frequency_hz, conductivity, permeability)
    return ((1.0 + 1.0j) / depth + 0.5 / radius) / (2.0 * pi * radius * conductivity)
