"""The floor as it is drawn: grid, the figure's shadow, and a bar of known length to measure by."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from condyle.viz import floor
from condyle.viz.figure import Figure
from condyle.viz.theme import Theme
from condyle.viz.viewpoint import Camera, level_axes, unit
from condyle.viz.window import Window

FloatArray = NDArray[np.float64]

GRID = ((floor.NARROW, 0.34, 1.4), (floor.WIDE, 0.78, 2.2))
"""Spacing (m), opacity, and width in pixels of a picture 2560 pixels wide."""

DESIGN_WIDTH = 2560.0

BAR_LENGTHS = (1.0, 0.5, 0.2, 0.1, 0.05, 0.02)
"""m; the longest that is no longer than `BAR_SHARE` of the figure's extent is taken."""

BAR_SHARE = 0.36
BAR_PARTS = 5
BAR_DEPTH, BAR_RIM = 0.07, 0.012
"""Of its length: how deep it is, and the dark rim round its light parts."""

BAR_BEFORE = 0.16
"""How far before the figure the bar lies, as a share of the figure's extent."""


def on_floor(figure: Figure, level: FloatArray, lift: float = 0.0) -> FloatArray:
    """(..., 3) m: places on the floor from their two level coordinates (..., 2)."""
    first, second, up = level_axes(figure.up)
    flat = level[..., :1] * first + level[..., 1:] * second
    return np.asarray(flat + (figure.floor + lift) * up)


def level_centre(figure: Figure, points: FloatArray) -> FloatArray:
    """(2,) m: the middle of the points' box, seen from above."""
    first, second, _ = level_axes(figure.up)
    middle = 0.5 * (points.min(axis=0) + points.max(axis=0))
    return np.array([middle @ first, middle @ second])


def draw_grid(
    window: Window, figure: Figure, centre: FloatArray, reach: float, theme: Theme, width: int
) -> None:
    """The grid within `reach` (m) of a place, fading outwards; `width` is the window's, in pixels."""
    for spacing, strength, stroke in GRID:
        lines = floor.grid_lines(centre, reach, spacing)
        opacity = strength * floor.fade(lines, centre, reach)
        places = on_floor(figure, lines)
        count, length = places.shape[:2]
        links = np.arange(count * length).reshape(count, length)
        cells = np.concatenate([np.full((count, 1), length), links], axis=1).ravel()
        mesh = window.pyvista.PolyData(places.reshape(-1, 3), lines=cells)
        colours = np.empty((count * length, 4), dtype=np.uint8)
        colours[:, :3] = theme.grid
        colours[:, 3] = np.round(255 * opacity.ravel())
        mesh["colour"] = colours
        stroke = max(stroke * width / DESIGN_WIDTH, 1.0)
        name = f"grid {spacing}"
        window.show(name, mesh, scalars="colour", rgb=True, lighting=False, line_width=stroke)


def draw_shadow(
    window: Window,
    figure: Figure,
    points: FloatArray,
    camera: Camera,
    centre: FloatArray,
    theme: Theme,
    *,
    pixels: int = floor.SHADOW_PIXELS,
) -> None:
    """The shadow of points (n, 3) m on the floor, from a light above the camera's left."""
    if not len(points):
        window.remove("shadow")
        return
    first, second, up = level_axes(figure.up)
    right, _, back = camera.axes()
    light = up + 0.16 * back - 0.22 * right
    heights = points @ up - figure.floor
    thrown = points - heights[:, None] * light / (light @ up)
    level = np.stack([thrown @ first, thrown @ second], axis=1)
    half = float(np.abs(level - centre).max()) + 0.35
    corners = centre + half * np.array([[-1, -1], [1, -1], [1, 1], [-1, 1]])
    mesh = window.pyvista.PolyData.from_regular_faces(
        on_floor(figure, corners, -0.001), np.array([[0, 1, 2, 3]])
    )
    mesh.active_texture_coordinates = np.array([[0, 0], [1, 0], [1, 1], [0, 1]], dtype=float)
    image = floor.shadow_image(
        level, heights, centre, half, theme.shadow, theme.darkest, pixels=pixels
    )
    texture = window.pyvista.Texture(image[::-1].copy())
    texture.interpolate = True
    window.show("shadow", mesh, texture=texture, lighting=False)


def bar_corners(figure: Figure, points: FloatArray, camera_right: FloatArray) -> FloatArray:
    """(2, 3) m: the ends of the bar, on the floor before the figure, level across the picture."""
    extent = float((points.max(axis=0) - points.min(axis=0)).max())
    length = next((b for b in BAR_LENGTHS if b <= BAR_SHARE * extent), BAR_LENGTHS[-1])
    up = figure.up
    right = unit(camera_right - (camera_right @ up) * up)
    before = np.cross(right, up)  # towards the camera, whichever way it looks down
    middle = 0.5 * (points.min(axis=0) + points.max(axis=0))
    away = float(((points - middle) @ before).max()) + BAR_BEFORE * extent
    centre = middle + away * before
    centre = centre - (centre @ up - figure.floor) * up
    half = 0.5 * length * right
    return np.stack([centre - half, centre + half])


def draw_bar(window: Window, figure: Figure, ends: FloatArray, theme: Theme) -> None:
    """The bar between its ends (2, 3) m, in light and dark parts."""
    along = ends[1] - ends[0]
    across = np.cross(figure.up, along)
    whole = [_quad(ends[0], along, across, 0.0, 1.0, 0.0)]
    light = [
        _quad(ends[0], along, across, part / BAR_PARTS, (part + 1) / BAR_PARTS, BAR_RIM)
        for part in range(1, BAR_PARTS, 2)
    ]
    for name, quads, colour, lift in (
        ("bar", whole, theme.ink, 0.002),
        ("bar parts", light, theme.ground, 0.004),
    ):
        points = np.concatenate(quads) + lift * figure.up
        faces = np.arange(len(points)).reshape(-1, 4)
        mesh = window.pyvista.PolyData.from_regular_faces(points, faces)
        window.show(name, mesh, color=colour, lighting=False)


def _quad(
    corner: FloatArray, along: FloatArray, across: FloatArray, start: float, end: float, rim: float
) -> FloatArray:
    """(4, 3) m: a part of the bar, without a rim."""
    low, high = rim, BAR_DEPTH - rim
    parts = ((start, low), (end, low), (end, high), (start, high))
    return np.stack([corner + a * along + b * across for a, b in parts])
