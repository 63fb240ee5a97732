"""The model language and what it means: skeletons, their growth, their kinematics.

The reader's names are imported at their first use: a command that only tells its help, or an error,
does not wait for the YAML parser and the vocabulary.
"""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from condyle.model.extending import shipped_models
    from condyle.model.loading import load_skeleton, load_tree
    from condyle.model.writing import write_subject

__all__ = ["load_skeleton", "load_tree", "shipped_models", "write_subject"]

_HOMES = {
    "load_skeleton": "condyle.model.loading",
    "load_tree": "condyle.model.loading",
    "shipped_models": "condyle.model.extending",
    "write_subject": "condyle.model.writing",
}


def __getattr__(name: str) -> object:
    if name in _HOMES:
        return getattr(import_module(_HOMES[name]), name)
    raise AttributeError(f"module 'condyle.model' has no attribute '{name}'")
