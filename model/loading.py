"""From a model's name or path to its skeleton, by way of one merged, mirrored and checked tree."""

from __future__ import annotations

from difflib import get_close_matches
from pathlib import Path

from condyle.model.building import build_skeleton
from condyle.model.checking import check_model
from condyle.model.coordinates import Declared
from condyle.model.errors import Mistake, ModelError, unknown_name
from condyle.model.extending import find_model, merged_tree, refuse_idle_nulls, shipped_models
from condyle.model.freed_joints import without_idle_freedoms
from condyle.model.language import ModelEntry
from condyle.model.mirroring import mirrored
from condyle.model.segment_checks import mesh_path
from condyle.model.shaping import read_shapes
from condyle.model.skeleton import Skeleton
from condyle.model.tree import Mistakes, Node, plain

_SECTIONS = (
    "segments", "joints", "coordinates", "markers", "ties", "sizing", "sizes", "labels",
)  # fmt: skip


def load_skeleton(name_or_path: str | Path) -> Skeleton:
    """Read a model file and give the skeleton it describes.

    Parameters
    ----------
    name_or_path : str or Path
        A shipped model's name, such as ``lower_limbs``, or the path of a model file.

    Returns
    -------
    Skeleton
        In metres, kilograms and radians, with the numbers of the model's reference person; a sized
        file's `sizes` and marker places beside them.

    Raises
    ------
    ModelError
        With every mistake of the file and of what it extends, each at its line.
    """
    model, declared, tree, source = _checked(name_or_path)
    return build_skeleton(model, declared, tree, source)


def load_tree(name_or_path: str | Path) -> dict[str, object]:
    """Read a model file and give it whole: merged, mirrored and checked, as plain values.

    Numbers keep the file's units (degrees). The keys `extends` and `mirror` are done with and gone.
    Meshes are given by absolute paths, so that the tree can be written elsewhere.

    Parameters
    ----------
    name_or_path : str or Path
        As for :func:`load_skeleton`.

    Raises
    ------
    ModelError
        As :func:`load_skeleton` does.
    """
    _, _, tree, _ = _checked(name_or_path)
    entries = {key: node for key, node in tree.entries.items() if key != "mirror"}
    found = plain(_with_mesh_paths(tree.with_value(entries)))
    return found if isinstance(found, dict) else {}


def _checked(name_or_path: str | Path) -> tuple[ModelEntry, dict[str, Declared], Node, str]:
    """Read, merge, mirror and check; raise where anything is wrong."""
    source = find_model(name_or_path)
    if source is None:
        raise ModelError([_no_such_model(str(name_or_path))])
    mistakes = Mistakes()
    merged = merged_tree(source, mistakes)
    if merged is None:
        raise mistakes.report()
    tree = refuse_idle_nulls(mirrored(merged.tree, mistakes), mistakes)
    tree = without_idle_freedoms(tree)
    if "name" not in tree.entries:
        name = tree.with_value(Path(str(source)).stem)
        tree = tree.with_value({**tree.entries, "name": name})
    model = read_shapes(tree, mistakes)
    declared: dict[str, Declared] = {}
    if model is not None and merged.complete and _sections_can_be_read(tree):
        declared = check_model(model, tree, mistakes)
    mistakes.raise_if_any()
    if model is None:
        raise AssertionError("a model that cannot be read has no mistakes")
    return model, declared, tree, str(source)


def _sections_can_be_read(tree: Node) -> bool:
    """Whether unknown names mean anything: not where a whole section is wrong or misspelled."""
    written = tree.entries
    if not all(isinstance(written[key].value, dict) for key in _SECTIONS if key in written):
        return False
    absent = [key for key in _SECTIONS if key not in written]
    unknown = [key for key in written if key not in ModelEntry.model_fields]
    return not any(get_close_matches(key, absent) for key in unknown[:20])


def _no_such_model(name: str) -> Mistake:
    told = unknown_name(Path(name), 1, "shipped model", name, shipped_models())
    return Mistake(name, 1, told.problem, f"{told.remedy} A file needs its path and ending.")


def _with_mesh_paths(node: Node, key: str = "") -> Node:
    """The tree with the full path of each shape's mesh."""
    if isinstance(node.value, dict):
        inner = {name: _with_mesh_paths(child, name) for name, child in node.value.items()}
        return node.with_value(inner)
    if isinstance(node.value, list):
        return node.with_value([_with_mesh_paths(child) for child in node.value])
    if key == "mesh" and isinstance(node.value, str):
        return node.with_value(str(mesh_path(node, node.value).resolve()))
    return node
