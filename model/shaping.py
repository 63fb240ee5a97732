"""A merged tree against the vocabulary: keys, kinds of value, numbers.

Every mistake is told at its own line. Then what is wrong is taken out and the rest read again, so
that the cross checks can go on with what is sound and one report holds everything.
"""

from __future__ import annotations

from pathlib import Path
from types import UnionType
from typing import Annotated, Any, Union, get_args, get_origin

from pydantic import ValidationError
from pydantic_core import ErrorDetails

from condyle.model.errors import unknown_name
from condyle.model.language import ModelEntry
from condyle.model.tree import Mistakes, Node, Step, plain
from condyle.model.value_kinds import Vocabulary

_LONGEST_SHOWN = 40
"""Characters of a wrong value that are worth repeating."""

_PASSES = 4
"""Taking a wrong value out can uncover another, hidden by it; never more than a few deep."""


def read_shapes(tree: Node, mistakes: Mistakes) -> ModelEntry | None:
    """Read a merged and mirrored tree by the vocabulary.

    Parameters
    ----------
    tree : Node
        What `extends` and `mirror` have made of the files.
    mistakes : Mistakes
        Gets everything that is not as the vocabulary says.

    Returns
    -------
    ModelEntry or None
        What is sound of the model, in the file's units. None where too little is.
    """
    _check_keys(ModelEntry, tree, mistakes)
    data: Any = plain(tree)
    for attempt in range(_PASSES):
        try:
            return ModelEntry.model_validate(data)
        except ValidationError as fault:
            errors = fault.errors(include_url=False)
        for error in errors:
            if error["type"] != "extra_forbidden":
                _tell(tree, error, mistakes)
        if attempt < _PASSES - 1:
            for error in errors:
                _take_out(data, error)
    return None


def _check_keys(kind: object, node: Node, mistakes: Mistakes) -> None:
    """Tell every unknown and every absent key, at every depth."""
    entries = node.entries
    model = _model_of(kind)
    if model is not None and isinstance(node.value, dict):
        keys = _keys_of(model)
        for key, child in entries.items():
            if key not in keys:
                _tell_unknown_key(child, key, model, mistakes)
        for key in model.needs:
            if key not in entries:
                problem = f"this {model.called} has no '{key}'."
                said = model.model_fields[keys[key]].description
                mistakes.add(node, problem, f"Add `{key}`: {said}.", key=True)
    for step, child in _children(node):
        inner = _inner_kind(kind, step)
        if inner is not None:
            _check_keys(inner, child, mistakes)


def _tell_unknown_key(node: Node, key: str, model: type[Vocabulary], mistakes: Mistakes) -> None:
    known = unknown_name(Path(node.file), node.key_line, "key", key, _keys_of(model))
    hint = known.remedy.split(" The keys defined here:")[0]
    hint = f"{hint} " if hint.startswith("Did you mean") else ""
    listed = ", ".join(_keys_of(model))
    problem = f"'{key}' is not a key of a {model.called}."
    mistakes.add(node, problem, f"{hint}The keys of a {model.called}: {listed}.", key=True)


def _tell(tree: Node, error: ErrorDetails, mistakes: Mistakes) -> None:
    """Turn one finding of pydantic into a mistake at its line."""
    node, key, said = _place_of(tree, error["loc"])
    kind = error["type"]
    if error["loc"][-1] == "[key]":
        problem = f"'{key}' cannot be a name."
        said = "a name in one line, without blanks at its ends, of at most 200 letters"
        mistakes.add(node, problem, f"Write {said}.", key=True)
        return
    shown = _shown(node)
    if kind in ("no_direction", "reversed"):
        problem = f"'{key}' is {shown}: {error['msg']}."
    else:
        problem = f"'{key}' cannot be {shown}."
    mistakes.add(node, problem, f"Write {said}.")


def _place_of(tree: Node, location: tuple[Step, ...]) -> tuple[Node, str, str]:
    """The node an error is about, the key it stands under, and what that key takes."""
    node, key, said = tree, "the file", "a mapping that begins with `condyle: 1`"
    kind: object = ModelEntry
    for step in location:
        child = dict(_children(node)).get(step)
        if child is None:  # pydantic's own names for a member of a union, or for a key
            continue
        model = _model_of(kind)
        field = (
            None if model is None else model.model_fields.get(_keys_of(model).get(str(step), ""))
        )
        if field is not None:
            said = field.description or said
        kind = _inner_kind(kind, step)
        inner = _model_of(kind)
        if field is None and inner is not None:
            said = f"the keys of a {inner.called}" + ("" if inner.needs else ", or {}")
        node = child
        key = step if isinstance(step, str) else key
    return node, key, said


def _take_out(data: Any, error: ErrorDetails) -> None:
    """Remove what an error is about; a mapping that is something else becomes an empty one."""
    parent, step = None, None
    holder: Any = data
    for next_step in error["loc"]:
        known = isinstance(holder, dict) and next_step in holder
        known = known or (
            isinstance(holder, list) and isinstance(next_step, int) and next_step < len(holder)
        )
        if not known:
            continue
        inside_list = isinstance(holder, list)
        if not inside_list or error["type"] == "model_type":
            parent, step = holder, next_step
        holder = holder[next_step]
    if parent is None:
        return
    if error["type"] == "model_type":
        parent[step] = {}
    elif isinstance(parent, dict):
        parent.pop(step, None)


def _children(node: Node) -> list[tuple[Step, Node]]:
    if isinstance(node.value, dict):
        return list(node.value.items())
    return list(enumerate(node.value)) if isinstance(node.value, list) else []


def _keys_of(model: type[Vocabulary]) -> dict[str, str]:
    """The keys as written in a file -> the names of the fields."""
    return {field.alias or name: name for name, field in model.model_fields.items()}


def _members(kind: object) -> list[object]:
    """The alternatives of a type, without what annotates them."""
    if get_origin(kind) is Annotated:
        return _members(get_args(kind)[0])
    if get_origin(kind) in (Union, UnionType):
        return [member for one in get_args(kind) for member in _members(one)]
    return [kind]


def _model_of(kind: object) -> type[Vocabulary] | None:
    for member in _members(kind):
        if isinstance(member, type) and issubclass(member, Vocabulary):
            return member
    return None


def _inner_kind(kind: object, step: Step) -> object | None:
    """What stands under `step` of a value of this kind."""
    model = _model_of(kind)
    if model is not None:
        name = _keys_of(model).get(str(step))
        return None if name is None else model.model_fields[name].annotation
    for member in _members(kind):
        origin, inner = get_origin(member), get_args(member)
        if origin is dict and isinstance(step, str):
            return inner[1]  # type: ignore[no-any-return]
        if origin is list and isinstance(step, int):
            return inner[0]  # type: ignore[no-any-return]
    return None


def _shown(node: Node) -> str:
    """A wrong value as a person would write it, shortened."""
    text = _as_written(plain(node))
    return text if len(text) <= _LONGEST_SHOWN else f"{text[: _LONGEST_SHOWN - 3]}..."


def _as_written(value: object) -> str:
    if isinstance(value, dict):
        return "{" + ", ".join(f"{key}: {_as_written(one)}" for key, one in value.items()) + "}"
    if isinstance(value, list):
        return "[" + ", ".join(map(_as_written, value)) + "]"
    if value is None or isinstance(value, bool):
        return {None: "empty", True: "true", False: "false"}[value]
    return f"'{value}'" if isinstance(value, str) else str(value)
