"""The four kernels of a ground by quadrature over vertical wavenumbers.

S[f](rho, Z) = integral over L from 0 of f(L) (L/u0) J0(L rho) exp(-u0 Z) dL, so that S[1] = exp(-jkR)/R, R^2 = rho^2 + Z^2, and

    P = S[Gh],  N = S[-Gh + k^2 w],  K = S[-Ge + k^2 w],  V = S[-u0 w]

(coefficients of ``response``).  The variable of integration is u0, for which (L/u0) dL = du0: along u0 = jk cos(theta) through
the propagating waves, then along u0 = v through the evanescent ones.  Panels are halved until the coefficients are resolved on
each, which finds the branch points of soils and the poles of sheets without being told, then cut to the phase of the
Bessel function.  Beyond every singularity the Bessel function splits into Hankel functions that decay on the vertical lines
L = L_b +- jt, which serve all distances but the shortest (Michalski and Mosig 1997 review such contours; from memory).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from functools import cache

import numpy as np
from scipy.special import hankel1e, j0

from elbowroom.base.arrays import ComplexArray, FloatArray
from elbowroom.base.errors import ModelRangeError, SolveError
from elbowroom.kernels.soil.response import GroundResponse

NEAR_DISTANCE_M = 1.5
"""Up to this horizontal distance the real axis serves to its end; farther, the vertical lines do [m]."""

GROUP_RATIO = 3.0
"""Largest over smallest distance of those that share nodes."""

RESOLVED = 2e-10
"""Last Legendre coefficients of what counts as resolved on a panel, the coefficients being of order one."""

DECAY = 26.0
"""exp(-DECAY) counts as nothing."""

_RULES = ((16, 6.0), (24, 15.0), (32, 24.0))
"""Gauss rules and the half phase across a panel up to which each is exact to 1e-10 beside a resolved coefficient."""

_DEEPEST = 48
_MOST_OPEN = 400

LARGEST_REST = 1e-7
"""What panels that were left unresolved may add to a kernel; more is refused."""

_TRACE = 1e-8
"""Loss tangent, and resistance of a mesh over its reactance, below which it is taken to be this."""


@cache
def _rule(n: int) -> tuple[FloatArray, FloatArray]:
    return np.polynomial.legendre.leggauss(n)


@cache
def _last_legendre(n: int) -> FloatArray:
    """Return the rows that give the last two Legendre coefficients from samples at the n Gauss points."""
    x, w = _rule(n)
    rows = [(2 * m + 1) / 2.0 * w * np.polynomial.legendre.Legendre.basis(m)(x) for m in (n - 2, n - 1)]
    return np.array(rows)


@dataclass(frozen=True)
class _Nodes:
    """Quadrature nodes of one path.

    ``level`` is L [rad/m] and ``u0`` the vertical wavenumber, ``coefficients`` (4, n) those of P, N, K and k V times the weight.
    """

    level: ComplexArray
    u0: ComplexArray
    coefficients: ComplexArray

    def sources(self, z: FloatArray) -> ComplexArray:
        """Return coefficients times exp(-u0 Z), (n, 4 n_z)."""
        waves = np.exp(-self.u0[:, None] * z)
        return (self.coefficients.T[:, :, None] * waves[:, None, :]).reshape(self.u0.size, -1)


def _four(response: GroundResponse, u0: ComplexArray) -> ComplexArray:
    """Return the coefficients of P, N, K and k V, (4, ...)."""
    k = response.wavenumber
    gh, ge, w = response.coefficients(u0)
    k2w = k * k * w
    return np.stack([gh, k2w - gh, k2w - ge, -k * u0 * w])


def _off_the_path(response: GroundResponse) -> GroundResponse:
    """Return the ground with a trace of loss if it has none: the waves it guides are poles that must not lie on the path."""

    def lossy(eps: complex) -> complex:
        return complex(eps.real, min(eps.imag, -_TRACE * eps.real))

    if response.sheet is None and not response.layers:
        return response
    sheet = response.sheet
    if sheet is not None:
        sheet = replace(sheet, loss=complex(max(sheet.loss.real, _TRACE * sheet.reactance), sheet.loss.imag))
    return replace(
        response,
        permittivity=lossy(response.permittivity),
        sheet=sheet,
        layers=tuple((thickness, lossy(eps)) for thickness, eps in response.layers),
        bottom=None if response.bottom is None else lossy(response.bottom),
    )


class GroundQuadrature:
    """Evaluates the kernels of one ground on grids of distance and height.

    Parameters
    ----------
    response : GroundResponse
        The ground.
    z_min_m : float
        Smallest sum of heights that will be asked for [m].

    Raises
    ------
    ModelRangeError
        On a height sum that is not positive.
    SolveError
        If the coefficients vary too rapidly for panels to follow.
    """

    def __init__(self, response: GroundResponse, z_min_m: float) -> None:
        if not (np.isfinite(z_min_m) and z_min_m > 0.0):
            msg = f"sum of heights above the ground [m]: expected more than 0, got {z_min_m!r}"
            raise ModelRangeError(msg)
        self.response = _off_the_path(response)
        self.z_min_m = float(z_min_m)
        k = response.wavenumber
        soils = [response.permittivity, *(eps for _, eps in response.layers)]
        if response.bottom is not None:
            soils.append(response.bottom)
        # Beyond the last branch point, k sqrt(eps), and the waves that a mesh binds, below k sqrt(eps + 1).
        self.corner = 1.2 * k * max(np.sqrt(eps + 1.0).real for eps in soils)
        self._corner_v = float(np.sqrt(self.corner**2 - k * k))
        self._end_v = max(DECAY / self.z_min_m, 1.5 * self._corner_v)
        self._theta_panels = self._resolve(np.linspace(0.0, np.pi / 2.0, 5), lambda s: 1j * k * np.cos(s))
        first = [0.0, 0.5 * self._corner_v, self._corner_v]
        beyond = self._corner_v * 2.0 ** np.arange(1, max(1, int(np.ceil(np.log2(self._end_v / self._corner_v)))) + 1)
        self._v_panels = self._resolve(np.array([*first, *beyond]), lambda s: s + 0j)

    def _resolve(self, breaks: FloatArray, path: Callable[[FloatArray], ComplexArray]) -> FloatArray:
        """Halve panels until the four coefficients are resolved on each; return (n, 2) ends."""
        x, _ = _rule(16)
        last = _last_legendre(16)
        open_ = np.stack([breaks[:-1], breaks[1:]], axis=1)
        done = []
        rest = 0.0
        for _ in range(_DEEPEST):
            half = 0.5 * (open_[:, 1] - open_[:, 0])
            samples = _four(self.response, path((open_[:, 0] + half)[:, None] + half[:, None] * x))
            tail = np.abs(samples @ last.T).max(axis=(0, 2))
            # What is left unresolved counts by the width it has; 100 m is farther than stations are wide.
            fine = tail * np.minimum(1.0, 100.0 * half) <= RESOLVED
            done.append(open_[fine])
            open_, rest = open_[~fine], float((tail * half)[~fine].sum())
            # Rounding beside a pole can keep panels from ever looking resolved.
            if not open_.size or len(open_) > _MOST_OPEN:
                break
            middle = open_.mean(axis=1)
            open_ = np.concatenate([np.stack([open_[:, 0], middle], axis=1), np.stack([middle, open_[:, 1]], axis=1)])
        if rest > LARGEST_REST:
            msg = (
                f"kernels of the ground at a wavenumber of {self.response.wavenumber:.4g} rad/m: {len(open_)} panels of their "
                f"integral stay unresolved, {rest:.1e} of a kernel, where {LARGEST_REST:g} is allowed; thick layers of soil that "
                "hardly lose power do that: let the last layer that matters have no end"
            )
            raise SolveError(msg)
        panels = np.concatenate([*done, open_])
        return panels[np.argsort(panels[:, 0])]

    def _place(self, panels: FloatArray, phase_per_unit: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Return nodes and weights on panels, cut so that the phase across each suits its rule."""
        half_phase = 0.5 * (panels[:, 1] - panels[:, 0]) * phase_per_unit
        parts = np.maximum(1, np.ceil(half_phase / _RULES[-1][1])).astype(int)
        width = (panels[:, 1] - panels[:, 0]) / parts
        index = np.repeat(np.arange(len(panels)), parts)
        offset = np.arange(parts.sum()) - np.repeat(np.cumsum(parts) - parts, parts)
        left, width = panels[index, 0] + offset * width[index], width[index]
        half_phase = (half_phase / parts)[index]
        nodes, weights, lowest = [], [], -1.0
        for n, largest in _RULES:
            mine = (half_phase > lowest) & (half_phase <= largest * (1.0 + 1e-9))
            lowest = largest * (1.0 + 1e-9)
            x, w = _rule(n)
            nodes.append((left[mine, None] + 0.5 * width[mine, None] * (x + 1.0)).ravel())
            weights.append((0.5 * width[mine, None] * w).ravel())
        return np.concatenate(nodes), np.concatenate(weights)

    def _real_axis(self, rho_max: float, z_max: float, end_v: float) -> _Nodes:
        k = self.response.wavenumber
        spread = np.hypot(rho_max, z_max)
        theta, weight = self._place(self._theta_panels, np.full(len(self._theta_panels), k * spread))
        panels = self._v_panels[self._v_panels[:, 0] < end_v * (1.0 - 1e-12)].copy()
        panels[-1, 1] = min(panels[-1, 1], end_v)
        # Heights that have died out at a panel's start do not ask for nodes on it.
        alive = np.minimum(z_max, DECAY / np.maximum(panels[:, 0], 1e-9))
        v, weight_v = self._place(panels, rho_max + alive)
        u0 = np.concatenate([1j * k * np.cos(theta), v + 0j])
        level = np.concatenate([k * np.sin(theta), np.sqrt(v * v + k * k)])
        weights = np.concatenate([1j * k * np.sin(theta) * -weight, weight_v + 0j])
        return _Nodes(level, u0, _four(self.response, u0) * weights)

    def _vertical(self, rho_min: float, rho_max: float) -> tuple[_Nodes, _Nodes]:
        """Return the nodes at L_b + jt and L_b - jt, without their Hankel functions."""
        end = DECAY / rho_min
        breaks = [end]
        while breaks[-1] > min(0.5 * self.response.wavenumber, 4.0 / rho_max):
            breaks.append(breaks[-1] / 2.5)
        edges = np.array([0.0, *reversed(breaks)])
        panels = np.stack([edges[:-1], edges[1:]], axis=1)
        t, weight = self._place(panels, np.full(len(panels), min(rho_max, rho_min * 2.0)))
        sides = []
        for sign in (1.0, -1.0):
            level = self.corner + sign * 1j * t
            u0 = np.sqrt(level * level - self.response.wavenumber**2)
            factor = 0.5j * sign * weight * level / u0
            sides.append(_Nodes(level, u0, _four(self.response, u0) * factor))
        return sides[0], sides[1]

    def kernels(self, rho: FloatArray, z: FloatArray) -> ComplexArray:
        """Return P, N, K and k V, each times R exp(+jkR), on a grid.

        Parameters
        ----------
        rho : float64 (n_rho,)
            Horizontal distances [m].
        z : float64 (n_z,)
            Sums of heights [m], not below the ``z_min_m`` of the quadrature.

        Returns
        -------
        complex128 (4, n_rho, n_z)
            Good to about 1e-9.
        """
        rho, z = np.asarray(rho, dtype=float), np.asarray(z, dtype=float)
        if z.size and z.min() < self.z_min_m * (1.0 - 1e-12):
            msg = f"sum of heights above the ground [m]: expected at least {self.z_min_m:g}, got {z.min():g}"
            raise ModelRangeError(msg)
        out = np.empty((rho.size, 4, z.size), dtype=complex)
        order = np.argsort(rho, kind="stable")
        ranked = rho[order]
        start = 0
        while start < rho.size:
            near = ranked[start] < NEAR_DISTANCE_M
            limit = NEAR_DISTANCE_M if near else GROUP_RATIO * ranked[start]
            stop = int(np.searchsorted(ranked, limit, side="left" if near else "right"))
            mine = order[start:stop]
            out[mine] = self._group(ranked[start:stop], z, near).reshape(stop - start, 4, z.size)
            start = stop
        distance = np.sqrt(rho[:, None] ** 2 + z**2)
        out *= (distance * np.exp(1j * self.response.wavenumber * distance))[:, None, :]
        return np.ascontiguousarray(out.transpose(1, 0, 2))

    def _group(self, rho: FloatArray, z: FloatArray, near: bool) -> ComplexArray:
        rho_min, rho_max, z_max = float(rho[0]), float(rho[-1]), float(z.max())
        axis = self._real_axis(rho_max, z_max, self._end_v if near else self._corner_v)
        bessel = j0(np.multiply.outer(rho, axis.level.real))
        total = _real_times_complex(bessel, axis.sources(z))
        if near:
            return total
        up, down = self._vertical(rho_min, rho_max)
        argument = np.multiply.outer(rho, up.level)
        hankel = hankel1e(0, argument) * np.exp(1j * argument)
        # H0(2) of the conjugate argument is the conjugate of H0(1).
        return total + hankel @ up.sources(z) + hankel.conj() @ down.sources(z)


