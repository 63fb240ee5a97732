"""Which column of a recording belongs to which marker of a model.

A map that the user wrote wins; every other marker matches by equal name, case and a prefix before
a colon aside.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path

from ruamel.yaml import YAML
from ruamel.yaml.nodes import MappingNode, ScalarNode

from condyle.model.errors import Mistake, ModelError
from condyle.model.whole_files import whole_file
from condyle.recording.point_names import split_prefix
from condyle.recording.small_yaml import compose, is_null, mistake

EXAMPLE = "write one 'model marker name: label in the recording' a line"


@dataclass(frozen=True, slots=True)
class LabelMatch:
    """How a model's markers and a recording's labels meet.

    Attributes
    ----------
    columns : marker name -> column of the recording or None
        In the order of the model's markers.
    missing : model markers without a label
    unknown : labels that belong to no marker
    """

    columns: Mapping[str, int | None]
    missing: tuple[str, ...]
    unknown: tuple[str, ...]


def match_labels(
    wanted: Sequence[str], recording_labels: Sequence[str], label_map: Mapping[str, str]
) -> LabelMatch:
    """Find each model marker's column.

    Parameters
    ----------
    wanted : model marker names
    recording_labels : (markers,) str
    label_map : model marker name -> label
        A listed label that the recording lacks is missing: it falls back on nothing. A label that
        the map gives to one marker is not given to another by its name.
    """
    columns: dict[str, int | None] = {}
    given = {
        marker: find_label(label_map[marker], recording_labels, frozenset())
        for marker in wanted
        if marker in label_map
    }
    taken = frozenset(column for column in given.values() if column is not None)
    for marker in wanted:
        if marker in given:
            columns[marker] = given[marker]
        else:
            columns[marker] = find_label(marker, recording_labels, taken)
    used = set(columns.values())
    return LabelMatch(
        columns=columns,
        missing=tuple(marker for marker, column in columns.items() if column is None),
        unknown=tuple(name for i, name in enumerate(recording_labels) if i not in used),
    )


def find_label(name: str, labels: Sequence[str], taken: frozenset[int]) -> int | None:
    """The column of the label most like `name`: alike to the letter, but for case, but for prefix."""
    bare = split_prefix(name)[1]
    alike = (
        lambda label: label == name,
        lambda label: label.casefold() == name.casefold(),
        lambda label: label.casefold() == bare.casefold(),
        lambda label: split_prefix(label)[1].casefold() == bare.casefold(),
    )
    free = [(column, label) for column, label in enumerate(labels) if column not in taken]
    for same in alike:
        for column, label in free:
            if same(label):
                return column
    return None


def read_label_map(path: Path) -> dict[str, str]:
    """Read MAP.yaml: ``{model marker name: label in the recording}``, YAML 1.2.

    Raises
    ------
    ModelError
        With every mistake, its file and line.
    """
    path = Path(path)
    root = compose(path, EXAMPLE)
    if root is None:
        return {}
    if not isinstance(root, MappingNode):
        raise ModelError([mistake(path, root, "this is not a map of marker names", EXAMPLE)])
    mistakes: list[Mistake] = []
    result: dict[str, str] = {}
    lines: dict[str, int] = {}
    for key, value in root.value:
        if not isinstance(key, ScalarNode) or not isinstance(value, ScalarNode):
            mistakes.append(mistake(path, key, "a marker has exactly one label", EXAMPLE))
            continue
        name, label = str(key.value).strip(), str(value.value).strip()
        if name in result:
            problem = f"'{name}' has a label already, on line {lines[name]}"
            mistakes.append(mistake(path, key, problem, "keep one of the two"))
        elif not name or not label or is_null(value):
            problem = f"'{name}' has no label"
            mistakes.append(mistake(path, key, problem, "write its label, or remove the line"))
        else:
            result[name], lines[name] = label, key.start_mark.line + 1
    twice = {label for label in result.values() if list(result.values()).count(label) > 1}
    for name, label in result.items():
        if label in twice:
            problem = f"the label '{label}' is given to more than one marker"
            mistakes.append(Mistake(str(path), lines[name], f"{problem}.", "Keep one of them."))
    if mistakes:
        raise ModelError(mistakes)
    return result


def write_label_map(path: Path, labels: Mapping[str, str]) -> None:
    """Write MAP.yaml, one marker a line, whole or not at all."""
    yaml = YAML()
    with whole_file(path) as beside, beside.open("w", encoding="utf-8") as file:
        file.write("# model marker: label in the recording\n")
        yaml.dump(dict(labels), file)
