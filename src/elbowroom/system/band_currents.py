r"""Currents between solved frequencies, from currents at solved ones.

Over a segment the functions are held, so that coordinates along frequency are samples of one function; the phase of the straight
path from the driven antenna, :math:`\exp(-jkd)`, is taken out and put back.  What is left turns with the extra paths of waves
that went by other antennas, up to twice the station's width, and is a polynomial in frequency over a window of a few solved
frequencies, or, where an antenna resonates inside, a quotient of two (AAA): poles that all currents share.

*Estimate.*  Every solved frequency is predicted from the others around it.  A polynomial through nodes :math:`x_i` misses by a
derivative times :math:`\prod |x - x_i|`; what the prediction missed, times the ratio of these products, is the estimate at a
frequency in between, the largest of those of its solved neighbours, times a safety.  Quotients are fitted without every fifth
solved frequency in turn, and what these five miss at the frequencies they did not see is the estimate between.

References
----------
.. [1] Y. Nakatsukasa, O. Sete, L. N. Trefethen, "The AAA algorithm for rational approximation", SIAM J. Sci. Comput. 40 (2018)
   A1494-A1522.
.. [2] P. Lietaert, K. Meerbergen, J. Perez, B. Vandereycken, "Automatic rational approximation and linearization of nonlinear
   eigenvalue problems", IMA J. Numer. Anal. 42 (2022) 1087-1115 (one set of weights for many functions).
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from elbowroom.base.arrays import AnyComplexArray, ComplexArray, FloatArray
from elbowroom.base.constants import SPEED_OF_LIGHT
from elbowroom.base.errors import ModelRangeError

WINDOWS = (4, 6, 8, 10, 12, 14)
"""Numbers of solved frequencies that a polynomial may pass through."""

NEIGHBOURS = 4
"""Solved frequencies around one in between whose predictions enter its estimate."""

SAFETY = 3.0
"""Stated over estimated error: ports that were not looked at may be worse than those that were."""

UNRESOLVED = 0.03
"""Relative miss of a prediction from which nothing is taken off for the distance to the solved frequencies."""

FOLDS = 5
"""Parts of the solved frequencies that are left out in turn when quotients are fitted."""

SKETCHES = 64
"""Random sums of currents to which quotients are fitted."""

SINGLE_NOISE = 1e-6
"""Relative rounding of currents solved in single precision, below which quotients are not fitted."""


def lagrange_weights(nodes: FloatArray, frequency_hz: float) -> FloatArray:
    """Return what each of some distinct nodes counts in the polynomial through all, at a frequency."""
    offset = frequency_hz - nodes
    if np.any(offset == 0.0):
        return np.asarray(offset == 0.0, dtype=float)
    weights = np.empty(len(nodes))
    for i, x in enumerate(nodes):
        others = np.delete(nodes, i)
        weights[i] = np.prod((frequency_hz - others) / (x - others))
    return weights


def _log_product(nodes: FloatArray, frequency_hz: float) -> float:
    return float(np.sum(np.log(np.maximum(np.abs(frequency_hz - nodes), 1e-3))))


@dataclass(frozen=True, eq=False)
class Quotient:
    """A rational function in barycentric form, the same weights for many functions.

    Attributes
    ----------
    support : int (m,)
        Which of the nodes carry it.
    weights : complex128 (m,)
        Their weights.
    """

    support: np.ndarray
    weights: ComplexArray

    def counts(self, nodes: FloatArray, frequency_hz: float) -> tuple[np.ndarray, ComplexArray]:
        """Return which nodes count at a frequency, and how much."""
        offset = frequency_hz - nodes[self.support]
        if np.any(offset == 0.0):
            return self.support, np.asarray(offset == 0.0, dtype=complex)
        terms = self.weights / offset
        return self.support, np.asarray(terms / terms.sum())


def fitted_quotient(nodes: FloatArray, values: ComplexArray, tolerance: float) -> Quotient:
    """Return the quotient through some of the nodes that fits functions (M, K) at all of them (AAA, one set of weights).

    Parameters
    ----------
    nodes : float64 (M,)
        Frequencies [Hz].
    values : complex128 (M, K)
        Functions there.
    tolerance : float
        Largest misfit relative to each function's largest value at which no more nodes are taken.
    """
    scaled = values / np.maximum(np.abs(values).max(axis=0), np.finfo(float).tiny)
    chosen: list[int] = []
    left = np.arange(len(nodes))
    model = np.broadcast_to(scaled.mean(axis=0), scaled.shape)
    weights = np.zeros(0, dtype=complex)
    while len(chosen) < (len(nodes) - 1) // 2 + 1:
        misfit = np.abs(scaled[left] - model[left]).max(axis=1)
        worst = int(left[np.argmax(misfit)])
        if chosen and misfit.max() <= tolerance:
            break
        chosen.append(worst)
        left = np.setdiff1d(left, [worst])
        support = np.array(chosen)
        cauchy = 1.0 / (nodes[left][:, None] - nodes[support][None, :])
        loewner = (scaled[left][:, :, None] - scaled[support].T[None]) * cauchy[:, None, :]
        _, _, right = np.linalg.svd(loewner.reshape(-1, len(support)), full_matrices=len(support) > loewner[..., 0].size)
        weights = right[-1].conj()
        model = np.array(scaled)
        model[left] = ((cauchy * weights) @ scaled[support]) / (cauchy @ weights)[:, None]
    return Quotient(np.array(chosen), weights)


@dataclass(frozen=True)
class Weighting:
    """How currents at a frequency are made of those at solved ones.

    Attributes
    ----------
    nodes : int (m,)
        Solved frequencies that count, as indices.
    weights : complex128 (m,)
        How much.
    error : float
        Estimated error, safety included.
    how : str
        ``"polynomial"`` or ``"quotient"``.
    """

    nodes: np.ndarray
    weights: ComplexArray
    error: float
    how: str


class CurrentSamples:
    """Solved frequencies of a segment, from which others may be made.

    Of each only the currents of a few ports are kept, to estimate with; the caller keeps the rest.

    Parameters
    ----------
    positions : float64 (A, 3)
        Places of the antennas [m].
    coordinate_offsets, port_offsets : int (A+1,)
        Where each antenna's coordinates and ports begin.
    ports : int (Q,)
        Ports to look at.
    """

    def __init__(
        self, positions: FloatArray, coordinate_offsets: np.ndarray, port_offsets: np.ndarray, ports: Sequence[int] | np.ndarray
    ) -> None:
        antenna_of_port = np.repeat(np.arange(len(positions)), np.diff(port_offsets))
        self.separation = np.linalg.norm(positions[:, None] - positions[None, :], axis=2)[:, antenna_of_port]
        self.counts, self.ports = np.diff(coordinate_offsets), np.asarray(ports, dtype=int)
        self.antenna_of_port = antenna_of_port
        self.nodes: FloatArray = np.zeros(0)
        self._values: AnyComplexArray = np.zeros((0, 0), dtype=np.complex64)
        self._misses: dict[tuple[int, int], tuple[float, float]] = {}
        self._quotients: tuple[Quotient, FloatArray] | None = None

    def turn(self, frequency_hz: float, ports: np.ndarray | slice = slice(None)) -> AnyComplexArray:
        """Return exp(-jkd) between antennas and ports, (A, P)."""
        return np.exp(-2j * np.pi * frequency_hz / SPEED_OF_LIGHT * self.separation[:, ports])

    def _still(self, frequency_hz: float, currents: ComplexArray) -> AnyComplexArray:
        return currents[:, self.ports] * np.repeat(self.turn(-frequency_hz, self.ports), self.counts, axis=0)

    def add(self, frequency_hz: float, currents: ComplexArray) -> int:
        """Take the currents (n, P) of a solved frequency [Hz]; return its place among the nodes, which are in rising order.

        Raises
        ------
        ModelRangeError
            If the frequency is there already, or the currents are not as many as the samples'.
        """
        expected = (int(self.counts.sum()), len(self.antenna_of_port))
        if currents.shape != expected:
            msg = f"currents at {frequency_hz:.12g} Hz: expected {expected} coordinates and ports, got {currents.shape}"
            raise ModelRangeError(msg)
        at = int(np.searchsorted(self.nodes, frequency_hz))
        if at < len(self.nodes) and self.nodes[at] == frequency_hz:
            msg = f"{frequency_hz:.12g} Hz is among the solved frequencies already"
            raise ModelRangeError(msg)
        still = self._still(frequency_hz, currents).ravel().astype(np.complex64)
        if not len(self.nodes):
            self._values = np.zeros((0, still.size), dtype=np.complex64)
        self.nodes = np.insert(self.nodes, at, frequency_hz)
        self._values = np.insert(self._values, at, still, axis=0)
        self._misses, self._quotients = {}, None
        return at

    def _relative(self, difference: AnyComplexArray, currents: AnyComplexArray) -> float:
        """Return the largest over ports of the norm of a difference over that of the port's currents."""
        parts = [np.linalg.norm(v.reshape(-1, len(self.ports)), axis=0) for v in (difference, currents)]
        return float(np.max(parts[0] / parts[1]))

    def _window(self, frequency_hz: float, size: int, without: int | None = None) -> np.ndarray:
        order = np.argsort(np.abs(self.nodes - frequency_hz), kind="stable")
        if without is not None:
            order = order[order != without]
        return np.sort(order[:size])

    def _miss(self, node: int, size: int) -> tuple[float, float]:
        """Return what a polynomial through nodes around a node misses there, and the logarithm of its product."""
        key = (node, size)
        if key not in self._misses:
            window = self._window(float(self.nodes[node]), size, node)
            weights = lagrange_weights(self.nodes[window], float(self.nodes[node])).astype(np.float32)
            made = (weights @ self._values[window].view(np.float32)).view(np.complex64)
            missed = self._relative(made - self._values[node], self._values[node])
            self._misses[key] = (missed, _log_product(self.nodes[window], float(self.nodes[node])))
        return self._misses[key]

    def _polynomial(self, frequency_hz: float, goal: float = 0.0) -> Weighting | None:
        """Return the polynomial of the least estimated error, or the one of lowest degree that meets the goal."""
        best: Weighting | None = None
        near = self._window(frequency_hz, NEIGHBOURS)
        for size in WINDOWS:
            if size > len(self.nodes) - 1 or (best is not None and best.error <= goal):
                break
            window = self._window(frequency_hz, size)
            own = _log_product(self.nodes[window], frequency_hz)
            error = 0.0
            weights = lagrange_weights(self.nodes[window], frequency_hz)
            for node in near:
                missed, product = self._miss(int(node), size)
                # What is missed by so much is not resolved, and no polynomial's derivative tells what lies between.
                nearer = float(np.exp(min(own - product, 0.0))) if missed < UNRESOLVED else 1.0
                error = max(error, missed * nearer)
            # Rounding of the solved currents is carried over whatever the polynomial.
            error = SAFETY * (error + SINGLE_NOISE * float(np.abs(weights).sum()))
            if best is None or error < best.error:
                best = Weighting(window, weights.astype(complex), error, "polynomial")
        return best

    def _sketches(self) -> ComplexArray:
        rng = np.random.default_rng(self._values.shape[1])
        chosen = rng.choice([-1.0, 1.0], size=(self._values.shape[1], SKETCHES)).astype(np.float32)
        return np.asarray(self._values.real @ chosen + 1j * (self._values.imag @ chosen), dtype=complex)

    def _fit_quotients(self) -> tuple[Quotient, FloatArray]:
        """Return the quotient through all nodes, and what those that did not see a node miss there."""
        if self._quotients is None:
            sketches, numbers = self._sketches(), np.arange(len(self.nodes))
            missed = np.full(len(self.nodes), np.inf)
            for fold in range(FOLDS):
                # The ends of a segment are never left out: nothing would be known beyond the others.
                out = numbers[(numbers % FOLDS == fold) & (numbers > 0) & (numbers < len(numbers) - 1)]
                seen = np.setdiff1d(numbers, out)
                if len(seen) < FOLDS or not len(out):
                    continue
                part = fitted_quotient(self.nodes[seen], sketches[seen], 3.0 * SINGLE_NOISE)
                for node in out:
                    support, weights = part.counts(self.nodes[seen], float(self.nodes[node]))
                    made = weights.astype(np.complex64) @ self._values[seen[support]]
                    missed[node] = self._relative(made - self._values[node], self._values[node])
            self._quotients = fitted_quotient(self.nodes, sketches, 3.0 * SINGLE_NOISE), missed
        return self._quotients

    def poles(self) -> ComplexArray:
        """Return the poles of the quotient through all solved frequencies [Hz]; those with little imaginary part are narrow."""
        quotient, _ = self._fit_quotients()
        return barycentric_poles(self.nodes[quotient.support], quotient.weights)

    def weighting(self, frequency_hz: float, *, goal: float = 0.0) -> Weighting:
        """Return how the currents at a frequency are made, whichever way has the smaller estimated error.

        Parameters
        ----------
        frequency_hz : float
            Between the solved frequencies [Hz].
        goal : float, optional
            Estimated error that is good enough, so that nothing better is sought.

        Raises
        ------
        ModelRangeError
            If the frequency lies outside the solved ones, or these are too few.
        """
        if len(self.nodes) <= WINDOWS[0]:
            msg = f"{len(self.nodes)} solved frequencies: expected {WINDOWS[0] + 1} at least to interpolate between them"
            raise ModelRangeError(msg)
        if not self.nodes[0] <= frequency_hz <= self.nodes[-1]:
            msg = f"{frequency_hz:.12g} Hz lies outside the solved frequencies, {self.nodes[0]:.12g} to {self.nodes[-1]:.12g} Hz"
            raise ModelRangeError(msg)
        best = self._polynomial(frequency_hz, goal)
        assert best is not None
        if best.error <= goal or len(self.nodes) < 2 * FOLDS:
            return best
        quotient, missed = self._fit_quotients()
        near = self._window(frequency_hz, NEIGHBOURS)
        known = missed[near][np.isfinite(missed[near])]
        if known.size:
            support, weights = quotient.counts(self.nodes, frequency_hz)
            error = SAFETY * (float(known.max()) + SINGLE_NOISE * float(np.abs(weights).sum()))
            if error < best.error:
                return Weighting(support, weights, error, "quotient")
        return best

    def combined(self, frequency_hz: float, weighting: Weighting, currents: Sequence[ComplexArray]) -> ComplexArray:
        """Return the currents (n, P) at a frequency from those (n, P) of the nodes that count, in their order."""
        total: AnyComplexArray = np.zeros(currents[0].shape, dtype=complex)
        for node, weight, one in zip(weighting.nodes, weighting.weights, currents, strict=True):
            total += np.repeat(weight * self.turn(frequency_hz - self.nodes[node]), self.counts, axis=0) * one
        return total

    def combined_ports(self, frequency_hz: float, weighting: Weighting, matrices: Sequence[ComplexArray]) -> ComplexArray:
        """Return the loaded admittance (P, P) at a frequency from those of the nodes that count; symmetric."""
        total: AnyComplexArray = np.zeros(matrices[0].shape, dtype=complex)
        for node, weight, one in zip(weighting.nodes, weighting.weights, matrices, strict=True):
            total += weight * self.turn(frequency_hz - self.nodes[node])[self.antenna_of_port] * one
        return 0.5 * (total + total.T)


def barycentric_poles(support: FloatArray, weights: ComplexArray) -> ComplexArray:
    """Return the zeros of sum w_i/(x - x_i): the finite eigenvalues of an arrowhead pencil (reference [1], section 3)."""
    from scipy.linalg import eigvals

    m = len(support)
    if m < 2:
        return np.zeros(0, dtype=complex)
    # Offsets from the middle, in units of the spread: eigenvalues of hertz would drown in rounding.
    middle, spread = float(np.mean(support)), float(np.ptp(support))
    left = np.zeros((m + 1, m + 1), dtype=complex)
    left[0, 1:], left[1:, 0] = weights, 1.0
    left[1:, 1:] = np.diag((support - middle) / spread)
    right = np.eye(m + 1)
    right[0, 0] = 0.0
    values = eigvals(left, right)
    return np.asarray(middle + spread * values[np.isfinite(values)])
