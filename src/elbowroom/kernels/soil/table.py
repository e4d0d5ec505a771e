"""Tables of a ground's kernels over horizontal distance and height, to a stated error.

Kept is each kernel times R exp(+jkR), R the distance to the image: smooth, of order one, and without the image to subtract.
Cubic B-splines, uniform in s = rho/(rho + a) with zero slope at rho = 0 and in t = Z/(Z + b): both cost a division each where
logarithms would cost more.  The distance a and the number of nodes follow from fourth derivatives sampled before anything is
tabulated: near the origin the lowest height sets the scale, far away the wave that travels through the soil.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from elbowroom.base.arrays import ComplexArray, FloatArray
from elbowroom.base.errors import ModelRangeError, SolveError
from elbowroom.kernels.soil.response import GroundResponse
from elbowroom.kernels.soil.sommerfeld import GroundQuadrature
from elbowroom.kernels.soil.splines import even_spline_coefficients, spline_basis, spline_weights

SINGLE_FROM = 5e-6
"""Tables of this tolerance and more are kept and read in single precision, which costs up to 1e-6."""

_SPLINE_ERROR = 1.0 / 384.0
"""Error of an interpolating cubic spline over the fourth difference of its samples (Hall 1968 has 5/384 for the worst)."""

_DISTANCES_M = (0.75, 1.5, 3.0, 4.5, 6.0, 9.0, 12.0, 18.0, 24.0, 36.0, 54.0)
_MOST_CHEBYSHEV = (40, 80)
"""Nodes in height that are tried: the second where echoes from metres below turn the phase within a low antenna's reach."""

_ATTEMPTS = 4
_BEYOND = 5


