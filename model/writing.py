"""A sized model back to YAML: the whole language, readable, nothing left to look up elsewhere.

The numbers of the reference person stay as they were read; what calibration found stands beside
them under keys of its own (`sizes`, `placed`, `axis_turn`, `subject`, `labels`, `up`,
`calibration`), so a reader can see both. Meshes that live in another folder are copied beside the file.
"""

from __future__ import annotations

import shutil
from collections.abc import Iterable, Mapping, Sequence
from math import degrees, isfinite, isnan
from numbers import Integral, Real
from pathlib import Path
from typing import Any

from ruamel.yaml import YAML
from ruamel.yaml.comments import CommentedMap, CommentedSeq
from ruamel.yaml.scalarstring import DoubleQuotedScalarString

from condyle.model.reading import scalar_of
from condyle.model.skeleton import Joint, Person, Size, Vector
from condyle.model.value_kinds import LARGEST_NUMBER
from condyle.model.whole_files import cannot_write, whole_file

DECIMALS = 6
"""Micrometres, and millionths of a size factor: a hundredth of what any calibration can tell."""

LINE_WIDTH = 110
"""Characters; a move with its function fits."""

_HEADER = """\
A model sized to one person by Condyle. The numbers are those of the reference person; `sizes`, and
`placed` at the markers, make them this person's. A measuring aid, not a diagnosis."""

_FIRST = ("condyle", "name", "about", "sources", "person", "subject", "up")
_LAST = ("sizes", "labels", "calibration")
_NEW = ("subject", "up", "sizes", "labels", "calibration")

Placed = Mapping[str, tuple[Vector, Vector | None]]


def write_subject(
    path: str | Path,
    merged_tree: Mapping[str, object],
    *,
    sizes: Mapping[str, Size],
    placed: Placed,
    subject: Person | None,
    labels: Mapping[str, str],
    up: str | None,
    calibration: Mapping[str, object],
    joints: Iterable[Joint] = (),
) -> None:
    """Write a complete, sized model.

    Parameters
    ----------
    path : path
        The file to write; whole or not at all.
    merged_tree : mapping
        What :func:`condyle.model.loading.load_tree` gives. What an earlier calibration added
        to it is replaced.
    sizes : segment -> Size
    placed : marker -> (place, sd or None)
        m in the sized segment.
    subject : Person or None
        Stature (m) and mass (kg); NaN where unknown.
    labels : model marker name -> label in the recording
    up : str or None
        The laboratory axis that points up, such as ``+Y``.
    calibration : mapping
        Where the file comes from: plain values, kept as they are.
    joints : Joints
        Those that calibration freed: their `placed` and `axis_turn`, with the sds, are written.

    Raises
    ------
    CondyleError
        Where the file cannot be written.
    """
    tree: dict[str, Any] = {key: value for key, value in merged_tree.items() if key not in _NEW}
    tree["markers"] = _markers(_mapping(tree.get("markers")), placed)
    found = {joint.name: joint for joint in joints}
    tree["joints"] = _joints(_mapping(tree.get("joints")), found)
    tree["subject"] = _subject(subject)
    tree["up"] = up
    tree["sizes"] = {name: _size(size) for name, size in sizes.items()}
    tree["labels"] = dict(labels)
    tree["calibration"] = dict(calibration)
    tree["segments"] = _with_meshes_beside(_mapping(tree.get("segments")), Path(path))
    _dump(_ordered({key: value for key, value in tree.items() if value}), path)


def _mapping(value: object) -> dict[str, Any]:
    return dict(value) if isinstance(value, Mapping) else {}


def _ordered(tree: dict[str, Any]) -> dict[str, Any]:
    middle = [key for key in tree if key not in (*_FIRST, *_LAST)]
    return {key: tree[key] for key in (*_FIRST, *middle, *_LAST) if key in tree}


def _rounded(vector: Sequence[float], *, smallest: float = 0.0) -> list[float]:
    """Rounded to what can matter; an sd never to zero."""
    return [max(round(float(value), DECIMALS) + 0.0, smallest) for value in vector]


def _sd(vector: Sequence[float]) -> list[float]:
    return _rounded(vector, smallest=10.0**-DECIMALS)


def _size(size: Size) -> dict[str, list[float]]:
    factors = [round(float(value), DECIMALS) for value in size.factors]
    return {"factors": factors} if size.sd is None else {"factors": factors, "sd": _sd(size.sd)}


def _subject(subject: Person | None) -> dict[str, float]:
    if subject is None:
        return {}
    known = {"stature": float(subject.stature), "mass": float(subject.mass)}
    return {key: round(value, DECIMALS) for key, value in known.items() if not isnan(value)}


