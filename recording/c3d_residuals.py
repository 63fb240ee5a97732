"""The fourth word of every C3D point: was it seen, how well, and by how many cameras.

By the standard the word is a signed 16-bit integer, in files of reals too: negative where the
point is missing, else the camera mask in the high byte (seven bits, the eighth being the sign) and
the residual in the low byte, in steps of the scale. The ezc3d library takes the two bytes the
other way round, so the words are read and written here.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from condyle.recording.c3d_layout import DEC, Layout

MISSING = -1
"""The word of a point that was not seen."""

CAMERA_BITS = 7
"""Cameras a mask can tell."""

LARGEST_RESIDUAL = 255
"""Steps of the scale that the residual's byte can count."""


def read_fourth_words(path: Path, layout: Layout) -> NDArray[np.int64]:
    """(frames, points) The words as signed 16-bit integers; -1 where a real is not finite."""
    kind = np.dtype("<u4" if layout.stored_as_reals else "<i2")
    stored = np.fromfile(
        path, kind, count=layout.frames * layout.frame_words, offset=layout.data_offset
    )
    words = stored.reshape(layout.frames, -1)[:, 3 : 4 * layout.points : 4]
    if not layout.stored_as_reals:
        return words.astype(np.int64)
    if layout.processor == DEC:
        reals = ((words >> 16) | (words << 16)).view("<f4") / 4
    else:
        reals = np.ascontiguousarray(words).view("<f4")
    usable = np.isfinite(reals) & (np.abs(reals) < 2**31)
    whole = np.where(usable, reals, MISSING).astype(np.int64)
    return (whole & 0xFFFF).astype(np.uint16).astype(np.int16).astype(np.int64)


def write_fourth_words(path: Path, layout: Layout, words: NDArray[np.int64]) -> None:
    """Replace the words of an Intel file of reals; `words` is (frames, points)."""
    shape = (layout.frames, layout.frame_words)
    stored = np.memmap(path, "<f4", "r+", offset=layout.data_offset, shape=shape)
    stored[:, 3 : 4 * layout.points : 4] = words
    stored.flush()


def split_words(words: NDArray[np.int64]) -> tuple[NDArray[np.int64], NDArray[np.int64]]:
    """Residuals in steps of the scale, and how many cameras saw each point; 0 where missing."""
    seen = words >= 0
    cameras = np.bitwise_count((words >> 8) & 0x7F).astype(np.int64)
    return np.where(seen, words & 0xFF, 0), np.where(seen, cameras, 0)


def join_words(
    steps: NDArray[np.float64], cameras: NDArray[np.int64], missing: NDArray[np.bool_]
) -> NDArray[np.int64]:
    """The words for residuals in steps of the scale (NaN: not given) and counts of cameras.

    A count of n is written as the first n cameras: which ones they were is not kept.
    """
    low = np.clip(np.rint(np.nan_to_num(steps)), 0, LARGEST_RESIDUAL).astype(np.int64)
    high = (1 << np.clip(cameras, 0, CAMERA_BITS)) - 1
    return np.where(missing, MISSING, (high << 8) | low)
