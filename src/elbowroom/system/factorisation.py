"""A complex symmetric matrix kept as the tiles of its lower half, factored in place and solved by blocks.

The half storage takes n^2/2 numbers, and L D L^T takes half the arithmetic of LU.  Pivots are chosen inside diagonal
tiles only.  What is left after eliminating some antennas is the impedance matrix of the others with those present, which
is again that of a passive structure, so that growth between tiles stays small; the residual of the solution is measured
all the same and reported.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from scipy.linalg import get_blas_funcs, inv

from elbowroom.base.arrays import AnyComplexArray, FloatArray
from elbowroom.base.errors import SolveError


class TiledSymmetric:
    """Lower tiles of a complex symmetric matrix.

    Parameters
    ----------
    sizes : sequence of int
        Heights of the tile rows; their sum is the order of the matrix.
    dtype : type
        ``complex64`` or ``complex128``.
    """

    def __init__(self, sizes: Sequence[int], dtype: type = np.complex128) -> None:
        self.sizes = tuple(int(s) for s in sizes)
        self.offsets = np.concatenate([[0], np.cumsum(self.sizes)])
        self.dtype: np.dtype = np.dtype(dtype)
        self.tiles: dict[tuple[int, int], AnyComplexArray] = {
            (i, j): np.zeros((self.sizes[i], self.sizes[j]), dtype=self.dtype, order="F")
            for i in range(len(self.sizes))
            for j in range(i + 1)
        }

    @property
    def order(self) -> int:
        """Number of rows."""
        return int(self.offsets[-1])

    @property
    def nbytes(self) -> int:
        """Bytes held by the tiles."""
        return sum(tile.nbytes for tile in self.tiles.values())

    def astype(self, dtype: type) -> TiledSymmetric:
        """Return a copy in another precision, or in the same; nothing is shared."""
        other = TiledSymmetric.__new__(TiledSymmetric)
        other.sizes, other.offsets, other.dtype = self.sizes, self.offsets, np.dtype(dtype)
        other.tiles = {key: np.array(tile, dtype=dtype, order="F") for key, tile in self.tiles.items()}
        return other

    def lowered(self) -> TiledSymmetric:
        """Turn the tiles into single precision one by one, freeing the double ones, and return the matrix."""
        for key in self.tiles:
            self.tiles[key] = np.array(self.tiles[key], dtype=np.complex64, order="F")
        self.dtype = np.dtype(np.complex64)
        return self

    def dense(self) -> AnyComplexArray:
        """Return the whole matrix, for small cases and tests."""
        full: AnyComplexArray = np.zeros((self.order, self.order), dtype=self.dtype)
        for (i, j), tile in self.tiles.items():
            rows = slice(self.offsets[i], self.offsets[i + 1])
            columns = slice(self.offsets[j], self.offsets[j + 1])
            full[rows, columns] = tile
            if i != j:
                full[columns, rows] = tile.T
        return full

    def product(self, vectors: AnyComplexArray | FloatArray) -> AnyComplexArray:
        """Return the matrix times vectors (n, R)."""
        result: AnyComplexArray = np.zeros((self.order, vectors.shape[1]), dtype=np.result_type(self.dtype, vectors.dtype))
        o = self.offsets
        for (i, j), tile in self.tiles.items():
            result[o[i] : o[i + 1]] += tile @ vectors[o[j] : o[j + 1]]
            if i != j:
                result[o[j] : o[j + 1]] += tile.T @ vectors[o[i] : o[i + 1]]
        return result

    def factorise(self) -> Factors:
        """Replace the tiles by their factors L and inverse diagonal tiles, and return them as a solver.

        The matrix itself is gone afterwards.

        Raises
        ------
        SolveError
            If a diagonal tile is singular or not finite.
        """
        tiles, count = self.tiles, len(self.sizes)
        (gemm,) = get_blas_funcs(("gemm",), (tiles[0, 0],))
        for k in range(count):
            pivot = tiles[k, k]
            try:
                inverse = inv(pivot, check_finite=True)
            except (np.linalg.LinAlgError, ValueError) as cause:
                msg = (
                    f"the impedance matrix cannot be factored (tile {k} of {count}: {cause}); "
                    "check the model for wires in one place"
                )
                raise SolveError(msg) from cause
            inverse = np.asfortranarray(0.5 * (inverse + inverse.T))
            tiles[k, k] = inverse
            scaled = {i: gemm(1.0, tiles[i, k], inverse) for i in range(k + 1, count)}
            for i in range(k + 1, count):
                for j in range(k + 1, i + 1):
                    tiles[i, j] = gemm(-1.0, scaled[i], tiles[j, k], 1.0, tiles[i, j], trans_b=1, overwrite_c=1)
            for i, block in scaled.items():
                tiles[i, k] = block
        factors = Factors(self.sizes, self.offsets, tiles, self.dtype)
        self.tiles = {}
        return factors


class Factors:
    """Factors L and D^-1 of a tiled symmetric matrix."""

    def __init__(
        self, sizes: tuple[int, ...], offsets: np.ndarray, tiles: dict[tuple[int, int], AnyComplexArray], dtype: np.dtype
    ) -> None:
        self.sizes, self.offsets, self.tiles, self.dtype = sizes, offsets, tiles, dtype

    def solve(self, right: AnyComplexArray | FloatArray) -> AnyComplexArray:
        """Return the solutions (n, R) of some right-hand sides (n, R), in the precision of the factors."""
        o, count = self.offsets, len(self.sizes)
        x = np.array(right, dtype=self.dtype)
        for k in range(count):
            block = x[o[k] : o[k + 1]]
            # Port sources are local: until an antenna is reached, its ports' columns are zero and need no work.
            filled = np.flatnonzero(block.any(axis=0))
            if filled.size == 0:
                continue
            last = int(filled[-1]) + 1
            for i in range(k + 1, count):
                x[o[i] : o[i + 1], :last] -= self.tiles[i, k] @ block[:, :last]
        for k in range(count):
            x[o[k] : o[k + 1]] = self.tiles[k, k] @ x[o[k] : o[k + 1]]
        for k in reversed(range(count)):
            for i in range(k + 1, count):
                x[o[k] : o[k + 1]] -= self.tiles[i, k].T @ x[o[i] : o[i + 1]]
        return x
