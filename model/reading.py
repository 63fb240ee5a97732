"""YAML text to a tree that remembers its lines, and nothing that a model file has no use for.

The parser of ruamel.yaml gives events; this file alone decides what they become: the core schema
of YAML 1.2.2 (https://yaml.org/spec/1.2.2/, section 10.3), in which `on`, `yes` and `y` are
plain words. Keys are text as written. Tags, which could construct objects, are refused; aliases
are copied, and the copies are counted, so that a small file cannot become a huge tree.
"""

from __future__ import annotations

import re
from collections.abc import Iterator
from dataclasses import dataclass, field, replace
from importlib.resources.abc import Traversable
from pathlib import Path
from typing import Any

from ruamel.yaml import YAML
from ruamel.yaml.error import MarkedYAMLError, YAMLError
from ruamel.yaml.reader import ReaderError

from condyle.model.tree import Mistakes, Node, Scalar

LARGEST_FILE = 10_000_000
"""Bytes. A full-body model with its comments takes about 50 000."""

MOST_VALUES = 100_000
"""Values in one file, aliases counted as often as they are used. A full body has about 5 000."""

DEEPEST_NESTING = 40
"""Mappings and lists within each other. The language itself needs eight."""

_NULL = frozenset(("", "~", "null", "Null", "NULL"))
_TRUE = frozenset(("true", "True", "TRUE"))
_FALSE = frozenset(("false", "False", "FALSE"))
_DECIMAL = re.compile(r"[-+]?[0-9]+")
_OCTAL_OR_HEX = re.compile(r"0o[0-7]+|0x[0-9a-fA-F]+")
_FLOAT = re.compile(r"[-+]?(\.[0-9]+|[0-9]+(\.[0-9]*)?)([eE][-+]?[0-9]+)?")
_INFINITE = re.compile(r"([-+]?)\.(inf|Inf|INF)")
_NOT_A_NUMBER = frozenset((".nan", ".NaN", ".NAN"))
_LONGEST_INTEGER = 18
"""Digits; a longer one becomes a float, which may be infinite."""


def read_tree(source: Path | Traversable, mistakes: Mistakes) -> Node | None:
    """Read one file.

    Parameters
    ----------
    source : Path or Traversable
        A file, or a resource of a package.
    mistakes : Mistakes
        Gets everything that is wrong with the text.

    Returns
    -------
    Node or None
        The top of the tree; None where the text cannot be read to its end.
    """
    file = str(source)
    text = _text_of(source, file, mistakes)
    return None if text is None else read_text(text, file, mistakes)


def read_text(text: str, file: str, mistakes: Mistakes) -> Node | None:
    """Read YAML text; `file` is the name to report. See :func:`read_tree`."""
    reader = _Reader(file, mistakes)
    try:
        return reader.document(_events(text))
    except _CannotGoOnError as stop:
        mistakes.add_at(file, stop.line, stop.problem, stop.remedy)
    except MarkedYAMLError as fault:
        mark = fault.problem_mark or fault.context_mark
        line = 1 if mark is None else mark.line + 1
        said = " ".join(str(fault.problem or fault.context or "cannot be understood").split())
        mistakes.add_at(
            file,
            line,
            f"this is not YAML: {said}.",
            "Look at this line and the one above it: brackets, quotes, colons, indentation.",
        )
    except ReaderError as fault:
        line = text.count("\n", 0, fault.position) + 1
        problem = f"the character U+{ord(text[fault.position]):04X} has no place in text."
        mistakes.add_at(file, line, problem, "Remove it: is this a text file at all?")
    except (YAMLError, ValueError, LookupError, AttributeError, NotImplementedError) as fault:
        # the scanner's answer to a few kinds of broken text is one of Python's own exceptions
        said = " ".join(str(fault).split())[:120]
        mistakes.add_at(file, reader.line, f"this is not YAML: {said}.", "Look from here on.")
    return None


def scalar_of(text: str) -> Scalar:
    """What a plain (unquoted) scalar means in the core schema of YAML 1.2.

    Examples
    --------
    >>> [scalar_of(word) for word in ("1", "-0.5", "1e3", "0x10", "on", "true", "~")]
    [1, -0.5, 1000.0, 16, 'on', True, None]
    """
    if text in _NULL:
        return None
    if text[0].isalpha():
        return True if text in _TRUE else False if text in _FALSE else text
    if _DECIMAL.fullmatch(text):
        return int(text) if len(text) <= _LONGEST_INTEGER else float(text)
    if _OCTAL_OR_HEX.fullmatch(text) and len(text) <= _LONGEST_INTEGER:
        return int(text, 0)
    if _FLOAT.fullmatch(text):
        return float(text)
    if infinite := _INFINITE.fullmatch(text):
        return float(f"{infinite[1]}inf")
    return float("nan") if text in _NOT_A_NUMBER else text


class _CannotGoOnError(Exception):
    """What follows in the text would only repeat, or hide, this mistake."""

    def __init__(self, line: int, problem: str, remedy: str) -> None:
        super().__init__(problem)
        self.line, self.problem, self.remedy = line, problem, remedy


