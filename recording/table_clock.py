"""The rate and the first frame's number, from the times in a table.

Decided here: how regular times must be, how times written with few decimals are told from times
that jitter, and how a clock that starts anywhere becomes ``time = (frame - 1) / rate``.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from condyle.recording.c3d_layout import refusal

FloatArray = NDArray[np.float64]

JITTER = 0.01
"""Share of the median step by which a step may differ: a rate is one number."""

MOST_DECIMALS = 9
"""Decimals of a second that are looked for in written times."""

FINE_ENOUGH = 0.25
"""Of a step; times rounded more coarsely are refused. A lost frame puts times half a step off."""

EXACT = 1e-9
"""s; steps that differ by less do not differ: what is left is the arithmetic of doubles."""

SLOWEST = 5.0
"""Hz; below it the times may well be in milliseconds, which is then said."""

LARGEST_FRAME = 2**53
"""Frame numbers up to this are exact in a double."""


@dataclass(frozen=True, slots=True)
class Clock:
    """Rate (Hz), the first frame's number, and what to tell the user about them."""

    rate: float
    first_frame: int
    remarks: tuple[str, ...]


def read_clock(
    time: FloatArray, frame: FloatArray | None, path: Path, row_name: Callable[[int], str]
) -> Clock:
    """Find the rate and the first frame's number.

    Parameters
    ----------
    time : (frames,) s
    frame : (frames,) or None
        The file's own frame numbers.
    row_name : callable
        What to call a row, such as ``line 12``.

    Raises
    ------
    RecordingError
        Where times or frames are missing, run backwards, repeat, or are not evenly spaced.
    """
    check_times(time, path, row_name)
    remarks: list[str] = []
    rate = read_rate(time, path, row_name, remarks)
    by_time = float(time[0]) * rate + 1
    if frame is None:
        first = round(by_time) if abs(by_time) < LARGEST_FRAME else 0
    else:
        first = first_number(frame, path, row_name)
    if abs(by_time) >= LARGEST_FRAME:
        raise refusal(path, f"its clock starts at {time[0]:g} s", "let it start near 0")
    if first < 1:
        remarks.append(f"The file counts its frames from {first}; here the first is 1.")
        first = 1
    shift = (first - 1) / rate - time[0]
    if abs(shift) * rate > JITTER:
        remarks.append(
            f"The clock of the file starts at {time[0]:.6g} s; here time is (frame - 1) / rate, "
            f"so frame {first} is at {(first - 1) / rate:.6g} s."
        )
    return Clock(rate, first, tuple(remarks))


def check_times(time: FloatArray, path: Path, row_name: Callable[[int], str]) -> None:
    """Every row needs a time, later than the row before."""
    absent = np.flatnonzero(~np.isfinite(time))
    if len(absent):
        raise refusal(path, f"{row_name(absent[0])} has no time", "give every frame its time")
    wrong = np.flatnonzero(np.diff(time) <= 0)
    if len(wrong):
        row = int(wrong[0]) + 1
        how = "repeats the time of" if time[row] == time[row - 1] else "is earlier than"
        raise refusal(
            path,
            f"{row_name(row)} ({time[row]:.9g} s) {how} {row_name(row - 1)} ({time[row - 1]:.9g} s)",
            "give one recording, its frames in order",
        )


def read_rate(
    time: FloatArray, path: Path, row_name: Callable[[int], str], remarks: list[str]
) -> float:
    """Frames per second; the plainest number that the written times allow."""
    if len(time) == 1:
        remarks.append("The rate of a single frame is not known; taken as 1 Hz.")
        return 1.0
    steps = np.diff(time)
    middle = float(np.median(steps))
    unit = written_unit(time)
    uneven = np.abs(steps - middle) > JITTER * middle
    if uneven.any():
        if not even_when_rounded(time, unit):
            row = int(np.flatnonzero(uneven)[0]) + 1
            raise refusal(
                path,
                f"{row_name(row)} comes {steps[row - 1]:.6g} s after the row before it where "
                f"{middle:.6g} s are usual",
                "keep a row for every frame, evenly spaced, its cells empty where nothing was seen",
            )
        remarks.append(
            f"The times are written to {unit:g} s, which is coarse for steps of "
            f"{middle:.4g} s; the rate is that of the whole recording."
        )
    exact = EXACT + 4 * float(np.spacing(np.abs(time).max()))
    known_to = exact if np.all(np.abs(steps - middle) <= exact) else max(unit, exact)
    rate = plainest_rate(len(steps), float(time[-1] - time[0]), known_to)
    if rate < SLOWEST:
        remarks.append(
            f"Frames are {1 / rate:.4g} s apart ({rate:.4g} Hz): if the times are in "
            "milliseconds, convert them to seconds."
        )
    return rate


def written_unit(time: FloatArray) -> float:
    """s; the last decimal that the times use."""
    for decimals in range(MOST_DECIMALS):
        scaled = time * 10.0**decimals
        if np.all(np.abs(scaled - np.round(scaled)) <= 1e-12 * np.maximum(np.abs(scaled), 1.0)):
            return float(10.0**-decimals)
    return float(10.0**-MOST_DECIMALS)


def even_when_rounded(time: FloatArray, unit: float) -> bool:
    """Whether evenly spaced times, rounded to `unit` (s), could read like this."""
    even = np.linspace(time[0], time[-1], len(time))
    fine_enough = unit <= FINE_ENOUGH * (time[-1] - time[0]) / (len(time) - 1)
    return bool(fine_enough and np.all(np.abs(time - even) <= unit * (1 + 1e-9)))


def plainest_rate(steps: int, duration: float, known_to: float) -> float:
    """Hz; the number with fewest decimals that explains a duration (s) known to `known_to`."""
    for decimals in range(6):
        rate = round(steps / duration, decimals)
        if rate > 0 and abs(steps / rate - duration) <= known_to:
            return float(rate)
    return steps / duration


def first_number(frame: FloatArray, path: Path, row_name: Callable[[int], str]) -> int:
    """The first of the file's own frame numbers, which count on by one."""
    whole = np.isfinite(frame) & (frame == np.round(frame)) & (np.abs(frame) < LARGEST_FRAME)
    if not whole.all():
        row = int(np.flatnonzero(~whole)[0])
        raise refusal(path, f"{row_name(row)} has no whole frame number", "number every frame")
    wrong = np.flatnonzero(np.diff(frame) != 1)
    if len(wrong):
        row = int(wrong[0]) + 1
        raise refusal(
            path,
            f"{row_name(row)} is frame {frame[row]:.0f} after frame {frame[row - 1]:.0f}",
            "keep a row for every frame, its cells empty where nothing was seen",
        )
    return int(frame[0])
