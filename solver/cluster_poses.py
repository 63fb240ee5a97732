"""The pose of one segment from its own markers alone, frame by frame, with no model.

The markers' shape is found from the recording itself: shapes of all frames are laid onto one another and
averaged (generalised Procrustes analysis without scaling, Gower 1975), so that no still frame is needed
and a marker that is missing now and then still counts (one that is never seen together with three others
that are already placed stays out).
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from condyle.recording.recording import is_seen, mean_positions
from condyle.solver.rigid_alignment import Alignment, align

FloatArray = NDArray[np.float64]

LEAST_MARKERS = 3
"""A pose has six numbers and a marker three, but two markers leave the turn about their line open."""
LEAST_SPREAD = 1e-3
"""Second over first singular value of a cluster: below, it is a line (its width 3 % of its length)."""
ROUNDS = 20
"""Averages of the shape at most; each is nearly the same as the one before after three."""
SAME_SHAPE = 1e-9
"""m; shapes this close are the same."""


def cluster_poses(positions: FloatArray) -> FloatArray:
    """Poses of a rigid cluster of markers.

    The cluster's axes are parallel to the laboratory's in the first frame that sees most of its markers;
    its origin is the middle of the markers of that frame.

    Parameters
    ----------
    positions : (frames, markers, 3) m
        NaN where missing.

    Returns
    -------
    (frames, 4, 4) laboratory-from-cluster; NaN where fewer than three markers are seen, or only
    markers that lie on a line.
    """
    seen = is_seen(positions)
    poses = np.full((len(positions), 4, 4), np.nan)
    if seen.sum(axis=1).max(initial=0) < LEAST_MARKERS:
        return poses
    fitted = _onto_mean_shape(positions, seen)
    known = _is_told(fitted)
    poses[known] = np.eye(4)
    poses[known, :3, :3] = fitted.rotation[known]
    poses[known, :3, 3] = fitted.translation[known]
    return poses


def _onto_mean_shape(positions: FloatArray, seen: NDArray[np.bool_]) -> Alignment:
    """The mean shape laid onto every frame."""
    first = int(np.argmax(seen.sum(axis=1)))
    shape = positions[first] - positions[first][seen[first]].mean(axis=0)
    for _ in range(ROUNDS):
        fitted = _laid_onto(shape, positions, seen)
        before, shape = shape, _mean_shape(fitted, positions)
        if np.allclose(shape, before, rtol=0.0, atol=SAME_SHAPE, equal_nan=True):
            break
    return _laid_onto(shape, positions, seen)


def _laid_onto(shape: FloatArray, positions: FloatArray, seen: NDArray[np.bool_]) -> Alignment:
    weights = (seen & is_seen(shape)).astype(np.float64)
    return align(np.nan_to_num(shape), positions, weights)


def _is_told(fitted: Alignment) -> NDArray[np.bool_]:
    """(frames,) Whether the markers determine the pose."""
    return (fitted.points >= LEAST_MARKERS) & (fitted.spread > LEAST_SPREAD)


def _mean_shape(fitted: Alignment, positions: FloatArray) -> FloatArray:
    """(markers, 3) The frames' shapes turned back and averaged; NaN for a marker never placed."""
    known = _is_told(fitted)
    back = (positions[known] - fitted.translation[known, None]) @ fitted.rotation[known]
    return mean_positions(back)