def _markers(markers: dict[str, Any], placed: Placed) -> dict[str, Any]:
    """The markers with their places; one that has none now loses that of an earlier file."""
    found: dict[str, Any] = {}
    for name, marker in markers.items():
        place, sd = placed.get(name, (None, None))
        found[name] = {**_without(marker, "placed"), **_estimate("placed", place, sd)}
    return found


def _joints(joints: dict[str, Any], freed: Mapping[str, Joint]) -> dict[str, Any]:
    """The joints with their places and turns; what an earlier file had of them is replaced."""
    found: dict[str, Any] = {}
    for name, entry in joints.items():
        found[name] = _without(_without(entry, "placed"), "axis_turn")
        if name in freed:
            joint = freed[name]
            found[name] |= _estimate("placed", joint.placed, joint.placed_sd)
            turn, turn_sd = _in_degrees(joint.axis_turn), _in_degrees(joint.axis_turn_sd)
            found[name] |= _estimate("axis_turn", turn, turn_sd)
    return found


def _without(entry: Mapping[str, Any], key: str) -> dict[str, Any]:
    return {name: value for name, value in entry.items() if name not in (key, f"{key}_sd")}


def _estimate(
    key: str, value: Sequence[float] | None, sd: Sequence[float] | None
) -> dict[str, list[float]]:
    """What calibration found, and its sd where there is one."""
    if value is None:
        return {}
    found = {key: [round(float(one), DECIMALS) + 0.0 for one in value]}
    if sd is not None and all(isfinite(one) for one in sd):
        found[f"{key}_sd"] = _sd(sd)
    return found


def _in_degrees(vector: Vector | None) -> list[float] | None:
    return None if vector is None else [degrees(angle) for angle in vector]


def _with_meshes_beside(segments: dict[str, Any], path: Path) -> dict[str, Any]:
    """Name each mesh from the file's own folder, copying those that live elsewhere."""
    found: dict[str, Any] = {}
    for name, segment in segments.items():
        shapes = [
            {**shape, "mesh": _mesh_beside(Path(shape["mesh"]), path)}
            for shape in segment.get("shapes", ())
        ]
        found[name] = {**segment, "shapes": shapes} if shapes else segment
    return found


def _mesh_beside(mesh: Path, path: Path) -> str:
    folder = path.resolve().parent
    if mesh.is_relative_to(folder):
        return mesh.relative_to(folder).as_posix()
    copies = folder / f"{path.stem}-meshes"
    try:
        copies.mkdir(exist_ok=True)
    except OSError as fault:
        raise cannot_write(copies, fault) from fault
    copy = copies / mesh.name
    number = 1
    while copy.exists() and copy.read_bytes() != mesh.read_bytes():
        number += 1
        copy = copies / f"{mesh.stem}-{number}{mesh.suffix}"
    with whole_file(copy) as beside:
        shutil.copyfile(mesh, beside)
    return copy.relative_to(folder).as_posix()


def _dump(tree: Mapping[str, Any], path: str | Path) -> None:
    yaml = YAML()
    yaml.width = LINE_WIDTH
    yaml.indent(mapping=2, sequence=4, offset=2)
    document = _for_yaml(tree, depth=0)
    document.yaml_set_start_comment(_HEADER)
    for key in list(document)[1:]:
        if isinstance(document[key], CommentedMap) and not document[key].fa.flow_style():
            document.yaml_set_comment_before_after_key(key, before="\n")
    with whole_file(path) as beside, beside.open("w", encoding="utf-8") as file:
        yaml.dump(document, file)


def _for_yaml(value: Any, *, depth: int) -> Any:
    """Plain values as the YAML library wants them: what fits a line in one line."""
    if isinstance(value, Mapping):
        entries = CommentedMap(
            {_quoted(str(key)): _for_yaml(one, depth=depth + 1) for key, one in value.items()}
        )
        is_section = depth <= 1 and any(isinstance(one, Mapping) for one in value.values())
        if depth > 0 and not is_section and _fits_a_line(value):
            entries.fa.set_flow_style()
        return entries
    if isinstance(value, list | tuple):
        items = CommentedSeq([_for_yaml(one, depth=depth + 1) for one in value])
        if _fits_a_line(value):
            items.fa.set_flow_style()
        return items
    return _scalar(value)


def _scalar(value: Any) -> Any:
    if isinstance(value, str):
        return _quoted(value)
    if value is None or isinstance(value, bool):
        return value
    if isinstance(value, Integral):
        return int(value)
    if isinstance(value, Real):
        number = float(value)
        is_whole = number.is_integer() and abs(number) < LARGEST_NUMBER
        return int(number) if is_whole else number
    return _quoted(str(value))


def _quoted(text: str) -> str:
    """Text that would be read as anything else gets quotes."""
    if text and isinstance(scalar_of(text), str) and text.isprintable():
        return text
    quoted: str = DoubleQuotedScalarString(text)
    return quoted


def _fits_a_line(value: Any) -> bool:
    return len(str(value)) < LINE_WIDTH - 30
