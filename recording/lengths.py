"""Lengths that somebody measured with a tape: ``{thigh_right: 0.43}``, metres, in a small YAML file."""

from __future__ import annotations

from math import isfinite
from pathlib import Path

from ruamel.yaml.nodes import MappingNode, ScalarNode

from condyle.model.errors import Mistake, ModelError
from condyle.recording.small_yaml import compose, mistake

EXAMPLE = "write one line for each segment, such as `thigh_right: 0.43` (metres)"
LONGEST = 3.0
"""m; more is no length of a body, and mostly one in centimetres or millimetres."""


def read_lengths(path: Path) -> dict[str, float]:
    """Read LENGTHS.yaml: segment -> m.

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
        raise ModelError([mistake(path, root, "this is not a list of lengths", EXAMPLE)])
    mistakes: list[Mistake] = []
    result: dict[str, float] = {}
    for key, value in root.value:
        if not isinstance(key, ScalarNode) or not isinstance(value, ScalarNode):
            mistakes.append(mistake(path, key, "a segment has exactly one length", EXAMPLE))
            continue
        name, length = str(key.value).strip(), _number(value.value)
        if name in result:
            mistakes.append(
                mistake(path, key, f"'{name}' has a length already", "keep one of the two")
            )
        elif length is None or not 0 < length <= LONGEST:
            problem = f"'{value.value}' is no length of {name} in metres"
            mistakes.append(mistake(path, value, problem, EXAMPLE))
        else:
            result[name] = length
    if mistakes:
        raise ModelError(mistakes)
    return result


def _number(text: str) -> float | None:
    try:
        number = float(text)
    except ValueError:
        return None
    return number if isfinite(number) else None
