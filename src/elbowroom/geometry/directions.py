"""Directions of the sky, their weights, and the components of fields along them.

Station frame: x east, y north, z up; a direction points from the station to the sky.  ``theta`` is the
zenith angle, ``phi`` turns from east towards north.  Inside functions every angle is in radians; a name
ending in ``_deg`` says where a person types or reads it.

- `Directions`, `unit_vectors`, `spherical_basis`, `azimuth_deg`: what a direction is
- `hemisphere_grid`, `sphere_quadrature`, `cut`: sets of directions to look at or to integrate over
- `ludwig3`, `rotated`: components of a field in another pair of unit vectors
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray

from elbowroom.base.arrays import FloatArray, check_array
from elbowroom.base.errors import GeometryError


@dataclass(frozen=True, eq=False)
class Directions:
    """A list of directions, with what is needed to integrate over them or to draw them as a grid.

    Parameters
    ----------
    theta_rad : float64 (D,)
        Zenith angle [rad], 0 to pi.
    phi_rad : float64 (D,)
        Angle from east towards north [rad].
    weights_sr : float64 (D,), optional
        Solid angle that each direction stands for [sr]; ``None`` where the list is not meant for integrals.
    shape : tuple of int, optional
        (rows, columns) of the grid that was flattened row by row; ``None`` for a plain list.

    Raises
    ------
    GeometryError
        If lengths disagree, a value is not finite, or a zenith angle lies outside 0 to pi.
    """

    theta_rad: FloatArray
    phi_rad: FloatArray
    weights_sr: FloatArray | None = None
    shape: tuple[int, int] | None = None

    def __post_init__(self) -> None:
        theta = _read_only("theta_rad", self.theta_rad, (None,))
        if theta.size and (theta.min() < 0.0 or theta.max() > np.pi):
            msg = f"theta_rad: zenith angles run from 0 to pi, got {theta.min():.6g} to {theta.max():.6g}" + (
                " (degrees?)" if theta.max() > 2.0 * np.pi else ""
            )
            raise GeometryError(msg)
        object.__setattr__(self, "theta_rad", theta)
        object.__setattr__(self, "phi_rad", _read_only("phi_rad", self.phi_rad, theta.shape))
        if self.weights_sr is not None:
            object.__setattr__(self, "weights_sr", _read_only("weights_sr", self.weights_sr, theta.shape))
        if self.shape is not None and self.shape[0] * self.shape[1] != theta.size:
            msg = f"shape: {self.shape[0]} rows of {self.shape[1]} do not hold {theta.size} directions"
            raise GeometryError(msg)

    def __len__(self) -> int:
        return self.theta_rad.size

    def unit_vectors(self) -> FloatArray:
        """Return the unit vectors towards the directions, float64 (D, 3)."""
        return unit_vectors(self.theta_rad, self.phi_rad)

    def integrate(self, values: ArrayLike) -> NDArray[Any]:
        """Return the integral over solid angle of values whose last axis is (D,).

        Raises
        ------
        GeometryError
            If this set of directions has no weights, or the last axis has another length.
        """
        array = np.asarray(values)
        if self.weights_sr is None:
            msg = "these directions carry no solid-angle weights; integrate over a grid or a quadrature"
            raise GeometryError(msg)
        if array.ndim == 0 or array.shape[-1] != len(self):
            msg = f"values: expected a last axis of {len(self)} directions, got shape {array.shape}"
            raise GeometryError(msg)
        return array @ self.weights_sr


def _read_only(name: str, values: ArrayLike, shape: tuple[int | None, ...]) -> FloatArray:
    array = np.array(check_array(name, values, shape, error=GeometryError))
    array.setflags(write=False)
    return array


def unit_vectors(theta_rad: ArrayLike, phi_rad: ArrayLike) -> FloatArray:
    """Return unit vectors (east, north, up) from the station towards the sky.

    Parameters
    ----------
    theta_rad, phi_rad : array_like (D,)
        Zenith angle, and angle from east towards north [rad]; broadcast against each other.

    Returns
    -------
    float64 (D, 3)
        Unit vectors [-].
    """
    theta, phi = np.broadcast_arrays(np.asarray(theta_rad, float), np.asarray(phi_rad, float))
    sin_theta = np.sin(theta)
    return np.stack([sin_theta * np.cos(phi), sin_theta * np.sin(phi), np.cos(theta)], axis=-1)


def spherical_basis(theta_rad: ArrayLike, phi_rad: ArrayLike) -> tuple[FloatArray, FloatArray]:
    """Return the unit vectors along growing zenith angle and growing phi.

    With the direction itself they form a right-handed set: theta_hat x phi_hat = r_hat.  At the zenith
    and the nadir the pair is still defined, by the phi that is given.

    Parameters
    ----------
    theta_rad, phi_rad : array_like (D,)
        Zenith angle, and angle from east towards north [rad]; broadcast against each other.

    Returns
    -------
    theta_hat, phi_hat : float64 (D, 3)
        Unit vectors (east, north, up) [-].
    """
    theta, phi = np.broadcast_arrays(np.asarray(theta_rad, float), np.asarray(phi_rad, float))
    sin_phi, cos_phi = np.sin(phi), np.cos(phi)
    cos_theta = np.cos(theta)
    theta_hat = np.stack([cos_theta * cos_phi, cos_theta * sin_phi, -np.sin(theta)], axis=-1)
    phi_hat = np.stack([-sin_phi, cos_phi, np.zeros_like(phi)], axis=-1)
    return theta_hat, phi_hat


def azimuth_deg(phi_rad: ArrayLike) -> FloatArray:
    """Return the compass azimuth [deg], north through east, 0 <= azimuth < 360, of angles phi [rad]."""
    azimuth = np.mod(90.0 - np.degrees(np.asarray(phi_rad, float)), 360.0)
    # the remainder of a tiny negative number rounds up to 360 itself
    return np.where(azimuth >= 360.0, 0.0, azimuth)


def hemisphere_grid(step_deg: float) -> Directions:
    """Return a regular grid over the sky above the horizon, with weights that add up to 2 pi.

    Rows are zenith angles 0, step, ..., 90 deg; columns are phi 0, step, ..., 360 - step.  All columns of
    the first row are the zenith.  The weights integrate exactly what varies linearly with zenith angle
    between two rows, and Fourier terms of phi below 360/step; for smooth patterns the error falls with
    the square of the step.  For integrals that must be exact use `sphere_quadrature`.

    Parameters
    ----------
    step_deg : float
        Step of both angles [deg]; must divide 90.

    Returns
    -------
    Directions
        (90/step + 1) x (360/step) directions, flattened row by row, with weights and shape.

    Raises
    ------
    GeometryError
        If the step is not positive or does not divide 90 degrees.
    """
    intervals = _intervals_of_quarter(step_deg)
    step = np.pi / 2.0 / intervals
    theta = np.linspace(0.0, np.pi / 2.0, intervals + 1)
    phi = np.arange(4 * intervals) * step
    # integral of a hat function of half-width `step` times sin(theta); the two end rows own half a hat
    rows = np.sin(theta) * (4.0 * np.sin(step / 2.0) ** 2 / step)
    rows[0] = 1.0 - np.sin(step) / step
    rows[-1] = 2.0 * np.sin(step / 2.0) ** 2 / step
    return _product(theta, phi, rows * step)


def sphere_quadrature(degree: int, hemisphere: bool = False, *, zenith_angles: int | None = None) -> Directions:
    """Return directions and weights that integrate spherical harmonics exactly.

    Gauss-Legendre rule in cos(theta), equal steps in phi.  Over the sphere, and likewise over the
    hemisphere above the horizon, every spherical harmonic up to the degree is integrated exactly, and
    so is every polynomial of that degree in the three direction cosines.  The product of two patterns of
    degree L is of degree 2 L; a source within a radius a needs L somewhat above k a.

    Parameters
    ----------
    degree : int
        Highest degree integrated exactly, at least 0.
    hemisphere : bool
        Only the directions above the horizon (zenith angle below 90 deg); the rule is then a Gauss rule
        in cos(theta) on (0, 1).
    zenith_angles : int, optional
        How many, where more are wanted than the degree asks for: degree // 2 + 1.

    Returns
    -------
    Directions
        ``zenith_angles`` x (degree + 1) directions, zenith first, with weights and shape.

    Raises
    ------
    GeometryError
        If the degree is negative or not a whole number, or there are too few zenith angles for it.
    """
    if isinstance(degree, bool) or not isinstance(degree, int | np.integer) or degree < 0:
        msg = f"degree: expected a whole number, 0 or more, got {degree!r}"
        raise GeometryError(msg)
    least = int(degree) // 2 + 1
    n_theta = least if zenith_angles is None else zenith_angles
    if n_theta < least:
        msg = f"zenith_angles: expected at least {least} for degree {degree}, got {zenith_angles!r}"
        raise GeometryError(msg)
    nodes, weights = np.polynomial.legendre.leggauss(n_theta)
    cos_theta = nodes[::-1]
    rows = weights[::-1]
    if hemisphere:
        cos_theta, rows = 0.5 * (1.0 + cos_theta), 0.5 * rows
    n_phi = int(degree) + 1
    phi = np.arange(n_phi) * (2.0 * np.pi / n_phi)
    return _product(np.arccos(cos_theta), phi, rows * (2.0 * np.pi / n_phi))


def cut(phi_deg: float, step_deg: float) -> tuple[Directions, FloatArray]:
    """Return the directions of a cut from horizon to horizon through the zenith.

    Positive signed zenith angles lie towards ``phi_deg``, negative ones on the opposite side, where the
    directions carry phi + 180 deg (and so theta_hat and phi_hat change sign on passing the zenith; use
    `ludwig3` for components that do not jump).

    Parameters
    ----------
    phi_deg : float
        Angle of the cut plane from east towards north [deg].
    step_deg : float
        Step [deg]; must divide 90.

    Returns
    -------
    directions : Directions
        2 * 90/step + 1 directions, no weights.
    signed_zenith_deg : float64 (D,)
        Signed zenith angle, -90 to 90 [deg].

    Raises
    ------
    GeometryError
        If the step is not positive or does not divide 90 degrees, or ``phi_deg`` is not finite.
    """
    intervals = _intervals_of_quarter(step_deg)
    phi = float(check_array("phi_deg", phi_deg, (), error=GeometryError))
    signed = np.arange(-intervals, intervals + 1) * (90.0 / intervals)
    phi_rad = np.radians(np.where(signed < 0.0, phi + 180.0, phi))
    return Directions(np.radians(np.abs(signed)), phi_rad), signed


def _intervals_of_quarter(step_deg: float) -> int:
    step = float(check_array("step_deg", step_deg, (), error=GeometryError))
    intervals = round(90.0 / step) if 0.0 < step <= 90.0 else 0
    # a typed decimal such as 0.3333333333 is taken for the fraction it stands for
    if intervals == 0 or abs(intervals * step - 90.0) > 1e-6:
        msg = f"step_deg: expected a step above 0 that divides 90 degrees (as 1, 0.5 or 7.5 do), got {step:g}"
        raise GeometryError(msg)
    return intervals


def _product(theta: FloatArray, phi: FloatArray, row_weights_sr: FloatArray) -> Directions:
    shape = (theta.size, phi.size)
    return Directions(np.repeat(theta, phi.size), np.tile(phi, theta.size), np.repeat(row_weights_sr, phi.size), shape)


def ludwig3(
    e_theta: ArrayLike, e_phi: ArrayLike, phi_rad: ArrayLike, nominal_azimuth_rad: float
) -> tuple[NDArray[Any], NDArray[Any]]:
    r"""Return co- and cross-polar components by Ludwig's third definition.

    .. math::
        E_{co} = \cos(\phi - p) E_\theta - \sin(\phi - p) E_\phi, \quad
        E_{cross} = \sin(\phi - p) E_\theta + \cos(\phi - p) E_\phi

    At the zenith the co-polar unit vector is horizontal, at the angle p from east towards north.

    Parameters
    ----------
    e_theta, e_phi : array_like (..., D)
        Components along theta_hat and phi_hat, real or complex, any unit.
    phi_rad : array_like (D,)
        Angle of the directions from east towards north [rad].
    nominal_azimuth_rad : float
        Nominal angle p of the port [rad], counted as phi is, *from east towards north*: 0 for a port whose
        wires run east-west, pi/2 for north-south.  It is not the compass azimuth of `azimuth_deg`.

    Returns
    -------
    co, cross : ndarray (..., D)
        Components in the unit of the input; a rotation, so |co|^2 + |cross|^2 is kept.

    References
    ----------
    .. [1] A. C. Ludwig, "The definition of cross polarization", IEEE Trans. Antennas Propag. AP-21
       (1973) 116-119.
    """
    angle = np.asarray(phi_rad, float) - nominal_azimuth_rad
    cosine, sine = np.cos(angle), np.sin(angle)
    theta_part, phi_part = np.asarray(e_theta), np.asarray(e_phi)
    return cosine * theta_part - sine * phi_part, sine * theta_part + cosine * phi_part


def rotated(theta_rad: ArrayLike, phi_rad: ArrayLike, rotation_matrix: ArrayLike) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return station directions as seen from a turned frame, and the way back for field components.

    Parameters
    ----------
    theta_rad, phi_rad : array_like (D,)
        Directions in the station frame [rad].
    rotation_matrix : array_like (3, 3)
        Takes vectors of the turned (local) frame to the station frame; its columns are the local axes.

    Returns
    -------
    local_theta_rad, local_phi_rad : float64 (D,)
        The same directions in the local frame [rad]; phi between -pi and pi.
    to_station : float64 (D, 2, 2)
        Rotation of components: (E_theta, E_phi) of the station = to_station @ (E_theta, E_phi) of the
        local frame, where the local pair belongs to the local angles returned here.

    Raises
    ------
    GeometryError
        If the matrix is not a proper rotation.

    Notes
    -----
    Where a direction is the local zenith or nadir, local phi could be anything.  It is then chosen so that
    the two pairs of unit vectors coincide (``to_station`` is the identity).  For a frame turned about the
    vertical this is the limit from all other directions: local phi = phi minus the turn, at the zenith too.
    """
    matrix = check_array("rotation_matrix", rotation_matrix, (3, 3), error=GeometryError)
    misfit = float(np.max(np.abs(matrix.T @ matrix - np.eye(3))))
    if misfit > 1e-9 or np.linalg.det(matrix) < 0.0:
        msg = (
            f"rotation_matrix: expected orthonormal, right-handed axes, got columns off by {misfit:.3g}"
            if misfit > 1e-9
            else "rotation_matrix: expected a rotation, got a reflection (determinant -1)"
        )
        raise GeometryError(msg)
    theta = check_array("theta_rad", np.atleast_1d(theta_rad), (None,), error=GeometryError)
    phi = check_array("phi_rad", np.atleast_1d(phi_rad), theta.shape, error=GeometryError)

    theta_hat, phi_hat = spherical_basis(theta, phi)
    local = unit_vectors(theta, phi) @ matrix  # rows times R: R^T r
    horizontal = np.hypot(local[:, 0], local[:, 1])
    local_theta = np.arctan2(horizontal, local[:, 2])  # keeps its digits near the zenith, unlike arccos
    local_phi = np.arctan2(local[:, 1], local[:, 0])
    # below this size the horizontal part is rounding noise and its angle means nothing
    at_pole = horizontal < 1e-14
    along = np.sign(local[at_pole, 2])[:, None] * (theta_hat[at_pole] @ matrix)
    local_phi[at_pole] = np.arctan2(along[:, 1], along[:, 0])

    local_pair = np.stack(spherical_basis(local_theta, local_phi), axis=1) @ matrix.T  # (D, 2, 3), station frame
    station_pair = np.stack([theta_hat, phi_hat], axis=1)
    return local_theta, local_phi, station_pair @ np.swapaxes(local_pair, 1, 2)
