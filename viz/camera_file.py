"""A camera that the user places: a small YAML file in laboratory axes.

::

    position: [2.5, 1.4, 2.0]   # m, where the camera stands
    target: [0.0, 0.9, 0.0]     # m, what is in the middle of the picture
    up: [0, 1, 0]               # may be left out: the laboratory's up
    field_of_view: 24           # degrees from bottom to top; may be left out
"""

from __future__ import annotations

from math import isfinite
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from condyle.model.reading import read_tree
from condyle.model.tree import Mistakes, Node, plain
from condyle.viz.viewpoint import VIEW_ANGLE, Camera

FloatArray = NDArray[np.float64]

KEYS = ("position", "target", "up", "field_of_view")

PLACES = "Write it as three numbers in metres, such as [2.5, 1.4, 2.0]."
DIRECTION = "Write it as three numbers that are not all zero, such as [0, 1, 0]."

NARROWEST, WIDEST = 1.0, 120.0
"""Degrees from bottom to top."""

LEAST_ANGLE = 1e-3
"""Sine of the least angle between the line of sight and up."""


def read_camera(path: Path, up: FloatArray) -> Camera:
    """Read a camera's file.

    Parameters
    ----------
    up : (3,)
        What is up in the picture where the file does not say so.

    Raises
    ------
    ModelError
        With every mistake, its file and line.
    """
    mistakes = Mistakes()
    if _is_empty(Path(path)):
        mistakes.add_at(
            str(path), 1, "this is no camera.", f"Write a line each: {', '.join(KEYS)}."
        )
        raise mistakes.report()
    root = read_tree(Path(path), mistakes)
    if root is not None and not isinstance(root.value, dict):
        mistakes.add(root, "this is no camera.", f"Write a line each: {', '.join(KEYS)}.")
    mistakes.raise_if_any()
    if root is None:
        raise mistakes.report()
    for name, node in root.entries.items():
        if name not in KEYS:
            mistakes.add_unknown(node, "key", name, KEYS, key=True)
    position = _three(root, "position", PLACES, mistakes)
    target = _three(root, "target", PLACES, mistakes)
    upright = _three(root, "up", DIRECTION, mistakes) if "up" in root.entries else up
    angle = _field_of_view(root, mistakes)
    mistakes.raise_if_any()
    _check_sight(root, position, target, upright, mistakes)
    mistakes.raise_if_any()
    return Camera(position, target, upright, angle)


def _is_empty(path: Path) -> bool:
    """Whether the file is there and holds nothing but comments."""
    if not path.is_file():
        return False
    lines = path.read_text(encoding="utf-8", errors="replace").splitlines()
    return all(not line.strip() or line.lstrip().startswith("#") for line in lines)


def _three(root: Node, name: str, remedy: str, mistakes: Mistakes) -> FloatArray:
    node = root.entries.get(name)
    if node is None:
        mistakes.add(root, f"{name} is missing.", remedy)
        return np.zeros(3)
    value = plain(node)
    numbers = value if isinstance(value, list) else []
    if len(numbers) != 3 or not all(_is_number(number) for number in numbers):
        mistakes.add(node, f"{name} is not three numbers.", remedy)
        return np.zeros(3)
    return np.array(numbers, dtype=np.float64)


def _is_number(value: object) -> bool:
    return isinstance(value, int | float) and not isinstance(value, bool) and isfinite(value)


def _field_of_view(root: Node, mistakes: Mistakes) -> float:
    node = root.entries.get("field_of_view")
    if node is None:
        return VIEW_ANGLE
    value = node.value
    if isinstance(value, int | float) and _is_number(value) and NARROWEST <= value <= WIDEST:
        return float(value)
    mistakes.add(
        node,
        "field_of_view is not an angle that a camera has.",
        f"Give {NARROWEST:g} to {WIDEST:g} degrees, from bottom to top.",
    )
    return VIEW_ANGLE


def _check_sight(
    root: Node, position: FloatArray, target: FloatArray, up: FloatArray, mistakes: Mistakes
) -> None:
    sight = target - position
    if not np.linalg.norm(sight) > 0.0:
        problem = "position and target are the same place."
        mistakes.add(root.entries["target"], problem, "Move one of them.")
    elif not np.linalg.norm(up) > 0.0:
        mistakes.add(root.entries["up"], "up has no direction.", DIRECTION)
    elif np.linalg.norm(np.cross(sight, up)) < LEAST_ANGLE * np.linalg.norm(sight) * np.linalg.norm(
        up
    ):
        where = root.entries.get("up", root)
        mistakes.add(
            where,
            "the camera looks along its own up.",
            "Give up: the direction that shall be up in the picture, across the line of sight.",
        )
