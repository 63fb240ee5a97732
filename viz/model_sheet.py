"""One sheet that shows what a model says: segments, joint axes with their positive sense, markers.

Decided here: the joints' arrows and the markers stand in panels of their own, each named at the
panel's side; what a bone hides shines through it. The model stands at rest, every orientation at zero.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray
from PIL import Image, ImageChops

from condyle.model.skeleton import Skeleton
from condyle.solver.results import FittedMotion
from condyle.viz import palette
from condyle.viz.coordinate_senses import RestingModel, Sense, coordinate_senses, resting_model
from condyle.viz.figure import Figure, build_figure
from condyle.viz.frame_figures import CAUTION
from condyle.viz.legend import Entry, draw_legend, write_within
from condyle.viz.palette import Colour
from condyle.viz.scene import SUPERSAMPLING, Scene
from condyle.viz.sheet_panels import (
    Panel,
    is_wide,
    panel_arrows,
    panel_points,
    plan_panels,
    size_of,
    towards,
)
from condyle.viz.side_labels import Label, draw_labels, set_labels
from condyle.viz.turn_arrows import Arrow
from condyle.viz.viewpoint import Camera, Room, frame_points

FloatArray = NDArray[np.float64]

PANEL_WIDTH, WIDE_PANEL_WIDTH = 1380, 1760
"""Pixels; a wide panel is for a figure that is wider than it is tall."""

PANEL_HEIGHTS = (620, 1620)
"""Pixels, least and most."""

COLUMN = 392
"""Pixels that names take at either side of a panel."""

MARGIN, HEADER, CAPTION, FOOTER, GAP = 44, 128, 50, 104, 22
"""Pixels."""

LETTERS, NOTE_GAP, NAME_GAP = 25.5, 66.0, 38.0
"""Pixels: height of the names; distance between names with a range beneath, and without."""

ARROW_BAR, ROD_BAR = 0.0024, 0.0011
"""Radius of an arrow's bar and of an axis, as shares of the figure's size."""

MARKER_RADIUS, LANDMARK_RADIUS = 0.0085, 0.0045
"""As shares of the figure's size."""

AXIS_COLOURS: tuple[Colour, Colour, Colour] = (palette.VERMILLION, palette.GREEN, palette.BLUE)
"""For axes that are nearest to the laboratory's X, Y, Z; Okabe and Ito's."""

HIDDEN = 0.42
"""How strongly an arrow shows through a bone that hides it."""


def draw_model_sheet(skeleton: Skeleton) -> Image.Image:
    """Draw a model at rest, with every coordinate's axis and sense and every marker by name.

    Raises
    ------
    NoGraphicsError
        Where the machine cannot draw.
    """
    resting = resting_model(skeleton)
    senses = coordinate_senses(resting)
    figure = build_figure(resting.motion(with_markers=False))
    panels = plan_panels(resting, figure, senses)
    wide = is_wide(figure)
    columns = max(1, 3 if len(panels) == 3 and not wide else min(len(panels), 2))
    width = WIDE_PANEL_WIDTH if wide or columns == 1 else PANEL_WIDTH
    heights = [_panel_height(figure, resting, panel, width) for panel in panels]
    rows = [range(i, min(i + columns, len(panels))) for i in range(0, len(panels), columns)]
    row_heights = [max(heights[i] for i in row) for row in rows]
    total = HEADER + sum(row_heights) + len(rows) * (CAPTION + GAP) + FOOTER
    sheet = Image.new(
        "RGB", (2 * MARGIN + columns * width + (columns - 1) * GAP, total), (255, 255, 255)
    )
    _write_header(sheet, skeleton, resting)
    y = HEADER
    for row, height in zip(rows, row_heights, strict=True):
        for column, index in enumerate(row):
            x = MARGIN + column * (width + GAP)
            picture = _draw_panel(resting, figure, panels[index], (width, height))
            write_within(sheet, (x, y + 34), panels[index].title, 25, width=width, bold=True)
            sheet.paste(picture, (x, y + CAPTION))
        y += height + CAPTION + GAP
    _write_footer(sheet, senses, resting)
    return sheet


