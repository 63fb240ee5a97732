"""Which markers a picture shows in a frame, and where it puts them.

The marker on the fitted skeleton is always drawn where it is. A used marker's residual is a few
millimetres, too short to see: the measured marker is drawn further out along it, by the factor
that the picture states. A marker left out of the fit is drawn where it was measured.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from condyle.solver.results import FittedMotion

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class DrawnMarkers:
    """One frame's markers in laboratory axes (m), by how they are drawn.

    Attributes
    ----------
    fitted : (used, 3)
        On the skeleton, of the markers that took part in the fit.
    measured : (used, 3)
        The same markers as measured, moved out along the residual.
    alone : (missing, 3)
        On the skeleton, where nothing was measured or the measurement was left out.
    left_out : (left out, 3)
        Where a marker was measured that took no part.
    left_out_fitted : (left out, 3)
        Its place on the skeleton; NaN where it has none.
    """

    fitted: FloatArray
    measured: FloatArray
    alone: FloatArray
    left_out: FloatArray
    left_out_fitted: FloatArray

    def near_figure(self) -> FloatArray:
        """(n, 3) m: what must be inside the picture; a stray left-out marker need not be."""
        return np.concatenate([self.fitted, self.measured, self.alone])


def place_markers(motion: FittedMotion, row: int, *, exaggeration: float) -> DrawnMarkers:
    """Sort one row's markers and move the measured ones out by the exaggeration."""
    measured, fitted = motion.measured[row], motion.fitted[row]
    seen, placed = np.isfinite(measured).all(axis=1), np.isfinite(fitted).all(axis=1)
    used = motion.used[row] & seen & placed
    left_out = seen & ~used
    return DrawnMarkers(
        fitted=fitted[used],
        measured=fitted[used] + exaggeration * (measured[used] - fitted[used]),
        alone=fitted[placed & ~used],
        left_out=measured[left_out],
        left_out_fitted=np.where(placed[left_out, None], fitted[left_out], np.nan),
    )
