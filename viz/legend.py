"""The legend at a picture's foot, and the crosses of markers that were left out of the fit."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Literal

import numpy as np
from PIL import Image, ImageDraw

from condyle.solver.results import FittedMotion
from condyle.viz import palette
from condyle.viz.drawn_markers import DrawnMarkers
from condyle.viz.palette import Colour, fit_text, text_width, write
from condyle.viz.skeleton_plan import side_of
from condyle.viz.theme import LIGHT, Theme
from condyle.viz.viewpoint import Camera

Sign = Literal["dot", "bar", "cross", "halves", "arrow", "cloud"]

CROSS = 0.0062
"""Half a cross's width, as a share of the picture's height."""

INDENT, GAP = 1.45, 1.6
"""In letters: from a sign to its words, and between entries."""

SMOOTH = 4
"""Signs are drawn this many times larger and reduced: Pillow draws without smoothing."""


@dataclass(frozen=True, slots=True)
class Entry:
    """A sign and what it means."""

    sign: Sign
    colour: Colour
    text: str


def legend_entries(
    motion: FittedMotion,
    drawn: list[DrawnMarkers],
    *,
    exaggeration: float,
    outside: int = 0,
    theme: Theme = LIGHT,
) -> list[Entry]:
    """The signs that these pictures hold, and no others."""
    longer = "" if exaggeration == 1.0 else f", drawn ×{exaggeration:g}"
    entries = []
    if any(len(markers.fitted) for markers in drawn):
        entries += [
            Entry("dot", theme.measured, "measured marker"),
            Entry("dot", theme.fitted, "marker on fitted skeleton"),
            Entry("bar", theme.residual, f"residual{longer}"),
        ]
    if any(len(markers.alone) for markers in drawn):
        entries.append(Entry("dot", theme.alone, "on skeleton only"))
    if any(len(markers.left_out) for markers in drawn):
        beyond = f" ({outside} outside the picture)" if outside else ""
        entries.append(Entry("cross", theme.left_out, f"left out of the fit{beyond}"))
    if {"right", "left"} <= {side_of(name) for name in motion.segment_names}:
        entries.append(Entry("halves", theme.right_bone, "right / left bones"))
    return entries


def calm_foot(
    image: Image.Image, *, from_height: float, until_height: float, theme: Theme = LIGHT
) -> None:
    """Fade the picture towards its ground colour at the foot, so that words there stay readable."""
    heights = np.arange(image.height, dtype=np.float64)
    ramp = np.clip((heights - from_height) / (until_height - from_height), 0.0, 1.0)
    opacity = np.round(235.0 * ramp * ramp * (3.0 - 2.0 * ramp)).astype(np.uint8)
    mask = Image.fromarray(np.repeat(opacity[:, None], image.width, axis=1))
    image.paste(theme.ground, (0, 0, image.width, image.height), mask)


def draw_legend(
    image: Image.Image,
    entries: Sequence[Entry],
    *,
    left: float,
    baseline: float,
    pixels: float,
    theme: Theme = LIGHT,
) -> None:
    """Write the entries in one row from the left, smaller where they would not fit."""
    room = image.width - 2.0 * left
    while pixels > 7.0 and row_width(entries, pixels) > room:
        pixels -= 0.5
    draw = ImageDraw.Draw(image)
    x = left
    for entry in entries:
        draw_sign(image, entry, (x + 0.5 * pixels, baseline - 0.36 * pixels), pixels, theme)
        write(draw, (x + INDENT * pixels, baseline), entry.text, pixels, colour=theme.ink)
        x += GAP * pixels + entry_width(entry, pixels)


def entry_width(entry: Entry, pixels: float) -> float:
    """Pixels that one entry takes, sign and words."""
    return INDENT * pixels + text_width(entry.text, pixels)


def row_width(entries: Sequence[Entry], pixels: float) -> float:
    """Pixels that the entries take in one row."""
    gaps = GAP * pixels * max(len(entries) - 1, 0)
    return gaps + sum(entry_width(entry, pixels) for entry in entries)


def draw_sign(
    image: Image.Image,
    entry: Entry,
    centre: tuple[float, float],
    size: float,
    theme: Theme = LIGHT,
) -> None:
    """Draw one sign, about as large as a letter, smoothly."""
    side = int(np.ceil(1.5 * size))
    patch = Image.new("RGBA", (SMOOTH * side, SMOOTH * side), (*entry.colour, 0))
    draw = ImageDraw.Draw(patch)
    middle, r = 0.5 * SMOOTH * side, 0.42 * SMOOTH * size
    fill = (*entry.colour, 255)
    if entry.sign == "bar":
        h = 0.24 * r
        draw.rounded_rectangle(
            (middle - 1.25 * r, middle - h, middle + 1.25 * r, middle + h), h, fill
        )
    elif entry.sign == "arrow":
        draw.line((middle - 1.25 * r, middle, middle + 0.5 * r, middle), fill, round(0.4 * r))
        tip = (middle + 1.3 * r, middle)
        draw.polygon([tip, (middle, middle - 0.7 * r), (middle, middle + 0.7 * r)], fill)
    elif entry.sign == "cloud":
        draw.ellipse(
            (middle - 1.2 * r, middle - 0.8 * r, middle + 1.2 * r, middle + 0.8 * r),
            (*entry.colour, 120),
            (*entry.colour, 255),
            round(0.16 * r),
        )
    elif entry.sign == "cross":
        for sign in (-1, 1):
            a, b = (
                (middle - 0.8 * r, middle - 0.8 * sign * r),
                (middle + 0.8 * r, middle + 0.8 * sign * r),
            )
            draw.line((*a, *b), fill=fill, width=round(0.32 * r))
    else:
        circle = (middle - r, middle - r, middle + r, middle + r)
        draw.ellipse(circle, fill=fill)
        if entry.sign == "halves":
            draw.pieslice(circle, -90, 90, fill=(*theme.left_bone, 255))
            draw.ellipse(circle, outline=(*theme.left_out, 255), width=round(0.13 * r))
    small = patch.reduce(SMOOTH)
    corner = (round(centre[0] - 0.5 * side), round(centre[1] - 0.5 * side))
    image.paste(small, corner, small)


def draw_left_out(
    large: Image.Image, markers: DrawnMarkers, camera: Camera, theme: Theme = LIGHT
) -> int:
    """Draw a grey cross for each marker left out, on top of all; how many lie outside the picture.

    A thin line leads to the marker's place on the skeleton, at its true length.
    """
    size = (large.width, large.height)
    draw = ImageDraw.Draw(large)
    half, thin = CROSS * large.height, max(1, round(0.0010 * large.height))
    outside = 0
    measured = camera.project(markers.left_out, size)
    fitted = camera.project(markers.left_out_fitted, size)
    for place, home in zip(measured, fitted, strict=True):
        if not (np.isfinite(place).all() and (place >= 0).all() and (place < size).all()):
            outside += 1
            continue
        if np.isfinite(home).all():
            draw.line((*place, *home), fill=theme.left_out, width=thin)
        for colour, width in ((theme.ground, 5 * thin), (theme.left_out, 3 * thin)):
            for sign in (-1, 1):
                a = (place[0] - half, place[1] - sign * half)
                b = (place[0] + half, place[1] + sign * half)
                draw.line((*a, *b), fill=colour, width=width)
    return outside


def write_within(
    image: Image.Image,
    at: tuple[float, float],
    text: str,
    pixels: float,
    *,
    width: float,
    colour: Colour = palette.INK,
    bold: bool = False,
) -> None:
    """Write one line that never leaves its room: smaller, or cut short, if need be."""
    fitted, pixels = fit_text(text, pixels, width, bold=bold)
    write(ImageDraw.Draw(image), at, fitted, pixels, colour=colour, bold=bold)
