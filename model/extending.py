"""`extends`: a model and the models it builds on become one tree.

Files merge key by key, the deepest base first. A mapping merges with a mapping; anything else,
lists too, replaces what was there. `null` removes an entry of the base; a `null` that removes
nothing stays in the tree, because it may be meant for a twin that the mirror would make
(:mod:`condyle.model.mirroring`). Every value keeps the file and line it was written in.

A base's path begins in the folder of the file that names it, and never leads out of the folder of
the outermost one: a model that somebody sent can read nothing but what came with it.
"""

from __future__ import annotations

from dataclasses import dataclass
from importlib.resources import files
from importlib.resources.abc import Traversable
from pathlib import Path

from condyle.model.reading import read_tree
from condyle.model.tree import Mistakes, Node

LANGUAGE_VERSION = 1

_SHIPPED = "condyle.models_yaml"
_ENDINGS = (".yaml", ".yml")
_LONGEST_CHAIN = 20
"""Files that build on one another."""


@dataclass(frozen=True, slots=True)
class Merged:
    """A merged tree.

    Attributes
    ----------
    tree : Node
        The file and all it builds on.
    complete : bool
        Whether every file of the chain could be read; only then does an unknown name mean that
        the name is wrong.
    """

    tree: Node
    complete: bool


def shipped_models() -> tuple[str, ...]:
    """The names of the models that come with Condyle, sorted."""
    names = (Path(entry.name) for entry in files(_SHIPPED).iterdir())
    return tuple(sorted(name.stem for name in names if name.suffix == ".yaml"))


def find_model(name_or_path: str | Path) -> Path | Traversable | None:
    """Where a model stands: a shipped one by its bare name, any other by its path.

    Returns None for a bare word that is neither.
    """
    text = str(name_or_path)
    if isinstance(name_or_path, str) and text in shipped_models():
        return files(_SHIPPED) / f"{text}.yaml"
    path = Path(text)
    is_path = isinstance(name_or_path, Path) or len(path.parts) > 1 or path.suffix in _ENDINGS
    return path if is_path or _exists(path) else None


def merged_tree(source: Path | Traversable, mistakes: Mistakes) -> Merged | None:
    """Read a file and everything it extends, and merge them.

    Parameters
    ----------
    source : Path or Traversable
        The outermost file.
    mistakes : Mistakes
        Gets what is wrong with any file of the chain, or with the chain.

    Returns
    -------
    Merged or None
        None where the outermost file itself cannot be read.
    """
    chain: list[Node] = []
    seen: list[str] = []
    place: Path | Traversable | None = source
    folder = Path(str(source)).parent.resolve()
    complete = True
    while place is not None:
        seen.append(_identity(place))
        top = read_tree(place, mistakes)
        if top is None or not _is_model(top, mistakes):
            complete = False
            break
        chain.append(top)
        place, sound = _base_of(top, place, folder, seen, mistakes)
        complete = complete and sound
    if not chain:
        return None
    tree = chain[-1]
    for over in reversed(chain[:-1]):
        tree = _merge(tree, over)
    entries = {key: node for key, node in tree.entries.items() if key != "extends"}
    return Merged(tree.with_value(entries), complete)


def _merge(base: Node, over: Node) -> Node:
    """Lay one value over another."""
    if not isinstance(base.value, dict) or not isinstance(over.value, dict):
        return over
    entries = dict(base.value)
    for key, node in over.value.items():
        if key not in entries:
            entries[key] = node
        elif node.value is None and entries[key].value is not None:
            del entries[key]
        else:
            entries[key] = _merge(entries[key], node)
    return over.with_value(entries)


