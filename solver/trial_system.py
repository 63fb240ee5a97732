"""The linear system of a trial's estimate: what the frames say, and what the process says between them.

    A = blockdiag(H_1 .. H_N) + J' R J,   J = d (D^p q) / dq.

It is solved by the compiled kernel, in memory that no trial outgrows, or else as one band by LAPACK
(`block_banded`). Both give solutions of one system; tests hold them to each other.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from condyle.solver.backends import backend
from condyle.solver.block_banded import band_system, banded_covariances
from condyle.solver.compiled_trial import CompiledElimination
from condyle.solver.many_matrices import symmetric_products
from condyle.solver.packed_matrices import Pattern
from condyle.solver.process_prior import ProcessPrior

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]


@dataclass(frozen=True, slots=True)
class Sums:
    """Weighted sums over neighbouring frames whose variance is asked for.

    Attributes
    ----------
    begin : (frames,) int
        The first frame of each frame's sums.
    weights : (2, frames, points)
    """

    begin: IntArray
    weights: FloatArray


@dataclass(frozen=True, slots=True)
class TrialSystem:
    """A of one posture.

    Attributes
    ----------
    pattern : Pattern
        Of the frames' own matrices.
    values : (frames, entries)
    prior : ProcessPrior
    turns : (order + 1, windows, balls, 3, 3)
        As `ProcessPrior.residuals` gives them.
    """

    pattern: Pattern
    values: FloatArray
    prior: ProcessPrior
    turns: FloatArray

    def times(self, x: FloatArray) -> FloatArray:
        """A x, (frames, n)."""
        own = symmetric_products(self.values, self.pattern.pairs, x)
        return own + self.prior.times(x, self.turns)

    def diagonal(self) -> FloatArray:
        """(frames, n)."""
        own = self.values[:, np.diag(self.pattern.position)]
        return np.asarray(own + self.prior.diagonal(self.turns))

    def solve(
        self, rhs: FloatArray, held: BoolArray, extra: FloatArray | None = None
    ) -> FloatArray | None:
        """X of A x = rhs (frames, n), or None where A is not positive definite.

        Parameters
        ----------
        held : (frames, n) bool
            Unknowns that are what their rhs says.
        extra : (frames, n), optional
            Added to the diagonal.
        """
        library = backend().library
        if library is None:
            factor = band_system(self.dense(), self.prior, self.turns, held, extra)
            return None if factor is None else factor.solve(rhs.ravel()).reshape(rhs.shape)
        try:
            return CompiledElimination(
                library, self.pattern, self.values, self.prior, self.turns, held, extra
            ).solve(rhs)
        except np.linalg.LinAlgError:
            return None

    def covariances(
        self, held: BoolArray, wanted: IntArray, scale: FloatArray, sums: Sums
    ) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Entries (frames, pairs) of A^-1 within frames, and of what follows for the two sums.

        Parameters
        ----------
        wanted : (pairs, 2) int
        scale : (pairs,)
            What each entry is multiplied by.

        Raises
        ------
        numpy.linalg.LinAlgError
            Where A is not positive definite.
        """
        library = backend().library
        if library is None:
            factor = band_system(self.dense(), self.prior, self.turns, held)
            if factor is None:
                raise np.linalg.LinAlgError("a trial's information is not positive definite")
            return banded_covariances(factor, wanted, scale, sums.begin, sums.weights)
        return CompiledElimination(
            library, self.pattern, self.values, self.prior, self.turns, held
        ).covariances(wanted, scale, sums.begin, sums.weights)

    def dense(self) -> FloatArray:
        """(frames, n, n) The frames' own matrices."""
        return self.pattern.dense(self.values)
