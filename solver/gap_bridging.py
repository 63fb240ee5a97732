"""Which gaps of a trial its process can bridge, and how far knowledge reaches beyond its ends.

Over m frames without information a process with white p-th differences of precision s is known to

    sd^2 = max diag (D_u' D_u)^-1 / s,   D_u the columns of D that belong to the gap,

with the frames beside it known. Where that exceeds what anyone would call knowledge the gap is not
bridged: the freedom then stays at rest there, and its sd is missing.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np
from numpy.typing import NDArray

from condyle.solver.process_prior import difference_weights

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

MOST_SD_TURN, MOST_SD_SHIFT = np.radians(20.0), 0.10
"""rad and m. Wider than this, a 95 % interval spans most of a joint's range, or a step's length."""
LONGEST_COMPUTED = 40
"""Frames; longer gaps follow from the power law sd^2 ~ m^(2p - 1) of integrated noise."""


def bridged(determined: BoolArray, precision: float, order: int, most_sd: float) -> BoolArray:
    """(frames,) Where one freedom is not determined by its frame but can be told from its neighbours.

    Parameters
    ----------
    determined : (frames,) bool
    precision : float
        s above; 0 where the freedom is not smoothed.
    order : int
    most_sd : float
    """
    result = np.zeros(len(determined), dtype=bool)
    if precision <= 0 or determined.all() or not determined.any():
        return result
    edges = np.flatnonzero(np.diff(np.r_[True, determined, True].astype(np.int8)))
    for start, end in zip(edges[::2], edges[1::2], strict=True):
        before = _run(determined[:start][::-1]) >= order
        after = _run(determined[end:]) >= order
        if not (before or after):
            continue
        variance = _relative_variance(int(end - start), order, before and after) / precision
        if np.sqrt(variance) <= most_sd:
            result[start:end] = True
    return result


def bridged_together(
    bridges: BoolArray, determined: BoolArray, told_in_part: BoolArray, share: MarkerShare
) -> BoolArray:
    """(frames, freedoms) The bridges that nothing at rest stands beside.

    A marker that moves with several undetermined freedoms tells no more than what they come to together:
    with one of them at rest, the others would take its part. So they are bridged all or none, and
    over their whole gaps.

    Parameters
    ----------
    bridges, determined : (frames, freedoms) bool
    told_in_part : (frames, freedoms) bool
        Undetermined, though a marker moves with it.
    share : MarkerShare
    """
    result = bridges.copy()
    while True:
        resting = told_in_part & ~result
        rows = np.flatnonzero(resting.any(axis=1) & (told_in_part & result).any(axis=1))
        touched = share.beside(resting[rows], told_in_part[rows], rows)
        lost = np.zeros_like(result)
        lost[rows] = touched & result[rows]
        if not lost.any():
            return result
        for d in np.flatnonzero(lost.any(axis=0)):
            gap = np.cumsum(np.r_[0, np.diff(determined[:, d].astype(np.int8)) != 0])
            result[np.isin(gap, gap[lost[:, d]]), d] = False


@dataclass(frozen=True, slots=True)
class MarkerShare:
    """Which freedoms share a marker, or a tie, that is there.

    Attributes
    ----------
    moves : (freedoms, markers) bool
    there : (frames, markers) bool
    """

    moves: BoolArray
    there: BoolArray

    def beside(self, some: BoolArray, of: BoolArray, rows: NDArray[np.int64]) -> BoolArray:
        """(rows, freedoms) Those `of` some, reached from `some` from marker to marker."""
        reached = some
        while True:
            markers = (reached @ self.moves) & self.there[rows]
            further = reached | (of & (markers @ self.moves.T))
            if (further == reached).all():
                return np.asarray(reached)
            reached = further


def _run(determined: BoolArray) -> int:
    """How many frames in a row are determined, from the first on."""
    gaps = np.flatnonzero(~determined)
    return int(gaps[0]) if len(gaps) else len(determined)


def _relative_variance(length: int, order: int, both_sides: bool) -> float:
    if length <= LONGEST_COMPUTED:
        return _computed(length, order, both_sides)
    longest = _computed(LONGEST_COMPUTED, order, both_sides)
    return float(longest * (length / LONGEST_COMPUTED) ** (2 * order - 1))


@lru_cache(maxsize=256)
def _computed(length: int, order: int, both_sides: bool) -> float:
    frames = length + (2 if both_sides else 1) * order
    c = difference_weights(order)
    D = sum(np.eye(frames - order, frames, k=i) * c[i] for i in range(order + 1))
    gap = np.asarray(D)[:, order : order + length]
    return float(np.diag(np.linalg.inv(gap.T @ gap)).max())