def _real_times_complex(real: FloatArray, values: ComplexArray) -> ComplexArray:
    """Return the product of a real and a complex matrix without making the first one complex."""
    return np.asarray(real @ np.ascontiguousarray(values).view(np.float64)).view(np.complex128)


def kernels_at(response: GroundResponse, rho_m: FloatArray, z_m: FloatArray) -> ComplexArray:
    """Return P, N, K [1/m] and V [1] on a grid of distances and height sums, complex128 (4, n_rho, n_z).

    Quadrature, good to about 1e-9 over R; tables (:mod:`elbowroom.kernels.soil.table`) serve many points.

    Parameters
    ----------
    response : GroundResponse
        The ground.
    rho_m : float64 (n_rho,)
        Horizontal distances [m], >= 0.
    z_m : float64 (n_z,)
        Sums of heights [m], > 0.

    Returns
    -------
    complex128 (4, n_rho, n_z)

    Raises
    ------
    ModelRangeError
        On distances or heights that are negative, zero (heights) or not finite.
    """
    rho, z = np.atleast_1d(np.asarray(rho_m, dtype=float)), np.atleast_1d(np.asarray(z_m, dtype=float))
    if not (np.all(np.isfinite(rho)) and np.all(rho >= 0.0)):
        msg = f"horizontal distances [m]: expected finite numbers >= 0, got {rho[~(rho >= 0.0) | ~np.isfinite(rho)][:3]}"
        raise ModelRangeError(msg)
    if not (np.all(np.isfinite(z)) and np.all(z > 0.0)):
        msg = f"sums of heights [m]: expected finite numbers > 0, got {z[~(z > 0.0) | ~np.isfinite(z)][:3]}"
        raise ModelRangeError(msg)
    scaled = GroundQuadrature(response, float(z.min())).kernels(rho, z)
    distance = np.sqrt(rho[:, None] ** 2 + z**2)
    scaled *= np.exp(-1j * response.wavenumber * distance) / distance
    scaled[3] /= response.wavenumber
    return scaled
