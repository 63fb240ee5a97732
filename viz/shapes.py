"""Solid shapes as distance functions, blended smoothly into one closed surface.

Everything that is drawn as bone is a short list of limbs, balls and plates. Each has a distance
function, negative inside; a polynomial smooth minimum joins them as if they had grown together
(Quilez, "smooth minimum", 2013), and the zero level becomes triangles with gradient normals.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

FINEST, COARSEST = 0.003, 0.0045
"""m; grid spacings between which a shape is sampled."""

CELLS_ACROSS = 4.0
"""Grid cells across the thinnest part: fewer shows steps, more takes longer than it shows."""

MOST_CELLS = 1_000_000
"""A shape's grid is coarsened to this, about 0.3 s, whatever a model declares."""


class Shape(Protocol):
    """Anything solid with a distance function; `bone_solids` holds those of the stored bones."""

    @property
    def thinnest(self) -> float:
        """The smallest radius, m."""
        ...

    def bounds(self) -> tuple[FloatArray, FloatArray]:
        """The corners of the box around it, m."""
        ...

    def distance(self, points: FloatArray) -> FloatArray:
        """Distance (m) from the surface, negative inside."""
        ...


@dataclass(frozen=True, slots=True)
class Limb:
    """A tapered round bar with rounded ends.

    `waist` slims its middle by that factor, `bow` (m) bends its middle aside.
    """

    start: FloatArray
    end: FloatArray
    start_radius: float
    end_radius: float
    waist: float = 1.0
    bow: FloatArray | None = None

    @property
    def thinnest(self) -> float:
        """The smallest radius, m."""
        return min(self.start_radius, self.end_radius) * self.waist

    def bounds(self) -> tuple[FloatArray, FloatArray]:
        """The corners of the box around it."""
        radius = max(self.start_radius, self.end_radius)
        corners = np.stack([self.start, self.end])
        if self.bow is not None:
            corners = np.concatenate([corners, corners.mean(axis=0)[None] + self.bow])
        return corners.min(axis=0) - radius, corners.max(axis=0) + radius

    def distance(self, points: FloatArray) -> FloatArray:
        """Approximate distance (m) from the surface, negative inside."""
        along = self.end - self.start
        square = max(float(along @ along), 1e-12)
        t = np.clip((points - self.start) @ along / square, 0.0, 1.0)
        fullness = 1.0 - (1.0 - self.waist) * (1.0 - (2.0 * t - 1.0) ** 4)
        radius = (self.start_radius + (self.end_radius - self.start_radius) * t) * fullness
        axis_points = self.start + t[..., None] * along
        if self.bow is not None:
            axis_points = axis_points + (4.0 * t * (1.0 - t))[..., None] * self.bow
        return np.asarray(np.linalg.norm(points - axis_points, axis=-1) - radius)


@dataclass(frozen=True, slots=True)
class Ball:
    """An ellipsoid with its axes along those of the segment."""

    centre: FloatArray
    radii: FloatArray

    @property
    def thinnest(self) -> float:
        """The smallest radius, m."""
        return float(self.radii.min())

    def bounds(self) -> tuple[FloatArray, FloatArray]:
        """The corners of the box around it."""
        return self.centre - self.radii, self.centre + self.radii

    def distance(self, points: FloatArray) -> FloatArray:
        """First-order distance (m) from the surface, negative inside."""
        scaled = (points - self.centre) / self.radii
        level = np.linalg.norm(scaled, axis=-1)
        slope = np.linalg.norm(scaled / self.radii, axis=-1)
        return np.asarray(level * (level - 1.0) / np.maximum(slope, 1e-9))


@dataclass(frozen=True, slots=True)
class Chain:
    """A bent round bar of even thickness through the points (n, 3)."""

    points: FloatArray
    radius: float

    @property
    def thinnest(self) -> float:
        """The radius, m."""
        return self.radius

    def bounds(self) -> tuple[FloatArray, FloatArray]:
        """The corners of the box around it."""
        return self.points.min(axis=0) - self.radius, self.points.max(axis=0) + self.radius

    def distance(self, points: FloatArray) -> FloatArray:
        """Distance (m) from the surface, negative inside."""
        links = zip(self.points[:-1], self.points[1:], strict=True)
        return np.asarray(
            np.min([to_link(points - start, end - start) for start, end in links], axis=0)
            - self.radius
        )


@dataclass(frozen=True, slots=True)
class Plate:
    """Triangles (n, 3, 3) that share edges, as one sheet of even thickness with round edges."""

    triangles: FloatArray
    radius: float

    @property
    def thinnest(self) -> float:
        """Half the thickness, m."""
        return self.radius

    def bounds(self) -> tuple[FloatArray, FloatArray]:
        """The corners of the box around it."""
        corners = self.triangles.reshape(-1, 3)
        return corners.min(axis=0) - self.radius, corners.max(axis=0) + self.radius

    def distance(self, points: FloatArray) -> FloatArray:
        """Distance (m) from the surface, negative inside."""
        nearest = [to_triangle(points, triangle) for triangle in self.triangles]
        return np.asarray(np.min(nearest, axis=0) - self.radius)


def to_link(offset: FloatArray, link: FloatArray) -> FloatArray:
    """Distance (m) of points, given from the link's start, to the straight link."""
    t = np.clip(offset @ link / max(float(link @ link), 1e-12), 0.0, 1.0)
    return np.asarray(np.linalg.norm(offset - t[..., None] * link, axis=-1))


