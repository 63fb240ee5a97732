"""The still part of a static trial, and where its markers are on average.

Decided here: what still means. The speed of a marker is its displacement over 0.1 s (so that
measurement noise does not pass for movement); the speed of a frame is that of its faster markers
(the 90th percentile), since one swinging arm is enough to smear a posture. The still part is the
longest run of quiet frames of at least 0.5 s; where there is none, the quietest 0.5 s, as long as
that is no movement. Common practice: a static trial is a person standing quietly.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from condyle.model.errors import FitError
from condyle.recording.gaps import find_gaps
from condyle.recording.recording import Recording

FloatArray = NDArray[np.float64]

SPEED_SPAN = 0.1
"""s; noise of 1 mm per axis reads 24 mm/s over it (RMS), where from frame to frame at 200 Hz it
reads 490 mm/s."""

SHORTEST_STILL = 0.5
"""s; shorter moments occur within movement, at every turning point."""

QUIET_SPEED = 0.05
"""m/s; the sway of quiet standing, and noise of 1 mm per axis in the faster tenth of the markers, stay
below (from memory, loose bound)."""

MOVING_SPEED = 0.08
"""m/s; above it a posture is not held: it changes by 4 cm within half a second."""

FASTER_MARKERS = 90.0
"""Percentile of marker speeds that stands for a frame; a few ghosts or swaps do not count."""


@dataclass(frozen=True, slots=True)
class StillPart:
    """Where a recording stands still.

    Attributes
    ----------
    frames : slice
        Indices into the recording.
    start, end : float
        s, of the first and the last frame on the recording's clock.
    positions : (markers, 3) m
        Mean over the still part; NaN where a marker was never seen in it.
    speed : float
        m/s, mean over the part of the speed of its faster markers; 0 for one frame.
    """

    frames: slice
    start: float
    end: float
    positions: FloatArray
    speed: float


def still_part(recording: Recording, *, start: float | None, end: float | None) -> StillPart:
    """Find the still part, or take the one that was chosen.

    Parameters
    ----------
    start, end : float or None
        s on the recording's clock; with either given the part between is taken whole.

    Raises
    ------
    FitError
        When it never stands still, when no marker is seen, or when the choice lies outside.
    """
    if not recording.present.any():
        raise FitError(f"{recording.source}: no marker is seen in any frame; give another static.")
    if start is not None or end is not None:
        frames = chosen_frames(recording, start, end)
        speed = frame_speeds(recording.positions[frames], recording.rate)
        return checked(recording, frames, mean_of_present(speed), chosen=True)
    speed = frame_speeds(recording.positions, recording.rate)
    frames = longest_quiet(speed, recording.rate) or quietest(speed, recording.rate)
    return checked(recording, frames, mean_of_present(speed[frames]), chosen=False)


def chosen_frames(recording: Recording, start: float | None, end: float | None) -> slice:
    """The frames between two times, both included."""
    time = recording.time
    first = time[0] if start is None else start
    last = time[-1] if end is None else end
    half = 0.5 / recording.rate
    inside = time[0] - half <= first <= last <= time[-1] + half
    picked = np.flatnonzero((time >= first - half) & (time <= last + half))
    if not inside or not len(picked):
        raise FitError(
            f"{recording.source}: {first:g} s to {last:g} s is no part of the recording, which "
            f"runs from {time[0]:.3f} s to {time[-1]:.3f} s; choose --from and --to within it."
        )
    return slice(int(picked[0]), int(picked[-1]) + 1)


def frame_speeds(positions: FloatArray, rate: float) -> FloatArray:
    """(frames,) m/s, the speed of the faster markers; NaN where none can be told.

    Parameters
    ----------
    positions : (frames, markers, 3) m
    rate : float
        Hz.
    """
    frames = len(positions)
    if frames == 1:
        return np.where(np.isfinite(positions).any(axis=(1, 2)), 0.0, np.nan)
    reach = max(1, round(SPEED_SPAN / 2 * rate))
    index = np.arange(frames)
    before, after = np.maximum(index - reach, 0), np.minimum(index + reach, frames - 1)
    moved = np.linalg.norm(positions[after] - positions[before], axis=2)
    speeds = moved / ((after - before) / rate)[:, None]
    known = np.isfinite(speeds).any(axis=1)
    result = np.full(frames, np.nan)
    if known.any():
        result[known] = np.nanpercentile(speeds[known], FASTER_MARKERS, axis=1)
    return result


def shortest_window(frames: int, rate: float) -> int:
    """How many frames the shortest still part has: all of them where a recording is shorter."""
    return min(frames, max(1, round(SHORTEST_STILL * rate)))


def longest_quiet(speed: FloatArray, rate: float) -> slice | None:
    """The longest run of quiet frames, where it is long enough."""
    runs = find_gaps(~(speed <= QUIET_SPEED)[:, None])
    if not len(runs.length):
        return None
    longest = int(np.argmax(runs.length))
    if runs.length[longest] < shortest_window(len(speed), rate):
        return None
    return slice(int(runs.start[longest]), int(runs.start[longest] + runs.length[longest]))


def quietest(speed: FloatArray, rate: float) -> slice:
    """The shortest window with the least mean speed; frames without a speed count as moving."""
    window = shortest_window(len(speed), rate)
    finite = np.where(np.isfinite(speed), speed, np.inf)
    means = np.lib.stride_tricks.sliding_window_view(finite, window).mean(axis=1)
    first = int(np.argmin(means))
    return slice(first, first + window)


def mean_of_present(speed: FloatArray) -> float:
    """The mean of the speeds that are known; infinite where none is."""
    known = speed[np.isfinite(speed)]
    return float(known.mean()) if len(known) else float("inf")


def checked(recording: Recording, frames: slice, speed: float, *, chosen: bool) -> StillPart:
    """The part, unless it moves."""
    time = recording.time[frames]
    if speed > MOVING_SPEED:
        what = "the chosen part moves" if chosen else "it never stands still"
        how = f"at {speed:.2f} m/s" if np.isfinite(speed) else "with no marker seen throughout"
        raise FitError(
            f"{recording.source}: {what}: {'' if chosen else 'the quietest part is '}"
            f"{time[0]:.2f} s to {time[-1]:.2f} s {how} (still is below {MOVING_SPEED} m/s); "
            "choose the still part with --from and --to, or give another static."
        )
    positions = recording.positions[frames]
    present = recording.present[frames][..., None]
    count = present.sum(axis=0)
    total = np.where(present, positions, 0.0).sum(axis=0)
    mean = np.where(count > 0, total / np.maximum(count, 1), np.nan)
    return StillPart(frames, float(time[0]), float(time[-1]), mean, speed)