def _panel_height(figure: Figure, resting: RestingModel, panel: Panel, width: int) -> int:
    """Tall enough for the figure at the width between the names, and for the names themselves."""
    camera = Camera(towards(figure, panel.view), np.zeros(3), figure.up)
    across, upwards, _ = np.ptp(panel_points(resting, figure, panel) @ camera.axes().T, axis=0)
    figure_height = 1.12 * (width - 2 * COLUMN) * upwards / max(float(across), 1e-6)
    each = len(panel.senses) * NOTE_GAP + len(_named_points(resting, panel)) * NAME_GAP
    wanted = max(figure_height, 0.5 * 1.2 * each + 80)
    return int(np.clip(wanted, *PANEL_HEIGHTS))


def _camera(resting: RestingModel, figure: Figure, panel: Panel, size: tuple[int, int]) -> Camera:
    side = COLUMN / size[0]
    room = Room(side, 1.0 - side, 0.04, 0.96)
    points = panel_points(resting, figure, panel)
    return frame_points(points, towards(figure, panel.view), figure.up, size, room)


def _named_points(resting: RestingModel, panel: Panel) -> dict[str, FloatArray]:
    """Name -> (3,) m: the panel's markers, and landmarks that no marker shares its name with."""
    if not panel.names:
        return {}
    motion = resting.motion(with_markers=True)
    markers = dict(zip(motion.marker_names, motion.fitted[0], strict=True))
    return {name: markers[name] for name in panel.names}


def _landmarks(motion: FittedMotion) -> FloatArray:
    """(n, 3) m, laboratory axes."""
    poses = motion.laboratory_from_segment[0]
    points = [
        poses[i, :3, :3] @ place + poses[i, :3, 3]
        for i, segment in enumerate(motion.segment_names)
        for place in motion.landmarks.get(segment, {}).values()
    ]
    return np.array(points).reshape(-1, 3)


def _draw_panel(
    resting: RestingModel, figure: Figure, panel: Panel, size: tuple[int, int]
) -> Image.Image:
    camera = _camera(resting, figure, panel, size)
    large_size = (SUPERSAMPLING * size[0], SUPERSAMPLING * size[1])
    extent = size_of(figure) if not panel.near else 0.9 * camera.visible_height()
    with Scene(figure, size) as scene:
        if panel.senses:
            arrows = panel_arrows(resting, figure, panel)
            _draw_arrows(scene, arrows, extent)
            labels = [_arrow_label(arrow, camera, large_size) for arrow in arrows]
        else:
            points = _named_points(resting, panel)
            everything = resting.motion(with_markers=True).fitted[0]
            scene.draw_balls("markers", everything, MARKER_RADIUS * extent, palette.ORANGE)
            landmarks = _landmarks(figure.motion)
            scene.draw_balls("landmarks", landmarks, LANDMARK_RADIUS * extent, palette.INK)
            places = camera.project(np.array(list(points.values())), large_size)
            labels = [
                Label(name, "", palette.SOFT_INK, place[None])
                for name, place in zip(points, places, strict=True)
            ]
        large = scene.render(0, camera, exaggeration=1.0)
        if panel.senses:
            alone = scene.render(0, camera, exaggeration=1.0, with_bones=False)
            _draw_arrows(scene, (), extent)
            empty = scene.render(0, camera, exaggeration=1.0, with_bones=False)
            large = shining_through(large, alone, empty)
    gap = SUPERSAMPLING * (NOTE_GAP if panel.senses else NAME_GAP)
    placed = set_labels(
        labels,
        middle=0.5 * large.width,
        top=0.7 * gap,
        bottom=large.height - 0.7 * gap,
        gap=gap,
    )
    draw_labels(
        large,
        placed,
        margin=SUPERSAMPLING * 8,
        column=SUPERSAMPLING * (COLUMN - 40),
        pixels=SUPERSAMPLING * LETTERS,
    )
    return large.reduce(SUPERSAMPLING)


