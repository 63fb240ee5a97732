"""What is known about each segment's shape: where its joints and landmarks are, in its own frame.

A fitted motion holds the joint centres that a segment offers its children. Where a segment hangs
on its own parent, and where its parent's points lie as seen from it, follow from the poses: the
median over the trial, so that a knee that slides by millimetres does not matter.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from condyle.solver.results import FittedMotion

FloatArray = NDArray[np.float64]

NEAR = 0.015
"""m; a child's joint this close to the segment's own makes a block (a talus), not a shaft."""

ONE = 1e-3
"""m; children that hang closer together than this hang at one place."""

FRAMES_FOR_MEDIAN = 50
"""Frames, evenly over the trial: enough for a median that only shapes a drawing."""


@dataclass(frozen=True, slots=True)
class SegmentPlan:
    """One segment's known points, all in its own frame (m).

    Attributes
    ----------
    parent : str or None
        None for a root.
    proximal : (3,)
        The joint centre on its parent; the origin for a root.
    centres : child segment -> (3,)
    landmarks : name -> (3,)
    parent_points : name -> (3,)
        The parent's landmarks as this segment sees them (median over the trial); and, under the
        parent's own name, the parent's proximal joint centre.
    """

    name: str
    parent: str | None
    proximal: FloatArray
    centres: Mapping[str, FloatArray]
    landmarks: Mapping[str, FloatArray]
    parent_points: Mapping[str, FloatArray]

    def landmark(self, stem: str) -> FloatArray | None:
        """The landmark of that ISB name, with or without a side."""
        return find(self.landmarks, stem)

    def far_centres(self) -> list[FloatArray]:
        """The children's joint centres that are not at the segment's own, every place once."""
        far = [c for c in self.centres.values() if np.linalg.norm(c - self.proximal) > NEAR]
        return [
            c for i, c in enumerate(far) if not any(np.allclose(c, e, atol=ONE) for e in far[:i])
        ]


def find(points: Mapping[str, FloatArray], stem: str) -> FloatArray | None:
    """The point called `stem`, `stem_right` or `stem_left`."""
    for name in (stem, f"{stem}_right", f"{stem}_left"):
        if name in points:
            return points[name]
    return None


def side_of(name: str) -> str:
    """`right`, `left` or nothing, from the end of a segment's name."""
    return next((side for side in ("right", "left") if name.endswith(f"_{side}")), "")


def finite_points(points: Mapping[str, FloatArray] | None) -> dict[str, FloatArray]:
    """The points that have a place, as arrays."""
    arrays = {name: np.asarray(p, dtype=np.float64) for name, p in (points or {}).items()}
    return {name: p for name, p in arrays.items() if np.all(np.isfinite(p))}


def median_through(
    motion: FittedMotion, child: str, parent: str, points_in_parent: FloatArray
) -> FloatArray:
    """(points, 3) m: points of the parent in the child's frame, median over the posed frames."""
    poses = motion.laboratory_from_segment
    child_index, parent_index = (motion.segment_names.index(n) for n in (child, parent))
    posed = np.isfinite(poses[:, [child_index, parent_index]]).all(axis=(1, 2, 3))
    rows = np.flatnonzero(posed)
    if not len(rows):
        return np.full_like(points_in_parent, np.nan)
    rows = rows[np.linspace(0, len(rows) - 1, min(len(rows), FRAMES_FOR_MEDIAN)).astype(int)]
    child_from_parent = np.linalg.solve(poses[rows, child_index], poses[rows, parent_index])
    homogeneous = np.c_[points_in_parent, np.ones(len(points_in_parent))]
    in_child = np.einsum("fij,pj->fpi", child_from_parent, homogeneous)[..., :3]
    return np.asarray(np.median(in_child, axis=0))


def plan_segments(motion: FittedMotion) -> tuple[SegmentPlan, ...]:
    """A plan for every segment, in the order of ``motion.segment_names``."""
    known = set(motion.segment_names)
    centres = {
        name: {c: p for c, p in finite_points(motion.joint_centres.get(name)).items() if c in known}
        for name in motion.segment_names
    }
    parent_of = {child: parent for parent, children in centres.items() for child in children}
    proximal: dict[str, FloatArray] = {}
    for name in motion.segment_names:
        parent = parent_of.get(name)
        at = (
            np.zeros((1, 3))
            if parent is None
            else median_through(motion, name, parent, centres[parent][name][None])
        )
        proximal[name] = np.nan_to_num(at[0])
    return tuple(
        SegmentPlan(
            name,
            parent_of.get(name),
            proximal[name],
            centres[name],
            finite_points(motion.landmarks.get(name)),
            points_of_parent(motion, name, parent_of.get(name), proximal),
        )
        for name in motion.segment_names
    )


def points_of_parent(
    motion: FittedMotion, name: str, parent: str | None, proximal: Mapping[str, FloatArray]
) -> dict[str, FloatArray]:
    """The parent's landmarks and proximal joint centre, as the segment sees them."""
    if parent is None:
        return {}
    points = {parent: proximal[parent], **finite_points(motion.landmarks.get(parent))}
    return finite_points(
        dict(
            zip(
                points,
                median_through(motion, name, parent, np.stack(list(points.values()))),
                strict=True,
            )
        )
    )
