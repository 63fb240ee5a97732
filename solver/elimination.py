"""In which order a sparse symmetric matrix is eliminated, and which entries that touches.

On a tree of segments, eliminating from the leaves to the root makes no new entries (Featherstone
2008, Rigid Body Dynamics Algorithms, ch. 6.5). Ties and shared coordinates join branches; there the
order that makes the fewest new entries at each turn is taken (minimum fill, Tinney & Walker 1967,
Proc IEEE 55:1801). It finds the leaves of a tree by itself, and where everything is joined it ends in
a dense factorisation.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

BoolArray = NDArray[np.bool_]
IntTable = NDArray[np.int32]


@dataclass(frozen=True, slots=True)
class EliminationPlan:
    """L'DL of one pattern, spelt out; indices below are turns of elimination.

    Attributes
    ----------
    order : (n,) int32
        The freedom eliminated at each turn.
    starts : (n + 1,) int32
        Where the entries of each turn begin in `later`.
    later : (entries,) int32
        The turn, after its own, that each entry off the diagonal joins.
    targets : int32
        For each turn, for each pair (a, c <= a) of its entries: which entry their product is taken from,
        the diagonal counting first.
    """

    order: IntTable
    starts: IntTable
    later: IntTable
    targets: IntTable

    @property
    def entries(self) -> int:
        """How many entries lie off the diagonal, new ones included."""
        return len(self.later)

    @property
    def places(self) -> IntTable:
        """(n + entries,) Where each entry stands in a dense matrix, row by row."""
        n = len(self.order)
        turns = np.repeat(np.arange(n), np.diff(self.starts))
        off = self.order[self.later] * n + self.order[turns]
        return np.concatenate([self.order * (n + 1), off]).astype(np.int32)


def elimination_plan(pattern: BoolArray) -> EliminationPlan:
    """The plan of a pattern.

    Parameters
    ----------
    pattern : (n, n) bool, symmetric
        Which pairs may have an entry other than zero.
    """
    n = len(pattern)
    pattern = np.array(pattern, dtype=bool)
    np.fill_diagonal(pattern, False)
    left = np.ones(n, dtype=bool)
    order, neighbours = [], []
    for _ in range(n):
        freedom = _least_fill(pattern, left)
        around = np.flatnonzero(pattern[freedom] & left)
        pattern[np.ix_(around, around)] = True
        pattern[around, around] = False
        left[freedom] = False
        order.append(freedom)
        neighbours.append(around)
    turn = np.empty(n, dtype=np.int64)
    turn[order] = np.arange(n)
    columns = [np.sort(turn[around]) for around in neighbours]
    sizes = [len(column) for column in columns]
    starts = np.concatenate([[0], np.cumsum(sizes)])
    later = np.concatenate([np.zeros(0, dtype=np.int64), *columns])
    return EliminationPlan(
        np.array(order, dtype=np.int32),
        starts.astype(np.int32),
        later.astype(np.int32),
        np.array(_targets(columns, starts), dtype=np.int32),
    )


def _least_fill(pattern: BoolArray, left: BoolArray) -> int:
    """The freedom whose elimination makes the fewest new entries, with the fewest neighbours."""
    best, chosen = (np.inf, np.inf), -1
    for freedom in np.flatnonzero(left):
        around = np.flatnonzero(pattern[freedom] & left)
        count = len(around)
        fill = count * (count - 1) - int(pattern[np.ix_(around, around)].sum())
        if (fill, count) < best:
            best, chosen = (fill, count), int(freedom)
    return chosen


def _targets(columns: list[NDArray[np.int64]], starts: NDArray[np.int64]) -> list[int]:
    n = len(columns)
    entry = {
        (int(row), k): n + int(starts[k]) + i
        for k, column in enumerate(columns)
        for i, row in enumerate(column)
    }
    entry |= {(k, k): k for k in range(n)}
    return [
        entry[int(column[a]), int(column[c])]
        for column in columns
        for a in range(len(column))
        for c in range(a + 1)
    ]
