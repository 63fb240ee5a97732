"""Check images: the fitted skeleton with the markers it was fitted to, and what misses by how much.

One picture shows one frame at full size; a contact sheet shows the whole trial. Both state their
exaggeration and say that they are a measuring aid.
"""

from __future__ import annotations

from pathlib import Path

import numpy as np
from PIL import Image

from condyle.model.errors import CondyleError
from condyle.model.whole_files import whole_file
from condyle.solver.results import FittedMotion
from condyle.viz import palette
from condyle.viz.contact_sheet import draw_contact_sheet
from condyle.viz.drawn_markers import DrawnMarkers, place_markers
from condyle.viz.figure import Figure, build_figure
from condyle.viz.floor import NARROW, WIDE
from condyle.viz.frame_figures import (
    CAUTION,
    best_row,
    frame_figures,
    typical_row,
    worst_row,
)
from condyle.viz.legend import (
    calm_foot,
    draw_left_out,
    draw_legend,
    legend_entries,
    write_within,
)
from condyle.viz.scene import SUPERSAMPLING, Scene
from condyle.viz.viewpoint import Camera, Room, ViewError, facing, frame_points, look_from

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

DESIGN_WIDTH = 1280.0
"""Pixels; the width at which the lettering has its full size."""

MARGIN = 36.0
"""Pixels at the design width, left and right of every line of text."""

HEADER, FOOTER = 112.0, 120.0
"""Pixels at the design width that the figure leaves free for words, at the top and the foot."""

SMALLEST_UNIT = 0.62
"""Lettering is not scaled down further than this, or nobody could read it."""


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
        `front`, `side` (from the person's right) or `oblique`.
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
    figure = build_figure(motion)
    camera = place_camera(figure, row, view=view, size=size, exaggeration=exaggeration)
    markers = place_markers(motion, row, exaggeration=exaggeration)
    with Scene(figure, size) as scene:
        large = scene.render(row, camera, exaggeration=exaggeration)
    outside = draw_left_out(large, markers, camera)
    image = large.reduce(SUPERSAMPLING)
    letter(image, motion, row)
    legend(image, motion, markers, exaggeration=exaggeration, outside=outside)
    return image


def overlay_camera(
    motion: FittedMotion,
    row: int,
    *,
    view: str = "oblique",
    size: tuple[int, int] = (1280, 960),
    exaggeration: float = 3.0,
) -> Camera:
    """The camera that ``draw_overlay`` uses when given the same arguments."""
    return place_camera(build_figure(motion), row, view=view, size=size, exaggeration=exaggeration)


def place_camera(
    figure: Figure, row: int, *, view: str, size: tuple[int, int], exaggeration: float
) -> Camera:
    """The camera that sees the whole figure and its markers from the named side."""
    motion = figure.motion
    if not 0 <= row < len(motion.time):
        raise ViewError(
            f"'{motion.name}' has no row {row}; its rows are 0 to {len(motion.time) - 1}."
        )
    towards_camera = look_from(view, facing(motion, np.array([row])), figure.up)
    points = figure.points(row, place_markers(motion, row, exaggeration=exaggeration))
    return frame_points(points, towards_camera, figure.up, size, room_for_figure(size))


def lettering_unit(width: int) -> float:
    """How large lettering is in a picture so wide, next to its size at the design width."""
    return max(width / DESIGN_WIDTH, SMALLEST_UNIT)


def room_for_figure(size: tuple[int, int]) -> Room:
    """The picture without the words; never less than its middle third."""
    unit = lettering_unit(size[0]) / size[1]
    return Room(0.05, 0.95, min(HEADER * unit, 0.33), max(1.0 - FOOTER * unit, 0.67))


def letter(image: Image.Image, motion: FittedMotion, row: int) -> None:
    """Write the title and the line of figures at the top."""
    unit = lettering_unit(image.width)
    left, width = MARGIN * unit, image.width - 2.0 * MARGIN * unit
    title = f"{motion.name}: fitted skeleton and measured markers"
    write_within(image, (left, 54 * unit), title, 25 * unit, width=width, bold=True)
    line = frame_figures(motion, row).line()
    write_within(image, (left, 84 * unit), line, 16.5 * unit, width=width, colour=palette.SOFT_INK)


def legend(
    image: Image.Image,
    motion: FittedMotion,
    markers: DrawnMarkers,
    *,
    exaggeration: float,
    outside: int,
) -> None:
    """Say what the signs mean, what the floor's lines measure, and what the picture is not."""
    unit = lettering_unit(image.width)
    left, foot = MARGIN * unit, image.height
    calm_foot(image, from_height=foot - 118 * unit, until_height=foot - 74 * unit)
    entries = legend_entries(motion, [markers], exaggeration=exaggeration, outside=outside)
    draw_legend(image, entries, left=left, baseline=foot - 58 * unit, pixels=16.5 * unit)
    note = f"{CAUTION}  Floor lines {NARROW:g} m and {WIDE:g} m apart."
    if len(markers.fitted) and exaggeration != 1.0:
        note = f"{note}  Measured markers stand at the end of the lengthened residual."
    write_within(
        image,
        (left, foot - 29 * unit),
        note,
        13.5 * unit,
        width=image.width - 2.0 * left,
        colour=palette.SOFT_INK,
    )


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


def save_picture(image: Image.Image, path: Path | str) -> None:
    """Write the picture whole or not at all; the path's ending names its kind (.png, .jpg).

    Raises
    ------
    PictureError
        Where the ending is not a picture's.
    CondyleError
        Where the system refuses the path.
    """
    path = Path(path)
    kind = picture_kind(path)
    with whole_file(path) as beside:
        image.save(beside, format=kind)
