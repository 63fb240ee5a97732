"""A whole trial on one sheet: panels at even times from the side, and the RMS error over time.

Every panel has the same scale and the same floor line, and looks in the same direction, so that
panels can be compared with a ruler; the camera only follows the person along.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from PIL import Image, ImageDraw

from condyle.solver.results import FittedMotion
from condyle.viz import palette
from condyle.viz.drawn_markers import DrawnMarkers, place_markers
from condyle.viz.error_strip import draw_error_strip
from condyle.viz.figure import Figure, build_figure
from condyle.viz.frame_figures import CAUTION, frame_figures
from condyle.viz.legend import draw_left_out, draw_legend, legend_entries, write_within
from condyle.viz.palette import write
from condyle.viz.scene import MARKER_SIZE, SUPERSAMPLING, Scene
from condyle.viz.viewpoint import (
    Camera,
    Room,
    ViewError,
    facing,
    frame_points,
    look_from,
)

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

SHEET_WIDTH, MARGIN, GAP = 1600, 36, 14
HEADER, CAPTION, STRIP, FOOTER = 104, 34, 206, 80
"""Pixels."""

COLUMNS = 4
"""Panels in a row; more panels make more rows."""

PANEL_SHAPE = 1.0
"""A panel's height over its width."""

ROOM = Room(left=0.07, right=0.93, top=0.07, bottom=0.90)


