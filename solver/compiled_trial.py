"""A trial's system over all frames solved by the compiled kernel, in memory that no trial outgrows.

Forward, frames are eliminated in chunks; of each chunk only the blocks it began with are kept. Backward,
each chunk is eliminated once more from there, used, and forgotten: twice the work of keeping factors, which
would fill 5 n^2 numbers a frame, but all of it in the cache: keeping some was measured, and is no faster.
"""

from __future__ import annotations

import ctypes
from collections.abc import Iterator
from typing import Any

import numpy as np
from numpy.typing import NDArray

from condyle.solver.compiled_kernel import address, addresses, aligned
from condyle.solver.kernel_source import LANE
from condyle.solver.packed_matrices import Pattern
from condyle.solver.process_prior import ProcessPrior, difference_weights

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

CHUNK = 48
"""Frames whose factors are in memory at once: few enough for the cache, many enough that the blocks kept
between chunks, 15 n^2 numbers each, are the smaller part."""


class CompiledElimination:
    """One system, ready to be solved; see `trial_system`.

    Parameters
    ----------
    library : ctypes.CDLL
    pattern : Pattern
        Of the frames' own matrices.
    values : (frames, entries)
    prior : ProcessPrior
    turns : (order + 1, windows, balls, 3, 3)
    held : (frames, n) bool
        Freedoms whose rows and columns are those of the identity.
    extra : (frames, n), optional
        What is added to the diagonal.

    Raises
    ------
    numpy.linalg.LinAlgError
        If the system is not positive definite; told while it is solved.
    """

    def __init__(
        self,
        library: ctypes.CDLL,
        pattern: Pattern,
        values: FloatArray,
        prior: ProcessPrior,
        turns: FloatArray,
        held: BoolArray,
        extra: FloatArray | None = None,
    ) -> None:
        self._library, self._order = library, prior.order
        frames, n = held.shape
        self._frames, self._n = frames, n
        self._tile = n * -(-n // LANE) * LANE
        self._given: list[NDArray[Any]] = [
            pattern.pairs.astype(np.int32),
            np.ascontiguousarray(values),
            prior.weights(),
            np.ascontiguousarray(turns),
            difference_weights(prior.order),
            *([] if extra is None else [np.ascontiguousarray(extra)]),
            np.ascontiguousarray(held),
        ]
        pointers = addresses(self._given)
        self._pointers = (ctypes.c_void_p * 7)(
            *list(pointers)[:5], None, pointers[len(pointers) - 1]
        )
        if extra is not None:
            self._pointers[5] = pointers[5]
        scalars = n - 3 * turns.shape[2]
        sizes = [n, prior.order, scalars, frames, len(pattern)]
        self._sizes = np.array(sizes, dtype=ctypes.c_long)
        if values.shape != (frames, len(pattern)) or turns.shape[1] != frames - prior.order:
            raise ValueError("the parts of a trial's system differ in length")
        self._factors = aligned((CHUNK, (prior.order + 1) * self._tile))

    def solve(self, rhs: FloatArray) -> FloatArray:
        """X of A x = rhs, (frames, n)."""
        x = np.array(rhs, dtype=np.float64, order="C")
        for start, stop in self._backward(x):
            self._library.trial_substitute(
                address(self._sizes),
                self._pointers,
                ctypes.c_long(start),
                ctypes.c_long(stop),
                address(self._factors),
                address(x),
            )
        return x

    def covariances(
        self,
        wanted: NDArray[np.int64],
        scale: FloatArray,
        begin: NDArray[np.int64],
        formula: FloatArray,
    ) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Entries of the inverse within frames, and of its form for two weighted sums over frames.

        Parameters
        ----------
        wanted : (pairs, 2) int
        scale : (pairs,)
            What each entry is multiplied by.
        begin : (frames,) int
            First frame of each frame's sums.
        formula : (2, frames, points)
            Weights of the sums.

        Returns
        -------
        Three of (frames, pairs).
        """
        points, order = formula.shape[2], self._order
        reach = max(points - 1, order)
        if reach >= points:
            raise ValueError("sums are shorter than the process reaches")
        state = aligned(((reach + 1) ** 2, self._tile))
        work = aligned((2 * order + 1, self._tile))
        found = [np.empty((self._frames, len(wanted))) for _ in range(3)]
        pairs = wanted.astype(np.int32)
        tables: list[NDArray[Any]] = [
            pairs,
            scale,
            begin.astype(ctypes.c_long),
            np.ascontiguousarray(formula),
        ]
        for start, stop in self._backward(None):
            self._library.trial_covariances(
                address(self._sizes),
                self._pointers,
                ctypes.c_long(start),
                ctypes.c_long(stop),
                *(address(x) for x in (self._factors, state, work)),
                ctypes.c_long(reach),
                ctypes.c_long(len(pairs)),
                *(address(x) for x in tables),
                addresses(found),
            )
        return found[0], found[1], found[2]

    def _backward(self, rhs: FloatArray | None) -> Iterator[tuple[int, int]]:
        """Chunks from the last to the first, each with its factors in place; rhs becomes L^-1 rhs."""
        state = aligned(((self._order + 1) * (self._order + 2) // 2, self._tile))
        *early, last = range(0, self._frames, CHUNK)
        began = []
        for start in early:
            began.append(state.copy())
            self._eliminate(start, state, rhs)
        self._eliminate(last, state, rhs)
        yield last, self._frames
        for start in reversed(early):
            np.copyto(state, began.pop())  # a copy is not aligned
            self._eliminate(start, state, None)
            yield start, start + CHUNK

    def _eliminate(self, start: int, state: FloatArray, rhs: FloatArray | None) -> None:
        failed = self._library.trial_eliminate(
            address(self._sizes),
            self._pointers,
            ctypes.c_long(start),
            ctypes.c_long(min(start + CHUNK, self._frames)),
            address(state),
            address(self._factors),
            None if rhs is None else address(rhs),
        )
        if failed >= 0:
            raise np.linalg.LinAlgError(f"a trial's system is not positive definite at {failed}")
