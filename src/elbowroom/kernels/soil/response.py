"""How a horizontally layered ground answers a plane wave of any horizontal wavenumber.

Notation, with exp(+j omega t), air above z = 0: k the wavenumber of air, L the horizontal wavenumber, u0 = sqrt(L^2 - k^2)
and u_n = sqrt(L^2 - k^2 eps_n) the vertical ones, real parts >= 0.  TE and TM waves see the ground as a load on a
transmission line (Wait 1970, *Electromagnetic Waves in Stratified Media*, chapter 2; from memory):

    Gh = (Y0h - Yh)/(Y0h + Yh)    horizontal electric field, -1 on a perfect conductor
    Ge = (Ye - Y0e)/(Ye + Y0e)    vertical polarisation in the magnetic-field sense, +1 on a perfect conductor
    w  = (Ge + Gh)/L^2            couples horizontal and vertical currents

Admittances are kept free of units: h = j omega mu0 Yh [1/m], u0 for air and u_n for soil; e = Ye/(j omega eps0) [m], 1/u0 for
air and eps_n/u_n for soil.  Each kind of ground gives w in a closed form without the 0/0 at L = 0.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, replace
from numbers import Complex, Real

import numpy as np

from elbowroom.base.arrays import ComplexArray, FloatArray
from elbowroom.base.constants import IMPEDANCE_OF_VACUUM
from elbowroom.base.errors import ModelRangeError


@dataclass(frozen=True)
class MeshSheet:
    """A bonded square wire mesh as a sheet: surface impedances over the impedance of vacuum.

    Attributes
    ----------
    loss : complex
        Pitch times the internal impedance per metre of the wire [1].
    reactance : float
        (k a/2 pi) ln(a/(2 pi r)) for pitch a and wire radius r [1].
    """

    loss: complex
    reactance: float


@dataclass(frozen=True)
class GroundResponse:
    """One ground at one frequency.

    Attributes
    ----------
    wavenumber : float
        k of air [rad/m].
    permittivity : complex
        Relative permittivity of the soil at the surface, eps_r - j sigma/(omega eps0).
    sheet : MeshSheet or None
        The mesh on the surface.
    layers : tuple of (float, complex)
        Thickness [m] and relative permittivity of the layers below the surface, top first, above the half space
        ``bottom``; empty for a homogeneous soil.
    bottom : complex or None
        Relative permittivity of the half space below all layers; None where there are no layers.
    """

    wavenumber: float
    permittivity: complex
    sheet: MeshSheet | None = None
    layers: tuple[tuple[float, complex], ...] = ()
    bottom: complex | None = None

    def coefficients(self, u0: ComplexArray) -> tuple[ComplexArray, ComplexArray, ComplexArray]:
        """Return (Gh, Ge, w) at vertical wavenumbers of air [rad/m], in their shape; w in m^2.

        Parameters
        ----------
        u0 : complex array
            sqrt(L^2 - k^2), real part >= 0.

        Returns
        -------
        tuple of complex arrays
            As in the module's notation.
        """
        u0 = np.asarray(u0, dtype=complex)
        if self.layers:
            return self._layered(u0)
        k, eps = self.wavenumber, self.permittivity
        # sqrt(u0^2 - k^2 (eps - 1)): for passive soil the argument stays in the upper half plane, away from the cut.
        u1 = np.sqrt(u0 * u0 - k * k * (eps - 1.0))
        if self.sheet is None:
            te, tm = u0 + u1, eps * u0 + u1
            return (u0 - u1) / te, (eps * u0 - u1) / tm, 2.0 * (eps - 1.0) / (te * tm)
        # Numerators and denominators times both sheet impedances, so that a sheet without impedance is a perfect plane.
        jx = 1j * self.sheet.reactance
        z_te = self.sheet.loss + jx
        z_tm = z_te - jx * (u0 * u0 / (k * k) + 1.0) / (eps + 1.0)
        shunt_te, shunt_tm = 1j * k, -1j * u0 * u1 / k
        te, tm = z_te * (u0 + u1) + shunt_te, z_tm * (eps * u0 + u1) + shunt_tm
        # With L^2 taken out, z_te u0^2 + z_tm k^2 leaves z_te - jx/(eps + 1).
        numerator = (eps - 1.0) * z_te * z_tm - (1j / k) * u1 * (z_te - jx / (eps + 1.0))
        gh, ge = (z_te * (u0 - u1) - shunt_te) / te, (z_tm * (eps * u0 - u1) + shunt_tm) / tm
        return gh, ge, 2.0 * numerator / (te * tm)

    def _layered(self, u0: ComplexArray) -> tuple[ComplexArray, ComplexArray, ComplexArray]:
        """Carry the admittances of the half space up through the layers.

        With A = -k^2 e and B = h, equal at L = 0, delta = (A - B)/L^2 is carried along, so that w needs no division by L^2.
        Of its two ways of writing, the one that A multiplies keeps its digits: B grows as L, A falls as 1/L.
        """
        k2 = self.wavenumber**2
        level: ComplexArray = u0 * u0 + k2

        def vertical(eps: complex) -> ComplexArray:
            u: ComplexArray = np.sqrt(level - k2 * eps)
            # A wave that runs level has no admittances; one that all but does tells their limit.
            return np.asarray(np.where(u == 0.0, 1e-12 * self.wavenumber, u), dtype=complex)

        assert self.bottom is not None
        u = vertical(self.bottom)
        a, b, delta = -k2 * self.bottom / u, u, -1.0 / u
        for thickness, eps in reversed(self.layers):
            u = vertical(eps)
            ac, bc, delta_c = -k2 * eps / u, u, -1.0 / u
            decay = np.exp(-2.0 * u * thickness)
            t = (1.0 - decay) / (1.0 + decay)
            below_a, below_b = ac + a * t, bc + b * t
            delta = (ac * bc * delta + t * (a * b + ac * bc) * delta_c + t * t * (a * (ac + bc) * delta_c - ac * ac * delta)) / (
                below_a * below_b
            )
            a, b = ac * (a + ac * t) / below_a, bc * (b + bc * t) / below_b
        if self.sheet is not None:
            # In parallel with the ground: 1/Z_TM - 1/Z_TE has a factor L^2 in closed form.
            k, jx = self.wavenumber, 1j * self.sheet.reactance
            z_te = self.sheet.loss + jx
            z_tm = z_te - jx * (level / k2) / (self.permittivity + 1.0)
            delta = delta - self.sheet.reactance / (k * (self.permittivity + 1.0) * z_te * z_tm)
            a, b = a + 1j * k / z_tm, b + 1j * k / z_te
        e: ComplexArray = -a / k2
        te, tm = u0 + b, 1.0 + u0 * e
        return (u0 - b) / te, (u0 * e - 1.0) / tm, 2.0 * (e + delta) / (te * tm)

    def reflection(self, theta_rad: FloatArray) -> tuple[ComplexArray, ComplexArray]:
        """Return (Gh, Ge) of plane waves at zenith angles up to the horizon, in the shape of ``theta_rad``."""
        gh, ge, _ = self.coefficients(1j * self.wavenumber * np.cos(np.asarray(theta_rad, dtype=float)))
        return gh, ge


def _positive(name: str, value: float, *, zero: bool = False) -> float:
    allowed = ">= 0" if zero else "> 0"
    fine = isinstance(value, Real) and math.isfinite(value) and (value >= 0.0 if zero else value > 0.0)
    if not fine:
        msg = f"{name}: expected a finite number {allowed}, got {value!r}"
        raise ModelRangeError(msg)
    return float(value)


def _passive(name: str, value: complex) -> complex:
    if not isinstance(value, Complex) or not np.isfinite(complex(value)):
        msg = f"{name}: expected a finite complex number, got {value!r}"
        raise ModelRangeError(msg)
    eps = complex(value)
    if eps.real < 1.0 or eps.imag > 0.0:
        msg = (
            f"{name}: expected eps_r - j sigma/(omega eps0) with eps_r >= 1 and sigma >= 0, got {eps:g}: "
            "with exp(+j omega t) losses make the imaginary part negative"
        )
        raise ModelRangeError(msg)
    return eps


def bare_soil(wavenumber: float, eps: complex) -> GroundResponse:
    """Return the response of a homogeneous half space.

    Parameters
    ----------
    wavenumber : float
        k of air [rad/m].
    eps : complex
        Relative permittivity, eps_r - j sigma/(omega eps0).

    Returns
    -------
    GroundResponse

    Raises
    ------
    ModelRangeError
        On a wavenumber that is not positive, eps_r below 1, negative conductivity, or anything not finite.
    """
    return GroundResponse(_positive("wavenumber", wavenumber), _passive("relative permittivity of soil", eps))


def layered_soil(wavenumber: float, layers: Sequence[tuple[float, complex]]) -> GroundResponse:
    """Return the response of horizontal layers of soil.

    Parameters
    ----------
    wavenumber : float
        k of air [rad/m].
    layers : sequence of (float, complex)
        Thickness [m] and relative permittivity, top first; the last one is the half space below, its thickness infinite
        (``math.inf``).

    Returns
    -------
    GroundResponse

    Raises
    ------
    ModelRangeError
        As :func:`bare_soil`; without layers, on thicknesses that are not positive, or a last layer that ends.
    """
    k = _positive("wavenumber", wavenumber)
    if not layers:
        msg = "layers of soil: expected at least one, got none"
        raise ModelRangeError(msg)
    passive = [_passive(f"relative permittivity of layer {n}", eps) for n, (_, eps) in enumerate(layers)]
    if layers[-1][0] != math.inf:
        msg = f"thickness of the last layer: expected inf, for it reaches down without end, got {layers[-1][0]!r}"
        raise ModelRangeError(msg)
    thick = [_positive(f"thickness of layer {n} [m]", d) for n, (d, _) in enumerate(layers[:-1])]
    if not thick:
        return GroundResponse(k, passive[0])
    return GroundResponse(k, passive[0], layers=tuple(zip(thick, passive, strict=False)), bottom=passive[-1])


def mesh_on_soil(
    wavenumber: float, eps: complex, pitch_m: float, wire_radius_m: float, wire_impedance_ohm_per_m: complex = 0.0
) -> GroundResponse:
    """Return the response of a square wire mesh, bonded at its crossings, on the surface of a half space.

    Parameters
    ----------
    wavenumber : float
        k of air [rad/m].
    eps : complex
        Relative permittivity of the soil.
    pitch_m, wire_radius_m, wire_impedance_ohm_per_m
        See :func:`under_mesh`.

    Returns
    -------
    GroundResponse

    Raises
    ------
    ModelRangeError
        As :func:`bare_soil` and :func:`under_mesh`.
    """
    return under_mesh(bare_soil(wavenumber, eps), pitch_m, wire_radius_m, wire_impedance_ohm_per_m)


def under_mesh(
    ground: GroundResponse, pitch_m: float, wire_radius_m: float, wire_impedance_ohm_per_m: complex = 0.0
) -> GroundResponse:
    """Return the response of a ground once a square wire mesh, bonded at its crossings, lies on it.

    Averaged boundary conditions (Kontorovich; Wait): good to |dGamma| of about 0.02 for pitches of 5-20 cm up to 350 MHz,
    not for antenna wires lower than about one pitch, nor for a pitch above a quarter wavelength in the soil.  The fields between
    the wires reach about a pitch deep: their permittivity is that of the top layer, which has to be thicker.

    Parameters
    ----------
    ground : GroundResponse
        Soil without a mesh.
    pitch_m : float
        Distance of neighbouring parallel wires [m].
    wire_radius_m : float
        [m]
    wire_impedance_ohm_per_m : complex, optional
        Internal impedance of the wire per length [ohm/m]; 0 for a perfect conductor.

    Returns
    -------
    GroundResponse

    Raises
    ------
    ModelRangeError
        On a pitch that is not larger than the wire's diameter (the sheet's reactance, ln(a/(2 pi r)), asks for more than pi
        diameters, and that is refused too), or an active wire impedance.
    """
    pitch, radius = _positive("pitch of the mesh [m]", pitch_m), _positive("wire radius of the mesh [m]", wire_radius_m)
    if pitch <= 2.0 * math.pi * radius:
        msg = (
            f"pitch of the mesh: expected more than {2.0 * math.pi:.4g} wire radii, where its averaged reactance is positive, "
            f"got {pitch:g} m with wires of {radius:g} m radius"
        )
        raise ModelRangeError(msg)
    wire = wire_impedance_ohm_per_m
    if not isinstance(wire, Complex) or not np.isfinite(complex(wire)) or complex(wire).real < 0.0:
        msg = f"impedance of the mesh's wire [ohm/m]: expected a finite number with a real part >= 0, got {wire!r}"
        raise ModelRangeError(msg)
    reactance = ground.wavenumber * pitch / (2.0 * math.pi) * math.log(pitch / (2.0 * math.pi * radius))
    return replace(ground, sheet=MeshSheet(pitch * complex(wire) / IMPEDANCE_OF_VACUUM, reactance))
