"""The cross checks: what no single value shows, because it lies between two of them.

They run on what is sound of a model after the vocabulary's checks, and ask the tree, not the
values, whether something was written at all; so one slip is told once, at its own line.
"""

from __future__ import annotations

import os
from collections.abc import Mapping
from pathlib import Path

from condyle.model.coordinates import Declared, all_angles, all_moves, declared_coordinates
from condyle.model.joint_tree import check_joint_tree
from condyle.model.language import JointEntry, ModelEntry, MoveEntry, SegmentEntry
from condyle.model.sizing_groups import check_splits
from condyle.model.skeleton import LABORATORY, Vector
from condyle.model.tree import Mistakes, Node, node_at

MOTIONS = ("floating", "spherical", "moves", "fixed")

MESH_FORMATS = (".stl", ".obj", ".ply", ".vtp")
"""Surface formats that can be drawn."""

_ROUNDING = 1e-9
"""Relative; gyration radii of a flat body may meet their bound exactly."""


def check_model(model: ModelEntry, tree: Node, mistakes: Mistakes) -> dict[str, Declared]:
    """Tell every mistake that lies between values.

    Parameters
    ----------
    model : ModelEntry
        What is sound of the model.
    tree : Node
        The merged and mirrored tree it was read from.
    mistakes : Mistakes
        Gets what is found.

    Returns
    -------
    dict of name -> Declared
        The coordinates that the joints declare.
    """
    for name in ("segments", "joints"):
        if not getattr(model, name) and not node_at(tree, name).entries.get(name):
            mistakes.add(tree, f"this model has no {name}.", f"Add `{name}:`.")
    for name, segment in model.segments.items():
        _check_segment(name, segment, node_at(tree, "segments", name), mistakes)
    _check_mass_shares(model, tree, mistakes)
    check_joint_tree(model, tree, mistakes)
    for name, joint in model.joints.items():
        _check_joint(joint, model, node_at(tree, "joints", name), name, mistakes)
    for move, node, _ in all_moves(model, tree):
        _check_move(move, node, mistakes)
    declared = declared_coordinates(model, tree, mistakes)
    _check_reported_names(model, declared, tree, mistakes)
    _check_markers(model, tree, mistakes)
    _check_sizes(model, declared, tree, mistakes)
    return declared


def mesh_path(node: Node, mesh: str) -> Path:
    """A mesh's place: its name is relative to the folder of the file that names it."""
    return Path(node.file).parent / mesh


def _check_segment(name: str, segment: SegmentEntry, node: Node, mistakes: Mistakes) -> None:
    if name == LABORATORY:
        problem = "'laboratory' is the recording's own frame and cannot be a segment."
        mistakes.add(node, problem, "Give the segment another name.", key=True)
    if "mass" in node.entries and "mass_share" in node.entries:
        problem = f"the segment '{name}' has both a mass and a mass_share."
        mistakes.add(node_at(node, "mass_share"), problem, "Keep one of them.")
    if segment.gyration is not None:
        _check_gyration(segment.gyration, node_at(node, "gyration"), mistakes)
    _check_place(segment.centre_of_mass, node_at(node, "centre_of_mass"), name, node, mistakes)
    for index, end in enumerate(segment.length or ()):
        _check_place(end, node_at(node, "length", index), name, node, mistakes)
    for index, shape in enumerate(segment.shapes):
        shape_node = node_at(node, "shapes", index)
        _check_place(shape.at, node_at(shape_node, "at"), name, node, mistakes)
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


def _check_place(
    place: Vector | str | None, node: Node, segment: str, segment_node: Node, mistakes: Mistakes
) -> None:
    if isinstance(place, str):
        known = node_at(segment_node, "landmarks").entries if segment_node else {}
        known = known if "landmarks" in segment_node.entries else {}
        if place not in known:
            mistakes.add_unknown(node, "landmark", place, known)


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


def _check_joint(
    joint: JointEntry, model: ModelEntry, node: Node, name: str, mistakes: Mistakes
) -> None:
    written = [motion for motion in MOTIONS if motion in node.entries]
    if not written:
        problem = f"the joint '{name}' does not say how it moves."
        remedy = "Add one of `floating`, `spherical`, `moves`, `fixed: true`."
        mistakes.add(node, problem, remedy, key=True)
    elif len(written) > 1:
        problem = f"the joint '{name}' is both {' and '.join(written)}."
        remedy = f"Keep one. One of a base model is removed by null: `{written[0]}: null`."
        mistakes.add(node_at(node, written[-1]), problem, remedy, key=True)
    if joint.floating is not None and joint.from_ not in (LABORATORY, None):
        problem = f"the floating joint '{name}' does not hang on the laboratory."
        remedy = "Write `from: laboratory`, or use moves: three that translate, three that rotate."
        mistakes.add(node_at(node, "from"), problem, remedy)
    if joint.floating is not None and "turned" in node.entries:
        problem = f"the floating joint '{name}' takes no 'turned'."
        remedy = "Its orientation is told relative to upright: remove `turned`."
        mistakes.add(node_at(node, "turned"), problem, remedy, key=True)
    elif joint.turned == "upright" and joint.from_ not in (LABORATORY, None):
        problem = f"only a joint from the laboratory can be `turned: upright`, not '{name}'."
        mistakes.add(node_at(node, "turned"), problem, "Turn it by {axis: ..., angle: ...}.")
    _check_joint_place(joint.at, node_at(node, "at"), joint.from_, model, node, mistakes)
    _check_joint_place(joint.in_child, node_at(node, "in_child"), joint.to, model, node, mistakes)


