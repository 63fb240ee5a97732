"""Condyle: a skeleton sized to one person and posed in every frame of a marker recording.

Each command of the command line is a thin layer over one function here. Names are loaded when they
are first used, so that importing the package stays light.
"""

from __future__ import annotations

from importlib import import_module
from typing import Any

__version__ = "0.1.0"

_HOMES = {
    "CondyleError": "condyle.model.errors",
    "calibrate": "condyle.pipeline",
    "check": "condyle.checking",
    "demo": "condyle.demonstration",
    "describe_recording": "condyle.pipeline",
    "export": "condyle.exporting",
    "figures": "condyle.reporting",
    "joint_axis": "condyle.solver.joints_from_movement",
    "joint_centre": "condyle.solver.joints_from_movement",
    "load_skeleton": "condyle.model",
    "movie": "condyle.filming",
    "picture": "condyle.picturing",
    "read_recording": "condyle.recording",
    "report": "condyle.reporting",
    "solve": "condyle.pipeline",
}

__all__ = [
    "CondyleError",
    "calibrate",
    "check",
    "demo",
    "describe_recording",
    "export",
    "figures",
    "joint_axis",
    "joint_centre",
    "load_skeleton",
    "movie",
    "picture",
    "read_recording",
    "report",
    "solve",
]


def __getattr__(name: str) -> Any:
    if name not in _HOMES:
        raise AttributeError(f"module 'condyle' has no attribute '{name}'")
    return getattr(import_module(_HOMES[name]), name)


def __dir__() -> list[str]:
    return sorted([*globals(), *_HOMES])