def shining_through(picture: Image.Image, alone: Image.Image, empty: Image.Image) -> Image.Image:
    """The picture with what is in `alone` but not in `empty` shown faintly where bones hide it."""
    drawn = ImageChops.difference(alone, empty).convert("L").point(lambda v: 255 if v > 6 else 0)
    return Image.composite(Image.blend(picture, alone, HIDDEN), picture, drawn)


def _draw_arrows(scene: Scene, arrows: Sequence[Arrow], extent: float) -> None:
    for axis, colour in enumerate(AXIS_COLOURS):
        paths = [arrow.path for arrow in arrows if nearest_axis(arrow.sense) == axis]
        scene.draw_paths(f"arrows {axis}", paths, ARROW_BAR * extent, colour, heads=True)
    rods = [arrow.rod for arrow in arrows if arrow.sense.turns]
    scene.draw_paths("axes", rods, ROD_BAR * extent, palette.SOFT_INK, heads=False)


def nearest_axis(sense: Sense) -> int:
    """0, 1, 2: the laboratory axis that a sense's axis is nearest to."""
    return int(np.abs(sense.direction).argmax())


def _arrow_label(arrow: Arrow, camera: Camera, size: tuple[int, int]) -> Label:
    colour = AXIS_COLOURS[nearest_axis(arrow.sense)]
    places = camera.project(arrow.path, size)
    return Label(arrow.sense.name, range_text(arrow.sense), colour, places)


def range_text(sense: Sense) -> str:
    """A coordinate's range in degrees or millimetres, or where it is held."""
    factor, unit = (float(np.degrees(1.0)), "deg") if sense.unit == "rad" else (1000.0, "mm")
    if sense.held is not None:
        return f"held at {factor * sense.held:.0f} {unit}"
    low, high = factor * sense.lower, factor * sense.upper
    if np.isfinite(low) and np.isfinite(high):
        return f"{low:.0f} to {high:.0f} {unit}"
    if np.isfinite(low) or np.isfinite(high):
        return f"from {low:.0f} {unit}" if np.isfinite(low) else f"up to {high:.0f} {unit}"
    return "turn, no range" if sense.turns else "slide, no range"


def _write_header(sheet: Image.Image, skeleton: Skeleton, resting: RestingModel) -> None:
    room = sheet.width - 2 * MARGIN
    write_within(sheet, (MARGIN, 62), skeleton.name, 38, width=room, bold=True)
    follow = sum(1 for c in skeleton.coordinates if c.follows is not None)
    unplaced = len(skeleton.markers) - len(resting.motion(with_markers=True).marker_names)
    parts = [
        f"{len(skeleton.segments)} segments",
        f"{resting.functions.kinematics.freedoms.size} freedoms",
        *([f"{follow} coordinates follow others and have no arrow"] if follow else []),
        f"{len(skeleton.markers)} markers",
        *([f"{unplaced} of them without a place"] if unplaced else []),
        "drawn at rest",
    ]
    line = "  ·  ".join(parts)
    write_within(sheet, (MARGIN, 104), line, 24, width=room, colour=palette.SOFT_INK)


def _write_footer(sheet: Image.Image, senses: Sequence[Sense], resting: RestingModel) -> None:
    words = ("X (forward)", "Y (up)", "Z (to the right)")
    entries = [
        Entry("bar", AXIS_COLOURS[axis], f"axis nearest to {words[axis]}")
        for axis in sorted({nearest_axis(sense) for sense in senses})
    ]
    if resting.skeleton.markers:
        entries.append(Entry("dot", palette.ORANGE, "marker"))
    if any(segment.landmarks for segment in resting.skeleton.segments):
        entries.append(Entry("dot", palette.INK, "landmark"))
    draw_legend(sheet, entries, left=MARGIN, baseline=sheet.height - 60, pixels=23)
    write_within(
        sheet,
        (MARGIN, sheet.height - 22),
        f"Arrows point the way in which a coordinate grows.  {CAUTION}",
        20,
        width=sheet.width - 2 * MARGIN,
        colour=palette.SOFT_INK,
    )
