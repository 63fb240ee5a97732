"""Which coordinates the joints declare, what the file then changes of them, who follows whom.

Decided here: a coordinate may drive several moves of one unit, and its range, rest, rest_sd and
held value may be stated at one of them (or equally at several); the `coordinates` section wins
over all of them. A following coordinate has a value and nothing else.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass, field
from math import inf, radians
from typing import Literal

from condyle.model.joint_language import Angles, MoveEntry
from condyle.model.language import CoordinateEntry, ModelEntry
from condyle.model.skeleton import Coordinate
from condyle.model.tree import Mistakes, Node, node_at

Unit = Literal["rad", "m"]

SETTINGS = ("range", "rest", "rest_sd", "held")


@dataclass(slots=True)
class Declared:
    """A coordinate as the file has it, in degrees or metres.

    Attributes
    ----------
    node : Node
        Where it was named first.
    settings : range, rest, rest_sd, held -> value
    nodes : setting -> where it was written
    """

    name: str
    unit: Unit
    node: Node
    follows: str | None = None
    settings: dict[str, object] = field(default_factory=dict)
    nodes: dict[str, Node] = field(default_factory=dict)


def all_moves(model: ModelEntry, tree: Node) -> Iterator[tuple[MoveEntry, Node, str]]:
    """Every move with its node and its joint's name, in the order of the file."""
    for name, joint in model.joints.items():
        for index, move in enumerate(joint.moves or ()):
            yield move, node_at(tree, "joints", name, "moves", index), name


def all_angles(model: ModelEntry, tree: Node) -> Iterator[tuple[Angles, Node]]:
    """Every report of an orientation, with its node."""
    for name, joint in model.joints.items():
        for kind in ("floating", "spherical"):
            motion = getattr(joint, kind)
            if motion is not None and motion.angles is not None:
                yield motion.angles, node_at(tree, "joints", name, kind, "angles")


def declared_coordinates(model: ModelEntry, tree: Node, mistakes: Mistakes) -> dict[str, Declared]:
    """Collect the coordinates of a model, by name, in the order of the file.

    Parameters
    ----------
    model : ModelEntry
        What is sound of the model.
    tree : Node
        The tree it was read from.
    mistakes : Mistakes
        Gets what contradicts itself, ranges that exclude their rest, and circles of `follows`.
    """
    found: dict[str, Declared] = {}
    for name, joint in model.joints.items():
        for index, axis_name in enumerate((joint.floating and joint.floating.position) or ()):
            node = node_at(tree, "joints", name, "floating", "position", index)
            if axis_name in found:
                problem = f"the name '{axis_name}' is taken by another coordinate."
                mistakes.add(node, problem, "Give each coordinate its own name.")
            found.setdefault(axis_name, Declared(axis_name, "m", node))
        for index, move in enumerate(joint.moves or ()):
            if move.coordinate is not None:
                node = node_at(tree, "joints", name, "moves", index)
                _declare(move.coordinate, move, node, found, mistakes)
    _override(model, tree, found, mistakes)
    for coordinate in found.values():
        _check_rest(coordinate, mistakes)
    _check_circles(model, tree, found, mistakes)
    return found


def _declare(
    name: str, move: MoveEntry, node: Node, found: dict[str, Declared], mistakes: Mistakes
) -> None:
    unit: Unit = "m" if move.translate is not None else "rad"
    place = node.entries.get("coordinate", node)
    first = found.get(name)
    if first is None:
        first = found[name] = Declared(name, unit, place, move.follows)
    elif first.follows is not None or move.follows is not None:
        problem = f"'{name}' follows another coordinate, so it can name one move only."
        remedy = f"Let this move follow it: `follows: {name}, polynomial: [0, 1]`."
        mistakes.add(place, problem, remedy)
        return
    elif first.unit != unit:
        problem = f"'{name}' both rotates and translates."
        mistakes.add(place, problem, "Use two coordinates, or let one follow the other.")
        return
    for key in SETTINGS:
        value = getattr(move, key)
        if value is None:
            continue
        if first.settings.setdefault(key, value) != value:
            problem = f"the {key} of '{name}' is stated a second time, and differs."
            mistakes.add(node_at(node, key), problem, "State it once.")
        first.nodes.setdefault(key, node_at(node, key))


