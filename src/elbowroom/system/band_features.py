r"""Resonances narrower than the step of the channels: where they are and how wide, though no channel meets them.

A resonance is a pole of the inverse of the impedance matrix, :math:`x(f) = r/(f - p) + \ldots`, with half its width in the
imaginary part of p.  Seen from the ports a narrow one is weak everywhere but within its width, because what makes it narrow is
that it hardly leaves the antenna.  A source *inside* the antenna drives it fully: away from p its answer falls as
:math:`r/|f - p|` with an r that does not depend on the width.  A quotient fitted to such answers at frequencies far wider apart
than the resonance (AAA, `elbowroom.system.band_currents`) therefore has the pole, however near the real axis it lies.

Two searches are made.  Each design alone over the ground, loaded as in the station: its matrix has tens of rows, so that
hundreds of frequencies cost nothing, and in double precision poles come out to parts of their width; frequencies are added
around each until it stays where it is.  And the whole station, from random sources inside a few antennas at all solved
frequencies, in the precision of its factors: that finds resonances which only the array has.  What is found becomes a place for
further solves; nothing is taken from the fit itself but where to look.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from elbowroom.base.arrays import AnyComplexArray, ComplexArray, FloatArray
from elbowroom.system.band_currents import Quotient, barycentric_poles, fitted_quotient
from elbowroom.system.spaces import CurrentSpace

PROBED_ANTENNAS = 6
"""Antennas in which random sources are put."""

SCAN_POINTS = 120
"""Frequencies at which a design alone is looked at first."""

MOST_REFINEMENTS = 6
"""Times that frequencies are added around the poles of a design."""

DOUBLE_FIT, SINGLE_FIT = 1e-9, 2e-5
"""Misfit at which a quotient is good: of answers in double, and through factors in single precision."""

STANDS_OUT = 0.03
"""Height of a resonance over what is around it, inside the antenna, from which it counts."""


@dataclass(frozen=True, order=True)
class Feature:
    """A narrow resonance.

    Attributes
    ----------
    frequency_hz : float
        Its middle [Hz].
    half_width_hz : float
        From the middle to half the power [Hz].
    where : str
        Name of the design that has it alone, or ``"array"``.
    """

    frequency_hz: float
    half_width_hz: float
    where: str


def probe_sources(space: CurrentSpace) -> FloatArray:
    """Return random sources (n, K) inside a few antennas of a station, one each."""
    antennas = probed_antennas(space)
    sources = np.zeros((space.size, len(antennas)))
    for column, a in enumerate(antennas):
        own = space.of(int(a))
        sources[own, column] = np.random.default_rng(int(a)).normal(size=own.stop - own.start)
    return sources


def probed_antennas(space: CurrentSpace) -> np.ndarray:
    """Return which antennas have sources."""
    count = len(space.offsets) - 1
    return np.unique(np.linspace(0, count - 1, min(PROBED_ANTENNAS, count)).round().astype(int))


def probe_answers(space: CurrentSpace, currents: AnyComplexArray) -> ComplexArray:
    """Return two random sums of what the sources of :func:`probe_sources` drive in their own antennas, (2 K,)."""
    out = []
    for column, a in enumerate(probed_antennas(space)):
        part = currents[space.of(int(a)), column]
        # The source itself, which every resonance that it drives answers, and another place.
        out += [part @ np.random.default_rng(seed).normal(size=len(part)) for seed in (int(a), int(a) + 1_000_000)]
    return np.array(out, dtype=complex)


def narrow_poles(nodes: FloatArray, values: ComplexArray, tolerance: float, widest_hz: float) -> list[tuple[complex, float]]:
    """Return the poles of functions (M, K) that lie between the nodes and nearer to the real axis than a half-width [Hz].

    Each with the height of its resonance over the functions' typical size; poles that rounding makes, whose zeros all but cancel
    them, stand far below it.
    """
    order = np.argsort(nodes)
    nodes, values = nodes[order], values[order]
    size = np.abs(values).max(axis=0)
    scaled = values / np.where(size > 0.0, size, 1.0)
    typical = np.median(np.abs(scaled), axis=0)
    quotient = fitted_quotient(nodes, scaled, tolerance)
    found = []
    for pole in barycentric_poles(nodes[quotient.support], quotient.weights):
        if not nodes[0] <= pole.real <= nodes[-1] or abs(pole.imag) > widest_hz:
            continue
        residue = _residue(nodes, scaled, quotient, complex(pole))
        # A lossless resonance is endlessly high; what counts is how it looks from the nearest frequency at hand.
        near = max(abs(pole.imag), float(np.abs(nodes - pole.real).min()), 1e-6)
        height = float(np.max(np.abs(residue) / near / np.maximum(typical, 1e-300)))
        found.append((complex(pole), height))
    return found


def _residue(nodes: FloatArray, values: ComplexArray, quotient: Quotient, pole: complex) -> ComplexArray:
    offset = pole - nodes[quotient.support]
    above = (quotient.weights / offset) @ values[quotient.support]
    return np.asarray(above / (-(quotient.weights / offset**2).sum()))


def scanned(
    answer: Callable[[float], ComplexArray], low_hz: float, high_hz: float, widest_hz: float
) -> list[tuple[float, float]]:
    """Return middle and half-width [Hz] of the resonances of a small system between two frequencies.

    Parameters
    ----------
    answer : callable
        Gives the answers (K,) of the system at a frequency [Hz], in double precision.
    low_hz, high_hz : float
        Band [Hz].
    widest_hz : float
        Half-width up to which a resonance counts as narrow [Hz].
    """
    # Frequencies in no step that a structure of the system could be in step with.
    steps = np.random.default_rng(0).uniform(-0.3, 0.3, SCAN_POINTS)
    steps[[0, -1]] = 0.0
    nodes = low_hz + (high_hz - low_hz) * (np.arange(SCAN_POINTS) + steps) / (SCAN_POINTS - 1)
    values = np.array([answer(f) for f in nodes])
    poles: list[complex] = []
    for _ in range(MOST_REFINEMENTS):
        known = poles
        poles = [p for p, height in narrow_poles(nodes, values, DOUBLE_FIT, widest_hz) if height > STANDS_OUT]
        still = len(poles) == len(known) and all(
            min(abs(p - q) for q in known) < max(0.02 * abs(p.imag), 1e-9 * abs(p)) for p in poles
        )
        if still:
            break
        spacing = (high_hz - low_hz) / SCAN_POINTS
        more = {
            float(np.clip(p.real + offset * reach, low_hz, high_hz))
            for p in poles
            for reach in (max(abs(p.imag), 1e-9 * p.real), np.sqrt(max(abs(p.imag), 1e-9 * p.real) * spacing))
            for offset in (-1.7, -0.6, 0.5, 1.6)
        }
        more -= set(nodes)
        if not more:
            break
        fresh = np.array(sorted(more))
        nodes, values = np.concatenate([nodes, fresh]), np.concatenate([values, [answer(f) for f in fresh]])
    return sorted({(p.real, abs(p.imag)) for p in poles})
