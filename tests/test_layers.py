"""Imports point one way: each layer may use only the layers below it."""

from __future__ import annotations

import ast
from collections.abc import Iterator
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[1]
LAYERS = ("model", "recording", "solver", "viz")
"""Lowest first. Above them all stands the door, src/condyle."""
MAY_USE: dict[str, frozenset[str]] = {
    **{layer: frozenset(LAYERS[: i + 1]) for i, layer in enumerate(LAYERS)},
    "models_yaml": frozenset({"models_yaml"}),
    "demo_data": frozenset({"demo_data", "model", "recording", "solver"}),
}
DATA = frozenset({"models_yaml", "demo_data"})
"""Packages of files; code may find them by name, but a layer imports neither."""
FILES = [path for folder in MAY_USE for path in sorted((ROOT / folder).rglob("*.py"))]


def imported(source: str) -> Iterator[tuple[int, str]]:
    """Line and full name of all that a source imports, wherever in the file it does so."""
    for node in ast.walk(ast.parse(source)):
        if isinstance(node, ast.Import):
            yield from ((node.lineno, alias.name) for alias in node.names)
        elif isinstance(node, ast.ImportFrom):
            module = "." * node.level + (node.module or "")
            # `from condyle import viz` imports condyle.viz.
            names = (
                [f"{module}.{alias.name}" for alias in node.names] if module == "condyle" else []
            )
            yield from ((node.lineno, name) for name in names or [module])
        elif isinstance(node, ast.Call) and _is_import_call(node.func):
            first = node.args[0] if node.args else None
            if isinstance(first, ast.Constant) and isinstance(first.value, str):
                yield node.lineno, first.value


def _is_import_call(function: ast.expr) -> bool:
    name = function.attr if isinstance(function, ast.Attribute) else getattr(function, "id", "")
    return name in ("import_module", "__import__")


def faults(source: str, layer: str) -> list[str]:
    """What a file of a layer imports that it may not."""
    found = []
    for line, name in imported(source):
        parts = name.split(".")
        if name.startswith("."):
            found.append(f"line {line}: '{name}' is relative; write condyle....")
        elif parts[0] in (*LAYERS, *DATA):
            found.append(f"line {line}: '{name}' works only from the repository root")
        elif parts[0] == "condyle" and (len(parts) == 1 or parts[1] not in MAY_USE):
            found.append(f"line {line}: '{name}' is the door, which stands above {layer}")
        elif parts[0] == "condyle" and parts[1] not in MAY_USE[layer]:
            found.append(f"line {line}: '{name}' lies above {layer}")
    return found


@pytest.mark.parametrize("path", FILES, ids=lambda path: path.relative_to(ROOT).as_posix())
def test_imports_point_down(path: Path) -> None:
    assert faults(path.read_text(encoding="utf-8"), path.relative_to(ROOT).parts[0]) == []


@pytest.mark.parametrize(
    "reaching_up",
    [
        "import condyle.viz",
        "import condyle.viz.scene as scene",
        "from condyle import viz",
        "from condyle.viz import scene",
        "from condyle.viz.scene import Scene",
        "def f():\n    from condyle.viz import scene",
        "def f():\n    import condyle.viz",
        "if TYPE_CHECKING:\n    from condyle.viz.scene import Scene",
        "import_module('condyle.viz.scene')",
        "importlib.import_module('condyle.viz')",
        "import condyle",
        "from condyle import calibrate",
        "from condyle.cli import main",
        "from ..viz import scene",
        "from . import results",
        "from viz import scene",
        "import condyle.demo_data",
    ],
)
def test_every_way_of_reaching_up_is_caught(reaching_up: str) -> None:
    assert len(faults(reaching_up, "solver")) == 1


@pytest.mark.parametrize(
    ("layer", "allowed"),
    [
        ("solver", "from condyle.model.skeleton import Skeleton"),
        ("solver", "from condyle.solver import results\nimport numpy, condyle.recording"),
        ("model", "from condyle.model import errors"),
        ("demo_data", "from condyle.solver.results import TrialFit"),
    ],
)
def test_reaching_down_is_allowed(layer: str, allowed: str) -> None:
    assert faults(allowed, layer) == []


def test_the_shipped_models_are_data_alone() -> None:
    assert len(faults("from condyle.model import errors", "models_yaml")) == 1
    assert len(faults("from condyle.viz import scene", "demo_data")) == 1


def test_there_is_something_to_check() -> None:
    folders = {path.relative_to(ROOT).parts[0] for path in FILES}
    assert folders == set(MAY_USE)
