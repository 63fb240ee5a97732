"""Colours and lettering of every picture.

The colours that carry meaning are Okabe and Ito's (2008), told apart by people with any of the
common kinds of colour blindness; everything else stays pale and grey so that they stand out.
"""

from __future__ import annotations

from functools import cache
from importlib.util import find_spec
from pathlib import Path

from PIL import ImageDraw, ImageFont

Colour = tuple[int, int, int]

BLUE: Colour = (0, 114, 178)
ORANGE: Colour = (230, 159, 0)
PALE_ORANGE: Colour = (244, 214, 148)
VERMILLION: Colour = (213, 94, 0)
GREEN: Colour = (0, 158, 115)
GREY: Colour = (122, 126, 134)

RIGHT_BONE: Colour = (240, 231, 214)
LEFT_BONE: Colour = (203, 211, 220)
MIDDLE_BONE: Colour = (232, 228, 220)

SKY: Colour = (222, 228, 236)
GROUND: Colour = (250, 251, 252)
GRID: Colour = (96, 112, 136)

INK: Colour = (30, 38, 50)
SOFT_INK: Colour = (84, 94, 108)

Font = ImageFont.FreeTypeFont | ImageFont.ImageFont


@cache
def font(pixels: float, *, bold: bool = False) -> Font:
    """A readable font of that height: DejaVu Sans where it came along, else Pillow's own."""
    spec = find_spec("matplotlib")  # PyVista brings it; only its font file is wanted
    if spec is not None and spec.origin:
        fonts = Path(spec.origin).parent / "mpl-data" / "fonts" / "ttf"
        file = fonts / ("DejaVuSans-Bold.ttf" if bold else "DejaVuSans.ttf")
        if file.is_file():
            return ImageFont.truetype(str(file), size=pixels)
    return ImageFont.load_default(size=pixels)


def text_width(text: str, pixels: float, *, bold: bool = False) -> float:
    """How many pixels wide the text is."""
    return float(font(pixels, bold=bold).getlength(text))


def fit_text(text: str, pixels: float, width: float, *, bold: bool = False) -> tuple[str, float]:
    """The text, smaller or if need be cut short, so that it fits; with its size in pixels."""
    smallest = max(0.7 * pixels, 7.0)
    while pixels > smallest and text_width(text, pixels, bold=bold) > width:
        pixels -= 0.5
    if text_width(text, pixels, bold=bold) <= width:
        return text, pixels
    while text and text_width(f"{text}…", pixels, bold=bold) > width:
        text = text[:-1]
    return f"{text.rstrip()}…", pixels


def write(
    draw: ImageDraw.ImageDraw,
    at: tuple[float, float],
    text: str,
    pixels: float,
    *,
    colour: Colour = INK,
    bold: bool = False,
    anchor: str = "ls",
) -> None:
    """Write text with its baseline (anchor `ls`: left end) at a place in the picture."""
    draw.text(at, text, fill=colour, font=font(pixels, bold=bold), anchor=anchor)
