"""Places that a file gives as three numbers or as the name of a landmark: checked, then resolved."""

from __future__ import annotations

from condyle.model.language import ModelEntry
from condyle.model.skeleton import LABORATORY, Vector
from condyle.model.tree import Mistakes, Node, node_at


def check_place(
    place: Vector | str | None, node: Node, segment: str | None, tree: Node, mistakes: Mistakes
) -> None:
    """Tell a landmark that its segment does not have.

    Parameters
    ----------
    place : Vector, str or None
        As written; three numbers are always sound.
    node : Node
        Where it was written.
    segment : str or None
        The segment it is on, or ``laboratory``; one that is unknown is told elsewhere.
    tree : Node
        The whole merged tree.
    """
    if not isinstance(place, str) or segment is None:
        return
    if segment == LABORATORY:
        problem = f"the laboratory has no landmark '{place}'."
        mistakes.add(node, problem, "Write three numbers, in metres.")
        return
    segments = node_at(tree, "segments").entries
    if segment not in segments:
        return
    landmarks = segments[segment].entries.get("landmarks")
    known = {} if landmarks is None else landmarks.entries
    if place not in known:
        mistakes.add_unknown(node, "landmark", place, known)


def resolved(place: Vector | str, segment: str, model: ModelEntry) -> Vector:
    """A sound place as three numbers, m in its segment."""
    return model.segments[segment].landmarks[place] if isinstance(place, str) else place