def _check_joint_place(
    place: Vector | str,
    node: Node,
    segment: str | None,
    model: ModelEntry,
    joint: Node,
    mistakes: Mistakes,
) -> None:
    if not isinstance(place, str) or segment is None:
        return
    if segment == LABORATORY:
        problem = f"the laboratory has no landmark '{place}'."
        mistakes.add(node, problem, "Write three numbers, in metres.")
    elif segment in model.segments and place not in model.segments[segment].landmarks:
        mistakes.add_unknown(node, "landmark", place, model.segments[segment].landmarks)


def _check_move(move: MoveEntry, node: Node, mistakes: Mistakes) -> None:
    written = node.entries
    if not isinstance(node.value, dict):
        return
    kinds = [kind for kind in ("rotate", "translate") if kind in written]
    if len(kinds) != 1:
        problem = "a move says `rotate` or `translate`, and one of them only."
        mistakes.add(node, problem, "Write an axis, such as `rotate: z`.")
    if "follows" in written:
        _check_following(node, mistakes)
        return
    if "coordinate" not in written:
        problem = "this move has neither a coordinate nor one that it follows."
        mistakes.add(node, problem, "Add `coordinate: NAME`, or `follows: NAME` and a function.")
    for key in ("polynomial", "spline", "between"):
        if key in written:
            problem = f"'{key}' stands in a move that follows nothing."
            mistakes.add(written[key], problem, "Add `follows: NAME`, or remove it.", key=True)


def _check_following(node: Node, mistakes: Mistakes) -> None:
    written = node.entries
    functions = [key for key in ("polynomial", "spline") if key in written]
    if len(functions) != 1:
        problem = "a move that follows has one function, a polynomial or a spline."
        mistakes.add(written["follows"], problem, "Write one, such as `polynomial: [0, 1]`.")
    for key in ("range", "rest", "rest_sd", "held"):
        if key in written:
            problem = f"'{key}' stands in a move that follows another coordinate."
            remedy = "Set it for the coordinate that is followed."
            mistakes.add(written[key], problem, remedy, key=True)
    if "between" in written and "polynomial" not in written:
        problem = "'between' belongs to a polynomial."
        remedy = "Remove it: a spline is linear outside its points."
        mistakes.add(written["between"], problem, remedy, key=True)
    points = written.get("spline")
    if points is not None and isinstance(points.value, list):
        _check_spline(points, mistakes)


def _check_spline(points: Node, mistakes: Mistakes) -> None:
    """Each point's first number is larger than the one before."""
    before: float | None = None
    for point in points.value if isinstance(points.value, list) else ():
        first = point.value[0].value if isinstance(point.value, list) and point.value else None
        if isinstance(first, bool) or not isinstance(first, int | float):
            return  # told as a wrong value
        if before is not None and not first > before:
            problem = f"the spline does not increase: {first:g} comes after {before:g}."
            mistakes.add(point, problem, "Sort its points by their first number, each once.")
            return
        before = first


def _check_reported_names(
    model: ModelEntry, declared: Mapping[str, Declared], tree: Node, mistakes: Mistakes
) -> None:
    """Reported angles, their sums and coordinates become columns of one table."""
    taken = dict.fromkeys(declared, "a coordinate")
    for angles, node in all_angles(model, tree):
        columns = list(angles.names or ())
        columns += [f"{columns[0]}_sum"] if columns else []
        for index, name in enumerate(columns):
            if name in taken:
                place = node_at(node, "names", min(index, 2) if index < 3 else 0)
                problem = f"the name '{name}' of a reported angle is taken by {taken[name]}."
                mistakes.add(place, problem, "Give each its own name.")
            taken[name] = "a reported angle" if index < 3 else "the sum of two reported angles"
        if angles.sequence is not None:
            _check_sequence(angles.sequence, node_at(node, "sequence"), mistakes)


def _check_sequence(sequence: tuple[str, str, str], node: Node, mistakes: Mistakes) -> None:
    letters = [axis.removeprefix("-") for axis in sequence]
    if letters[0] == letters[1] or letters[1] == letters[2]:
        problem = f"the sequence {', '.join(sequence)} turns twice in a row about one axis."
        mistakes.add(node, problem, "Neighbouring turns need different axes, such as [z, x, y].")


def _check_markers(model: ModelEntry, tree: Node, mistakes: Mistakes) -> None:
    for name, marker in model.markers.items():
        node = node_at(tree, "markers", name)
        if marker.segment is None:
            continue
        if marker.segment not in model.segments:
            place = node_at(node, "segment")
            mistakes.add_unknown(place, "segment", marker.segment, model.segments)
        elif isinstance(marker.at, str):
            segment = node_at(tree, "segments", marker.segment)
            _check_place(marker.at, node_at(node, "at"), marker.segment, segment, mistakes)
    for name in model.labels:
        if name not in model.markers:
            node = node_at(tree, "labels", name)
            mistakes.add_unknown(node, "marker", name, model.markers, key=True)


def _check_sizes(
    model: ModelEntry, declared: Mapping[str, Declared], tree: Node, mistakes: Mistakes
) -> None:
    check_splits(model.sizing.segments, model.segments, tree, mistakes)
    reported = {name for angles, _ in all_angles(model, tree) for name in angles.names or ()}
    for name in model.sizing.standing:
        if name not in declared and name not in reported:
            node = node_at(tree, "sizing", "standing", name)
            mistakes.add_unknown(node, "coordinate", name, {*declared, *reported}, key=True)
    for name in model.sizes:
        if name not in model.segments:
            node = node_at(tree, "sizes", name)
            mistakes.add_unknown(node, "segment", name, model.segments, key=True)
