"""Coordinates in which the currents of a station are kept: all unknowns, or a few functions of each antenna."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from elbowroom.base.arrays import ComplexArray
from elbowroom.system.discretisation import Discretisation

ROUNDING = 1e-6
"""What functions that are the same may differ by, of the largest entry: some are kept in single precision."""


@dataclass(frozen=True, eq=False)
class CurrentSpace:
    """Where each antenna's coordinates stand, and what they multiply.

    Attributes
    ----------
    offsets : int (A+1,)
        Where the coordinates of each antenna begin.
    bases : tuple of complex128 (N, n) or None
        For each kind of antenna, its functions as columns of unknowns; ``None`` where the coordinates are the unknowns.
    """

    offsets: np.ndarray
    bases: tuple[ComplexArray | None, ...]

    @property
    def size(self) -> int:
        """Number of coordinates of the station."""
        return int(self.offsets[-1])

    @property
    def reduced(self) -> bool:
        """Whether any antenna has functions of its own."""
        return any(basis is not None for basis in self.bases)

    def like(self, other: CurrentSpace) -> bool:
        """Return whether the same coordinates mean the same currents in another space, to `ROUNDING`."""
        if self is other:
            return True
        if not np.array_equal(self.offsets, other.offsets) or len(self.bases) != len(other.bases):
            return False
        for one, two in zip(self.bases, other.bases, strict=True):
            if one is two:
                continue
            if one is None or two is None or one.shape != two.shape:
                return False
            if not np.allclose(one, two, rtol=0.0, atol=ROUNDING * float(np.abs(one).max(initial=0.0))):
                return False
        return True

    def of(self, antenna: int) -> slice:
        """Return the rows of one antenna."""
        return slice(int(self.offsets[antenna]), int(self.offsets[antenna + 1]))

    def rows_of(self, antennas: np.ndarray) -> np.ndarray:
        """Return the rows of some antennas, one after another."""
        return np.concatenate([np.arange(self.offsets[a], self.offsets[a + 1]) for a in antennas])

    def unknowns(self, discretisation: Discretisation, currents: ComplexArray) -> ComplexArray:
        """Return the unknowns (N, P) of coordinates (n, P)."""
        if not self.reduced:
            return currents
        out = np.empty((discretisation.n_unknowns, currents.shape[1]), dtype=complex)
        for a, k in enumerate(discretisation.kind_of):
            basis = self.bases[k]
            part = currents[self.of(a)]
            out[discretisation.unknowns_of(a)] = part if basis is None else basis @ part
        return out


def all_unknowns(discretisation: Discretisation) -> CurrentSpace:
    """Return the space of all unknowns."""
    return CurrentSpace(discretisation.unknown_offsets, (None,) * len(discretisation.kinds))


def reduced_space(discretisation: Discretisation, bases: Sequence[ComplexArray]) -> CurrentSpace:
    """Return the space that some functions of each kind span."""
    counts = [bases[k].shape[1] for k in discretisation.kind_of]
    return CurrentSpace(np.concatenate([[0], np.cumsum(counts)]), tuple(bases))
