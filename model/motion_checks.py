"""What of joints and their motions no single value shows: kinds, moves, functions, names of angles."""

from __future__ import annotations

from collections.abc import Mapping

from condyle.model.coordinates import Declared, all_angles, all_moves
from condyle.model.joint_language import JointEntry, MoveEntry
from condyle.model.language import ModelEntry
from condyle.model.places import check_place
from condyle.model.skeleton import LABORATORY
from condyle.model.tree import Mistakes, Node, node_at

MOTIONS = ("floating", "spherical", "moves", "fixed")


def check_motions(model: ModelEntry, tree: Node, mistakes: Mistakes) -> None:
    """Tell what is wrong within each joint and each move."""
    for name, joint in model.joints.items():
        _check_joint(name, joint, tree, mistakes)
    for move, node, _ in all_moves(model, tree):
        _check_move(move, node, mistakes)


def check_reported_names(
    model: ModelEntry, declared: Mapping[str, Declared], tree: Node, mistakes: Mistakes
) -> None:
    """Tell a name taken twice: angles, their sums and coordinates become columns of one table."""
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


def _check_joint(name: str, joint: JointEntry, tree: Node, mistakes: Mistakes) -> None:
    node = node_at(tree, "joints", name)
    _check_kind(name, node, mistakes)
    _check_root(name, joint, node, mistakes)
    if joint.spherical is not None and joint.spherical.twist is not None:
        _check_twist(name, joint.spherical.twist, node_at(node, "spherical", "twist"), mistakes)
    check_place(joint.at, node_at(node, "at"), joint.from_, tree, mistakes)
    check_place(joint.in_child, node_at(node, "in_child"), joint.to, tree, mistakes)


def _check_kind(name: str, node: Node, mistakes: Mistakes) -> None:
    written = [motion for motion in MOTIONS if motion in node.entries]
    if not written:
        problem = f"the joint '{name}' does not say how it moves."
        remedy = "Add one of `floating`, `spherical`, `moves`, `fixed: true`."
        mistakes.add(node, problem, remedy, key=True)
    elif len(written) > 1:
        problem = f"the joint '{name}' is both {' and '.join(written)}."
        remedy = f"Keep one. One of a base model is removed by null: `{written[0]}: null`."
        mistakes.add(node_at(node, written[-1]), problem, remedy, key=True)


def _check_root(name: str, joint: JointEntry, node: Node, mistakes: Mistakes) -> None:
    """Tell what only a joint from the laboratory can be, or a floating one cannot."""
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


def _check_twist(name: str, twist: tuple[float, float], node: Node, mistakes: Mistakes) -> None:
    """A fit starts from the zero posture, where nothing is twisted."""
    if not twist[0] <= 0.0 <= twist[1]:
        problem = f"the twist [{twist[0]:g}, {twist[1]:g}] of '{name}' excludes its rest, 0."
        remedy = "Widen it, or turn the joint's frame by `turned` until 0 lies within."
        mistakes.add(node, problem, remedy)


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


def _check_sequence(sequence: tuple[str, str, str], node: Node, mistakes: Mistakes) -> None:
    letters = [axis.removeprefix("-") for axis in sequence]
    if letters[0] == letters[1] or letters[1] == letters[2]:
        problem = f"the sequence {', '.join(sequence)} turns twice in a row about one axis."
        mistakes.add(node, problem, "Neighbouring turns need different axes, such as [z, x, y].")
