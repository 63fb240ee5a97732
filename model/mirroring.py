"""`mirror`: the left side of a body from its right side, once, after merging.

The mirror plane is z = 0 of the upright body (ISB: Z to the right), the same in every segment
because all axes are parallel in the reference posture. A place or a translation is a polar
vector: z changes sign. A rotation axis is an axial vector: x and y change sign, so that a
coordinate of the same value is the mirrored posture and keeps its clinical meaning. The twist of a
spherical joint counts about -y in a twin: told about +y, its range is negated and turned round.

Decided here:

- The twins follow all written entries of their section, so that one side stays together.
- In a twin, names that end in either suffix are exchanged: what the right side calls its
  opposite is, seen from the left, the right.
- An entry written out, `null` too, keeps its twin from being made: it stands as it is written.
- Landmarks of a segment without the suffix are mirrored one by one. Labels, the subject and texts
  are not touched.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace

from condyle.model.tree import Mistakes, Node

_SECTIONS = ("segments", "joints", "coordinates", "markers", "ties", "sizes")
_SIZING_SECTIONS = ("segments", "joints", "standing")

_NAMES = frozenset(("from", "to", "segment", "coordinate", "follows", "with", "of"))
_NAME_LISTS = frozenset(("names", "position"))
_POINTS = frozenset(("point", "meets", "from"))
_POLAR = frozenset(
    (
        "at",
        "in_child",
        "centre_of_mass",
        "length",
        "translate",
        "placed",
        "through",
        "centre",
        "normal",
    )
)
_AXIAL = frozenset(("rotate", "axis", "sequence", "axis_turn"))
_NEVER_LANDMARKS = _AXIAL | {"translate", "normal"}

Suffixes = Mapping[str, str]


def mirrored(tree: Node, mistakes: Mistakes) -> Node:
    """Add the twins that the model's `mirror` asks for.

    Parameters
    ----------
    tree : Node
        A merged tree.
    mistakes : Mistakes
        Gets what is wrong with the suffixes.

    Returns
    -------
    Node
        The tree with its twins.
    """
    suffixes = _suffixes(tree, mistakes)
    entries = dict(tree.entries)
    for key in _SECTIONS:
        if key in entries:
            entries[key] = _doubled(entries[key], key, suffixes)
    if isinstance(sizing := entries.get("sizing"), Node) and isinstance(sizing.value, dict):
        inner = {
            key: _doubled(node, key, suffixes) if key in _SIZING_SECTIONS else node
            for key, node in sizing.value.items()
        }
        entries["sizing"] = sizing.with_value(inner)
    return tree.with_value(entries)


def _suffixes(tree: Node, mistakes: Mistakes) -> Suffixes:
    """The sound pairs of suffixes: no ending stands in two of them."""
    node = tree.entries.get("mirror")
    pairs: dict[str, str] = {}
    for suffix, twin in (node.entries if node is not None else {}).items():
        if not isinstance(twin.value, str):
            continue  # told with the other wrong values
        used = {*pairs, *pairs.values()}
        if not suffix or not twin.value or suffix == twin.value or used & {suffix, twin.value}:
            remedy = "Write pairs of different endings, such as {_right: _left}."
            mistakes.add(twin, f"'{suffix}: {twin.value}' is no pair of endings.", remedy)
        else:
            pairs[suffix] = twin.value
    return pairs


def _doubled(section: Node, key: str, suffixes: Suffixes) -> Node:
    """A section with the twins of its entries."""
    if not isinstance(section.value, dict) or not suffixes:
        return section
    entries: dict[str, Node] = {}
    twins: dict[str, Node] = {}
    for name, node in section.value.items():
        twin_name = _swapped_end(name, suffixes)
        if node.value is None:
            if not _stops_a_twin(name, section.value, suffixes):
                entries[name] = node
        elif twin_name is None:
            entries[name] = _with_landmark_twins(node, suffixes) if key == "segments" else node
        else:
            entries[name] = node
            if twin_name not in section.value:
                twins[twin_name] = _twin(node, key, suffixes)
    return section.with_value({**entries, **twins})


def _stops_a_twin(name: str, section: Mapping[str, Node], suffixes: Suffixes) -> bool:
    """Whether a null stands where the mirror would make an entry."""
    backwards = {twin: suffix for suffix, twin in suffixes.items()}
    original = section.get(_swapped_end(name, backwards) or "")
    return original is not None and original.value is not None


def _with_landmark_twins(segment: Node, suffixes: Suffixes) -> Node:
    landmarks = segment.entries.get("landmarks")
    if landmarks is None:
        return segment
    doubled = _doubled(landmarks, "at", suffixes)
    return segment.with_value({**segment.entries, "landmarks": doubled})


def _swapped_end(name: str, suffixes: Suffixes) -> str | None:
    """The twin's name of a name that ends in a suffix of the mirror."""
    for suffix in sorted(suffixes, key=len, reverse=True):
        if name.endswith(suffix):
            return name[: -len(suffix)] + suffixes[suffix]
    return None


