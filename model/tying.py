"""Ties: loops and contacts, from the file's words to a checked :class:`Tie`.

Decided here: a tie joins two different frames, since two points of one rigid body keep their
distance anyway; either may be the laboratory, whose places are numbers in the frame as recorded.
The distance of `stays` lies between two bodies and belongs to neither, so growth leaves it alone: a rod
that should grow is a segment of its own, tied at both ends by `meets`.
"""

from __future__ import annotations

from condyle.model.language import ModelEntry, TieEntry
from condyle.model.places import check_place, resolved
from condyle.model.skeleton import (
    LABORATORY,
    MeetsPoint,
    OnEllipsoid,
    OnPlane,
    StaysAt,
    Tie,
    Vector,
)
from condyle.model.tree import Mistakes, Node, node_at

KINDS = ("meets", "on_plane", "on_ellipsoid", "stays")


def check_ties(model: ModelEntry, tree: Node, mistakes: Mistakes) -> None:
    """Tell ties of no kind or of two, unknown segments and landmarks, and ties that tie nothing."""
    for name, tie in model.ties.items():
        node = node_at(tree, "ties", name)
        _check_kind(name, node, mistakes)
        first = _check_point(tie.point, node_at(node, "point"), model, tree, mistakes)
        for kind in KINDS:
            if kind in node.entries:
                second = _check_other_end(tie, kind, node_at(node, kind), model, tree, mistakes)
                if first is not None and first == second:
                    problem = f"the tie '{name}' joins '{first}' with itself, which ties nothing."
                    mistakes.add(node_at(node, kind), problem, "Name two different segments.")


def built_ties(model: ModelEntry) -> tuple[Tie, ...]:
    """The ties of a sound model, in the order of the file."""
    return tuple(_tie(name, entry, model) for name, entry in model.ties.items())


def _check_kind(name: str, node: Node, mistakes: Mistakes) -> None:
    written = [kind for kind in KINDS if kind in node.entries]
    if not written:
        problem = f"the tie '{name}' does not say what its point keeps to."
        remedy = "Add one of `meets`, `on_plane`, `on_ellipsoid`, `stays`."
        mistakes.add(node, problem, remedy, key=True)
    elif len(written) > 1:
        problem = f"the tie '{name}' is of several kinds: {' and '.join(written)}."
        remedy = f"Keep one, or write two ties. A base model's is removed by `{written[0]}: null`."
        mistakes.add(node_at(node, written[-1]), problem, remedy, key=True)


def _check_other_end(
    tie: TieEntry, kind: str, node: Node, model: ModelEntry, tree: Node, mistakes: Mistakes
) -> str | None:
    """Check what the point keeps to; the segment it is on, where that is sound."""
    if kind == "meets":
        return _check_point(tie.meets, node, model, tree, mistakes)
    if kind == "stays":
        end = None if tie.stays is None else tie.stays.from_
        return _check_point(end, node_at(node, "from"), model, tree, mistakes)
    surface = tie.on_plane if kind == "on_plane" else tie.on_ellipsoid
    if surface is None:
        return None
    word = "through" if kind == "on_plane" else "centre"
    place = getattr(surface, word)
    check_place(place, node_at(node, word), surface.of, tree, mistakes)
    return _check_segment(surface.of, node_at(node, "of"), model, mistakes)


def _check_point(
    point: tuple[str, Vector | str] | None,
    node: Node,
    model: ModelEntry,
    tree: Node,
    mistakes: Mistakes,
) -> str | None:
    if point is None:
        return None
    check_place(point[1], node_at(node, 1), point[0], tree, mistakes)
    return _check_segment(point[0], node_at(node, 0), model, mistakes)


def _check_segment(
    name: str | None, node: Node, model: ModelEntry, mistakes: Mistakes
) -> str | None:
    if name is None or name == LABORATORY or name in model.segments:
        return name
    mistakes.add_unknown(node, "segment", name, [*model.segments, LABORATORY])
    return None


def _tie(name: str, entry: TieEntry, model: ModelEntry) -> Tie:
    if entry.point is None:
        raise AssertionError("a tie without its point passed the checks")
    segment, place = entry.point
    return Tie(name, segment, resolved(place, segment, model), _kind(entry, model), entry.sd)


def _kind(entry: TieEntry, model: ModelEntry) -> MeetsPoint | OnPlane | OnEllipsoid | StaysAt:
    if entry.meets is not None:
        segment, place = entry.meets
        return MeetsPoint(segment, resolved(place, segment, model))
    plane, ellipsoid, stays = entry.on_plane, entry.on_ellipsoid, entry.stays
    if plane is not None and plane.of and plane.through is not None and plane.normal is not None:
        return OnPlane(plane.of, resolved(plane.through, plane.of, model), plane.normal)
    if ellipsoid is not None and ellipsoid.of and ellipsoid.centre and ellipsoid.radii:
        centre = resolved(ellipsoid.centre, ellipsoid.of, model)
        return OnEllipsoid(ellipsoid.of, centre, ellipsoid.radii)
    if stays is not None and stays.from_ is not None and stays.distance is not None:
        segment, place = stays.from_
        return StaysAt(segment, resolved(place, segment, model), stays.distance)
    raise AssertionError("a tie without its kind passed the checks")
