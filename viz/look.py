"""How a picture is drawn, in one value: from where, how large, on which ground, and how far residuals are stretched."""

from __future__ import annotations

from dataclasses import dataclass
from math import isfinite

from condyle.viz.theme import LIGHT, Theme
from condyle.viz.viewpoint import VIEWS, Camera, ViewError

SMALLEST, LARGEST = 120, 6000
"""Pixels along a picture's side; a graphics library draws no more than 16384, and twice as much is drawn."""

POINTS_PER_INCH, MM_PER_INCH = 72.0, 25.4

PRINTED_LETTERS = 7.5
"""Points of the body's letters in print; journals ask for 6 to 8 at least (common practice)."""

PRINT_SHAPE = 0.8
"""A printed picture's height over its width, where no size is given."""

SHAPE = (1280, 960)
"""Pixels of a picture for the screen."""


@dataclass(frozen=True, slots=True)
class Look:
    """How a picture is drawn.

    Attributes
    ----------
    view : a name of `viewpoint.VIEWS`, or a Camera that stands where it is
    size : (width, height) pixels
    exaggeration : float
        How many times longer than they are residuals and ellipsoids are drawn; the picture says so.
    theme : Theme
    transparent : bool
        Without the ground, for a slide or a poster.
    letters : float or None
        Pixels of the body's letters; None leaves them to the width.
    grows : bool
        Whether the height is what the figure has, and words come on top of it, as in a printed column.
    dpi : float or None
        Of print, noted in the file.
    """

    view: str | Camera = "oblique"
    size: tuple[int, int] = SHAPE
    exaggeration: float = 3.0
    theme: Theme = LIGHT
    transparent: bool = False
    letters: float | None = None
    grows: bool = False
    dpi: float | None = None

    def __post_init__(self) -> None:
        if isinstance(self.view, str) and self.view not in VIEWS:
            raise ViewError(f"no view is called '{self.view}'; the views are {', '.join(VIEWS)}.")
        if not all(SMALLEST <= side <= LARGEST for side in self.size):
            raise ViewError(
                f"a picture of {self.size[0]} x {self.size[1]} pixels cannot be drawn here.\n"
                f"  Each side has {SMALLEST} to {LARGEST}."
            )
        if not (isfinite(self.exaggeration) and self.exaggeration > 0.0):
            raise ViewError(
                f"residuals cannot be drawn {self.exaggeration:g} times as long.\n"
                "  Give a number above 0; 1 draws them as they are."
            )


def printed(
    *, width_mm: float, dpi: float, size: tuple[int, int] | None
) -> tuple[tuple[int, int], float]:
    """Pixels (width, height) of a picture in print, and of its letters.

    Parameters
    ----------
    size : (width, height), optional
        Only its shape counts.

    Raises
    ------
    ViewError
        Where the width or the density is none that is printed.
    """
    if not (10.0 <= width_mm <= 1000.0 and 50.0 <= dpi <= 2400.0):
        raise ViewError(
            f"{width_mm:g} mm at {dpi:g} dpi cannot be drawn.\n"
            "  A width has 10 to 1000 mm, a density 50 to 2400 dpi; a column is 85 mm at 300 dpi."
        )
    width = round(width_mm / MM_PER_INCH * dpi)
    shape = PRINT_SHAPE if size is None else size[1] / size[0]
    return (width, round(shape * width)), PRINTED_LETTERS / POINTS_PER_INCH * dpi