def _text_of(source: Path | Traversable, file: str, mistakes: Mistakes) -> str | None:
    """Read the file, or say why not."""
    try:
        with source.open("rb") as stream:
            content = stream.read(LARGEST_FILE + 1)
    except FileNotFoundError:
        mistakes.add_at(file, 1, "there is no such file.", "Check the path and its spelling.")
        return None
    except IsADirectoryError:
        mistakes.add_at(file, 1, "this is a folder.", "Name the model file in it.")
        return None
    except (OSError, ValueError) as fault:
        reason = getattr(fault, "strerror", None) or fault
        mistakes.add_at(file, 1, f"cannot be read: {reason}.", "Check its permissions.")
        return None
    if len(content) > LARGEST_FILE:
        remedy = "A model takes less than a hundredth of that: is this the right file?"
        mistakes.add_at(file, 1, f"more than {LARGEST_FILE // 10**6} MB.", remedy)
        return None
    try:
        return content.decode("utf-8-sig")
    except UnicodeDecodeError as fault:
        line = content.count(b"\n", 0, fault.start) + 1
        remedy = "Save the file as UTF-8: is this a text file at all?"
        mistakes.add_at(file, line, "this is not text in UTF-8.", remedy)
        return None


def _events(text: str) -> Iterator[Any]:
    events: Iterator[Any] = YAML(typ="safe", pure=True).parse(text)
    return events


@dataclass(slots=True)
class _Reader:
    """Builds the tree from events; holds what one file's reading has to remember."""

    file: str
    mistakes: Mistakes
    line: int = 1
    values: int = 0
    anchors: dict[str, tuple[Node, int] | None] = field(default_factory=dict)

    def document(self, events: Iterator[Any]) -> Node | None:
        """Read the one document of the stream."""
        top: Node | None = None
        for event in events:
            self.line = event.start_mark.line + 1
            kind = type(event).__name__
            if kind == "DocumentStartEvent" and top is not None:
                problem = "a second document begins here."
                raise _CannotGoOnError(self.line, problem, "Write one model in one file.")
            if kind not in ("StreamStartEvent", "DocumentStartEvent", "DocumentEndEvent"):
                if kind == "StreamEndEvent":
                    break
                top = self.node(event, events, depth=0)
        if top is None or top.value is None:
            remedy = "A model begins with `condyle: 1`."
            raise _CannotGoOnError(1, "the file holds nothing.", remedy)
        return top

    def node(self, event: Any, events: Iterator[Any], *, depth: int) -> Node:
        """Read the value that `event` begins."""
        self.line = line = event.start_mark.line + 1
        kind = type(event).__name__
        if kind == "AliasEvent":
            return self._copy(event.anchor, line)
        self._count(1, line)
        self._refuse_tags(event, line)
        if event.anchor is not None:
            self.anchors[event.anchor] = None
        before = self.values - 1
        if kind == "ScalarEvent":
            is_plain = not event.style and event.tag is None
            value = scalar_of(event.value) if is_plain else event.value
            node = Node(value, self.file, line, line)
        else:
            self._refuse_depth(depth, line)
            inside = self._mapping if kind == "MappingStartEvent" else self._sequence
            node = Node(inside(events, depth + 1), self.file, line, line)
        if event.anchor is not None:
            self.anchors[event.anchor] = (node, self.values - before)
        return node

    def _mapping(self, events: Iterator[Any], depth: int) -> dict[str, Node]:
        entries: dict[str, Node] = {}
        for event in events:
            kind = type(event).__name__
            if kind == "MappingEndEvent":
                break
            line = event.start_mark.line + 1
            if kind != "ScalarEvent":
                problem = "a key is a list, a mapping or an alias."
                raise _CannotGoOnError(line, problem, "Write a name before the colon.")
            self._refuse_tags(event, line)
            key = event.value
            if key in entries:
                first = entries[key].key_line
                problem = f"'{key}' stands here a second time; the first is in line {first}."
                self.mistakes.add_at(self.file, line, problem, "Keep one of the two.")
            value = self.node(next(events), events, depth=depth)
            entries[key] = replace(value, key_line=line)
        return entries

    def _sequence(self, events: Iterator[Any], depth: int) -> list[Node]:
        items: list[Node] = []
        for event in events:
            if type(event).__name__ == "SequenceEndEvent":
                break
            items.append(self.node(event, events, depth=depth))
        return items

    def _copy(self, anchor: str, line: int) -> Node:
        """Resolve an alias (`*name`) to the value that its anchor (`&name`) stands before."""
        known = self.anchors.get(anchor)
        if known is None:
            within = anchor in self.anchors
            problem = f"'*{anchor}' stands within the value it names." if within else ""
            problem = problem or f"nothing above is marked '&{anchor}'."
            raise _CannotGoOnError(line, problem, "Write the value out.")
        node, size = known
        self._count(size, line)
        return node

    def _count(self, values: int, line: int) -> None:
        self.values += values
        if self.values > MOST_VALUES:
            problem = f"more than {MOST_VALUES} values, those that aliases repeat included."
            raise _CannotGoOnError(line, problem, "Write the values out, without aliases.")

    def _refuse_depth(self, depth: int, line: int) -> None:
        if depth >= DEEPEST_NESTING:
            problem = f"more than {DEEPEST_NESTING} lists or mappings within each other."
            raise _CannotGoOnError(line, problem, "No model needs that: is a bracket missing?")

    def _refuse_tags(self, event: Any, line: int) -> None:
        tag = event.tag
        if tag is None or (
            tag == "tag:yaml.org,2002:str" and type(event).__name__ == "ScalarEvent"
        ):
            return
        shown = str(tag).replace("tag:yaml.org,2002:", "!!")
        problem = f"the tag '{shown}' is not part of the model language."
        self.mistakes.add_at(self.file, line, problem, "Remove it: a model holds plain values.")