def _override(
    model: ModelEntry, tree: Node, found: Mapping[str, Declared], mistakes: Mistakes
) -> None:
    """Lay the `coordinates` section over what the joints say."""
    reported = {name for angles, _ in all_angles(model, tree) for name in angles.names or ()}
    for name, entry in model.coordinates.items():
        node = node_at(tree, "coordinates", name)
        if name in reported:
            problem = f"'{name}' is a reported angle and takes no range, rest or held."
            remedy = "Use three rotating moves for the joint, each with its coordinate."
            mistakes.add(node, problem, remedy, key=True)
        elif name not in found:
            mistakes.add_unknown(node, "coordinate", name, found, key=True)
        elif found[name].follows is not None:
            problem = f"'{name}' follows '{found[name].follows}' and takes no range, rest or held."
            mistakes.add(node, problem, "Set them for the coordinate that it follows.", key=True)
        else:
            _override_one(found[name], entry, node)


def _override_one(coordinate: Declared, entry: CoordinateEntry, node: Node) -> None:
    for key in SETTINGS:
        value = getattr(entry, key)
        if value is not None:
            coordinate.settings[key] = value
            coordinate.nodes[key] = node_at(node, key)


def _check_rest(coordinate: Declared, mistakes: Mistakes) -> None:
    limits, rest = coordinate.settings.get("range"), coordinate.settings.get("rest")
    if not isinstance(limits, tuple) or not isinstance(rest, float):
        return
    if not limits[0] <= rest <= limits[1]:
        shown = f"[{limits[0]:g}, {limits[1]:g}]"
        problem = f"the range {shown} of '{coordinate.name}' excludes its rest, {rest:g}."
        remedy = "Change one of them; without a rest, the middle of such a range is taken."
        mistakes.add(coordinate.nodes["range"], problem, remedy)


def _check_circles(
    model: ModelEntry, tree: Node, found: Mapping[str, Declared], mistakes: Mistakes
) -> None:
    """Tell unknown names in `follows`, and coordinates that follow each other in a circle."""
    reported = {name for angles, _ in all_angles(model, tree) for name in angles.names or ()}
    for move, node, _ in all_moves(model, tree):
        place = node_at(node, "follows")
        if move.follows is None or move.follows in found:
            continue
        if move.follows in reported:
            problem = f"'{move.follows}' is a reported angle; nothing can follow it."
            mistakes.add(place, problem, "Use three rotating moves for that joint.")
        else:
            mistakes.add_unknown(place, "coordinate", move.follows, found)
    settled: set[str] = set()
    for start in found:
        walk: list[str] = []
        name: str | None = start
        while name is not None and name in found and name not in settled:
            settled.add(name)
            walk.append(name)
            name = found[name].follows
        if name is not None and name in walk:
            circle = walk[walk.index(name) :]
            listed = " follows ".join(f"'{one}'" for one in [*circle, circle[0]])
            remedy = "Let one of them be free: remove its `follows`."
            mistakes.add(found[circle[0]].node, f"a circle: {listed}.", remedy)


def finished(declared: Declared) -> Coordinate:
    """A coordinate in SI and radians, its defaults filled in."""
    to_si = radians if declared.unit == "rad" else float
    limits, rest = declared.settings.get("range"), declared.settings.get("rest")
    rest_sd, held = declared.settings.get("rest_sd"), declared.settings.get("held")
    lower, upper = -inf, inf
    if isinstance(limits, tuple):
        lower, upper = to_si(limits[0]), to_si(limits[1])
    default = 0.0 if lower <= 0.0 <= upper else (lower + upper) / 2
    return Coordinate(
        name=declared.name,
        unit=declared.unit,
        lower=lower,
        upper=upper,
        rest=to_si(rest) if isinstance(rest, float) else default,
        rest_sd=to_si(rest_sd) if isinstance(rest_sd, float) else None,
        held=to_si(held) if isinstance(held, float) else None,
        follows=declared.follows,
    )
