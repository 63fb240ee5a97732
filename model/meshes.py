"""Meshes to draw on segments: read once, checked, thinned, and grown with their segment.

Decided here: which mesh files are taken and how large they may be, how many faces are worth drawing,
what a mesh says about its own soundness, and in which order a shape is reflected, scaled, turned,
moved and stretched. Trimesh reads the files, from memory and without a resolver, so that a file
cannot name another one to be read.
"""

from __future__ import annotations

import json
import re
from collections.abc import Mapping
from dataclasses import dataclass
from functools import lru_cache
from io import BytesIO
from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
from numpy.typing import NDArray

from condyle.model.elementary import rotation_of_turn
from condyle.model.errors import CondyleError
from condyle.model.growth import size_factors
from condyle.model.skeleton import Shape, Skeleton, Vector

if TYPE_CHECKING:
    import trimesh

FloatArray = NDArray[np.float64]

MOST_DRAWN = 20_000
"""Faces; more do not show at the size of a picture."""

MOST_FACES = 5_000_000
"""Faces read at all: a scan of a whole skeleton has fewer."""

MOST_BYTES = 500 * 2**20
"""Bytes of a mesh file: five million faces as text."""

LONGEST, SHORTEST = 3.0, 0.002
"""m; nothing a person carries is longer, no mesh worth drawing smaller: the unit is not metres."""

CLAIM = re.compile(rb"^element\s+\w+\s+(\d+)\s*$", re.MULTILINE)
"""A count in the header of a PLY file."""

KEPT = 64
"""Meshes kept in memory; full_body with a mesh for every bone has fewer."""


class MeshError(CondyleError):
    """A mesh file that a model names cannot be read."""

    def __init__(self, path: Path, problem: str, remedy: str) -> None:
        super().__init__(f"{path}: {problem}.\n  {remedy}")


@dataclass(frozen=True, slots=True)
class Mesh:
    """Triangles as a file gives them, thinned to what is worth drawing.

    Attributes
    ----------
    points : (n, 3)
        In the file's own unit, which Condyle takes as metres.
    faces : (m, 3) int
        Indices of points, counter-clockwise as seen from outside.
    faces_in_file : int
        Before thinning.
    watertight : bool
        Whether the file's surface is closed.
    """

    points: FloatArray
    faces: NDArray[np.int64]
    faces_in_file: int
    watertight: bool


@dataclass(frozen=True, slots=True)
class GrownShape:
    """A shape of a sized skeleton: the mesh to draw, and its segment's growth along x, y, z."""

    shape: Shape
    factors: Vector = (1.0, 1.0, 1.0)


def load_mesh(path: str | Path) -> Mesh:
    """Read a mesh (STL, PLY, OBJ or GLB); a file that has not changed is read only once.

    Raises
    ------
    MeshError
        Where the file is missing, too large, damaged, or holds no triangle.
    """
    path = Path(path)
    try:
        status = path.stat()
        if status.st_size > MOST_BYTES:
            raise MeshError(path, "this mesh is too large", f"Thin it to {MOST_DRAWN} faces.")
        return _read(path, status.st_mtime_ns, status.st_size)
    except OSError as fault:
        why = fault.strerror or str(fault)
        remedy = "Put the mesh there, or correct its name in the model."
        raise MeshError(path, f"this mesh cannot be read ({why})", remedy) from fault


@lru_cache(maxsize=KEPT)
def _read(path: Path, _modified: int, _size: int) -> Mesh:
    import trimesh  # a third of a second that only meshes are worth

    content = path.read_bytes()
    kind = path.suffix.lower().lstrip(".")
    check_claims(content, kind, path)
    try:
        scene = trimesh.load_scene(BytesIO(content), file_type=kind)
        counted = [scene.graph[node][1] for node in scene.graph.nodes_geometry]
        faces = sum(len(getattr(scene.geometry[name], "faces", ())) for name in counted)
        if faces > MOST_FACES:
            raise MeshError(path, f"this mesh has {faces} faces", f"Thin it to {MOST_DRAWN}.")
        return _checked(scene.to_mesh(), path)
    except MeshError:
        raise
    except Exception as fault:  # a parser raises whatever it met
        why = " ".join(str(fault).split())[:200] or type(fault).__name__
        raise MeshError(path, f"this mesh is damaged ({why})", "Export it again.") from fault