def to_triangle(points: FloatArray, triangle: FloatArray) -> FloatArray:
    """Distance (m) of points to a triangle (3, 3): to its plane above it, else to its edges."""
    edges = np.roll(triangle, -1, axis=0) - triangle
    normal = np.cross(edges[0], edges[1])
    normal = normal / max(float(np.linalg.norm(normal)), 1e-12)
    offsets = [points - corner for corner in triangle]
    above = np.all(
        [
            offset @ np.cross(normal, edge) >= 0.0
            for offset, edge in zip(offsets, edges, strict=True)
        ],
        axis=0,
    )
    to_edges = np.min([to_link(o, edge) for o, edge in zip(offsets, edges, strict=True)], axis=0)
    return np.asarray(np.where(above, np.abs(offsets[0] @ normal), to_edges))


@dataclass(frozen=True, slots=True)
class Surface:
    """Triangles: points (n, 3) m, outward unit normals (n, 3), faces (m, 3) indices."""

    points: FloatArray
    normals: FloatArray
    faces: NDArray[np.int64]


def smooth_minimum(first: FloatArray, second: FloatArray, blend: float) -> FloatArray:
    """The smaller of two distances, rounded where they differ by less than `blend` (m)."""
    overlap = np.maximum(blend - np.abs(first - second), 0.0) / blend
    return np.asarray(np.minimum(first, second) - overlap**2 * (0.25 * blend))


def spacing_for(shapes: Sequence[Shape], extent: FloatArray) -> float:
    """The grid's spacing, m: fine enough for the thinnest shape, coarse enough for the grid to stay small."""
    thinnest = min(shape.thinnest for shape in shapes)
    wanted = float(np.clip(2.0 * thinnest / CELLS_ACROSS, FINEST, COARSEST))
    return max(wanted, float(np.cbrt(np.prod(extent) / MOST_CELLS)))


def sample(
    shapes: Sequence[Shape],
    blend: float,
    carved: Sequence[Shape] = (),
    spacing: float | None = None,
) -> tuple[NDArray[np.float32], FloatArray, float]:
    """The blended distance on a grid, with the grid's first point and its spacing (m).

    A shape is evaluated only near itself: elsewhere it cannot move the surface.
    """
    boxes = [shape.bounds() for shape in shapes]
    low = np.min([box[0] for box in boxes], axis=0)
    high = np.max([box[1] for box in boxes], axis=0)
    step = spacing or spacing_for(shapes, high - low)
    margin = blend + 2.0 * step
    origin = low - margin
    count = np.ceil((high - low + 2.0 * margin) / step).astype(int) + 1
    field = np.full(count, 10.0 * margin)
    for shape in shapes:
        block, points = near(shape, origin, step, count, margin)
        field[block] = smooth_minimum(field[block], shape.distance(points), blend)
    for shape in carved:
        block, points = near(shape, origin, step, count, margin)
        field[block] = -smooth_minimum(-field[block], shape.distance(points), blend)
    return field.astype(np.float32), origin, step


def near(
    shape: Shape, origin: FloatArray, spacing: float, count: NDArray[np.int64], margin: float
) -> tuple[tuple[slice, ...], FloatArray]:
    """The block of the grid within `margin` (m) of a shape, and its points (i, j, k, 3)."""
    low, high = shape.bounds()
    first = np.clip(np.floor((low - margin - origin) / spacing).astype(int), 0, count)
    last = np.clip(np.ceil((high + margin - origin) / spacing).astype(int) + 1, first, count)
    ranges = [np.arange(a, b) for a, b in zip(first, last, strict=True)]
    points = origin + spacing * np.stack(np.meshgrid(*ranges, indexing="ij"), axis=-1)
    return tuple(slice(a, b) for a, b in zip(first, last, strict=True)), points


def skin(
    shapes: Sequence[Shape],
    *,
    blend: float,
    carved: Sequence[Shape] = (),
    spacing: float | None = None,
) -> Surface:
    """One closed surface around all the shapes, grown together within `blend` (m).

    Parameters
    ----------
    carved : shapes
        Taken away again, with edges as round as the joins.
    spacing : float, optional
        m, of the grid; by default what suits the thinnest shape.
    """
    # VTK's filters alone: bones are wanted (a report's, say) where nothing can be drawn too.
    from vtkmodules.util.numpy_support import numpy_to_vtk, vtk_to_numpy
    from vtkmodules.vtkCommonDataModel import vtkImageData
    from vtkmodules.vtkFiltersCore import vtkFlyingEdges3D

    field, origin, step = sample(shapes, blend, carved, spacing)
    grid = vtkImageData()
    grid.SetDimensions(*field.shape)
    grid.SetSpacing(step, step, step)
    grid.SetOrigin(*origin)
    depth = -field.ravel(order="F")  # VTK's normals point to where the value falls
    grid.GetPointData().SetScalars(numpy_to_vtk(depth, deep=True))
    contour = vtkFlyingEdges3D()
    contour.SetInputData(grid)
    contour.SetValue(0, 0.0)
    contour.ComputeNormalsOn()
    contour.ComputeGradientsOff()
    contour.Update()
    mesh = contour.GetOutput()
    points = vtk_to_numpy(mesh.GetPoints().GetData()).astype(np.float64)
    normals = vtk_to_numpy(mesh.GetPointData().GetNormals()).astype(np.float64)
    faces = vtk_to_numpy(mesh.GetPolys().GetConnectivityArray()).astype(np.int64).reshape(-1, 3)
    return Surface(points, normals, faces)
