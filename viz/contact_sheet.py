"""A whole trial on one sheet: panels at even times from the side and the front, and the RMS error over time.

Every panel has the same scale and each row the same floor line, and looks in the same direction, so that
panels can be compared with a ruler; the camera only follows the person along.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from PIL import Image, ImageDraw

from condyle.solver.results import FittedMotion
from condyle.viz.drawn_markers import DrawnMarkers, place_markers
from condyle.viz.error_strip import draw_error_strip
from condyle.viz.figure import Figure, build_figure
from condyle.viz.floor import NARROW, WIDE
from condyle.viz.frame_figures import CAUTION, frame_figures
from condyle.viz.legend import draw_left_out, draw_legend, legend_entries, write_within
from condyle.viz.palette import write
from condyle.viz.scene import MARKER_SIZE, SUPERSAMPLING, Scene
from condyle.viz.theme import LIGHT, Theme
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

VIEWS = {"side": "from the person's right", "front": "from the front"}
"""The rows of panels, in order."""

LAYOUTS = ((1.55, 8, 8), (1.0, 6, 6), (0.0, 8, 4))
"""From which height over width of the figure on: how many panels, and how many of them side by side."""

PANEL_SHAPES = (0.55, 1.95)
"""A panel's height over its width, least and most."""

ROOM = Room(left=0.06, right=0.94, top=0.09, bottom=0.93)
MARKER_SHARE = 1.25
"""Markers are so much larger than in a picture of their own."""


