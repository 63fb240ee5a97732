"""Solids that only the stored bones are made of: splined rods, drums, turned balls, swept ribs.

They cost more to sample than the limbs of `shapes`, which does not matter to a script that runs
once. What a bone's design repeats on both sides is reflected here in the plane of symmetry, z = 0.
"""

from __future__ import annotations

import itertools
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import CubicSpline, PchipInterpolator

from condyle.viz.bone_depth import direction
from condyle.viz.shapes import Shape

FloatArray = NDArray[np.float64]
Point = Sequence[float] | FloatArray
Points = Sequence[Point] | FloatArray

ROD_LINKS = 14
"""Straight links that a splined rod is cut into."""

TO_THE_OTHER_SIDE = np.array([1.0, 1.0, -1.0])
"""Reflection in the median plane: Z points to the subject's right in every segment."""


def spline(points: Points, count: int) -> FloatArray:
    """(count, 3) m: points on the smooth curve through `points`, evenly by its chords."""
    knots = np.asarray(points, dtype=np.float64)
    along = chords(knots)
    if len(knots) == 2:
        return np.asarray(knots[0] + np.linspace(0.0, 1.0, count)[:, None] * (knots[1] - knots[0]))
    curve = CubicSpline(along, knots, bc_type="natural")
    return np.asarray(curve(np.linspace(0.0, along[-1], count)))


def chords(points: FloatArray) -> FloatArray:
    """(n,) m: the length of the broken line up to each of its points."""
    steps = np.linalg.norm(np.diff(points, axis=0), axis=1)
    return np.concatenate([[0.0], np.cumsum(steps)])


def moved(point: Point, x: float, y: float, z: float) -> FloatArray:
    """A point (3,) m that many metres further on."""
    return np.asarray(point + np.array([x, y, z]), dtype=np.float64)


@dataclass(frozen=True, slots=True)
class Rod:
    """A round bar along a smooth curve, with a radius (m) at each of its points."""

    points: Points
    radii: Sequence[float]

    @property
    def thinnest(self) -> float:
        """The smallest radius, m."""
        return min(self.radii)

    def bounds(self) -> tuple[FloatArray, FloatArray]:
        """The corners of the box around it."""
        curve, radius = spline(self.points, ROD_LINKS + 1), max(self.radii)
        return curve.min(axis=0) - radius, curve.max(axis=0) + radius

    def distance(self, points: FloatArray) -> FloatArray:
        """Approximate distance (m) from the surface, negative inside."""
        knots = np.asarray(self.points, dtype=np.float64)
        curve = spline(self.points, ROD_LINKS + 1)
        along = chords(knots)
        radius = PchipInterpolator(along, self.radii)(np.linspace(0.0, along[-1], ROD_LINKS + 1))
        nearest = np.full(points.shape[:-1], np.inf)
        for (start, end), (first, last) in zip(
            itertools.pairwise(curve), itertools.pairwise(radius), strict=True
        ):
            link = end - start
            t = np.clip((points - start) @ link / max(float(link @ link), 1e-12), 0.0, 1.0)
            gap = np.linalg.norm(points - (start + t[..., None] * link), axis=-1)
            nearest = np.minimum(nearest, gap - (first + (last - first) * t))
        return nearest


@dataclass(frozen=True, slots=True)
class Egg:
    """An ellipsoid of half axes `radii` (m); `axes` has them as columns, else the segment's."""

    centre: Point
    radii: Sequence[float]
    axes: FloatArray | None = None

    @property
    def thinnest(self) -> float:
        """The smallest radius, m."""
        return min(self.radii)

    def bounds(self) -> tuple[FloatArray, FloatArray]:
        """The corners of the box around it."""
        axes = np.eye(3) if self.axes is None else self.axes
        reach = np.linalg.norm(axes * np.asarray(self.radii), axis=1)
        return np.asarray(self.centre) - reach, np.asarray(self.centre) + reach

    def distance(self, points: FloatArray) -> FloatArray:
        """First-order distance (m) from the surface, negative inside."""
        local = points - np.asarray(self.centre)
        if self.axes is not None:
            local = local @ self.axes
        scaled = local / np.asarray(self.radii)
        level = np.linalg.norm(scaled, axis=-1)
        slope = np.linalg.norm(scaled / np.asarray(self.radii), axis=-1)
        return np.asarray(level * (level - 1.0) / np.maximum(slope, 1e-9))


