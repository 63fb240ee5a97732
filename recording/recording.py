"""A recording of marker positions, in metres and seconds, with NaN where a marker was not seen.

Readers convert to this and nothing downstream asks where the numbers came from.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]


def is_seen(positions: FloatArray) -> NDArray[np.bool_]:
    """(...) Whether each position (..., 3) is known: none of its numbers is NaN."""
    return np.asarray(np.isfinite(positions).all(axis=-1), dtype=np.bool_)


def mean_positions(positions: FloatArray) -> FloatArray:
    """(markers, 3) Mean over the frames in which each was seen; NaN where never."""
    seen = is_seen(positions)
    count = seen.sum(axis=0)
    total = np.where(seen[..., None], positions, 0.0).sum(axis=0)
    return np.asarray(total / np.where(count, count, np.nan)[:, None])


@dataclass(frozen=True, slots=True)
class Event:
    """A named instant (s, on the recording's own clock)."""

    time: float
    label: str


@dataclass(frozen=True, slots=True)
class AnalogSignals:
    """Analog channels as the file scales them.

    Attributes
    ----------
    labels, units : (channels,) str
    rate : float
        Hz; an integer multiple of the marker rate.
    values : (samples, channels)
    """

    labels: tuple[str, ...]
    units: tuple[str, ...]
    rate: float
    values: FloatArray


@dataclass(frozen=True, slots=True)
class ForcePlate:
    """One plate as the file describes it; its channels stay in `AnalogSignals`.

    Attributes
    ----------
    type : int
        C3D force platform type.
    corners : (4, 3) m, laboratory
    origin : (3,) m, plate axes
    channels : analog channel indices, from 0
    calibration : (rows, columns) or None
        The CAL_MATRIX as the file stores it, where it has one.
    """

    type: int
    corners: FloatArray
    origin: FloatArray
    channels: tuple[int, ...]
    calibration: FloatArray | None = None


@dataclass(frozen=True, slots=True)
class Recording:
    """Marker positions over time.

    Attributes
    ----------
    name : str
        The file's stem.
    source : str
        The file it was read from, as the user named it.
    rate : float
        Frames per second.
    first_frame : int
        The file's own number of the first frame.
    labels : (markers,) str
        As in the file, but for a prefix before a colon.
    positions : (frames, markers, 3) m
        In the laboratory frame exactly as recorded; NaN where missing.
    residuals : (frames, markers) m
        The file's own residual; NaN where missing or not given (0 in the file: not given).
    cameras : (frames, markers) int
        How many cameras saw the point; 0 where not known.
    up : str or None
        The up axis that the file declares (``+Y``, ``+Z``, ...); None where it declares none.
    units : str
        The file's own unit of length, ``mm`` or ``m``.
    remarks : str
        What a reader decided or dropped, one sentence each, for the user to see.
    """

    name: str
    source: str
    rate: float
    first_frame: int
    labels: tuple[str, ...]
    positions: FloatArray
    residuals: FloatArray
    cameras: NDArray[np.int64]
    up: str | None = None
    units: str = "m"
    remarks: tuple[str, ...] = ()
    analog: AnalogSignals | None = None
    plates: tuple[ForcePlate, ...] = ()
    events: tuple[Event, ...] = ()
    details: Mapping[str, object] = field(default_factory=dict)

    def __post_init__(self) -> None:
        shape = self.positions.shape
        if len(shape) != 3 or shape[1:] != (len(self.labels), 3):
            raise ValueError(f"positions are {shape} for {len(self.labels)} labels")
        if self.residuals.shape != shape[:2] or self.cameras.shape != shape[:2]:
            raise ValueError("residuals and cameras need the frames and markers of positions")

    def __len__(self) -> int:
        return len(self.positions)

    @property
    def frame(self) -> NDArray[np.int64]:
        """(frames,) The file's own frame numbers."""
        return np.arange(self.first_frame, self.first_frame + len(self), dtype=np.int64)

    @property
    def time(self) -> FloatArray:
        """(frames,) s, (frame number - 1) / rate."""
        return np.asarray((self.frame - 1) / self.rate, dtype=np.float64)

    @property
    def present(self) -> NDArray[np.bool_]:
        """(frames, markers) Whether a marker was seen."""
        return is_seen(self.positions)
