"""Where the camera stands: relative to which way is up and which way the person faces.

A view is named for the person, not for the laboratory: `side` looks from the person's right, so
that they face the right edge of the picture, whichever way the laboratory's axes run.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from condyle.model.errors import CondyleError
from condyle.solver.results import FittedMotion

FloatArray = NDArray[np.float64]

VIEWS: dict[str, tuple[float, float]] = {
    "front": (0.0, 4.0),
    "side": (90.0, 4.0),
    "oblique": (38.0, 11.0),
    "top": (0.0, 90.0),
}
"""View -> degrees turned from the person's front to their right, and degrees above level."""

VIEW_ANGLE = 22.0
"""Degrees from bottom to top of the picture: a long lens, so that near limbs do not loom."""

LEAST_HORIZONTAL = 0.3
"""A forward axis whose level part is shorter than this belongs to somebody lying down."""

NEAREST = 0.2
"""m; a camera stays at least so far from the nearest point."""


class ViewError(CondyleError):
    """A picture was asked for that cannot be: an unknown view, row or axis."""


@dataclass(frozen=True, slots=True)
class Camera:
    """A pinhole camera in laboratory axes.

    Attributes
    ----------
    position, focal_point : (3,) m
        It stands at one and looks at the other.
    up : (3,)
        The direction that is up in the picture, not necessarily square to the line of sight.
    view_angle : float
        Degrees between the bottom and the top of the picture.
    """

    position: FloatArray
    focal_point: FloatArray
    up: FloatArray
    view_angle: float = VIEW_ANGLE

    def axes(self) -> FloatArray:
        """(3, 3): rows are the picture's right, its up, and backwards out of it."""
        back = unit(self.position - self.focal_point)
        right = unit(np.cross(self.up, back))
        return np.stack([right, np.cross(back, right), back])

    def project(self, points: FloatArray, size: tuple[int, int]) -> FloatArray:
        """(..., 2) pixels from the top left corner; NaN for what lies behind the camera."""
        seen = (points - self.position) @ self.axes().T
        depth = np.where(seen[..., 2] < 0.0, -seen[..., 2], np.nan)
        half_height = 0.5 * size[1]
        scale = half_height / np.tan(np.radians(0.5 * self.view_angle)) / depth
        return np.stack(
            [0.5 * size[0] + scale * seen[..., 0], half_height - scale * seen[..., 1]], axis=-1
        )

    def visible_height(self) -> float:
        """What the picture's height spans at the focal point, m."""
        distance = float(np.linalg.norm(self.position - self.focal_point))
        return 2.0 * distance * float(np.tan(np.radians(0.5 * self.view_angle)))


@dataclass(frozen=True, slots=True)
class Room:
    """The part of a picture that the figure may fill, as fractions from the top left corner."""

    left: float = 0.06
    right: float = 0.94
    top: float = 0.06
    bottom: float = 0.94


def unit(vector: FloatArray) -> FloatArray:
    """The vector with length one; zero stays zero."""
    return np.asarray(vector / max(float(np.linalg.norm(vector)), 1e-12))


def up_vector(up: str) -> FloatArray:
    """The unit vector of an axis written such as ``+Y``.

    Raises
    ------
    ViewError
        For anything else.
    """
    text = up.strip().upper()
    sign, letter = (text[0], text[1:]) if text[:1] in ("+", "-") else ("+", text)
    if len(letter) != 1 or letter not in "XYZ":
        raise ViewError(f"no axis is called '{up}'; up is one of +X, +Y, +Z, -X, -Y, -Z.")
    vector = np.zeros(3)
    vector["XYZ".index(letter)] = -1.0 if sign == "-" else 1.0
    return vector


def level_axes(up: FloatArray) -> FloatArray:
    """(3, 3): rows are two level directions and up, right-handed."""
    first = np.roll(np.abs(up), 1)
    return np.stack([first, np.cross(up, first), up])


