"""The RMS error of every frame over time, as one quiet strip with chosen instants marked."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray
from PIL import Image, ImageDraw

from condyle.solver.results import FittedMotion
from condyle.viz.palette import write
from condyle.viz.theme import LIGHT, Theme

FloatArray = NDArray[np.float64]

LEFT, RIGHT, TOP, BOTTOM = 44, 14, 54, 40
"""Pixels between the strip's edges and its axes."""

SMOOTH = 3
"""The curve is drawn this many times larger and reduced."""

MOST_TICKS = 10
"""On the time axis; few enough that their numbers never touch."""


def draw_error_strip(
    motion: FittedMotion,
    rows: NDArray[np.int64],
    size: tuple[int, int],
    theme: Theme = LIGHT,
) -> Image.Image:
    """The strip: RMS error in mm over time in s, with numbered marks at the rows.

    Frames without a used marker leave a gap in the line.
    """
    rms_mm = 1000.0 * motion.rms_of_frames()
    known = rms_mm[np.isfinite(rms_mm)]
    step = nice_step(max(float(known.max()) if len(known) else 1.0, 0.1) / 3.0)
    top = step * np.ceil(max(float(known.max()) if len(known) else 1.0, 0.1) / step)
    start, end = float(motion.time[0]), float(motion.time[-1])
    if end <= start:
        start, end = start - 0.5, start + 0.5
    wide, high = size[0] - LEFT - RIGHT, size[1] - TOP - BOTTOM

    def across(time: FloatArray) -> FloatArray:
        return np.asarray(LEFT + wide * (time - start) / (end - start))

    def down(millimetres: FloatArray) -> FloatArray:
        return np.asarray(TOP + high * (1.0 - millimetres / top))

    levels = np.arange(0.0, top + 0.5 * step, step)
    image = Image.new("RGB", (SMOOTH * size[0], SMOOTH * size[1]), theme.page)
    draw = ImageDraw.Draw(image)
    for y in SMOOTH * down(levels):
        draw.line((SMOOTH * LEFT, y, SMOOTH * (LEFT + wide), y), fill=theme.rule, width=SMOOTH)
    for x in SMOOTH * across(motion.time[rows]):
        draw.line((x, SMOOTH * TOP, x, SMOOTH * (TOP + high)), fill=theme.left_out, width=SMOOTH)
    draw_curve(draw, SMOOTH * across(motion.time), SMOOTH * down(rms_mm), theme)
    small = image.reduce(SMOOTH)
    letter_axes(small, (start, end), levels, across, down, theme)
    for number, (row, x) in enumerate(zip(rows, across(motion.time[rows]), strict=True), start=1):
        mark(small, number, float(x), float(down(rms_mm[row])), theme)
    return small


def nice_step(least: float) -> float:
    """The smallest of 1, 2 or 5 times a power of ten that is at least so large."""
    power = 10.0 ** np.floor(np.log10(least))
    return float(next(m * power for m in (1.0, 2.0, 5.0, 10.0) if m * power >= least * 0.999))


def draw_curve(draw: ImageDraw.ImageDraw, x: FloatArray, y: FloatArray, theme: Theme) -> None:
    """Draw the line in pieces between its gaps; a lone frame becomes a dot."""
    known = np.isfinite(y)
    edges = np.flatnonzero(np.diff(np.r_[False, known, False].astype(int)))
    for first, last in edges.reshape(-1, 2):
        points = np.stack([x[first:last], y[first:last]], axis=1)
        if last - first == 1:
            (px, py), r = points[0], 1.5 * SMOOTH
            draw.ellipse((px - r, py - r, px + r, py + r), fill=theme.measured)
        else:
            draw.line([tuple(point) for point in points], theme.measured, 2 * SMOOTH, "curve")


def letter_axes(
    image: Image.Image,
    span: tuple[float, float],
    levels: FloatArray,
    across: Callable[[FloatArray], FloatArray],
    down: Callable[[FloatArray], FloatArray],
    theme: Theme,
) -> None:
    """Number both axes and say what they are."""
    draw = ImageDraw.Draw(image)
    foot = image.height - BOTTOM
    decimals = 0 if levels[1] >= 1.0 else int(np.ceil(-np.log10(levels[1])))
    for level, y in zip(levels, down(levels), strict=True):
        text = f"{level:.{decimals}f}"
        write(draw, (LEFT - 9, y), text, 12.5, colour=theme.soft_ink, anchor="rm")
    write(draw, (0, 9), "RMS error, mm", 12.5, colour=theme.soft_ink, anchor="lm")
    step = nice_step((span[1] - span[0]) / MOST_TICKS)
    ticks = step * np.arange(np.ceil(span[0] / step - 1e-9), span[1] / step + 1e-9)
    decimals = 0 if step >= 1.0 else int(np.ceil(-np.log10(step) - 1e-9))
    for tick, x in zip(np.round(ticks, 9), across(ticks), strict=True):
        draw.line((x, foot, x, foot + 5), fill=theme.left_out)
        text = f"{tick + 0.0:.{decimals}f}"
        write(draw, (x, foot + 15), text, 12.5, colour=theme.soft_ink, anchor="mm")
    end = (image.width - RIGHT, foot + 32)
    write(draw, end, "time, s", 12.5, colour=theme.soft_ink, anchor="rm")


def mark(image: Image.Image, number: int, x: float, y: float, theme: Theme) -> None:
    """Number one instant above the strip, with a dot on the curve where it has a value."""
    draw = ImageDraw.Draw(image)
    write(draw, (x, TOP - 9), f"{number}", 13, colour=theme.ink, bold=True, anchor="mm")
    if np.isfinite(y):
        draw.ellipse((x - 3.5, y - 3.5, x + 3.5, y + 3.5), fill=theme.fitted, outline=theme.page)
