"""Plane waves and the unknowns of one kind of antenna: what a wave induces along them, and by reciprocity what they radiate.

For a direction r_hat the receive vector of an unknown is the integral of f(r') exp(+jk r_hat . r') dl' with the ground's
reflection added: it is both the voltage that a plane wave of unit amplitude arriving from r_hat induces along it and what it
radiates (times -jk eta exp(-jkr)/(4 pi r)).
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import ArrayLike
from scipy.special import j0

from elbowroom.base.arrays import ComplexArray, FloatArray, check_array
from elbowroom.base.errors import ModelRangeError
from elbowroom.kernels.grounds import GroundKernels
from elbowroom.kernels.points_numba import fill_phases
from elbowroom.system.discretisation import Kind


@dataclass(frozen=True)
class DirectionFrame:
    """Directions with what patterns need of them.

    Attributes
    ----------
    theta_rad, phi_rad : float64 (D,)
        Zenith angle, and azimuth from east towards north [rad].
    unit : float64 (D, 3)
        Unit vectors towards the sky.
    """

    theta_rad: FloatArray
    phi_rad: FloatArray
    unit: FloatArray

    @property
    def count(self) -> int:
        """Number of directions."""
        return self.theta_rad.size

    def part(self, rows: slice) -> DirectionFrame:
        """Return some of the directions."""
        return DirectionFrame(self.theta_rad[rows], self.phi_rad[rows], self.unit[rows])


def direction_frame(theta_rad: ArrayLike, phi_rad: ArrayLike) -> DirectionFrame:
    """Check and flatten directions.

    Parameters
    ----------
    theta_rad, phi_rad : array_like
        Zenith angles (0 to pi) and azimuths from east towards north [rad], of shapes that broadcast.

    Raises
    ------
    ModelRangeError
        If a value is not finite or a zenith angle lies outside 0 to pi.
    """
    theta, phi = np.broadcast_arrays(np.asarray(theta_rad, dtype=float), np.asarray(phi_rad, dtype=float))
    theta = check_array("theta_rad", theta.ravel(), (None,), error=ModelRangeError)
    phi = check_array("phi_rad", phi.ravel(), (None,), error=ModelRangeError)
    if theta.size and (theta.min() < 0.0 or theta.max() > np.pi * (1.0 + 1e-12)):
        msg = f"theta_rad: expected zenith angles from 0 to pi, got {theta.min():g} to {theta.max():g}; degrees?"
        raise ModelRangeError(msg)
    s = np.sin(theta)
    return DirectionFrame(theta, phi, np.stack([s * np.cos(phi), s * np.sin(phi), np.cos(theta)], axis=1))


def phases(unit: FloatArray, positions: FloatArray, wavenumber: float) -> ComplexArray:
    """Return exp(+jk r_hat . r_i), complex128 (A, D)."""
    out = np.empty((len(positions), len(unit)), dtype=complex)
    real, imag = np.empty(out.shape), np.empty(out.shape)
    fill_phases(np.ascontiguousarray(unit), np.ascontiguousarray(positions), wavenumber, real, imag)
    out.real, out.imag = real, imag
    return out


class KindWaves:
    """Receive vectors of one kind of antenna at many directions: what does not depend on them is worked out once.

    Parameters
    ----------
    kind : Kind
        Design, attitude and height.
    ground : GroundKernels
        The ground.
    wavenumber : float
        [rad/m].
    tolerance : float, optional
        Relative accuracy of the quadrature along the wires.
    circumference : bool, optional
        Whether the current fills the tube (exact with the near kernel) or its axis.
    basis : complex128 (N, n), optional
        If given, the receive vectors of these combinations of unknowns instead.
    """

    def __init__(
        self,
        kind: Kind,
        ground: GroundKernels,
        wavenumber: float,
        *,
        tolerance: float = 1e-8,
        circumference: bool = True,
        basis: ComplexArray | None = None,
    ) -> None:
        self.ground, self.wavenumber, self.circumference = ground, wavenumber, circumference
        self.sampled = kind.samples(np.inf, wavenumber, tolerance)
        currents = self.sampled.currents
        self.complex = basis is not None
        self.count = self.sampled.charge.shape[1] if basis is None else basis.shape[1]
        if basis is None:
            self.weights = np.concatenate(list(currents), axis=1)
        else:
            # Real and imaginary parts of the phases meet those of the weights in one real product.
            parts = [c @ part for part in (basis.real, basis.imag) for c in currents]
            self.weights = np.concatenate(parts, axis=1)

    def at(self, frame: DirectionFrame) -> ComplexArray:
        """Return the receive vectors, the antenna standing at x = y = 0.

        Returns
        -------
        complex128 (N, D, 2), or (n, D, 2)
            Components along theta_hat and phi_hat [m].  Below the horizon of a ground the field is zero.
        """
        direct = self._sums(frame, mirror=False)
        ct, st = np.cos(frame.theta_rad)[:, None], np.sin(frame.theta_rad)[:, None]
        cp, sp = np.cos(frame.phi_rad)[:, None], np.sin(frame.phi_rad)[:, None]
        reflection = self.ground.reflection(frame.theta_rad, self.wavenumber)
        theta = ct * (cp * direct[0] + sp * direct[1]) - st * direct[2]
        phi = -sp * direct[0] + cp * direct[1]
        if reflection is not None:
            image = self._sums(frame, mirror=True)
            gh, ge = reflection[0][:, None], reflection[1][:, None]
            theta = theta - ge * (ct * (cp * image[0] + sp * image[1]) + st * image[2])
            phi = phi + gh * (-sp * image[0] + cp * image[1])
            below = frame.theta_rad > 0.5 * np.pi * (1.0 + 1e-12)
            theta[below], phi[below] = 0.0, 0.0
        return np.ascontiguousarray(np.stack([theta.T, phi.T], axis=-1))

    def _sums(self, frame: DirectionFrame, *, mirror: bool) -> ComplexArray:
        """Return (3, D, n): sums of the x, y, z current weights with the phases of (mirrored) points."""
        sampled, n = self.sampled, self.count
        flip = np.array([1.0, 1.0, -1.0]) if mirror else np.ones(3)
        unit = np.ascontiguousarray(frame.unit)
        points = np.ascontiguousarray((sampled.points.T) * flip)
        parts = np.empty((2, len(points), frame.count))
        fill_phases(unit, points, self.wavenumber, parts[0], parts[1])
        if self.circumference:
            # A tube's far field: J0(ka sin psi), psi the angle between the direction and the (mirrored) wire.
            tangents, index = np.unique(np.column_stack([sampled.tangent * flip, sampled.radius]), axis=0, return_inverse=True)
            cosine = np.clip(tangents[:, :3] @ unit.T, -1.0, 1.0)
            parts *= j0(self.wavenumber * tangents[:, 3:] * np.sqrt(1.0 - cosine**2))[index.ravel()]
        sums = np.swapaxes(parts, 1, 2) @ self.weights
        result = np.empty((3, frame.count, n), dtype=complex)
        for component in range(3):
            own = slice(component * n, (component + 1) * n)
            if not self.complex:
                result[component].real, result[component].imag = sums[0][:, own], sums[1][:, own]
                continue
            other = slice((3 + component) * n, (4 + component) * n)
            result[component].real = sums[0][:, own] - sums[1][:, other]
            result[component].imag = sums[0][:, other] + sums[1][:, own]
        return result


def kind_vectors(
    kind: Kind,
    ground: GroundKernels,
    frame: DirectionFrame,
    wavenumber: float,
    *,
    tolerance: float = 1e-8,
    circumference: bool = True,
    basis: ComplexArray | None = None,
) -> ComplexArray:
    """Return the receive vectors of the unknowns of one kind, its antenna standing at x = y = 0; see :class:`KindWaves`."""
    return KindWaves(kind, ground, wavenumber, tolerance=tolerance, circumference=circumference, basis=basis).at(frame)
