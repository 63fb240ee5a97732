"""Where markers are missing, and for how long.

A gap is a run of frames in which a marker was not seen, at the ends of a recording too.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray


@dataclass(frozen=True, slots=True)
class Gaps:
    """Every gap of a recording.

    Attributes
    ----------
    marker, start, length : (gaps,) int
        Which marker, the index of its first missing frame, and how many frames are missing.
    """

    marker: NDArray[np.int64]
    start: NDArray[np.int64]
    length: NDArray[np.int64]


def find_gaps(present: NDArray[np.bool_]) -> Gaps:
    """Gaps by marker, then by time.

    Parameters
    ----------
    present : (frames, markers) bool
        Where each marker was seen.
    """
    missing = np.pad(~present.T, ((0, 0), (1, 1))).astype(np.int8)
    change = np.diff(missing, axis=1)
    marker, start = np.nonzero(change == 1)
    _, end = np.nonzero(change == -1)
    return Gaps(marker, start, end - start)
