"""The figure to draw: a motion's bones, which way is up, and where its floor is.

Needs no window, so that a camera can be placed, and a test can ask, without drawing anything.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from condyle.solver.results import FittedMotion
from condyle.viz.bones import build_bones
from condyle.viz.drawn_markers import DrawnMarkers
from condyle.viz.floor import floor_height
from condyle.viz.shapes import Surface
from condyle.viz.viewpoint import level_axes, up_vector

FloatArray = NDArray[np.float64]

OUTLINE_POINTS = 160
"""Points per bone that stand for it when framing."""

NEAR_FLOOR = 0.25
"""m; a picture also shows the floor under what hangs lower than this."""


@dataclass(frozen=True, slots=True)
class Figure:
    """What of a motion does not change from row to row.

    Attributes
    ----------
    bones : one Surface per segment, in the segment's frame
    up : (3,) unit, laboratory axes
    floor : float
        m along `up` from the laboratory's zero.
    """

    motion: FittedMotion
    bones: tuple[Surface, ...]
    up: FloatArray
    floor: float

    def posed(self, row: int) -> NDArray[np.bool_]:
        """(segments,): which segments have a pose in that row."""
        return np.asarray(np.isfinite(self.motion.laboratory_from_segment[row]).all(axis=(1, 2)))

    def bone_points(self, row: int, most: int) -> FloatArray:
        """(n, 3) m: at most so many points of every posed bone, in laboratory axes."""
        points = []
        for index in np.flatnonzero(self.posed(row)):
            pose = self.motion.laboratory_from_segment[row, index]
            local = self.bones[index].points
            local = local[:: max(1, -(-len(local) // most))]
            points.append(local @ pose[:3, :3].T + pose[:3, 3])
        return np.concatenate(points) if points else np.empty((0, 3))

    def points(self, row: int, markers: DrawnMarkers) -> FloatArray:
        """(n, 3) m: what a camera must see of a row; a man's height of room where it is empty."""
        bones = self.bone_points(row, OUTLINE_POINTS)
        points = np.concatenate([bones, self.below(bones), markers.near_figure()])
        if not len(points):
            points = markers.left_out
        if len(points):
            return points
        first, second, up = level_axes(self.up)
        corners = [
            a * first + b * second + c * up for a in (-1, 1) for b in (-1, 1) for c in (0, 1)
        ]
        return np.array(corners) + self.floor * self.up

    def below(self, points: FloatArray) -> FloatArray:
        """The floor under those points that are near it, where their shadow falls."""
        heights = points @ self.up - self.floor
        near = heights < NEAR_FLOOR
        return np.asarray(points[near] - heights[near, None] * self.up)


def build_figure(motion: FittedMotion) -> Figure:
    """Build a motion's bones and find its floor."""
    bones, up = build_bones(motion), up_vector(motion.up)
    return Figure(motion, bones, up, floor_height(lowest_points(motion, bones, up)))


def lowest_points(motion: FittedMotion, bones: tuple[Surface, ...], up: FloatArray) -> FloatArray:
    """(frames,) m: height of each frame's lowest bone point; NaN where nothing is posed."""
    lowest = np.full(len(motion.time), np.nan)
    for index, bone in enumerate(bones):
        outline = bone.points[:: max(1, len(bone.points) // OUTLINE_POINTS)]
        poses = motion.laboratory_from_segment[:, index]
        heights = np.einsum("i,fij,pj->fp", up, poses[:, :3, :3], outline, optimize=True)
        lowest = np.fmin(lowest, heights.min(axis=1) + poses[:, :3, 3] @ up)
    return lowest
