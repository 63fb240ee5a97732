"""Covariances of many frames, by those entries alone that somebody asks for.

A coordinate's sd asks for one entry, an angle's for the block of its ball. All entries of every frame would be
most of what a solved trial takes in memory, so whole matrices are kept only where they are wanted.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import casadi as ca
import numpy as np
from numpy.typing import NDArray

from condyle.model.kinematics import Kinematics
from condyle.solver.packed_matrices import Pattern

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]


@dataclass(frozen=True, slots=True)
class Covariances:
    """Symmetric matrices of the freedoms, one a frame; numpy takes them for dense ones.

    Attributes
    ----------
    pattern : Pattern
        Which entries are kept.
    values : (frames, entries)
    """

    pattern: Pattern
    values: FloatArray

    def __len__(self) -> int:
        return len(self.values)

    def __array__(self, dtype: Any = None, copy: bool | None = None) -> NDArray[Any]:
        """(frames, freedoms, freedoms), 0 where an entry is not kept."""
        return np.asarray(self.pattern.dense(self.values), dtype=dtype)

    def __add__(self, other: Covariances) -> Covariances:
        self._check(other)
        return Covariances(self.pattern, self.values + other.values)

    def __sub__(self, other: Covariances) -> Covariances:
        self._check(other)
        return Covariances(self.pattern, self.values - other.values)

    def times(self, factor: float) -> Covariances:
        """All of them, multiplied."""
        return Covariances(self.pattern, factor * self.values)

    def take(self, rows: IntArray | slice) -> Covariances:
        """Those of some frames."""
        return Covariances(self.pattern, self.values[rows])

    def variances(self) -> FloatArray:
        """(frames, freedoms)."""
        return self.values[:, np.diag(self.pattern.position)]

    def block(self, freedoms: IntArray) -> FloatArray:
        """(frames, m, m) Of some freedoms.

        Raises
        ------
        KeyError
            If an entry was not kept.
        """
        places = self.pattern.position[np.ix_(freedoms, freedoms)]
        if (places < 0).any():
            raise KeyError(f"covariances between freedoms {freedoms.tolist()} were not kept")
        return self.values[:, places]

    def only(self, told: NDArray[np.bool_]) -> Covariances:
        """Those of the freedoms that are told in a frame (frames, freedoms); 0 elsewhere."""
        rows, columns = self.pattern.pairs.T
        return Covariances(
            self.pattern, np.where(told[:, rows] & told[:, columns], self.values, 0.0)
        )

    def _check(self, other: Covariances) -> None:
        if len(self.pattern) != len(other.pattern):
            raise ValueError("covariances of different entries")


def joined(parts: list[Covariances]) -> Covariances:
    """Those of frames that follow each other."""
    return Covariances(parts[0].pattern, np.concatenate([part.values for part in parts]))


def reported_pairs(kinematics: Kinematics) -> Pattern:
    """What the sd of a coordinate or of a reported angle asks for."""
    freedoms = kinematics.freedoms
    groups = [*np.arange(freedoms.size)[:, None]]
    for ball in range(len(freedoms.balls)):
        here = freedoms.ball_slice(ball)
        groups.append(np.arange(here.start, here.stop))
    jacobian = ca.jacobian(kinematics.coordinate_values, kinematics.scalars)
    rows, columns = (np.array(part, dtype=np.int64) for part in jacobian.sparsity().get_triplet())
    groups += [columns[rows == row] for row in range(jacobian.shape[0])]
    pairs = {(int(k), int(j)) for group in groups for k in group for j in group if k >= j}
    return Pattern(pairs, freedoms.size)


def all_pairs(size: int) -> Pattern:
    """Every entry."""
    rows, columns = np.tril_indices(size)
    return Pattern(zip(rows.tolist(), columns.tolist(), strict=True), size)
