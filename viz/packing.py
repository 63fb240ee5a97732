"""Numbers made small enough to travel inside a page: rounded to a step, differenced in time, packed.

Each array is a row of channels (a marker's x, an angle) over time. Decided here: a channel is rounded
to a stated step, its differences in time are taken once or twice, whichever is shorter, what is missing
stands in a mask of bits, and all of it is one gzip stream in base64, which every browser can open by itself.
"""

from __future__ import annotations

import base64
import gzip
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]

LEVEL = 9
"""Of gzip: the page is written once and opened many times."""


@dataclass(slots=True)
class Package:
    """Arrays on their way into a page; `directory` tells a reader how to undo it.

    Attributes
    ----------
    directory : name -> how it lies in the bytes
    """

    directory: dict[str, dict[str, Any]] = field(default_factory=dict)
    _parts: list[bytes] = field(default_factory=list)
    _length: int = 0

    def add(self, name: str, channels: FloatArray, *, step: float) -> None:
        """Pack channels (n, length), rounded to `step`; NaN is missing."""
        missing = ~np.isfinite(channels)
        whole = np.round(_held(channels, missing) / step).astype(np.int64)
        start = whole[:, :1]
        once = np.diff(whole - start, axis=1, prepend=0)
        twice = np.diff(once, axis=1, prepend=0)
        order, steps = (1, once) if np.abs(once).sum() <= np.abs(twice).sum() else (2, twice)
        width = 2 if np.abs(steps).max(initial=0) < 2**15 else 4
        entry = {
            "channels": channels.shape[0],
            "length": channels.shape[1],
            "step": step,
            "order": order,
            "width": width,
            "start": start[:, 0].tolist(),
            "at": self._append(byte_planes(steps, width)),
        }
        if missing.any():
            entry["missing"] = self._append(np.packbits(missing, axis=None).tobytes())
        self.directory[name] = entry

    def base64(self) -> str:
        """Everything, compressed, as text; the same numbers give the same text."""
        return base64.b64encode(gzip.compress(b"".join(self._parts), LEVEL, mtime=0)).decode()

    def _append(self, part: bytes) -> int:
        at = self._length
        self._parts.append(part)
        self._length += len(part)
        return at


def _held(channels: FloatArray, missing: NDArray[np.bool_]) -> FloatArray:
    """Each channel with its gaps filled by the value before them, else by the first value after."""
    rows = np.arange(channels.shape[1])
    last = np.maximum.accumulate(np.where(missing, -1, rows), axis=1)
    first = np.where(missing.all(axis=1), 0, np.argmin(missing, axis=1))
    held = np.take_along_axis(channels, np.where(last < 0, first[:, None], last), axis=1)
    return np.asarray(np.nan_to_num(held))


def byte_planes(steps: NDArray[np.int64], width: int) -> bytes:
    """All lowest bytes, then all next ones, and so on: like beside like packs better."""
    folded = np.where(steps < 0, -2 * steps - 1, 2 * steps).astype(np.uint64)
    return b"".join(((folded >> (8 * i)) & 255).astype(np.uint8).tobytes() for i in range(width))
