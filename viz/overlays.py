"""Check images in the fewest words: one frame, from one side, as everything else of the project draws it.

Stills with more to say are composed in `stills`; here are the plain one, its camera, and saving.
"""

from __future__ import annotations

from pathlib import Path
from typing import Any

from PIL import Image

from condyle.model.errors import CondyleError
from condyle.model.whole_files import whole_file
from condyle.solver.results import FittedMotion
from condyle.viz.contact_sheet import draw_contact_sheet
from condyle.viz.drawn_markers import place_markers
from condyle.viz.extras import Extras
from condyle.viz.figure import build_figure
from condyle.viz.frame_figures import best_row, typical_row, worst_row
from condyle.viz.look import Look
from condyle.viz.stills import draw_still, row_of, setting_of, still_camera, words_of
from condyle.viz.viewpoint import Camera

__all__ = [
    "best_row",
    "draw_contact_sheet",
    "draw_overlay",
    "overlay_camera",
    "picture_kind",
    "save_picture",
    "typical_row",
    "worst_row",
]


class PictureError(CondyleError):
    """A picture was asked for in a form that no picture has."""


def draw_overlay(
    motion: FittedMotion,
    row: int,
    *,
    view: str = "oblique",
    size: tuple[int, int] = (1280, 960),
    exaggeration: float = 3.0,
) -> Image.Image:
    """One frame: bones, measured markers, the same markers on the skeleton, residuals drawn longer.

    Parameters
    ----------
    row : int
        Which row of ``motion``.
    view : str
        `front`, `side` (from the person's right), `oblique` or `top`.
    size : (width, height) pixels
    exaggeration : float
        How many times longer than they are the residuals are drawn; the picture says so.

    Raises
    ------
    ViewError
        For an unknown view or a row that the motion does not have.
    NoGraphicsError
        Where the machine cannot draw.
    """
    return draw_still(motion, row, Look(view, size, exaggeration))


def overlay_camera(
    motion: FittedMotion,
    row: int,
    *,
    view: str = "oblique",
    size: tuple[int, int] = (1280, 960),
    exaggeration: float = 3.0,
) -> Camera:
    """The camera that ``draw_overlay`` uses when given the same arguments."""
    return camera_of(motion, row, Look(view, size, exaggeration))


def camera_of(motion: FittedMotion, row: int, look: Look, extras: Extras | None = None) -> Camera:
    """The camera that ``draw_still`` uses when given the same arguments."""
    extras = extras or Extras()
    figure = build_figure(motion)
    markers = place_markers(motion, row_of(motion, row), exaggeration=look.exaggeration)
    setting = setting_of(words_of(motion, row, markers, look, extras), look)
    return still_camera(figure, row, look, extras, setting)


def picture_kind(path: Path | str) -> str:
    """The kind of picture that a path's ending names, so that a wrong one is told before drawing.

    Raises
    ------
    PictureError
        Where the ending is not a picture's.
    """
    path = Path(path)
    kind = Image.registered_extensions().get(path.suffix.lower())
    if kind not in Image.SAVE:
        raise PictureError(f"{path}: '{path.suffix}' is not a kind of picture; '.png' would be.")
    return str(kind)


def save_picture(image: Image.Image, path: Path | str, *, dpi: float | None = None) -> None:
    """Write the picture whole or not at all; the path's ending names its kind (.png, .jpg).

    `dpi` is noted in the file where its kind can hold it.

    Raises
    ------
    PictureError
        Where the ending is not a picture's.
    CondyleError
        Where the system refuses the path.
    """
    path = Path(path)
    kind = picture_kind(path)
    noted: dict[str, Any] = {} if dpi is None else {"dpi": (dpi, dpi), "resolution": dpi}
    if image.mode == "RGBA" and kind in ("JPEG", "PDF", "BMP"):
        raise PictureError(f"{path}: {kind} holds no transparency; '.png' does.")
    with whole_file(path) as beside:
        image.save(beside, format=kind, **noted)
