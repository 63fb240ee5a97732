"""Where a result comes from: versions and file hashes, so that it can be made again."""

from __future__ import annotations

import hashlib
import platform
from collections.abc import Mapping
from importlib.metadata import PackageNotFoundError, version
from pathlib import Path
from typing import Any

_PARTS = ("casadi", "ezc3d", "numpy", "scipy", "pandas")


def versions() -> dict[str, str]:
    """Of Condyle, Python, and what the numbers depend on."""
    found = {"condyle": _version("condyle"), "python": platform.python_version()}
    return found | {name: _version(name) for name in _PARTS}


def _version(package: str) -> str:
    try:
        return version(package)
    except PackageNotFoundError:
        return "unknown"


def file_hash(path: Path) -> str:
    """SHA-256 of a file's bytes, in hexadecimal."""
    with path.open("rb") as file:
        return hashlib.file_digest(file, "sha256").hexdigest()


def model_hash(source: str, tree: Mapping[str, Any]) -> str:
    """SHA-256 of a model's file, or of the merged model where it is shipped inside the package."""
    path = Path(source)
    if path.is_file():
        return file_hash(path)
    return hashlib.sha256(repr(tree).encode()).hexdigest()