@dataclass(frozen=True)
class SoilTable:
    """Kernels of one ground at one frequency as bicubic splines.

    Attributes
    ----------
    coefficients : float32 or float64 (n_rho, n_z, 8)
        Spline coefficients; last axis real and imaginary parts of P, N, K and V times R exp(+jkR).
    wavenumber : float
        [rad/m].
    rho_scale_m, rho_per_node : float
        a of s = rho/(rho + a), and the distance in s of two nodes.
    z_scale_m, z_start, z_per_node : float
        b of t = Z/(Z + b), t of the first node, and the distance in t of two nodes.
    rho_max_m, z_min_m, z_max_m : float
        Where the table holds [m].
    tolerance : float
        Asked for: error of P, N, K times R, and of V times k R.
    error : float
        Largest found on held-out points.
    """

    coefficients: FloatArray
    wavenumber: float
    rho_scale_m: float
    rho_per_node: float
    z_scale_m: float
    z_start: float
    z_per_node: float
    rho_max_m: float
    z_min_m: float
    z_max_m: float
    tolerance: float
    error: float

    @property
    def nbytes(self) -> int:
        """Size of the coefficients [bytes]."""
        return int(self.coefficients.nbytes)

    @cached_property
    def aligned(self) -> tuple[FloatArray, int, int]:
        """Return the coefficients as compiled code reads them: flat, elements between rows, elements to the odd copy.

        Four nodes along Z are read at once, in two lines of the cache if they start on one.  In single precision two nodes
        share a line: a second copy, one node on, serves places that start with an odd one.
        All are divided by 36, because compiled code takes six times the weights of splines.
        """
        n_rho, n_z, parts = self.coefficients.shape
        dtype = self.coefficients.dtype
        copies = 2 if dtype == np.float32 else 1
        stride = (n_z + 1) // 2 * 2 * parts
        flat = np.zeros(copies * n_rho * stride + 64, dtype=dtype)
        start = -flat.ctypes.data % 64 // dtype.itemsize
        flat = flat[start : start + copies * n_rho * stride]
        places = flat.reshape(copies, n_rho, stride // parts, parts)
        places[0, :, :n_z] = self.coefficients / 36.0
        if copies == 2:
            places[1, :, : n_z - 1] = places[0, :, 1:n_z]
        return flat, stride, n_rho * stride if copies == 2 else parts

    @cached_property
    def scales(self) -> tuple[float, FloatArray]:
        """Return 1 over the wavelength [1/m], and what turns distances in wavelengths into places in the table."""
        turns = self.wavenumber / (2.0 * np.pi)
        along, upwards = 1.0 / self.rho_per_node, 1.0 / self.z_per_node
        numbers = (turns * self.rho_scale_m, along, turns * self.z_scale_m, upwards, self.z_start * upwards)
        return turns, np.array(numbers, dtype=self.coefficients.dtype)

    def to_arrays(self) -> dict[str, np.ndarray]:
        """Return everything as arrays, for a store."""
        names = [name for name in self.__dataclass_fields__ if name != "coefficients"]
        return {"coefficients": self.coefficients, "numbers": np.array([getattr(self, name) for name in names])}

    @classmethod
    def from_arrays(cls, arrays: dict[str, np.ndarray]) -> SoilTable:
        """Return the table that :meth:`to_arrays` took apart."""
        return cls(arrays["coefficients"], *(float(x) for x in arrays["numbers"]))

    def smooth(self, rho: FloatArray, z: FloatArray) -> ComplexArray:
        """Return what the table holds, kernels times R exp(+jkR), at broadcast points: complex (..., 4)."""
        s = rho / (rho + self.rho_scale_m) / self.rho_per_node
        t = (z / (z + self.z_scale_m) - self.z_start) / self.z_per_node
        s, t = np.broadcast_arrays(s, t)
        n_rho, n_z, _ = self.coefficients.shape
        i = np.clip(np.floor(s).astype(int), 0, n_rho - 4)
        j = np.clip(np.floor(t).astype(int), 0, n_z - 4)
        along, up = spline_weights(s - i), spline_weights(t - j)
        total = np.zeros((*s.shape, 8))
        for p in range(4):
            for q in range(4):
                total += (along[p] * up[q])[..., None] * self.coefficients[i + p, j + q]
        return total.view(np.complex128)

    def kernels(self, rho_m: FloatArray, z_m: FloatArray) -> ComplexArray:
        """Return P, N, K [1/m] and V [1] at broadcast points: the slow twin of the compiled fill.

        Parameters
        ----------
        rho_m, z_m : float64 (...)
            Horizontal distances and sums of heights [m], within the table.

        Returns
        -------
        complex128 (4, ...)
        """
        rho, z = np.broadcast_arrays(np.asarray(rho_m, dtype=float), np.asarray(z_m, dtype=float))
        distance = np.sqrt(rho**2 + z**2)
        wave = np.exp(-1j * self.wavenumber * distance) / distance
        return np.moveaxis(self.smooth(rho, z) * wave[..., None], -1, 0)


def _check(name: str, value: float, lowest: float) -> float:
    if not (isinstance(value, (int, float, np.number)) and np.isfinite(value) and value > lowest):
        msg = f"{name}: expected a finite number above {lowest:g}, got {value!r}"
        raise ModelRangeError(msg)
    return float(value)


def build_table(response: GroundResponse, rho_max_m: float, z_min_m: float, z_max_m: float, tolerance: float = 1e-5) -> SoilTable:
    """Tabulate the kernels of a ground.

    Parameters
    ----------
    response : GroundResponse
        The ground.
    rho_max_m : float
        Largest horizontal distance of two points [m].
    z_min_m, z_max_m : float
        Smallest and largest sum of two heights [m].
    tolerance : float, optional
        Error allowed: of P, N and K times R, of V times k R, between 1e-8 and 1e-2.

    Returns
    -------
    SoilTable
        Its ``error`` is what was found on held-out points.

    Raises
    ------
    ModelRangeError
        On distances or heights that are not positive and finite or out of order, or a tolerance out of its range.
    SolveError
        If the error stays above the tolerance.
    """
    rho_max = _check("largest horizontal distance [m]", rho_max_m, 0.0)
    z_min = _check("smallest sum of heights [m]", z_min_m, 0.0)
    z_max = _check("largest sum of heights [m]", z_max_m, 0.0)
    if z_max < z_min:
        msg = f"sums of heights [m]: expected the largest not below the smallest, got {z_max:g} and {z_min:g}"
        raise ModelRangeError(msg)
    if not 1e-8 <= tolerance <= 1e-2:
        msg = f"tolerance of the ground's table: expected 1e-8 to 1e-2, got {tolerance!r}"
        raise ModelRangeError(msg)
    # A little more than asked for, so that rounding of coordinates stays inside.
    z_low, z_high, rho_end = z_min * (1.0 - 1e-6), max(z_max, 1.02 * z_min) * (1.0 + 1e-6), rho_max * (1.0 + 1e-6)
    quadrature = GroundQuadrature(response, z_low)
    heights = _chebyshev_heights(quadrature, rho_end, z_low, z_high, 0.1 * tolerance)
    scale, count = _plan_distances(quadrature, rho_end, z_low, z_high, 0.4 * tolerance)
    # Nodes in order of random distances over the whole table, half of them near, always with the lowest height.
    rng = np.random.default_rng(20)
    rho_test = np.concatenate([[0.0, rho_max], rho_max * rng.random(40), np.minimum(rho_max, 20.0 * z_low) * rng.random(24)])
    z_test = np.concatenate([[z_min, z_max], z_min * (z_max / z_min) ** rng.random(6)])
    exact = quadrature.kernels(rho_test, z_test)
    share, dtype = 0.4, np.float32 if tolerance >= SINGLE_FROM else np.float64
    for _ in range(_ATTEMPTS):
        table = _tabulate(quadrature, scale, count, rho_end, heights, (z_low, z_high), share * tolerance, dtype)
        found = np.moveaxis(table.smooth(rho_test[:, None], z_test), -1, 0)
        found[3] *= response.wavenumber
        error = float(np.abs(found - exact).max())
        if error <= 0.8 * tolerance:
            numbers = table.to_arrays()["numbers"].copy()
            numbers[-5:] = rho_max, z_min, z_max, tolerance, error
            return SoilTable.from_arrays({"coefficients": table.coefficients, "numbers": numbers})
        count, share = int(np.ceil(1.35 * count)), 0.6 * share
    msg = f"table of the ground's kernels: error {error:.1e} on held-out points, expected {tolerance:.1e}"
    raise SolveError(msg)


@dataclass(frozen=True)
class _Heights:
    """Chebyshev nodes in ln Z."""

    centre: float
    half: float
    count: int

    def nodes(self) -> FloatArray:
        x = np.cos(np.pi * (np.arange(self.count) + 0.5) / self.count)
        return np.exp(self.centre + self.half * x)

    def matrix(self, z: FloatArray) -> FloatArray:
        """Return the matrix (len(z), count) from values at the nodes to values at z."""
        m = np.arange(self.count)
        x = np.clip((np.log(z) - self.centre) / self.half, -1.0, 1.0)
        at_nodes = np.cos(np.pi * np.outer(m + 0.5, m) / self.count) * (2.0 / self.count)
        at_nodes[:, 0] *= 0.5
        return np.cos(np.outer(np.arccos(x), m)) @ at_nodes.T


def _chebyshev_heights(quadrature: GroundQuadrature, rho_max: float, z_low: float, z_high: float, allowed: float) -> _Heights:
    """Return as many nodes as the last coefficients at some distances ask for."""
    centre, half = 0.5 * np.log(z_low * z_high), 0.5 * np.log(z_high / z_low)
    rho = np.concatenate([[0.0], np.geomspace(0.3 * z_low, rho_max, 15)])
    for count in _MOST_CHEBYSHEV:
        most = _Heights(centre, half, count)
        values = quadrature.kernels(rho, most.nodes())
        m = np.arange(count)
        spectrum = np.abs(values @ np.cos(np.pi * np.outer(m + 0.5, m) / count)).max(axis=(0, 1)) * (2.0 / count)
        left = np.cumsum(spectrum[::-1])[::-1]
        if np.any(left <= allowed):
            return _Heights(centre, half, int(np.clip(np.argmax(left <= allowed) + 1, 5, count)))
    return most


def _plan_distances(
    quadrature: GroundQuadrature, rho_max: float, z_low: float, z_high: float, allowed: float
) -> tuple[float, int]:
    """Return a of s = rho/(rho + a) and the number of nodes that fourth derivatives at some distances ask for."""
    k = quadrature.response.wavenumber
    places = np.concatenate([[0.0], np.geomspace(0.2 * z_low, rho_max, 24)])
    z = np.geomspace(z_low, z_high, 4)
    # Stencils of seven points: short against the height, the distance and the shortest wave in the ground.
    step = np.minimum(0.25 * np.hypot(z_low, places / 4.0), 0.35 / max(quadrature.corner, k))
    rho = np.abs(places[:, None] + step[:, None] * np.arange(-3.0, 4.0))
    values = quadrature.kernels(rho.ravel(), z).reshape(4, len(places), 7, len(z))
    differences = [
        ([0, 0, -1, 0, 1, 0, 0], 0.5),
        ([0, 0, 1, -2, 1, 0, 0], 1.0),
        ([0, -1, 2, 0, -2, 1, 0], 0.5),
        ([0, 1, -4, 6, -4, 1, 0], 1.0),
        ([1, -6, 15, -20, 15, -6, 1], 1.0),
    ]
    orders = (1, 2, 3, 4, 6)
    d1, d2, d3, d4, d6 = (
        factor * np.einsum("j,apjz->apz", np.array(row, dtype=float), values) / step[:, None] ** order
        for (row, factor), order in zip(differences, orders, strict=True)
    )
    # Squared wavenumber of what varies fastest at each place.
    rapid = np.abs(d6).max(axis=(0, 2)) / np.maximum(np.abs(d4).max(axis=(0, 2)), 1e-300)
    best = (_DISTANCES_M[0], np.inf)
    for a in _DISTANCES_M:
        # Chain rule for rho(s) = a s/(1 - s).
        q = (places + a)[:, None]
        r1, r2, r3, r4 = q**2 / a, 2.0 * q**3 / a**2, 6.0 * q**4 / a**3, 24.0 * q**5 / a**4
        fourth = np.abs(d4 * r1**4 + 6.0 * d3 * r1**2 * r2 + d2 * (3.0 * r2**2 + 4.0 * r1 * r3) + d1 * r4).max(axis=(0, 2))
        # Soil that is air sends nothing back.
        fourth = np.maximum(fourth, 1e-30)
        spacings = (allowed / (_SPLINE_ERROR * fourth)) ** 0.25
        for _ in range(4):
            # Waves of few nodes each, allowed where they are weak, are missed by more than the fourth power says.
            excess = 1.0 + 0.2 * (spacings * r1[:, 0]) ** 2 * rapid
            spacings = (allowed / (_SPLINE_ERROR * fourth * excess)) ** 0.25
        spacing = spacings.min()
        count = rho_max / (rho_max + a) / spacing
        if count < best[1]:
            best = (a, float(count))
    return best[0], max(8, int(np.ceil(best[1])) + 1)


def _tabulate(
    quadrature: GroundQuadrature,
    scale: float,
    count: int,
    rho_end: float,
    heights: _Heights,
    z_range: tuple[float, float],
    allowed: float,
    dtype: type,
) -> SoilTable:
    """Return the table on a grid of distances; as many heights as the spline between them asks for."""
    # The spline's last few intervals are less good: they lie beyond the end.
    s = np.arange(count + _BEYOND) * (rho_end / (rho_end + scale) / (count - 1))
    values = quadrature.kernels(scale * s / (1.0 - s), heights.nodes())
    values[3] /= quadrature.response.wavenumber
    parts = np.ascontiguousarray(values.transpose(1, 2, 0)).view(np.float64)  # (n_rho, n_chebyshev, 8)
    z_low, z_high = z_range
    b = np.sqrt(z_low * z_high)
    t_low, t_high = z_low / (z_low + b), z_high / (z_high + b)
    some = parts[:: max(1, count // 64)]
    weight = np.repeat([1.0, 1.0, 1.0, quadrature.response.wavenumber], 2)
    n_z = 8
    while True:
        positions = np.arange(4 * (n_z - 1) + 1) / 4.0
        t = t_low + positions * ((t_high - t_low) / (n_z - 1))
        exact, basis = heights.matrix(b * t / (1.0 - t)), spline_basis(n_z, positions)
        up = np.linalg.lstsq(basis, exact, rcond=None)[0]
        if np.abs(np.matmul(exact - basis @ up, some) * weight).max() <= allowed or n_z > 400:
            break
        n_z = int(np.ceil(1.2 * n_z))
    coefficients = even_spline_coefficients(np.matmul(up, parts))
    return SoilTable(
        coefficients=np.ascontiguousarray(coefficients[: count + 2], dtype=dtype),
        wavenumber=quadrature.response.wavenumber,
        rho_scale_m=scale,
        rho_per_node=float(s[1]),
        z_scale_m=float(b),
        z_start=float(t_low),
        z_per_node=float((t_high - t_low) / (n_z - 1)),
        rho_max_m=rho_end,
        z_min_m=z_low,
        z_max_m=z_high,
        tolerance=np.inf,
        error=np.inf,
    )
