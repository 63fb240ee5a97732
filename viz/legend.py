"""The legend at a picture's foot, and the crosses of markers that were left out of the fit."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np
from PIL import Image, ImageDraw

from condyle.solver.results import FittedMotion
from condyle.viz import palette
from condyle.viz.drawn_markers import DrawnMarkers
from condyle.viz.palette import Colour, fit_text, text_width, write
from condyle.viz.skeleton_plan import side_of
from condyle.viz.viewpoint import Camera

Sign = Literal["dot", "bar", "cross", "halves"]

CROSS = 0.0062
"""Half a cross's width, as a share of the picture's height."""

SMOOTH = 4
"""Signs are drawn this many times larger and reduced: Pillow draws without smoothing."""


@dataclass(frozen=True, slots=True)
class Entry:
    """A sign and what it means."""

    sign: Sign
    colour: Colour
    text: str


def legend_entries(
    motion: FittedMotion, drawn: list[DrawnMarkers], *, exaggeration: float, outside: int = 0
) -> list[Entry]:
    """The signs that these pictures hold, and no others."""
    longer = "" if exaggeration == 1.0 else f", drawn ×{exaggeration:g}"
    entries = []
    if any(len(markers.fitted) for markers in drawn):
        entries += [
            Entry("dot", palette.BLUE, "measured marker"),
            Entry("dot", palette.ORANGE, "marker on fitted skeleton"),
            Entry("bar", palette.VERMILLION, f"residual{longer}"),
        ]
    if any(len(markers.alone) for markers in drawn):
        entries.append(Entry("dot", palette.PALE_ORANGE, "on skeleton only"))
    if any(len(markers.left_out) for markers in drawn):
        beyond = f" ({outside} outside the picture)" if outside else ""
        entries.append(Entry("cross", palette.GREY, f"left out of the fit{beyond}"))
    if {"right", "left"} <= {side_of(name) for name in motion.segment_names}:
        entries.append(Entry("halves", palette.RIGHT_BONE, "right / left bones"))
    return entries


def calm_foot(image: Image.Image, *, from_height: float, until_height: float) -> None:
    """Fade the picture towards its ground colour at the foot, so that words there stay readable."""
    heights = np.arange(image.height, dtype=np.float64)
    ramp = np.clip((heights - from_height) / (until_height - from_height), 0.0, 1.0)
    opacity = np.round(235.0 * ramp * ramp * (3.0 - 2.0 * ramp)).astype(np.uint8)
    mask = Image.fromarray(np.repeat(opacity[:, None], image.width, axis=1))
    image.paste(palette.GROUND, (0, 0, image.width, image.height), mask)


def draw_legend(
    image: Image.Image, entries: list[Entry], *, left: float, baseline: float, pixels: float
) -> None:
    """Write the entries in one row from the left, smaller where they would not fit."""
    room = image.width - 2.0 * left
    gap, indent = 1.6, 1.45  # of the letter height
    while pixels > 7.0 and row_width(entries, pixels, gap, indent) > room:
        pixels -= 0.5
    draw = ImageDraw.Draw(image)
    x = left
    for entry in entries:
        draw_sign(image, entry, (x + 0.5 * pixels, baseline - 0.36 * pixels), pixels)
        write(draw, (x + indent * pixels, baseline), entry.text, pixels, colour=palette.INK)
        x += (indent + gap) * pixels + text_width(entry.text, pixels)


def row_width(entries: list[Entry], pixels: float, gap: float, indent: float) -> float:
    """Pixels that the entries take in one row."""
    texts = sum(text_width(entry.text, pixels) for entry in entries)
    return texts + pixels * (len(entries) * (indent + gap) - gap)


def draw_sign(image: Image.Image, entry: Entry, centre: tuple[float, float], size: float) -> None:
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
            draw.pieslice(circle, -90, 90, fill=(*palette.LEFT_BONE, 255))
            draw.ellipse(circle, outline=(*palette.GREY, 255), width=round(0.13 * r))
    small = patch.reduce(SMOOTH)
    corner = (round(centre[0] - 0.5 * side), round(centre[1] - 0.5 * side))
    image.paste(small, corner, small)


def draw_left_out(large: Image.Image, markers: DrawnMarkers, camera: Camera) -> int:
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
            draw.line((*place, *home), fill=palette.GREY, width=thin)
        for colour, width in (((255, 255, 255), 5 * thin), (palette.GREY, 3 * thin)):
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
