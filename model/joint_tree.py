"""The joints as one tree that grows from the laboratory: what breaks it, and its order."""

from __future__ import annotations

from collections.abc import Mapping
from heapq import heapify, heappop, heappush

from condyle.model.joint_language import JointEntry
from condyle.model.language import ModelEntry
from condyle.model.skeleton import LABORATORY
from condyle.model.tree import Mistakes, Node, node_at


def check_joint_tree(model: ModelEntry, tree: Node, mistakes: Mistakes) -> None:
    """Tell unknown segments, second parents, cycles, and segments that no joint reaches."""
    _check_ends(model, tree, mistakes)
    carrier = _carriers(model, tree, mistakes)
    if any(joint.from_ is None or joint.to is None for joint in model.joints.values()):
        return  # a joint with an end missing was told; the rest would follow from it
    _check_cycles(model, carrier, tree, mistakes)
    orphans = [name for name in model.segments if name not in carrier and name != LABORATORY]
    if not any(joint.from_ == LABORATORY for joint in model.joints.values()):
        begin = f" to '{orphans[0]}'" if orphans else ""
        problem = "no joint comes from the laboratory."
        remedy = f"Add a joint `from: laboratory`{begin}, for example a floating one."
        mistakes.add(node_at(tree, "joints"), problem, remedy, key=True)
        return
    for name in orphans:
        problem = f"no joint reaches the segment '{name}'."
        remedy = f"Add a joint `to: {name}`, or remove the segment."
        mistakes.add(node_at(tree, "segments", name), problem, remedy, key=True)


def joints_in_order(joints: Mapping[str, JointEntry]) -> list[str]:
    """The names of the joints of a sound tree, parents first, else as they are written."""
    place = {name: index for index, name in enumerate(joints)}
    names = list(joints)
    outward: dict[str | None, list[int]] = {}
    for name, joint in joints.items():
        outward.setdefault(joint.from_, []).append(place[name])
    ready = list(outward.get(LABORATORY, []))
    heapify(ready)
    order: list[str] = []
    while ready:
        name = names[heappop(ready)]
        order.append(name)
        for index in outward.get(joints[name].to, []):
            heappush(ready, index)
    return order


def _check_ends(model: ModelEntry, tree: Node, mistakes: Mistakes) -> None:
    for name, joint in model.joints.items():
        for key, end in (("from", joint.from_), ("to", joint.to)):
            node = node_at(tree, "joints", name, key)
            if key == "to" and end == LABORATORY:
                problem = f"the joint '{name}' cannot carry the laboratory, which stands still."
                mistakes.add(node, problem, "Exchange `from` and `to`.")
            elif end is not None and end not in model.segments and end != LABORATORY:
                mistakes.add_unknown(node, "segment", end, model.segments)


def _carriers(model: ModelEntry, tree: Node, mistakes: Mistakes) -> dict[str, str]:
    """The joint that carries each segment."""
    carrier: dict[str, str] = {}
    for name, joint in model.joints.items():
        if joint.to is None:
            continue
        if joint.to in carrier:
            problem = (
                f"a second parent for '{joint.to}': the joint '{carrier[joint.to]}' carries it."
            )
            remedy = "A segment hangs on one joint: remove one, or add a segment between."
            mistakes.add(node_at(tree, "joints", name, "to"), problem, remedy)
        else:
            carrier[joint.to] = name
    return carrier


def _check_cycles(
    model: ModelEntry, carrier: Mapping[str, str], tree: Node, mistakes: Mistakes
) -> None:
    """Follow every segment inward, once; coming back to the same walk is a cycle."""
    walked: set[str] = set()
    for start in carrier:
        walk: list[str] = []
        segment: str | None = start
        while segment is not None and segment in carrier and segment not in walked:
            walked.add(segment)
            walk.append(segment)
            segment = model.joints[carrier[segment]].from_
        if segment is not None and segment in walk:
            circle = walk[walk.index(segment) :]
            joints = sorted((carrier[one] for one in circle), key=list(model.joints).index)
            listed = ", ".join(f"'{name}'" for name in joints)
            problem = f"the joints lead round in a circle: {listed}."
            remedy = "Let one of its segments hang on the laboratory, or outside the circle."
            mistakes.add(node_at(tree, "joints", joints[0]), problem, remedy, key=True)
