"""Every source file is reachable under the installed name, from the same place as its folder."""

import doctest
import importlib
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parents[1]
FOLDERS = ["model", "recording", "solver", "viz"]
MODULES = [
    f"condyle.{folder}.{path.stem}".removesuffix(".__init__")
    for folder in FOLDERS
    for path in sorted((ROOT / folder).glob("*.py"))
]


@pytest.mark.parametrize("name", MODULES)
def test_module_imports_and_its_examples_hold(name: str) -> None:
    module = importlib.import_module(name)
    assert doctest.testmod(module).failed == 0