def _exchanged(name: str, suffixes: Suffixes) -> str:
    """The name on the other side, whichever side it names."""
    both = {**{twin: suffix for suffix, twin in suffixes.items()}, **suffixes}
    return _swapped_end(name, both) or name


def _twin(node: Node, key: str, suffixes: Suffixes) -> Node:
    """The mirror image of what stands under `key`."""
    value = node.value
    if isinstance(value, dict):
        return _twin_mapping(node, key, suffixes)
    if key in _AXIAL or key in _POLAR:
        return _twin_vector(node, key, suffixes)
    if key in _POINTS and isinstance(value, list) and len(value) == 2:
        return replace(node, value=_twin_point(value, suffixes), twin=True)
    if key == "twist" and isinstance(value, list):
        return replace(node, value=[_negated(child) for child in reversed(value)], twin=True)
    if isinstance(value, list):
        inner = "names" if key in _NAME_LISTS else "each"
        return replace(node, value=[_twin(child, inner, suffixes) for child in value], twin=True)
    if isinstance(value, str) and (key in _NAMES or key in _NAME_LISTS):
        return replace(node, value=_exchanged(value, suffixes), twin=True)
    return replace(node, twin=True)


def _twin_mapping(node: Node, key: str, suffixes: Suffixes) -> Node:
    entries: dict[str, Node] = {}
    for name, child in node.entries.items():
        if key == "landmarks":
            entries[_exchanged(name, suffixes)] = _twin(child, "at", suffixes)
        else:
            entries[name] = _twin(child, name, suffixes)
    if "mesh" in entries:
        was = node.entries.get("reflected")
        mesh = entries["mesh"]
        entries["reflected"] = replace(mesh, value=not (was is not None and was.value is True))
    return replace(node, value=entries, twin=True)


def _twin_point(point: list[Node], suffixes: Suffixes) -> list[Node]:
    """The mirror image of a segment and a place on it, as ties name them."""
    return [_twin(point[0], "segment", suffixes), _twin(point[1], "at", suffixes)]


def _twin_vector(node: Node, key: str, suffixes: Suffixes) -> Node:
    """The mirror image of an axis, a place, the name of a landmark, or a list of such."""
    value = node.value
    if isinstance(value, str):
        is_axis = key in _NEVER_LANDMARKS
        other = _twin_axis(value, key) if is_axis else _exchanged(value, suffixes)
        return replace(node, value=other, twin=True)
    if not isinstance(value, list):
        return replace(node, twin=True)
    if len(value) == 3 and all(_is_number(child) for child in value):
        changed = (0, 1) if key in _AXIAL else (2,)
        items = [_negated(child) if i in changed else child for i, child in enumerate(value)]
        return replace(node, value=[replace(child, twin=True) for child in items], twin=True)
    return replace(node, value=[_twin(child, key, suffixes) for child in value], twin=True)


def _twin_axis(letter: str, key: str) -> str:
    """The mirror image of an axis given as x, y, z, -x, -y or -z."""
    bare = letter.removeprefix("-")
    changes = bare in (("x", "y") if key in _AXIAL else ("z",))
    if not changes:
        return letter
    return bare if letter.startswith("-") else f"-{letter}"


def _is_number(node: Node) -> bool:
    return isinstance(node.value, int | float) and not isinstance(node.value, bool)


def _negated(node: Node) -> Node:
    return node.with_value(0 - node.value) if isinstance(node.value, int | float) else node
