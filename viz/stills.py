"""One frame as a picture: composed here from the scene, its extras and its words.

Nothing is decided by the camera's back door: the words are set first, the figure gets the room they leave, and
what a marker's pixel is can be computed from the camera alone (`still_camera`).
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray
from PIL import Image, ImageDraw

from condyle.solver.results import FittedMotion
from condyle.viz.drawn_markers import DrawnMarkers, place_markers
from condyle.viz.extras import Extras, entries_of, place_extras
from condyle.viz.figure import Figure, build_figure
from condyle.viz.floor import NARROW, WIDE
from condyle.viz.frame_figures import CAUTION, frame_figures
from condyle.viz.ground import bar_corners, draw_bar
from condyle.viz.layers import lay_over
from condyle.viz.legend import draw_left_out, legend_entries
from condyle.viz.lettering import NOTE, Setting, Words, set_words
from condyle.viz.look import Look
from condyle.viz.palette import write
from condyle.viz.scene import MARKER_NAMES, SUPERSAMPLING, Scene
from condyle.viz.viewpoint import Camera, ViewError, facing, frame_points, look_from, picture_up

FloatArray = NDArray[np.float64]


def draw_still(
    motion: FittedMotion, row: int, look: Look | None = None, extras: Extras | None = None
) -> Image.Image:
    """One frame: bones, measured markers, the same markers on the skeleton, residuals drawn longer.

    Returns
    -------
    Image, with an opacity channel only where the look is transparent

    Raises
    ------
    ViewError
        For a row that the motion does not have.
    NoGraphicsError
        Where the machine cannot draw.
    """
    look, extras = look or Look(), extras or Extras()
    figure = build_figure(motion)
    markers = place_markers(motion, row_of(motion, row), exaggeration=look.exaggeration)
    setting = setting_of(words_of(motion, row, markers, look, extras), look)
    camera = still_camera(figure, row, look, extras, setting)
    with Scene(figure, setting.size, theme=look.theme) as scene:
        bar = bar_corners(figure, figure.points(row, markers), camera.axes()[0])
        large = shoot(scene, row, camera, look, extras, bar)
    outside = draw_left_out(large, markers, camera, look.theme)
    image = large.convert("RGBa").reduce(SUPERSAMPLING).convert("RGBA")
    if outside:
        words = words_of(motion, row, markers, look, extras, outside=outside)
        setting = replace(setting_of(words, look), size=setting.size)
    setting.write(image, calm=not look.transparent)
    write_bar_length(image, bar, camera, setting)
    return image if look.transparent else image.convert("RGB")


def shoot(
    scene: Scene, row: int, camera: Camera, look: Look, extras: Extras, bar: FloatArray
) -> Image.Image:
    """The picture without its words, `SUPERSAMPLING` times as large, with an opacity channel."""
    scene.show(row, camera, exaggeration=look.exaggeration)
    draw_bar(scene.window, scene.figure, bar, look.theme)
    layers = place_extras(
        scene, extras, visible_height=camera.visible_height(), exaggeration=look.exaggeration
    )
    names = [n for layer in layers for n in layer.names if n not in MARKER_NAMES]
    with scene.window.without(names):
        picture = scene.shoot(transparent=look.transparent)
        depth = scene.window.depth() if layers else None
    for layer in layers:
        if depth is not None:
            seen = scene.window.layer(layer.names)
            lay_over(picture, depth, seen, in_front=layer.in_front, hidden=layer.hidden)
    return Image.fromarray(picture)


def setting_of(words: Words, look: Look) -> Setting:
    """The words set for a look; where that grows with them, its size is the setting's."""
    setting = set_words(words, look.size, letters=look.letters, theme=look.theme)
    if not look.grows:
        return setting
    width, height = look.size
    return replace(setting, size=(width, round(height + setting.header + setting.footer)))


def still_camera(figure: Figure, row: int, look: Look, extras: Extras, setting: Setting) -> Camera:
    """The camera of a still: the look's own, or the nearest that sees everything in the words' room."""
    if isinstance(look.view, Camera):
        return look.view
    motion = figure.motion
    forward = facing(motion, np.array([row]))
    towards = look_from(look.view, forward, figure.up)
    up = picture_up(look.view, forward, figure.up)
    markers = place_markers(motion, row, exaggeration=look.exaggeration)
    points = figure.points(row, markers)
    right = Camera(towards, np.zeros(3), up).axes()[0]
    everything = [points, extras.points(look.exaggeration), bar_corners(figure, points, right)]
    return frame_points(np.concatenate(everything), towards, up, setting.size, setting.room())


def row_of(motion: FittedMotion, row: int) -> int:
    """The row, if the motion has it."""
    if not 0 <= row < len(motion.time):
        raise ViewError(
            f"'{motion.name}' has no row {row}; its rows are 0 to {len(motion.time) - 1}."
        )
    return row


def words_of(
    motion: FittedMotion,
    row: int,
    markers: DrawnMarkers,
    look: Look,
    extras: Extras,
    *,
    outside: int = 0,
) -> Words:
    """What a still says: its title, the line of figures, the legend and the notes."""
    notes = [CAUTION, f"Floor lines {NARROW:g} m and {WIDE:g} m apart."]
    if len(markers.fitted) and look.exaggeration != 1.0:
        notes.append("Measured markers stand at the end of the lengthened residual.")
    legend = legend_entries(
        motion, [markers], exaggeration=look.exaggeration, outside=outside, theme=look.theme
    )
    return Words(
        f"{motion.name}: fitted skeleton and measured markers",
        motion.name,
        frame_figures(motion, row).parts(),
        [*legend, *entries_of(extras, exaggeration=look.exaggeration, theme=look.theme)],
        [*notes, *extras.notes],
    )


def write_bar_length(image: Image.Image, bar: FloatArray, camera: Camera, setting: Setting) -> None:
    """Write the length of the bar on the floor beside its right end, where there is room."""
    length = round(float(np.linalg.norm(bar[1] - bar[0])), 6)
    left, right = camera.project(bar, (image.width, image.height))
    if not (np.isfinite(left).all() and np.isfinite(right).all()):
        return
    pixels = NOTE * setting.letters
    at = (float(right[0]) + 0.5 * pixels, float(right[1]) + 0.15 * pixels)
    lowest = image.height - setting.footer + 1.5 * setting.letters
    inside = 0 < at[0] < image.width - 4 * pixels and 0 < at[1] < lowest
    if inside:
        text = f"{length:g} m" if length >= 0.5 else f"{100 * length:g} cm"
        write(ImageDraw.Draw(image), at, text, pixels, colour=setting.theme.soft_ink, anchor="lm")
