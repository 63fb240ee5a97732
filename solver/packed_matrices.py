"""The matrices of many frames by those entries alone that can be other than zero.

On a tree of segments that is a quarter of a dense matrix or less; a fit spends most of its time on
moving matrices about.
"""

from __future__ import annotations

from collections.abc import Iterable

import numpy as np
from numpy.typing import NDArray

from condyle.solver.many_matrices import symmetric_matrices

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]


class Pattern:
    """Which entries symmetric matrices have, and in what order.

    Attributes
    ----------
    size : int
    pairs : (entries, 2) int
        Row and column (row >= column) of each entry; all others are zero.
    position : (size, size) int, symmetric
        Which entry stands where; -1 where none does.
    """

    def __init__(self, pairs: Iterable[tuple[int, int]], size: int) -> None:
        self.size = size
        self.pairs = np.array(sorted(set(pairs)), dtype=np.int64).reshape(-1, 2)
        self._places: dict[tuple[int, ...], tuple[IntArray, IntArray, IntArray]] = {}
        self.position = np.full((size, size), -1)
        rows, columns = self.pairs.T
        self.position[rows, columns] = self.position[columns, rows] = np.arange(len(self.pairs))

    def __len__(self) -> int:
        return len(self.pairs)

    def dense(self, values: FloatArray) -> FloatArray:
        """(frames, size, size) from (frames, entries)."""
        return symmetric_matrices(values, self.pairs, self.size)

    def packed(self, matrices: FloatArray) -> FloatArray:
        """(frames, entries) of (frames, size, size); what stands elsewhere is left out."""
        return matrices[:, self.pairs[:, 0], self.pairs[:, 1]]

    def add(self, values: FloatArray, freedoms: IntArray, block: FloatArray) -> None:
        """Add symmetric blocks (frames, m, m) at some freedoms (m,) to packed matrices, in place."""
        key = tuple(freedoms.tolist())
        if key not in self._places:
            rows, columns = np.tril_indices(len(freedoms))
            self._places[key] = self.position[freedoms[rows], freedoms[columns]], rows, columns
        places, rows, columns = self._places[key]
        values[:, places] += block[:, rows, columns]
