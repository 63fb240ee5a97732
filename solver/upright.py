"""Which laboratory axis points up, and the turn to upright that follows from it.

Upright is the laboratory turned by the smallest rotation so that Y is up; floating joints tell
their orientation relative to it. The choice is always said.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from condyle.model.errors import FitError

FloatArray = NDArray[np.float64]

UP_AXES = ("+X", "+Y", "+Z", "-X", "-Y", "-Z")
"""How an up axis is written."""

_TURNS: dict[str, tuple[str, float]] = {
    "+Y": ("x", 0.0),
    "+Z": ("x", 90.0),
    "-Z": ("x", -90.0),
    "+X": ("z", -90.0),
    "-X": ("z", 90.0),
    "-Y": ("x", 180.0),
}


@dataclass(frozen=True, slots=True)
class Upright:
    """The up axis of a laboratory and how it was chosen (a sentence for `fit.json`)."""

    axis: str
    how: str

    @property
    def laboratory_from_upright(self) -> FloatArray:
        """(3, 3) Rotation: columns written upright become columns written in the laboratory."""
        about, angle = _TURNS[self.axis]
        return np.round(Rotation.from_euler(about, angle, degrees=True).as_matrix())


def up_axis(text: str) -> str:
    """An up axis as people write it (``z``, ``+Z``, ``-y``) in its one spelling.

    Raises
    ------
    FitError
        If it is none of the six.
    """
    plain = text.strip().upper()
    spelled = plain if plain[:1] in "+-" else f"+{plain}"
    if spelled not in UP_AXES:
        raise FitError(f"'{text}' is no axis to point up.\n  Give one of {', '.join(UP_AXES)}.")
    return spelled


def nearest_axis(directions: FloatArray) -> str:
    """The laboratory axis nearest the mean of some unit vectors (n, 3)."""
    mean = np.nanmean(directions, axis=0)
    largest = int(np.abs(mean).argmax())
    return ("+" if mean[largest] > 0 else "-") + "XYZ"[largest]
