"""What unit of length a recording is in, and whether its size could be a person's.

Decided here: which units are read, how a missing unit is told from the spread of the points, and
when a spread contradicts the unit that a file declares.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from condyle.model.errors import RecordingError

METRES_PER_UNIT = {"mm": 1e-3, "cm": 1e-2, "dm": 1e-1, "m": 1.0}
"""Units of length that are read, in small letters; any case is taken."""

DEFAULT_UNIT = "mm"
"""The C3D standard's own default for POINT:UNITS."""

LEAST_SPREAD, MOST_SPREAD = 0.02, 20.0
"""m; markers on a person, or on a hand alone, spread further than the one and less than the
other. Chosen about a factor 30 to either side of a person, so that a unit wrong by 1000 always
falls outside and no sound recording does."""


def check_unit(units: str | None) -> None:
    """Refuse a unit of length that is asked for but not known."""
    if units is not None and units not in METRES_PER_UNIT:
        known = ", ".join(METRES_PER_UNIT)
        raise RecordingError(f"no unit of length is called '{units}'; give one of {known}.")


def marker_spread(positions: NDArray[np.float64]) -> float:
    """How far apart the markers of a frame are: the median over frames of the longest side.

    Parameters
    ----------
    positions : (frames, markers, 3)
        Any unit; NaN where missing.

    Returns
    -------
    float
        In the unit of `positions`. Frames with fewer than two markers count only where there is
        no other; then it is the longest side of the whole path. NaN where nothing was seen.
    """
    seen = np.asarray(np.isfinite(positions).all(axis=2))
    low = np.where(seen[..., None], positions, np.inf)
    high = np.where(seen[..., None], positions, -np.inf)
    several = seen.sum(axis=1) > 1
    if several.any():
        sides = high[several].max(axis=1) - low[several].min(axis=1)
        return float(np.median(sides.max(axis=1)))
    if not seen.any():
        return float("nan")
    return float((high.max(axis=(0, 1)) - low.min(axis=(0, 1))).max())


def unit_from_spread(spread: float) -> str:
    """``m`` or ``mm``, whichever brings the spread nearer to 1 m; the standard's ``mm`` if unknown.

    The border is the geometric mean of 1 and 1000, about 32 of the file's units.
    """
    return "m" if 0 < spread < np.sqrt(1000.0) else DEFAULT_UNIT


def unlikely_spread(spread: float) -> str | None:
    """Why a spread (m) cannot be a person's, in words; None where it can."""
    if not (spread > MOST_SPREAD or 0 < spread < LEAST_SPREAD):
        return None
    wrong = "1000 times too large" if spread > MOST_SPREAD else "1000 times too small"
    return (
        f"the markers spread over {spread:.3g} m, which no person does: "
        f"the declared unit may be {wrong}"
    )
