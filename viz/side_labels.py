"""Names beside a figure: set in two columns at its sides, each led to its place by a thin line.

Decided here: a label goes to the side its place is on unless that side is full, labels of a side keep
the order of their places, and none lies on another.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from PIL import Image, ImageDraw

from condyle.viz import palette
from condyle.viz.palette import Colour, fit_text, text_width, write

FloatArray = NDArray[np.float64]

LEADER_ALPHA = 190


@dataclass(frozen=True, slots=True)
class Label:
    """A name, what stands smaller beneath it, and the places (pixels) any of which it may point at."""

    text: str
    note: str
    colour: Colour
    places: FloatArray  # (n, 2)


@dataclass(frozen=True, slots=True)
class SetLabel:
    """A label with its side, its height (pixels, middle) and the place it points at."""

    label: Label
    right: bool
    y: float
    place: FloatArray


def set_labels(
    labels: Sequence[Label], *, middle: float, top: float, bottom: float, gap: float
) -> list[SetLabel]:
    """Each label with a side and a height, `gap` pixels apart where the room allows it."""
    sides = choose_sides(labels, middle=middle, most=max(int((bottom - top) // gap), 1))
    placed = []
    for right in (False, True):
        own = [label for label, side in zip(labels, sides, strict=True) if side == right]
        points = [outermost(label, right=right) for label in own]
        order = np.argsort([point[1] for point in points], kind="stable")
        targets = np.array([points[i][1] for i in order])
        heights = spread(targets, gap=gap, low=top, high=bottom)
        placed += [
            SetLabel(own[i], right, float(y), points[i])
            for i, y in zip(order, heights, strict=True)
        ]
    return placed


def choose_sides(labels: Sequence[Label], *, middle: float, most: int) -> list[bool]:
    """True for the right: where the places lie, moved over where one side has too many."""
    offsets = np.array([float(label.places[:, 0].mean()) - middle for label in labels])
    order = np.argsort(offsets, kind="stable")
    left = int((offsets < 0).sum())
    half = len(labels) // 2
    slack = max(1, round(0.2 * len(labels)))
    left = int(np.clip(left, max(half - slack, len(labels) - most), min(half + slack, most)))
    sides = np.ones(len(labels), dtype=bool)
    sides[order[:left]] = False
    return [bool(side) for side in sides]


def outermost(label: Label, *, right: bool) -> FloatArray:
    """The label's place nearest to its side."""
    x = label.places[:, 0]
    return np.asarray(label.places[int(x.argmax() if right else x.argmin())])


def spread(targets: FloatArray, *, gap: float, low: float, high: float) -> FloatArray:
    """Heights nearest to ascending targets (least squares) that keep their distance and the room.

    With the gaps subtracted this is isotonic regression, solved by pooling adjacent violators
    (Barlow et al. 1972, Statistical Inference under Order Restrictions).
    """
    count = len(targets)
    if not count:
        return targets
    gap = min(gap, (high - low) / max(count - 1, 1))
    pools: list[tuple[float, int]] = []
    for value in targets - gap * np.arange(count):
        pools.append((float(value), 1))
        while len(pools) > 1 and pools[-2][0] > pools[-1][0]:
            (a, m), (b, n) = pools[-2:]
            pools[-2:] = [((a * m + b * n) / (m + n), m + n)]
    flat = np.concatenate([np.full(n, value) for value, n in pools])
    flat = np.clip(flat, low, high - gap * (count - 1))
    return np.asarray(flat + gap * np.arange(count))


def draw_labels(
    image: Image.Image, labels: Sequence[SetLabel], *, margin: float, column: float, pixels: float
) -> None:
    """Write the labels in columns so wide at the picture's margins, with their lines and dots."""
    draw = ImageDraw.Draw(image, "RGBA")
    thin = max(1, round(0.075 * pixels))
    for one in labels:
        text, size = fit_text(one.label.text, pixels, column - 0.6 * pixels)
        width = text_width(text, size)
        edge = image.width - margin - column if one.right else margin + column
        begin = edge + 0.25 * pixels * (1 if one.right else -1)
        elbow = edge - 0.5 * pixels * (1 if one.right else -1)
        line = [(begin, one.y), (elbow, one.y), tuple(one.place)]
        draw.line(line, fill=(255, 255, 255, 150), width=3 * thin, joint="curve")
        draw.line(line, fill=(*one.label.colour, LEADER_ALPHA), width=thin, joint="curve")
        x, y = one.place
        dot = 0.16 * pixels
        draw.ellipse((x - dot, y - dot, x + dot, y + dot), fill=(*one.label.colour, 255))
        start = edge + 0.45 * pixels if one.right else edge - 0.45 * pixels - width
        baseline = one.y + (0.34 * pixels if not one.label.note else -0.10 * pixels)
        write(draw, (start, baseline), text, size, colour=palette.INK)
        if one.label.note:
            small = 0.74 * pixels
            note, small = fit_text(one.label.note, small, column - 0.6 * pixels)
            at = edge + 0.45 * pixels
            if not one.right:
                at = edge - 0.45 * pixels - text_width(note, small)
            write(draw, (at, baseline + 1.28 * small), note, small, colour=palette.SOFT_INK)
