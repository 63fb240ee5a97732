"""Where bone begins: directions and depths that every bone's construction shares.

Landmarks are given on the skin, joints inside. How deep bone lies below a landmark is settled
here, once: a round figure for drawing, not a measurement.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

SKIN = 0.009
"""m; a landmark is felt through skin and tissue, and the bone begins about this far below it."""


def direction(vector: FloatArray) -> FloatArray:
    """The unit vector; zero stays zero."""
    return np.asarray(vector / max(float(np.linalg.norm(vector)), 1e-12))


def below_skin(point: FloatArray, towards: FloatArray, depth: float = SKIN) -> FloatArray:
    """The point moved under the skin, never more than half way to what it is moved towards."""
    way = towards - point
    length = float(np.linalg.norm(way))
    return np.asarray(point + direction(way) * min(depth, 0.5 * length))
