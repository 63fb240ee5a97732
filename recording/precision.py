"""How precisely cameras saw a marker, from what a file keeps of it: its residual and its cameras.

Each of c cameras tells a point across its ray, with an error of sd s in two directions. Least squares
leaves, of 2c equations, 2c - 3 to disagree, so the mean squared distance r^2 of the rays from the
point is s^2 (2 - 3 / c). Looking from all around, the rays tell each axis with information (2/3) c / s^2.
Hence, per axis,

    variance = 3 s^2 / (2 c) = 3 r^2 / (4 c - 6).

More cameras, better precision; rays that miss each other, worse. (Least-squares triangulation; Hartley
& Zisserman 2004, Multiple View Geometry, ch. 12.)
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

FEWEST_CAMERAS = 2
USUAL_CAMERAS = 3
"""Taken where a file gives a residual but not its cameras."""


def measurement_variance(residuals: FloatArray, cameras: NDArray[np.integer]) -> FloatArray:
    """Variance of a reconstructed point per axis, m^2.

    Parameters
    ----------
    residuals : (...,) m
        Mean distance of the rays from the point; NaN, 0 or less where not known.
    cameras : (...,) int
        How many saw the point; 0 where not known.

    Returns
    -------
    (...,) m^2; 0 where nothing is known.
    """
    known = np.nan_to_num(residuals, nan=0.0) > 0
    count = np.where(cameras > 0, np.maximum(cameras, FEWEST_CAMERAS), USUAL_CAMERAS)
    squared = np.where(known, np.nan_to_num(residuals, nan=0.0), 0.0) ** 2
    return np.asarray(3 * squared / (4 * count - 6))
