"""A stored bone laid into a person's segment: moved, turned and stretched onto its own points.

First one movement with one size for the whole bone (least squares, Kabsch 1976), leaning towards no
turn where the points leave it open; then what is still missing at each point is added there and fades
with distance, so that joint centres and landmarks are met exactly and the bone between stays smooth.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from condyle.viz.bone_library import StoredBone
from condyle.viz.bone_signs import PARENT

FloatArray = NDArray[np.float64]

LEANING = 1e-4
"""Weight of no turn at all: settles the turn about a line of points and moves no other visibly."""

FADING = 0.35
"""Of the bone's length: how far a correction reaches."""

MOST_STRETCH = 0.30
"""Of the bone's length: where points lie further off than this, it is not that bone."""

SMALLEST, LARGEST = 0.2, 5.0
"""Times the reference person."""


@dataclass(frozen=True, slots=True)
class Movement:
    """Points of the reference person to points of the segment: turned, then resized, then moved."""

    rotation: FloatArray
    size: float
    centre: FloatArray
    new_centre: FloatArray

    def __call__(self, points: FloatArray) -> FloatArray:
        """Points (n, 3) m of the reference person, moved."""
        return np.asarray((points - self.centre) @ self.rotation.T * self.size + self.new_centre)


def fit_bone(bone: StoredBone, known: Mapping[str, FloatArray]) -> FloatArray | None:
    """(n, 3) m: the bone's points in the segment, or None where its points do not suit the bone.

    Parameters
    ----------
    known : name -> (3,) m
        The segment's points, as `bone_signs.known_points` gives them.
    """
    shared = [name for name in bone.anchors if name in known]
    held = [name for name in shared if not name.startswith(PARENT)]
    if not held:
        return None
    source = np.array([bone.anchors[name] for name in held])
    target = np.array([known[name] for name in held])
    measured = shared if len(held) == 1 else held
    ratio = spread([known[name] for name in measured]) / spread(
        [bone.anchors[name] for name in measured]
    )
    if not SMALLEST < ratio < LARGEST:
        return None
    movement = best_movement(source, target, ratio)
    missing = target - movement(source)
    length = ratio * float(np.ptp(bone.points, axis=0).max())
    if np.linalg.norm(missing, axis=1).max() > MOST_STRETCH * length:
        return None
    return faded(movement(bone.points), movement(source), missing, FADING * length)


def spread(points: list[FloatArray]) -> float:
    """Root of the sum of squared distances from their middle, m; 1 for a single point."""
    if len(points) < 2:
        return 1.0
    return float(np.linalg.norm(np.array(points) - np.mean(points, axis=0)))


def best_movement(source: FloatArray, target: FloatArray, size: float) -> Movement:
    """The turn that brings the resized source nearest to the target."""
    centre, new_centre = source.mean(axis=0), target.mean(axis=0)
    pairs = (target - new_centre).T @ (source - centre)
    reach = spread(list(source)) * spread(list(target)) if len(source) > 1 else 1.0
    left, _, right = np.linalg.svd(pairs + LEANING * reach * np.eye(3))
    proper = np.diag([1.0, 1.0, np.sign(np.linalg.det(left @ right))])
    return Movement(left @ proper @ right, size, centre, new_centre)


def faded(points: FloatArray, places: FloatArray, shifts: FloatArray, reach: float) -> FloatArray:
    """Points (n, 3) m shifted so that `places` (k, 3) move by `shifts`; a Matérn kernel of order 3/2."""
    weights = np.linalg.lstsq(kernel(places, places, reach), shifts, rcond=1e-9)[0]
    return np.asarray(points + kernel(points, places, reach) @ weights)


def kernel(points: FloatArray, places: FloatArray, reach: float) -> FloatArray:
    """(n, k): how much of a shift at each place is felt at each point."""
    away = np.sqrt(3.0) * np.linalg.norm(points[:, None] - places[None], axis=2) / reach
    return np.asarray((1.0 + away) * np.exp(-away))
