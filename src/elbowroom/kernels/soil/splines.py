"""Uniform cubic B-splines through samples: coefficients only, evaluation is compiled with the fill."""

from __future__ import annotations

import numpy as np
from scipy.linalg import solve_banded

from elbowroom.base.arrays import FloatArray


def even_spline_coefficients(samples: FloatArray) -> FloatArray:
    """Return the n + 2 coefficients of the cubic spline through n samples, with zero slope at the first.

    The value at position i + t, 0 <= t <= 1, is the sum of :func:`spline_weights` (t) times coefficients i to i + 3.  The last
    coefficients lie on a cubic, which spoils the last few intervals: let samples go on beyond what is needed.

    Parameters
    ----------
    samples : float64 (n, ...)
        At 0, 1, ..., n - 1; n >= 5.

    Returns
    -------
    float64 (n + 2, ...)
    """
    n = len(samples)
    bands = np.zeros((5, n))  # entry (i, j) of the matrix stands at row 1 + i - j
    bands[0, 1:] = 1.0 / 6.0
    bands[1] = 4.0 / 6.0
    bands[2, :-1] = 1.0 / 6.0
    bands[0, 1] += 1.0 / 6.0
    for step, factor in ((1, 4.0), (2, -6.0), (3, 4.0), (4, -1.0)):
        bands[step, n - step] += factor / 6.0
    inner = solve_banded((3, 1), bands, samples.reshape(n, -1), check_finite=False).reshape(samples.shape)
    coefficients = np.empty((n + 2, *samples.shape[1:]))
    coefficients[1:-1] = inner
    coefficients[-1] = 4.0 * inner[-1] - 6.0 * inner[-2] + 4.0 * inner[-3] - inner[-4]
    coefficients[0] = inner[1]
    return coefficients


def spline_weights(t: FloatArray) -> FloatArray:
    """Return the weights (4, ...) of the four coefficients at a position t in [0, 1] of its interval."""
    s = 1.0 - t
    return np.stack([s**3 / 6.0, 2.0 / 3.0 - t * t * (1.0 - t / 2.0), 2.0 / 3.0 - s * s * (1.0 - s / 2.0), t**3 / 6.0])


def spline_basis(n: int, positions: FloatArray) -> FloatArray:
    """Return the values (len(positions), n + 2) of the splines on n nodes at positions in [0, n - 1]."""
    index = np.clip(np.floor(positions).astype(int), 0, n - 2)
    basis = np.zeros((len(positions), n + 2))
    basis[np.arange(len(positions))[:, None], index[:, None] + np.arange(4)] = spline_weights(positions - index).T
    return basis
