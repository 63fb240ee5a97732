"""A model file as a tree whose every value remembers the file and line it was written in.

Files are merged and mirrored as trees, so that a mistake found at the very end, say a marker on a
segment that a base model defines, is still told at the line a person can go and change.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TypeAlias

from condyle.model.errors import Mistake, ModelError, unknown_name

Scalar: TypeAlias = str | int | float | bool | None
Step: TypeAlias = str | int


@dataclass(frozen=True, slots=True)
class Node:
    """One value of a model file.

    Attributes
    ----------
    value : scalar, list of Node, or dict of str to Node
    file : str
        As the user named it.
    line : int
        Where the value begins, counted from 1.
    key_line : int
        Where its key stands; `line` for what has no key.
    twin : bool
        Made by the mirror: its mistakes are told once, at the entry it was made from.
    """

    value: Scalar | list[Node] | dict[str, Node]
    file: str
    line: int
    key_line: int
    twin: bool = False

    @property
    def entries(self) -> Mapping[str, Node]:
        """The entries of a mapping; none where the value is anything else."""
        return self.value if isinstance(self.value, dict) else {}

    def with_value(self, value: Scalar | list[Node] | dict[str, Node]) -> Node:
        """Another value at the same place."""
        return replace(self, value=value)


def plain(node: Node) -> object:
    """The tree as plain dicts, lists, text and numbers."""
    if isinstance(node.value, dict):
        return {key: plain(child) for key, child in node.value.items()}
    if isinstance(node.value, list):
        return [plain(child) for child in node.value]
    return node.value


def deepest(node: Node, path: Iterable[Step]) -> tuple[Node, int]:
    """Follow `path` as far as the tree goes: the last node met, and how many steps it took."""
    steps = 0
    for step in path:
        child: Node | None = None
        if isinstance(node.value, dict) and isinstance(step, str):
            child = node.value.get(step)
        elif isinstance(node.value, list) and isinstance(step, int) and step < len(node.value):
            child = node.value[step]
        if child is None:
            break
        node, steps = child, steps + 1
    return node, steps


def node_at(node: Node, *path: Step) -> Node:
    """The node at `path`, or the nearest one above it that exists."""
    return deepest(node, path)[0]


MOST_TOLD = 500
"""Mistakes in one report; beyond that the file is something else, and each costs time."""


class Mistakes:
    """Everything wrong with a model, collected so that it can be told in one report."""

    def __init__(self) -> None:
        self._found: list[tuple[Mistake, bool]] = []
        self._untold = 0

    def __bool__(self) -> bool:
        return bool(self._found)

    def add(self, node: Node, problem: str, remedy: str, *, key: bool = False) -> None:
        """Add a mistake at a node's value, or at its `key`."""
        line = node.key_line if key else node.line
        self._keep(Mistake(node.file, line, problem, remedy), twin=node.twin)

    def add_at(self, file: str, line: int, problem: str, remedy: str) -> None:
        """Add a mistake at a line for which there is no node."""
        self._keep(Mistake(file, line, problem, remedy), twin=False)

    def add_unknown(
        self, node: Node, kind: str, name: str, known: Iterable[str], *, key: bool = False
    ) -> None:
        """Add the mistake of a name that refers to nothing, with the nearest real one."""
        line = node.key_line if key else node.line
        known = known if len(self._found) < MOST_TOLD else ()
        self._keep(unknown_name(Path(node.file), line, kind, name, known), twin=node.twin)

    def _keep(self, mistake: Mistake, *, twin: bool) -> None:
        if len(self._found) < MOST_TOLD:
            self._found.append((mistake, twin))
        else:
            self._untold += 1

    def report(self) -> ModelError:
        """Every mistake once; a twin's only where its original is sound."""
        told = {(mistake.file, mistake.line) for mistake, twin in self._found if not twin}
        mistakes = [
            mistake
            for mistake, twin in self._found
            if not twin or (mistake.file, mistake.line) not in told
        ]
        if self._untold:
            last = max(mistakes)
            problem = f"and {self._untold} more mistakes, in this or other lines."
            mistakes.append(Mistake(last.file, last.line, problem, "Mend these first."))
        return ModelError(mistakes)

    def raise_if_any(self) -> None:
        """Raise :class:`ModelError` where anything was found."""
        if self._found:
            raise self.report()