def check_claims(content: bytes, kind: str, path: Path) -> None:
    """Refuse a file that claims more items than it has bytes, before room is made for them."""
    claimed = 0
    if kind == "ply":
        header = content[: max(content.find(b"end_header"), 0)]
        claimed = sum(int(count[:20]) for count in CLAIM.findall(header.replace(b"\r", b"\n")))
    elif kind == "glb":
        claimed = claimed_by_glb(content)
    if claimed > len(content):
        problem = f"this mesh is damaged (it claims {claimed} items in {len(content)} bytes)"
        raise MeshError(path, problem, "Export it again.")


def claimed_by_glb(content: bytes) -> int:
    """Numbers that a binary glTF says it holds; 0 where that cannot be told (glTF 2.0, 4.4)."""
    try:
        length = int.from_bytes(content[12:16], "little")
        accessors = json.loads(content[20 : 20 + length])["accessors"]
        return sum(int(accessor["count"]) for accessor in accessors)
    except (ValueError, KeyError, TypeError, RecursionError):
        return 0


def _checked(mesh: trimesh.Trimesh, path: Path) -> Mesh:
    """Only sound triangles, at most as many as are worth drawing."""
    mesh.update_faces(np.isfinite(mesh.triangles).all(axis=(1, 2)))
    mesh.remove_unreferenced_vertices()
    found = len(mesh.faces)
    if not found:
        remedy = "Export it again, as a surface of triangles."
        raise MeshError(path, "this mesh holds no triangle", remedy)
    watertight = bool(mesh.is_watertight)
    if found > MOST_DRAWN:
        mesh = mesh.simplify_quadric_decimation(face_count=MOST_DRAWN)
    points = np.array(mesh.vertices, dtype=np.float64)
    return Mesh(points, np.array(mesh.faces, dtype=np.int64), found, watertight)


def place_mesh(mesh: Mesh, grown: GrownShape) -> tuple[FloatArray, NDArray[np.int64]]:
    """Put a mesh on its sized segment.

    In this order: z reversed where `reflected`, scaled, turned, moved `at` its place in the
    reference segment, then stretched with the segment, axis by axis.

    Returns
    -------
    points : (n, 3) m, in the sized segment
    faces : (m, 3) int, their outside still outside
    """
    shape = grown.shape
    points, faces = mesh.points, mesh.faces
    if shape.reflected:
        points, faces = points * [1.0, 1.0, -1.0], faces[:, ::-1]
    in_segment = shape.scale * points @ rotation_of_turn(shape.turned).T + shape.at
    return np.asarray(in_segment * grown.factors), faces


def grown_shapes(skeleton: Skeleton) -> dict[str, tuple[GrownShape, ...]]:
    """Segment -> its shapes with the segment's growth; only segments that have shapes."""
    found = {}
    for segment, (x, y, z) in zip(skeleton.segments, size_factors(skeleton), strict=True):
        if segment.shapes:
            factors = (float(x), float(y), float(z))
            found[segment.name] = tuple(GrownShape(shape, factors) for shape in segment.shapes)
    return found


def mesh_remarks(shapes: Mapping[str, tuple[GrownShape, ...]]) -> tuple[str, ...]:
    """What a user should know about a model's meshes: open surfaces, thinning, senseless sizes.

    Raises
    ------
    MeshError
        Where a mesh cannot be read.
    """
    said: list[str] = []
    for segment, several in shapes.items():
        for grown in several:
            mesh = load_mesh(grown.shape.mesh)
            name = f"{segment}: the mesh {Path(grown.shape.mesh).name}"
            size = float(np.ptp(place_mesh(mesh, grown)[0], axis=0).max())
            if size > LONGEST:
                said.append(
                    f"{name} is {size:.3g} m long as placed; where it is in millimetres, write "
                    f"`scale: {0.001 * grown.shape.scale:g}`."
                )
            if size < SHORTEST:
                said.append(
                    f"{name} is only {1000 * size:.2g} mm long as placed; a mesh in metres has "
                    "`scale: 1`."
                )
            if not mesh.watertight:
                said.append(f"{name} is not closed; it is drawn all the same.")
            if mesh.faces_in_file > len(mesh.faces):
                said.append(
                    f"{name} has {mesh.faces_in_file} faces; {len(mesh.faces)} of them are drawn."
                )
    return tuple(said)
