"""Uniform cubic B-splines through samples: coefficients only, evaluation is compiled with the fill."""

from __future__ import annotations

import numpy as np
from scipy.linalg import solve_banded

from elbowroom.base.arrays import FloatArray


def spline_coefficients(samples: FloatArray, *, flat_start: bool) -> FloatArray:
    """Return the n + 2 coefficients of the cubic spline through n samples, along the first axis.

    The value at position i + t, 0 <= t <= 1, is the sum of :func:`spline_weights` (t) times coefficients i to i + 3.

    Parameters
    ----------
    samples : float64 (n, ...)
        At 0, 1, ..., n - 1; n >= 5.
    flat_start : bool
        Whether the slope vanishes at 0; otherwise, as always at the other end, the last coefficients lie on a cubic.

    Returns
    -------
    float64 (n + 2, ...)
    """
    n = len(samples)
    bands = np.zeros((7, n))  # entry (i, j) of the matrix stands at row 3 + i - j

    def add(i: int, j: int, value: float) -> None:
        bands[3 + i - j, j] += value

    bands[3] = 4.0 / 6.0
    bands[2, 1:] = 1.0 / 6.0
    bands[4, :-1] = 1.0 / 6.0
    ends = ((1, 4.0), (2, -6.0), (3, 4.0), (4, -1.0))
    for step, factor in ends:
        add(n - 1, n - step, factor / 6.0)
        if not flat_start:
            add(0, step - 1, factor / 6.0)
    if flat_start:
        add(0, 1, 1.0 / 6.0)
    inner = solve_banded((3, 3), bands, samples.reshape(n, -1), check_finite=False).reshape(samples.shape)
    coefficients = np.empty((n + 2, *samples.shape[1:]))
    coefficients[1:-1] = inner
    coefficients[-1] = 4.0 * inner[-1] - 6.0 * inner[-2] + 4.0 * inner[-3] - inner[-4]
    coefficients[0] = inner[1] if flat_start else 4.0 * inner[0] - 6.0 * inner[1] + 4.0 * inner[2] - inner[3]
    return coefficients


def spline_weights(t: FloatArray) -> FloatArray:
    """Return the weights (4, ...) of the four coefficients at a position t in [0, 1] of its interval."""
    s = 1.0 - t
    return np.stack([s**3 / 6.0, 2.0 / 3.0 - t * t * (1.0 - t / 2.0), 2.0 / 3.0 - s * s * (1.0 - s / 2.0), t**3 / 6.0])


def spline_matrix(n: int, positions: FloatArray, *, flat_start: bool) -> FloatArray:
    """Return the matrix (len(positions), n) from n samples to the spline's values at positions in [0, n - 1]."""
    coefficients = spline_coefficients(np.eye(n), flat_start=flat_start)
    index = np.clip(np.floor(positions).astype(int), 0, n - 2)
    weights = spline_weights(positions - index)
    return np.asarray(sum(weights[a][:, None] * coefficients[index + a] for a in range(4)))