def _is_model(top: Node, mistakes: Mistakes) -> bool:
    """Tell a model file from anything else that is YAML."""
    if not isinstance(top.value, dict):
        kind = "a list" if isinstance(top.value, list) else "a single value"
        remedy = "A model is a mapping that begins with `condyle: 1`."
        mistakes.add(top, f"this is not a model but {kind}.", remedy)
        return False
    version = top.entries.get("condyle")
    if version is None:
        problem = "this is not a model: it does not say `condyle: 1`."
        mistakes.add(top, problem, "Write `condyle: 1`, the version of the language, first.")
        return False
    if version.value != LANGUAGE_VERSION or type(version.value) is not int:
        problem = "this version of the model language is not known."
        mistakes.add(version, problem, f"This Condyle reads version {LANGUAGE_VERSION}.")
        return False
    return True


def _base_of(
    top: Node, place: Path | Traversable, folder: Path, seen: list[str], mistakes: Mistakes
) -> tuple[Path | Traversable | None, bool]:
    """The file that this one extends, and whether the chain is sound so far."""
    node = top.entries.get("extends")
    if node is None or node.value is None:
        return None, True
    if not isinstance(node.value, str) or not node.value.strip():
        remedy = "Write a shipped model's name, or a path beside this file."
        mistakes.add(node, "'extends' is not a name.", remedy)
        return None, False
    base = _find_base(node, place, folder, mistakes)
    if base is None:
        return None, False
    if _identity(base) in seen:
        problem = f"'extends' goes round in a circle: '{node.value}' builds on this file."
        mistakes.add(node, problem, "Remove one `extends` of the circle.")
        return None, False
    if len(seen) >= _LONGEST_CHAIN:
        problem = f"more than {_LONGEST_CHAIN} files build on one another."
        mistakes.add(node, problem, "Bring some of them together in one file.")
        return None, False
    return base, True


def _find_base(
    node: Node, place: Path | Traversable, folder: Path, mistakes: Mistakes
) -> Path | Traversable | None:
    """A base by its shipped name, or by its path beside the file that names it."""
    name = str(node.value)
    if name in shipped_models():
        return files(_SHIPPED) / f"{name}.yaml"
    beside = Path(str(place)).parent / name
    if not _is_within(beside, folder):
        problem = f"the base model '{name}' is not in the model's folder."
        mistakes.add(node, problem, "Put it beside the model, and name it from there.")
    elif _exists(beside):
        return beside
    elif Path(name).suffix in _ENDINGS or len(Path(name).parts) > 1:
        problem = f"there is no file '{name}' beside this one."
        mistakes.add(node, problem, "Check the path: it begins in the folder of this file.")
    else:
        mistakes.add_unknown(node, "base model", name, shipped_models())
    return None


def _exists(path: Path) -> bool:
    try:
        return path.is_file()
    except (OSError, ValueError):  # a name too long for the system, or with a zero byte in it
        return False


def _is_within(base: Path, folder: Path) -> bool:
    """Whether a file is in `folder` or below it, wherever links lead."""
    try:
        return base.resolve().is_relative_to(folder)
    except (OSError, ValueError, RuntimeError):
        return False


def _identity(place: Path | Traversable) -> str:
    try:
        return str(Path(str(place)).resolve())
    except (OSError, ValueError, RuntimeError):
        return str(place)


def refuse_idle_nulls(tree: Node, mistakes: Mistakes, *, within: str = "") -> Node:
    """Tell each `null` that removed nothing, and take it out; a segment stays, as an empty one."""
    if isinstance(tree.value, list):
        return tree.with_value([refuse_idle_nulls(child, mistakes) for child in tree.value])
    if not isinstance(tree.value, dict):
        return tree
    entries: dict[str, Node] = {}
    for key, node in tree.value.items():
        if key == "calibration":  # kept as it is
            entries[key] = node
        elif node.value is None:
            problem = f"'{key}' is empty (null), and there is no such entry to remove."
            remedy = "Write its value ({} where it has none), or delete the line."
            mistakes.add(node, problem, remedy, key=True)
            if within == "segments":
                entries[key] = node.with_value({})
        else:
            entries[key] = refuse_idle_nulls(node, mistakes, within=key)
    return tree.with_value(entries)