def main_root(motion: FittedMotion) -> int:
    """The index of the root with the most segments below it: the person, not the ball."""
    children = {n: list(motion.joint_centres.get(n, {})) for n in motion.segment_names}
    hanging = {child for below in children.values() for child in below}
    roots = [n for n in motion.segment_names if n not in hanging] or [motion.segment_names[0]]

    def family(name: str) -> int:
        return 1 + sum(family(child) for child in children.get(name, ()))

    return motion.segment_names.index(max(roots, key=family))


def facing(motion: FittedMotion, rows: slice | NDArray[np.int64]) -> FloatArray:
    """(3,): the level direction in which the person faces on average over those rows.

    Taken from the root's X axis (ISB: forward); from its Y axis for a person lying down; from
    the laboratory where no row is posed.
    """
    up = up_vector(motion.up)
    poses = motion.laboratory_from_segment[rows, main_root(motion)]
    poses = poses[np.isfinite(poses).all(axis=(1, 2))]
    for column in (0, 1):
        level = poses[:, :3, column] - np.outer(poses[:, :3, column] @ up, up)
        mean = level.mean(axis=0) if len(level) else np.zeros(3)
        if np.linalg.norm(mean) > LEAST_HORIZONTAL:
            return unit(mean)
    return np.asarray(level_axes(up)[0])


def look_from(view: str, forward: FloatArray, up: FloatArray) -> FloatArray:
    """(3,): the unit vector from the person to the camera.

    Raises
    ------
    ViewError
        For a view that is not one of ``VIEWS``.
    """
    if view not in VIEWS:
        raise ViewError(f"no view is called '{view}'; the views are {', '.join(VIEWS)}.")
    turned, raised = np.radians(VIEWS[view])
    level = np.cos(turned) * forward + np.sin(turned) * np.cross(forward, up)
    return np.asarray(np.cos(raised) * level + np.sin(raised) * up)


def picture_up(view: str, forward: FloatArray, up: FloatArray) -> FloatArray:
    """(3,): what is up in the picture: the laboratory's up, or from above the way the person faces."""
    return forward if view == "top" else up


def frame_points(
    points: FloatArray,
    towards_camera: FloatArray,
    up: FloatArray,
    size: tuple[int, int],
    room: Room,
) -> Camera:
    """The nearest camera in that direction that sees every point inside the room; `up` is the picture's.

    In camera axes (x right, y up, z back) an edge of the room is a plane through the camera: x - cx
    <= r (cz - z) for every point at the right edge's slope r, and so on. Left and right together
    bound the distance cz from below, lower and upper edge likewise; the larger bound is taken, and
    the slack of the other is halved.
    """
    axes = Camera(towards_camera, np.zeros(3), up).axes()
    x, y, z = axes @ points.T
    half = np.tan(np.radians(0.5 * VIEW_ANGLE))
    across = half * size[0] / size[1] * (2.0 * np.array([room.left, room.right]) - 1.0)
    upwards = half * (1.0 - 2.0 * np.array([room.bottom, room.top]))
    distance = max(
        least_distance(x, z, across), least_distance(y, z, upwards), float(z.max()) + NEAREST
    )
    eye = [centred(x, z, across, distance), centred(y, z, upwards, distance), distance]
    looked_at = [eye[0], eye[1], 0.5 * float(z.min() + z.max())]
    return Camera(np.array(eye) @ axes, np.array(looked_at) @ axes, up)


def least_distance(offset: FloatArray, back: FloatArray, slopes: FloatArray) -> float:
    """How far back (m) a camera must be for all points to lie between two slopes."""
    low, high = slopes
    return float(((offset + high * back).max() - (offset + low * back).min()) / (high - low))


def centred(offset: FloatArray, back: FloatArray, slopes: FloatArray, distance: float) -> float:
    """The camera's offset (m) at that distance that leaves the same slack at both edges."""
    low, high = slopes
    first = float((offset + high * back).max() - high * distance)
    last = float((offset + low * back).min() - low * distance)
    return 0.5 * (first + last)
