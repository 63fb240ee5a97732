"""Small YAML files that a person writes by hand, read so that every mistake has its line."""

from __future__ import annotations

from pathlib import Path

from ruamel.yaml import YAML
from ruamel.yaml.error import MarkedYAMLError, YAMLError
from ruamel.yaml.nodes import Node, ScalarNode

from condyle.model.errors import Mistake, ModelError

LARGEST_FILE = 1_000_000
"""Bytes; a map of a thousand markers takes 50 000."""


def is_null(node: ScalarNode) -> bool:
    """Whether a plain scalar means nothing at all."""
    return node.style is None and node.value in ("", "~", "null", "Null", "NULL")


def compose(path: Path, example: str) -> Node | None:
    """The file as YAML nodes: nothing is constructed, so no tag can do harm.

    Parameters
    ----------
    example : str
        What a right file looks like, for what is said of a wrong one.

    Raises
    ------
    ModelError
        If the file cannot be read, or is no YAML.
    """
    try:
        if path.is_file() and path.stat().st_size > LARGEST_FILE:
            raise at_line(path, 1, "this is far too large for a list of names", example)
        text = path.read_text(encoding="utf-8")
    except OSError as error:
        why = error.strerror or str(error)
        raise at_line(path, 1, f"cannot be read ({why})", "check the path") from error
    except UnicodeDecodeError as error:
        raise at_line(path, 1, "this is not UTF-8 text", example) from error
    try:
        node: Node | None = YAML(typ="safe", pure=True).compose(text)
    except MarkedYAMLError as error:
        mark = error.problem_mark or error.context_mark
        line = mark.line + 1 if mark else 1
        raise at_line(path, line, f"not YAML: {error.problem or error.context}", example) from error
    except (YAMLError, RecursionError) as error:
        raise at_line(path, 1, "not YAML", example) from error
    return node


def mistake(path: Path, node: Node, problem: str, remedy: str) -> Mistake:
    """A mistake at the line of a node."""
    line = node.start_mark.line + 1
    return Mistake(str(path), line, f"{problem}.", f"{remedy[0].upper()}{remedy[1:]}.")


def at_line(path: Path, line: int, problem: str, remedy: str) -> ModelError:
    """The error of a file with one mistake."""
    return ModelError(
        [Mistake(str(path), line, f"{problem}.", f"{remedy[0].upper()}{remedy[1:]}.")]
    )