@dataclass(frozen=True, slots=True)
class Drum:
    """A cylinder of oval section with rounded rims and a slight waist, as a vertebra's body is.

    Attributes
    ----------
    axes : (3, 3)
        Columns: the section's first and second axis, and the drum's own.
    radii : (first, second) m
    half_height, rim : float
        m; `rim` is the radius of the rounding.
    waist : float
        Share by which the middle is slimmer.
    """

    centre: FloatArray
    axes: FloatArray
    radii: tuple[float, float]
    half_height: float
    rim: float
    waist: float = 0.10

    @property
    def thinnest(self) -> float:
        """The smallest half width, m."""
        return min(*self.radii, self.half_height)

    def bounds(self) -> tuple[FloatArray, FloatArray]:
        """The corners of the box around it."""
        reach = np.abs(self.axes) @ np.array([*self.radii, self.half_height])
        return self.centre - reach, self.centre + reach

    def distance(self, points: FloatArray) -> FloatArray:
        """Approximate distance (m) from the surface, negative inside."""
        local = (points - self.centre) @ self.axes
        height = local[..., 2] / self.half_height
        slim = 1.0 - self.waist * np.cos(0.5 * np.pi * np.clip(height, -1.0, 1.0)) ** 2
        level = np.linalg.norm(local[..., :2] / np.asarray(self.radii), axis=-1) / slim
        aside = (level - 1.0) * min(self.radii) + self.rim
        above = np.abs(local[..., 2]) - (self.half_height - self.rim)
        inside = np.minimum(np.maximum(aside, above), 0.0)
        outside = np.hypot(np.maximum(aside, 0.0), np.maximum(above, 0.0))
        return np.asarray(inside + outside - self.rim)


@dataclass(frozen=True, slots=True)
class Reflected:
    """Another shape as it lies on the other side of the median plane."""

    shape: Shape

    @property
    def thinnest(self) -> float:
        """The smallest radius, m."""
        return self.shape.thinnest

    def bounds(self) -> tuple[FloatArray, FloatArray]:
        """The corners of the box around it."""
        corners = np.stack(self.shape.bounds()) * TO_THE_OTHER_SIDE
        return corners.min(axis=0), corners.max(axis=0)

    def distance(self, points: FloatArray) -> FloatArray:
        """Distance (m) from the surface, negative inside."""
        return self.shape.distance(points * TO_THE_OTHER_SIDE)


def both_sides(*shapes: Shape) -> list[Shape]:
    """The shapes, which lie on the right, and their reflections."""
    return [*shapes, *(Reflected(shape) for shape in shapes)]


def swept(
    path: FloatArray, outward: FloatArray, height: FloatArray, depth: FloatArray, *, sides: int
) -> tuple[FloatArray, NDArray[np.int64]]:
    """A closed bar of oval section along a path: what a rib is.

    Parameters
    ----------
    path, outward : (n, 3)
        m; and unit directions in which the section is `depth` thick.
    height, depth : (n,) m
        Half axes of the section.

    Returns
    -------
    points (n * sides + 2, 3) m, faces, wound counter-clockwise as seen from outside
    """
    along = np.gradient(path, axis=0)
    along /= np.linalg.norm(along, axis=1, keepdims=True)
    out = outward - along * np.sum(along * outward, axis=1, keepdims=True)
    out /= np.linalg.norm(out, axis=1, keepdims=True)
    aside = np.cross(along, out)
    angle = np.linspace(0.0, 2.0 * np.pi, sides, endpoint=False)[None, :, None]
    rings = (
        path[:, None]
        + np.cos(angle) * depth[:, None, None] * out[:, None]
        + np.sin(angle) * height[:, None, None] * aside[:, None]
    )
    tips = path[[0, -1]] + 0.6 * np.stack([-depth[0] * along[0], depth[-1] * along[-1]])
    return np.concatenate([rings.reshape(-1, 3), tips]), ring_faces(len(path), sides)


def ring_faces(rings: int, sides: int) -> NDArray[np.int64]:
    """Triangles between successive rings of points, and from the outer two to the tips after them."""
    first = np.arange(rings - 1)[:, None] * sides
    side, following = np.arange(sides), (np.arange(sides) + 1) % sides
    a, b = first + side, first + following
    walls = np.stack([np.stack([a, b, b + sides], -1), np.stack([a, b + sides, a + sides], -1)])
    start, end = rings * sides, rings * sides + 1
    last = (rings - 1) * sides
    caps = [
        np.stack([following, side, np.full(sides, start)], -1),
        np.stack([last + side, last + following, np.full(sides, end)], -1),
    ]
    return np.concatenate([walls.reshape(-1, 3), *caps]).astype(np.int64)


def frame_along(axis: Point, forward: Point = (1.0, 0.0, 0.0)) -> FloatArray:
    """(3, 3) Columns forward, to the side, along `axis`; `forward` is made square to the axis."""
    up = direction(np.asarray(axis, dtype=np.float64))
    ahead = np.asarray(forward, dtype=np.float64)
    ahead = direction(ahead - up * (up @ ahead))
    return np.stack([ahead, np.cross(up, ahead), up], axis=1)
