"""The offscreen scene: bones, markers and floor of one fitted motion, photographed row by row.

Everything heavy is built once per motion; showing another row only moves the bones and refills
the markers, the shadow and the grid. Pictures are drawn at twice their size and reduced, which
smooths better for its price than the graphics library's own way.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from types import TracebackType
from typing import Any, Self

import numpy as np
from numpy.typing import NDArray
from PIL import Image

from condyle.viz import ground
from condyle.viz.drawn_markers import DrawnMarkers, place_markers
from condyle.viz.figure import Figure
from condyle.viz.floor import ROUGH_SHADOW_PIXELS, SHADOW_PIXELS
from condyle.viz.layers import Pixels, without_ground
from condyle.viz.palette import Colour
from condyle.viz.theme import LIGHT, Theme
from condyle.viz.viewpoint import Camera
from condyle.viz.window import COARSE_BALL, FINE_BALL, Window

FloatArray = NDArray[np.float64]

SUPERSAMPLING = 2
"""Drawn this many times larger in each direction, then reduced."""

MARKER_SIZE = 0.0062
"""A marker's radius as a share of the picture's visible height."""

SHADOW_POINTS = 9000
"""Points per bone that throw shadow, at most."""

REACH = 2.6
"""How far the floor's grid is drawn, as a share of the picture's visible height."""

LEAST_REACH = 2.0
"""m"""


MARKER_NAMES = ("fitted", "fitted rim", "measured", "measured rim", "alone", "residuals")
"""Of what `Scene` draws of markers in its window."""


@dataclass(frozen=True, slots=True)
class Detail:
    """How finely a scene is drawn.

    Attributes
    ----------
    sampling : float
        Drawn this many times larger in each direction, then reduced.
    shadow_points, shadow_pixels : per bone at most, and across the shadow
    ball : corners of a marker; see `Window`
    """

    sampling: float = SUPERSAMPLING
    shadow_points: int = SHADOW_POINTS
    shadow_pixels: int = SHADOW_PIXELS
    ball: tuple[int, int] = FINE_BALL


FILM_DETAIL = Detail(1.5, 1500, ROUGH_SHADOW_PIXELS, COARSE_BALL)
"""Enough for what moves, and twice as fast."""


class Scene:
    """One motion's skeleton in one offscreen window; use it in a ``with`` block.

    Parameters
    ----------
    figure : Figure
    size : (width, height)
        Pixels of the finished picture.
    theme : Theme
    detail : Detail
        Of stills, or of films.
    """

    def __init__(
        self,
        figure: Figure,
        size: tuple[int, int],
        *,
        theme: Theme = LIGHT,
        detail: Detail | None = None,
    ) -> None:
        self.figure = figure
        self.motion = figure.motion
        self.size = size
        self.theme = theme
        self._detail = detail or Detail()
        sampling = self._detail.sampling
        self._large = (round(sampling * size[0]), round(sampling * size[1]))
        self.window = Window(self._large, self._detail.ball)
        self.window.ground(theme.ground, theme.sky)
        self._bones = self._add_bones(figure, "bone", None)
        self._ghosts = 0

    def __enter__(self) -> Self:
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        self.close()

    def close(self) -> None:
        """Give the window back."""
        self.window.close()

    def render(
        self,
        row: int,
        camera: Camera,
        *,
        exaggeration: float,
        marker_radius: float | None = None,
        with_bones: bool = True,
    ) -> Image.Image:
        """The row's picture, ``SUPERSAMPLING`` times as large as the scene's size.

        Parameters
        ----------
        marker_radius : float, optional
            m; by default a fixed share of what the picture spans.
        with_bones : bool
            False leaves the bones out, but not their shadow.
        """
        self.show(row, camera, exaggeration=exaggeration, marker_radius=marker_radius)
        if not with_bones:
            for actor in self._bones:
                actor.visibility = False
        return Image.fromarray(self.window.shoot())

    def show(
        self,
        row: int,
        camera: Camera,
        *,
        exaggeration: float,
        marker_radius: float | None = None,
    ) -> None:
        """Put everything of a row in its place, and the camera before it."""
        markers = place_markers(self.motion, row, exaggeration=exaggeration)
        poses = self.motion.laboratory_from_segment[row]
        self._move(self._bones, poses, self.figure.posed(row))
        self._draw_markers(markers, marker_radius or MARKER_SIZE * camera.visible_height())
        points = self.figure.points(row, markers)
        centre = ground.level_centre(self.figure, points)
        reach = max(REACH * camera.visible_height(), LEAST_REACH)
        ground.draw_grid(self.window, self.figure, centre, reach, self.theme, self._large[0])
        shade = self.figure.bone_points(row, self._detail.shadow_points)
        ground.draw_shadow(
            self.window,
            self.figure,
            shade,
            camera,
            centre,
            self.theme,
            pixels=self._detail.shadow_pixels,
        )
        self.window.aim(camera)

    def shoot(self, *, transparent: bool = False) -> Pixels:
        """(height, width, 4): what was put in place; without its ground where asked for."""
        if not transparent:
            colour = self.window.shoot()
            return np.dstack([colour, np.full(colour.shape[:2], 255, dtype=np.uint8)])
        shots = []
        for level in (0, 255):
            plain: Colour = (level, level, level)
            self.window.ground(plain, plain)
            shots.append(self.window.shoot())
        self.window.ground(self.theme.ground, self.theme.sky)
        return without_ground(*shots)

    def add_ghost(self, figure: Figure, row: int, poses: FloatArray, colour: Colour) -> list[str]:
        """Add another figure's bones; gives the names by which to lay them over a picture.

        Parameters
        ----------
        row : int
            Of the other motion.
        poses : (segments, 4, 4)
            Where its segments are drawn, laboratory axes.
        """
        self._ghosts += 1
        kind = f"ghost {self._ghosts}"
        self._move(self._add_bones(figure, kind, colour), poses, figure.posed(row))
        return [f"{kind} {index}" for index in np.flatnonzero(figure.posed(row))]

    def draw_balls(self, name: str, centres: FloatArray, radius: float, colour: Any) -> None:
        """Balls at centres (n, 3) m in place of those last drawn under that name; none where n is 0."""
        self.window.balls(name, centres, radius, colour)

    def draw_paths(
        self, name: str, paths: Sequence[FloatArray], radius: float, colour: Any, *, heads: bool
    ) -> None:
        """Round bars along paths (n, 3) m, with arrowheads at their ends or without.

        They stand in place of those last drawn under that name.
        """
        self.window.paths(name, paths, radius, colour, heads=heads)

    def _add_bones(self, figure: Figure, kind: str, colour: Colour | None) -> list[Any]:
        return [
            self.window.show_bone(f"{kind} {index}", bone, colour or self.theme.bone(name))
            for index, (name, bone) in enumerate(
                zip(figure.motion.segment_names, figure.bones, strict=True)
            )
        ]

    @staticmethod
    def _move(actors: list[Any], poses: FloatArray, posed: NDArray[np.bool_]) -> None:
        for actor, pose, known in zip(actors, poses, posed, strict=True):
            actor.visibility = bool(known)
            if known:
                actor.user_matrix = pose

    def _draw_markers(self, markers: DrawnMarkers, radius: float) -> None:
        theme, window = self.theme, self.window
        rim = theme.outline
        window.balls("fitted", markers.fitted, 0.8 * radius, theme.fitted, outline=rim)
        window.balls("measured", markers.measured, radius, theme.measured, outline=rim)
        window.balls("alone", markers.alone, 0.8 * radius, theme.alone)
        pairs = np.stack([markers.fitted, markers.measured], axis=1)
        long = np.linalg.norm(pairs[:, 0] - pairs[:, 1], axis=1) > 1e-6
        window.bars("residuals", pairs[long], 0.36 * radius, theme.residual)
