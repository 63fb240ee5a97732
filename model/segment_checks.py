"""What of one segment no single value shows: masses, inertia that no body has, meshes, landmarks."""

from __future__ import annotations

import os
from pathlib import Path

from condyle.model.language import ModelEntry, SegmentEntry
from condyle.model.places import check_place
from condyle.model.skeleton import LABORATORY, Vector
from condyle.model.tree import Mistakes, Node, node_at

MESH_FORMATS = (".stl", ".ply", ".obj", ".glb")
"""Surface formats that can be drawn."""

_ROUNDING = 1e-9
"""Relative; gyration radii of a flat body may meet their bound exactly."""


def check_segments(model: ModelEntry, tree: Node, mistakes: Mistakes) -> None:
    """Tell what is wrong within each segment."""
    for name, segment in model.segments.items():
        _check_segment(name, segment, tree, mistakes)
    _check_mass_shares(model, tree, mistakes)


def mesh_path(node: Node, mesh: str) -> Path:
    """A mesh's place: its name is relative to the folder of the file that names it."""
    return Path(node.file).parent / mesh


def _check_segment(name: str, segment: SegmentEntry, tree: Node, mistakes: Mistakes) -> None:
    node = node_at(tree, "segments", name)
    if name == LABORATORY:
        problem = "'laboratory' is the recording's own frame and cannot be a segment."
        mistakes.add(node, problem, "Give the segment another name.", key=True)
    if "mass" in node.entries and "mass_share" in node.entries:
        problem = f"the segment '{name}' has both a mass and a mass_share."
        mistakes.add(node_at(node, "mass_share"), problem, "Keep one of them.")
    if segment.gyration is not None:
        _check_gyration(segment.gyration, node_at(node, "gyration"), mistakes)
    check_place(segment.centre_of_mass, node_at(node, "centre_of_mass"), name, tree, mistakes)
    for index, end in enumerate(segment.length or ()):
        check_place(end, node_at(node, "length", index), name, tree, mistakes)
    for index, shape in enumerate(segment.shapes):
        shape_node = node_at(node, "shapes", index)
        check_place(shape.at, node_at(shape_node, "at"), name, tree, mistakes)
        if shape.mesh is not None:
            _check_mesh(shape.mesh, node_at(shape_node, "mesh"), mistakes)


def _check_gyration(radii: Vector, node: Node, mistakes: Mistakes) -> None:
    """A body's second moments are not negative, so no squared radius exceeds the other two's sum."""
    squares = sorted(radius * radius for radius in radii)
    if squares[2] > (squares[0] + squares[1]) * (1 + _ROUNDING):
        shown = ", ".join(f"{radius:g}" for radius in radii)
        problem = f"no body has the gyration radii [{shown}]."
        remedy = "The square of each is at most the sum of the other two squares."
        mistakes.add(node, problem, remedy)


def _check_mesh(mesh: str, node: Node, mistakes: Mistakes) -> None:
    """A mesh stands in the folder of its model, or below; nowhere else on the disk."""
    path = mesh_path(node, mesh)
    try:
        folder = Path(node.file).parent.resolve()
        inside = not Path(mesh).is_absolute() and path.resolve().is_relative_to(folder)
        there = inside and path.is_file()
        readable = there and os.access(path, os.R_OK) and path.stat().st_size > 0
    except (OSError, ValueError, RuntimeError):
        inside = there = readable = False
    if not inside:
        problem = f"the mesh '{mesh}' is not in the model's folder."
        mistakes.add(node, problem, "Put it beside the model, and name it from there.")
    elif not there:
        problem = f"there is no mesh '{mesh}' in the model's folder."
        mistakes.add(node, problem, "Put it there, or correct its name.")
    elif path.suffix.lower() not in MESH_FORMATS:
        problem = f"the mesh '{mesh}' is of a kind that cannot be drawn."
        mistakes.add(node, problem, f"Convert it to one of {', '.join(MESH_FORMATS)}.")
    elif not readable:
        problem = f"the mesh '{mesh}' is empty or cannot be read."
        mistakes.add(node, problem, "Check the file and its permissions.")


def _check_mass_shares(model: ModelEntry, tree: Node, mistakes: Mistakes) -> None:
    if "person" in tree.entries:
        return
    for name, segment in model.segments.items():
        if segment.mass_share is not None:
            problem = "mass_share is refused in a model without `person`."
            remedy = "Add whom the numbers describe, such as `person: {stature: 1.75, mass: 72}`."
            mistakes.add(node_at(tree, "segments", name, "mass_share"), problem, remedy)
            return  # one remedy cures them all
