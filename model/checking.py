"""The cross checks: what no single value shows, because it lies between two of them.

They run on what is sound of a model after the vocabulary's checks, and ask the tree, not the
values, whether something was written at all; so one slip is told once, at its own line.
"""

from __future__ import annotations

from collections.abc import Mapping

from condyle.model.coordinates import Declared, all_angles, declared_coordinates
from condyle.model.freed_joints import check_freed_joints, check_spread
from condyle.model.joint_tree import check_joint_tree
from condyle.model.language import ModelEntry
from condyle.model.motion_checks import check_motions, check_reported_names
from condyle.model.places import check_place
from condyle.model.segment_checks import check_segments
from condyle.model.sizing_groups import check_splits
from condyle.model.tree import Mistakes, Node, node_at
from condyle.model.tying import check_ties


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
    check_segments(model, tree, mistakes)
    check_joint_tree(model, tree, mistakes)
    check_motions(model, tree, mistakes)
    declared = declared_coordinates(model, tree, mistakes)
    check_reported_names(model, declared, tree, mistakes)
    _check_markers(model, tree, mistakes)
    check_ties(model, tree, mistakes)
    _check_sizes(model, declared, tree, mistakes)
    check_freed_joints(model, tree, mistakes)
    return declared


def _check_markers(model: ModelEntry, tree: Node, mistakes: Mistakes) -> None:
    for name, marker in model.markers.items():
        node = node_at(tree, "markers", name)
        check_spread("placed", node, mistakes)
        if marker.segment is None:
            continue
        if marker.segment not in model.segments:
            place = node_at(node, "segment")
            mistakes.add_unknown(place, "segment", marker.segment, model.segments)
        else:
            check_place(marker.at, node_at(node, "at"), marker.segment, tree, mistakes)
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