@dataclass(frozen=True, slots=True)
class Plan:
    """Where the panels stand.

    Attributes
    ----------
    rows : (panels,) of the motion
    markers : of each row
    cameras : view -> one camera a panel
    columns : panels side by side
    size : (width, height) pixels of a panel
    """

    rows: IntArray
    markers: list[DrawnMarkers]
    cameras: dict[str, list[Camera]]
    columns: int
    size: tuple[int, int]

    @property
    def block(self) -> int:
        """Pixels from one band of views to the next."""
        return len(self.cameras) * (self.size[1] + GAP // 2) + CAPTION + GAP

    @property
    def bands(self) -> int:
        """How many times the views stand above each other."""
        return -(-len(self.rows) // self.columns)

    @property
    def height(self) -> int:
        """Pixels of the sheet."""
        return HEADER + self.bands * self.block + STRIP + FOOTER

    def corner(self, panel: int, view: int) -> tuple[int, int]:
        """The upper left corner of a panel in one of its views; of its caption after the last."""
        band, column = divmod(panel, self.columns)
        x = MARGIN + column * (self.size[0] + GAP)
        return x, HEADER + band * self.block + view * (self.size[1] + GAP // 2)


def draw_contact_sheet(
    motion: FittedMotion,
    *,
    panels: int | None = None,
    exaggeration: float = 3.0,
    theme: Theme = LIGHT,
) -> Image.Image:
    """The trial in panels at even times, with each one's time and RMS error, and the error's course.

    Parameters
    ----------
    panels : int, optional
        At most one per frame is drawn; by default 6 or 8, as the figure's shape asks.

    Raises
    ------
    ViewError
        For fewer than one panel, or a motion without frames.
    NoGraphicsError
        Where the machine cannot draw.
    """
    figure = build_figure(motion)
    plan = plan_sheet(figure, panels, exaggeration)
    sheet = Image.new("RGB", (SHEET_WIDTH, plan.height), theme.page)
    write_header(sheet, motion, plan, exaggeration, theme)
    draw_panels(sheet, figure, plan, exaggeration, theme)
    for panel, row in enumerate(plan.rows):
        write_caption(sheet, motion, int(row), panel + 1, plan, theme)
    strip = draw_error_strip(motion, plan.rows, (SHEET_WIDTH - 2 * MARGIN, STRIP), theme)
    sheet.paste(strip, (MARGIN, plan.height - STRIP - FOOTER))
    entries = legend_entries(motion, plan.markers, exaggeration=exaggeration, theme=theme)
    foot = plan.height
    draw_legend(sheet, entries, left=MARGIN, baseline=foot - 44, pixels=15.5, theme=theme)
    note = (
        f"RMS error over the markers used in each frame.  Floor lines {NARROW:g} m and {WIDE:g} m "
        f"apart.  {CAUTION}"
    )
    room = SHEET_WIDTH - 2 * MARGIN
    write_within(sheet, (MARGIN, foot - 18), note, 13.5, width=room, colour=theme.soft_ink)
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


def plan_sheet(figure: Figure, panels: int | None, exaggeration: float) -> Plan:
    """Choose the panels' number and size by the figure's shape, and their cameras."""
    rows = even_rows(figure.motion, LAYOUTS[0][1] if panels is None else panels)
    together = np.concatenate(list(clouds_of(figure, rows, exaggeration)[2]))
    forward = facing(figure.motion, slice(None))
    shape = figure_shape(together, figure.up, forward)
    _, most, columns = next(layout for layout in LAYOUTS if shape >= layout[0])
    if panels is None and most != len(rows):
        rows = even_rows(figure.motion, most)
    markers, middles, clouds = clouds_of(figure, rows, exaggeration)
    together = np.concatenate(clouds)
    columns = min(columns, len(rows))
    width = min((SHEET_WIDTH - 2 * MARGIN - (columns - 1) * GAP) // columns, 480)
    size = (width, round(width * float(np.clip(1.02 * shape, *PANEL_SHAPES))))
    shared = {
        view: frame_points(together, look_from(view, forward, figure.up), figure.up, size, ROOM)
        for view in VIEWS
    }
    span = max(camera.visible_height() for camera in shared.values())
    cameras = {view: follow(at_span(camera, span), middles) for view, camera in shared.items()}
    return Plan(rows, markers, cameras, columns, size)


def clouds_of(
    figure: Figure, rows: IntArray, exaggeration: float
) -> tuple[list[DrawnMarkers], FloatArray, list[FloatArray]]:
    """Each row's markers, the figure's middle (3,), and what a camera must see, about that middle."""
    markers = [place_markers(figure.motion, int(row), exaggeration=exaggeration) for row in rows]
    clouds = [figure.points(int(row), drawn) for row, drawn in zip(rows, markers, strict=True)]
    middles = np.array([level_middle(cloud, figure.up) for cloud in clouds])
    return markers, middles, [c - m for c, m in zip(clouds, middles, strict=True)]


def figure_shape(points: FloatArray, up: FloatArray, forward: FloatArray) -> float:
    """Height over width of the points' box, in the wider of the two views."""
    across = max(float(np.ptp(points @ axis)) for axis in (forward, np.cross(forward, up)))
    return float(np.ptp(points @ up)) / max(across, 1e-6)


def at_span(camera: Camera, span: float) -> Camera:
    """The camera moved back until the picture's height spans so many metres."""
    back = (camera.position - camera.focal_point) * span / camera.visible_height()
    return Camera(camera.focal_point + back, camera.focal_point, camera.up, camera.view_angle)


def follow(camera: Camera, middles: FloatArray) -> list[Camera]:
    """The same camera moved along to each of some places (n, 3)."""
    return [
        Camera(camera.position + m, camera.focal_point + m, camera.up, camera.view_angle)
        for m in middles
    ]


def level_middle(points: FloatArray, up: FloatArray) -> FloatArray:
    """(3,): the middle of the points' box, at height zero."""
    middle = 0.5 * (points.min(axis=0) + points.max(axis=0))
    return np.asarray(middle - (middle @ up) * up)


def draw_panels(
    sheet: Image.Image, figure: Figure, plan: Plan, exaggeration: float, theme: Theme
) -> None:
    """Draw every panel into its place, and name each row of them."""
    with Scene(figure, plan.size, theme=theme) as scene:
        for number, (view, cameras) in enumerate(plan.cameras.items()):
            for panel, camera in enumerate(cameras):
                large = scene.render(
                    int(plan.rows[panel]),
                    camera,
                    exaggeration=exaggeration,
                    marker_radius=MARKER_SHARE * MARKER_SIZE * camera.visible_height(),
                )
                draw_left_out(large, plan.markers[panel], camera, theme)
                x, y = plan.corner(panel, number)
                sheet.paste(large.reduce(SUPERSAMPLING), (x, y))
                if panel % plan.columns == 0:
                    at = (x + 9, y + 20)
                    write(ImageDraw.Draw(sheet), at, view, 13.5, colour=theme.soft_ink)


def write_header(
    sheet: Image.Image, motion: FittedMotion, plan: Plan, exaggeration: float, theme: Theme
) -> None:
    """The trial's name, length and overall error."""
    rms = motion.rms_of_frames()
    known = rms[np.isfinite(rms)]
    parts = [f"{len(motion.time)} frames, {motion.time[-1] - motion.time[0]:.2f} s"]
    parts.append(f"{len(plan.rows)} at even times, {' and '.join(VIEWS.values())}, one scale")
    if len(known):
        parts.append(f"RMS error {1000 * np.median(known):.1f} mm (median)")
        parts.append(f"at worst {1000 * known.max():.1f} mm")
    room = SHEET_WIDTH - 2 * MARGIN
    title = f"{motion.name}: the whole trial"
    write_within(sheet, (MARGIN, 52), title, 26, width=room, colour=theme.ink, bold=True)
    line = "  ·  ".join(parts)
    write_within(sheet, (MARGIN, 82), line, 16.5, width=room, colour=theme.soft_ink)


def write_caption(
    sheet: Image.Image, motion: FittedMotion, row: int, number: int, plan: Plan, theme: Theme
) -> None:
    """The panel's number and time on the left, its error on the right."""
    figures = frame_figures(motion, row)
    draw = ImageDraw.Draw(sheet)
    x, y = plan.corner(number - 1, len(plan.cameras))
    wide = plan.size[0] > 300
    error = f"{figures.rms_mm:.1f} mm" if figures.used else "none used"
    pixels, baseline = (15.0, y + 18) if wide else (13.5, y + 17)
    write(draw, (x + 2, baseline), f"{number}", pixels, colour=theme.ink, bold=True)
    write(draw, (x + 24, baseline), f"{figures.time:.2f} s", pixels, colour=theme.ink)
    right = (x + plan.size[0] - 2, baseline)
    error = f"RMS {error}" if figures.used else error
    write(draw, right, error, pixels, colour=theme.soft_ink, anchor="rs")