def draw_contact_sheet(
    motion: FittedMotion, *, panels: int = 8, exaggeration: float = 3.0
) -> Image.Image:
    """The trial in panels at even times, with each one's time and RMS error, and the error's course.

    Parameters
    ----------
    panels : int
        At most one per frame is drawn.

    Raises
    ------
    ViewError
        For fewer than one panel, or a motion without frames.
    NoGraphicsError
        Where the machine cannot draw.
    """
    rows = even_rows(motion, panels)
    columns = min(len(rows), COLUMNS)
    width = (SHEET_WIDTH - 2 * MARGIN - (columns - 1) * GAP) // columns
    size = (width, min(round(PANEL_SHAPE * width), 460))
    deep = -(-len(rows) // columns)
    height = HEADER + deep * (size[1] + CAPTION + GAP) + STRIP + FOOTER
    sheet = Image.new("RGB", (SHEET_WIDTH, height), (255, 255, 255))
    write_header(sheet, motion, rows, exaggeration)
    pictures = draw_panels(motion, rows, size, exaggeration)
    for index, (row, picture) in enumerate(zip(rows, pictures, strict=True)):
        x = MARGIN + (index % columns) * (width + GAP)
        y = HEADER + (index // columns) * (size[1] + CAPTION + GAP)
        sheet.paste(picture, (x, y))
        write_caption(sheet, motion, int(row), index + 1, (x, y + size[1]), width)
    strip = draw_error_strip(motion, rows, (SHEET_WIDTH - 2 * MARGIN, STRIP))
    sheet.paste(strip, (MARGIN, height - STRIP - FOOTER))
    drawn = [place_markers(motion, int(row), exaggeration=exaggeration) for row in rows]
    entries = legend_entries(motion, drawn, exaggeration=exaggeration)
    draw_legend(sheet, entries, left=MARGIN, baseline=height - 46, pixels=15)
    write_within(
        sheet,
        (MARGIN, height - 18),
        f"RMS error over the markers used in each frame.  {CAUTION}",
        13.5,
        width=SHEET_WIDTH - 2 * MARGIN,
        colour=palette.SOFT_INK,
    )
    return sheet


def even_rows(motion: FittedMotion, panels: int) -> IntArray:
    """(panels,): rows at even times from the first to the last."""
    frames = len(motion.time)
    if panels < 1 or frames < 1:
        raise ViewError(
            f"'{motion.name}' has {frames} frames and {panels} panels were asked for; "
            "a contact sheet needs at least one of each."
        )
    wanted = np.linspace(motion.time[0], motion.time[-1], min(panels, frames))
    return np.unique([int(np.argmin(np.abs(motion.time - t))) for t in wanted])


def draw_panels(
    motion: FittedMotion, rows: IntArray, size: tuple[int, int], exaggeration: float
) -> list[Image.Image]:
    """The panels' pictures, in the order of the rows."""
    figure = build_figure(motion)
    markers = [place_markers(motion, int(row), exaggeration=exaggeration) for row in rows]
    cameras = shared_scale(figure, rows, markers, size)
    pictures = []
    with Scene(figure, size) as scene:
        for row, camera, drawn in zip(rows, cameras, markers, strict=True):
            large = scene.render(
                int(row),
                camera,
                exaggeration=exaggeration,
                marker_radius=1.35 * MARKER_SIZE * camera.visible_height(),
            )
            draw_left_out(large, drawn, camera)
            pictures.append(large.reduce(SUPERSAMPLING))
    return pictures


def shared_scale(
    figure: Figure, rows: IntArray, markers: list[DrawnMarkers], size: tuple[int, int]
) -> list[Camera]:
    """Cameras side by side: one direction, one distance, one height above the floor.

    Each follows its own panel's middle; the distance and height are those that hold all the
    panels' figures laid on top of each other.
    """
    towards = look_from("side", facing(figure.motion, slice(None)), figure.up)
    clouds = [figure.points(int(row), drawn) for row, drawn in zip(rows, markers, strict=True)]
    middles = [level_middle(cloud, figure.up) for cloud in clouds]
    together = np.concatenate([c - m for c, m in zip(clouds, middles, strict=True)])
    shared = frame_points(together, towards, figure.up, size, ROOM)
    return [
        Camera(shared.position + middle, shared.focal_point + middle, shared.up, shared.view_angle)
        for middle in middles
    ]


def level_middle(points: FloatArray, up: FloatArray) -> FloatArray:
    """(3,): the middle of the points' box, at height zero."""
    middle = 0.5 * (points.min(axis=0) + points.max(axis=0))
    return np.asarray(middle - (middle @ up) * up)


def write_header(
    sheet: Image.Image, motion: FittedMotion, rows: IntArray, exaggeration: float
) -> None:
    """The trial's name, length and overall error."""
    rms = motion.rms_of_frames()
    known = rms[np.isfinite(rms)]
    parts = [f"{len(motion.time)} frames, {motion.time[-1] - motion.time[0]:.2f} s"]
    parts.append(f"{len(rows)} at even times, seen from the person's right, one scale")
    parts.append(f"residuals drawn ×{exaggeration:g}")
    if len(known):
        parts.append(f"RMS error {1000 * np.median(known):.1f} mm (median)")
        parts.append(f"at worst {1000 * known.max():.1f} mm")
    room = SHEET_WIDTH - 2 * MARGIN
    write_within(sheet, (MARGIN, 52), f"{motion.name}: the whole trial", 26, width=room, bold=True)
    write_within(
        sheet, (MARGIN, 82), "  ·  ".join(parts), 16.5, width=room, colour=palette.SOFT_INK
    )


def write_caption(
    sheet: Image.Image,
    motion: FittedMotion,
    row: int,
    number: int,
    at: tuple[int, int],
    width: int,
) -> None:
    """The panel's number and time on the left, its error on the right."""
    figures = frame_figures(motion, row)
    draw = ImageDraw.Draw(sheet)
    error = f"RMS {figures.rms_mm:.1f} mm" if figures.used else "no marker used"
    baseline = at[1] + 23
    write(draw, (at[0] + 2, baseline), f"{number}", 15, bold=True)
    write(draw, (at[0] + 26, baseline), f"t = {figures.time:.2f} s", 15)
    write(draw, (at[0] + width - 2, baseline), error, 15, colour=palette.SOFT_INK, anchor="rs")
