"""Which frames of movement calibration looks at: one for each cell of the postures gone through.

A trial of walking has the same posture hundreds of times; each time counts as new evidence only as far
as noise goes, and skin repeats itself. So postures are laid into cells along their main components,
and each cell gives the frame nearest its middle that shows most markers; extremes weigh no more
than the rest.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

MOST_FRAMES = 200
COMPONENTS = 4
"""Main components that cells are counted in."""
WIDEST, NARROWEST = 1.0, 0.2
"""rad; the range in which the width of cells is sought. Within 10 degrees skin is where it was: a frame more
would tell the same error again."""
HALVINGS = 12


def chosen_frames(turns: FloatArray, shown: IntArray, most: int = MOST_FRAMES) -> IntArray:
    """Rows of the frames to look at, in order.

    Parameters
    ----------
    turns : (frames, freedoms) rad
        How far each turning freedom has moved.
    shown : (frames,)
        How many markers each frame shows; frames without any are never chosen.
    most : int
    """
    usable = np.flatnonzero(shown > 0)
    if not len(usable):
        return usable
    centred = turns[usable] - turns[usable].mean(axis=0)
    _, _, axes = np.linalg.svd(centred, full_matrices=False)
    main = centred @ axes[:COMPONENTS].T
    width = _width(main, most)
    cells = np.round(main / width)
    _, cell = np.unique(cells, axis=0, return_inverse=True)
    away = np.linalg.norm(main / width - cells, axis=1)
    order = np.lexsort((away, -shown[usable], cell.ravel()))
    first = np.r_[True, np.diff(cell.ravel()[order]) != 0]
    return np.sort(usable[order[first]][:most])


def _width(main: FloatArray, most: int) -> float:
    """rad; the narrowest allowed of which no more than `most` cells are gone through."""
    low, high = NARROWEST, WIDEST
    if len(np.unique(np.round(main / low), axis=0)) <= most:
        return low
    for _ in range(HALVINGS):
        width = np.sqrt(low * high)
        if len(np.unique(np.round(main / width), axis=0)) > most:
            low = width
        else:
            high = width
    return high
