"""A skeleton asked for places: joints, landmarks and lengths of the reference person in the zero posture.

What a model does not have is None, never a guess, so that whoever asks can say what is missing.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from condyle.model.skeleton import LABORATORY, Joint, Segment, Skeleton

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class Span:
    """A part's two ends, m in the axes of its first segment, and the length that its radii go with."""

    start: FloatArray
    end: FloatArray
    length: float


def span(start: FloatArray, end: FloatArray, length: float | None = None) -> Span:
    """Two ends; the length is their distance where it is not given."""
    return Span(start, end, float(np.linalg.norm(end - start)) if length is None else length)


class Anatomy:
    """A skeleton asked for places in the zero posture; None is the answer where it has no such thing."""

    def __init__(self, skeleton: Skeleton) -> None:
        self.segments = {segment.name: segment for segment in skeleton.segments}
        self.carrying = {joint.child: joint for joint in skeleton.joints}
        self.person = skeleton.person

    def joint_between(self, parent: str, child: str) -> FloatArray | None:
        """(3,) m, the centre of a joint in its parent."""
        joint = self.carrying.get(child)
        return np.array(joint.at) if joint is not None and joint.parent == parent else None

    def origin(self, of: str, within: str) -> FloatArray | None:
        """(3,) m, a segment's origin in another; None where they hang apart or at an angle."""
        if of not in self.segments or within not in self.segments:
            return None
        here, there = self._path(of), self._path(within)
        shared = next((name for name in here if name in there), None)
        if shared is None or not (self._level(of, shared) and self._level(within, shared)):
            return None
        return here[shared] - there[shared]

    def landmark(self, segment: str, name: str) -> FloatArray | None:
        """(3,) m in its segment."""
        found = self.segments.get(segment, Segment(segment)).landmarks.get(name)
        return None if found is None else np.array(found)

    def tape(self, segment: str) -> Span | None:
        """What a tape would measure of a segment."""
        found = self.segments.get(segment, Segment(segment)).length
        return None if found is None else span(np.array(found[0]), np.array(found[1]))

    def _path(self, segment: str) -> dict[str, FloatArray]:
        """Every segment from this one up to its root -> this one's origin in it."""
        path, place = {segment: np.zeros(3)}, np.zeros(3)
        for joint in self._joints_above(segment):
            place = place + np.array(joint.at) - np.array(joint.in_child)
            path[joint.parent] = place
        return path

    def _level(self, segment: str, above: str) -> bool:
        """Whether no joint on the way has a fixed turn."""
        for joint in self._joints_above(segment):
            if joint.child == above:
                return True
            if joint.turned is not None:
                return False
        return True

    def _joints_above(self, segment: str) -> list[Joint]:
        joints = [self.carrying[segment]]
        while joints[-1].parent != LABORATORY:
            joints.append(self.carrying[joints[-1].parent])
        return joints[:-1]
