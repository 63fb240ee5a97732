"""What a bone's design is: solids for the reference person, and the points it is placed by.

A design is a list of parts, each a closed surface of its own (a vertebra, a rib), with a number
of faces that it is thinned to. Joint centres and landmarks are those of the shipped models; nothing is
measured on bone, all shapes are drawn by eye from common anatomy.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from condyle.viz.offscreen import open_pyvista
from condyle.viz.shapes import Shape, skin

FloatArray = NDArray[np.float64]
Triangles = tuple[FloatArray, NDArray[np.int64]]
"""Points (n, 3) m, and faces (m, 3), indices wound counter-clockwise as seen from outside."""

GRID = 0.0016
"""m; fine enough for a shoulder blade, which is 4 mm thick."""


@dataclass(frozen=True, slots=True)
class Part:
    """Solids that grow together.

    Attributes
    ----------
    shapes : solids
    faces : int
        The surface is thinned to about so many.
    blend : float
        m; how softly the solids join.
    carved : solids
        Taken away again.
    grid : float
        m, spacing at which the solids are sampled.
    """

    shapes: Sequence[Shape]
    faces: int
    blend: float = 0.006
    carved: Sequence[Shape] = ()
    grid: float = GRID

    def triangles(self) -> Triangles:
        """The part's surface, thinned where it is flattest (quadric errors, as VTK has them)."""
        surface = skin(self.shapes, blend=self.blend, carved=self.carved, spacing=self.grid)
        mesh = open_pyvista().PolyData.from_regular_faces(surface.points, surface.faces)
        thin = mesh.decimate(1.0 - self.faces / mesh.n_cells)
        faces = np.asarray(thin.faces, dtype=np.int64).reshape(-1, 4)[:, 1:]
        return np.asarray(thin.points, dtype=np.float64), faces


@dataclass(frozen=True, slots=True)
class Swept:
    """A part whose triangles are known without sampling."""

    surface: Triangles

    def triangles(self) -> Triangles:
        """The part's surface."""
        return self.surface


@dataclass(frozen=True, slots=True)
class Design:
    """One bone, or several that move as one, for the reference person.

    Attributes
    ----------
    anchors : name -> (x, y, z) m
        Points of the segment that the bone follows when a person's differ; names as
        `bone_fitting.known_points` gives them.
    parts : parts
        Those of the right side; where a segment lies in the middle, of both.
    """

    anchors: Mapping[str, Sequence[float]]
    parts: Sequence[Part | Swept] = field(default_factory=tuple)

    def triangles(self) -> Triangles:
        """All parts as one list of triangles."""
        return joined([part.triangles() for part in self.parts])


def joined(surfaces: Sequence[Triangles]) -> Triangles:
    """Several surfaces as one list of triangles."""
    starts = np.cumsum([0, *(len(points) for points, _ in surfaces[:-1])])
    points = np.concatenate([points for points, _ in surfaces])
    faces = [faces + start for (_, faces), start in zip(surfaces, starts, strict=True)]
    return points, np.concatenate(faces)
