"""Freed joints: whose centre or axes calibration may move, and what it found of them.

Decided here: only a joint with moves has axes to turn, because the turn T of T M T^-1 would vanish
in a fixed joint and in the free orientation of a spherical or floating one; a floating joint has no
place to free either, since its position is a coordinate. What a base model frees of a joint falls away
where an extending file takes the joint out or makes it another kind: nobody there wrote it. A centre regression needs all four of
the pelvis' spines, and a centre that is clearly to one side, so that right and left are told apart.
"""

from __future__ import annotations

from collections.abc import Mapping
from math import radians

from condyle.model.joint_language import JointEntry
from condyle.model.language import REGRESSIONS, FreedJointEntry, ModelEntry
from condyle.model.skeleton import LABORATORY, FreedJoint, Vector
from condyle.model.tree import Mistakes, Node, node_at

SPINES = ("ASIS_right", "ASIS_left", "PSIS_right", "PSIS_left")
"""The landmarks of the pelvis (ISB, Wu et al. 2002) that the centre regressions start from."""


def without_idle_freedoms(tree: Node) -> Node:
    """The merged tree without what a base model frees of joints that are not there, or not so, any more."""
    sizing = tree.entries.get("sizing")
    freed = None if sizing is None else sizing.entries.get("joints")
    if sizing is None or freed is None or not freed.entries:
        return tree
    joints = tree.entries["joints"].entries if "joints" in tree.entries else {}
    kept = {}
    for name, entry in freed.entries.items():
        if entry.file != tree.file and entry.entries:
            entry = _still_meant(entry, joints.get(name), tree)
            if not entry.entries:
                continue
        kept[name] = entry
    inner = {**sizing.entries, "joints": freed.with_value(kept)}
    return tree.with_value({**tree.entries, "sizing": sizing.with_value(inner)})


def _still_meant(entry: Node, joint: Node | None, tree: Node) -> Node:
    """What an inherited entry can still free of its joint."""
    if joint is None:
        return entry.with_value({})
    idle = set()
    if "moves" not in joint.entries:
        idle.add("axis_sd")
    if "floating" in joint.entries:
        idle |= {"place_sd", "centre_from"}
    parent = joint.entries.get("from")
    landmarks = node_at(tree, "segments", str(parent.value if parent else ""), "landmarks").entries
    if not set(SPINES) <= set(landmarks):
        idle.add("centre_from")
    return entry.with_value(
        {k: v for k, v in entry.entries.items() if k not in idle or v.file == tree.file}
    )


def check_freed_joints(model: ModelEntry, tree: Node, mistakes: Mistakes) -> None:
    """Tell what is freed of joints that are not there or have nothing to free."""
    for name, freed in model.sizing.joints.items():
        node = node_at(tree, "sizing", "joints", name)
        if name not in model.joints:
            mistakes.add_unknown(node, "joint", name, model.joints, key=True)
            continue
        if not node.entries:
            problem = f"'{name}' is listed as a freed joint, but nothing of it is freed."
            remedy = "Add `place_sd`, `axis_sd` or `centre_from`, or remove it."
            mistakes.add(node, problem, remedy, key=True)
        _check_sense(name, ("place_sd", "axis_sd"), model.joints[name], node, mistakes)
        if freed.centre_from is not None:
            _check_regression(name, freed.centre_from, node, model, mistakes)
    for name, joint in model.joints.items():
        node = node_at(tree, "joints", name)
        _check_sense(name, ("placed", "axis_turn"), joint, node, mistakes)
        for key in ("placed", "axis_turn"):
            check_spread(key, node, mistakes)


def check_spread(key: str, node: Node, mistakes: Mistakes) -> None:
    """Tell an sd of something that is not there."""
    spread = f"{key}_sd"
    if spread in node.entries and key not in node.entries:
        problem = f"'{spread}' stands without '{key}'."
        mistakes.add(node.entries[spread], problem, f"Add `{key}`, or remove it.", key=True)


def freed_joints(entries: Mapping[str, FreedJointEntry]) -> dict[str, FreedJoint]:
    """The freed joints of a sound model, in metres and radians."""
    return {
        name: FreedJoint(
            place_sd=entry.place_sd,
            axis_sd=None if entry.axis_sd is None else radians(entry.axis_sd),
            centre_from=next((word for word in REGRESSIONS if word == entry.centre_from), None),
        )
        for name, entry in entries.items()
    }


def in_radians(vector: Vector | None) -> Vector | None:
    """Three angles of a file."""
    return None if vector is None else (radians(vector[0]), radians(vector[1]), radians(vector[2]))


def _check_sense(
    name: str, keys: tuple[str, str], joint: JointEntry, node: Node, mistakes: Mistakes
) -> None:
    """Tell a place of a joint that floats, and axes of a joint that has none."""
    place, axes = keys
    if joint.floating is not None and place in node.entries:
        problem = f"'{place}' does nothing for '{name}': a floating joint's place is its position."
        mistakes.add(node.entries[place], problem, "Remove it.", key=True)
    if (joint.floating or joint.spherical or joint.fixed) and axes in node.entries:
        problem = f"'{axes}' turns nothing: the joint '{name}' has no moves."
        mistakes.add(node.entries[axes], problem, "Remove it, or give the joint moves.", key=True)


def _check_regression(
    name: str, regression: str, node: Node, model: ModelEntry, mistakes: Mistakes
) -> None:
    place = node_at(node, "centre_from")
    if regression not in REGRESSIONS:
        mistakes.add_unknown(place, "published regression", regression, REGRESSIONS)
        return
    joint = model.joints[name]
    parent = model.segments.get(joint.from_ or "")
    if parent is None and joint.from_ != LABORATORY:
        return  # told as an unknown segment
    landmarks = {} if parent is None else parent.landmarks
    absent = [spine for spine in SPINES if spine not in landmarks]
    if absent:
        listed = ", ".join(absent)
        problem = f"{regression} needs landmarks that '{joint.from_}' does not have: {listed}."
        mistakes.add(place, problem, "Add them, or remove `centre_from`.")
        return
    centre = landmarks.get(joint.at) if isinstance(joint.at, str) else joint.at
    if centre is not None and centre[2] == 0.0:
        problem = f"{regression} cannot tell whether '{name}' is the right hip: its z is 0."
        mistakes.add(place, problem, "Give its `at` a z: above 0 on the right, below on the left.")
