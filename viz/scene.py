"""The offscreen scene: bones, markers and floor of one fitted motion, photographed row by row.

Everything heavy is built once per motion; showing another row only moves the bones and refills
the markers, the shadow and the grid. Pictures are drawn at twice their size and reduced, which
smooths better for its price than the graphics library's own way.
"""

from __future__ import annotations

from collections.abc import Sequence
from types import TracebackType
from typing import Any, Self

import numpy as np
from numpy.typing import NDArray
from PIL import Image

from condyle.viz import floor, palette
from condyle.viz.drawn_markers import DrawnMarkers, place_markers
from condyle.viz.figure import Figure
from condyle.viz.offscreen import open_pyvista
from condyle.viz.shapes import Surface
from condyle.viz.skeleton_plan import side_of
from condyle.viz.viewpoint import Camera, level_axes, unit

FloatArray = NDArray[np.float64]

SUPERSAMPLING = 2
"""Drawn this many times larger in each direction, then reduced."""

MARKER_SIZE = 0.0062
"""A marker's radius as a share of the picture's visible height."""

SHADOW_POINTS = 9000
"""Points per bone that throw shadow, at most."""

BONE_LOOK = {"ambient": 0.38, "diffuse": 0.80, "specular": 0.08, "specular_power": 18}
MARKER_LOOK = {"ambient": 0.55, "diffuse": 0.60, "specular": 0.12, "specular_power": 25}


ARROWHEAD_LENGTH, ARROWHEAD_RADIUS = 7.5, 2.9
"""Of the radius of the arrow's bar."""


def shortened(path: FloatArray, by: float) -> FloatArray:
    """A path (n, 3) without the last `by` metres of its length; two points at least."""
    if by <= 0.0:
        return path
    steps = np.linalg.norm(np.diff(path, axis=0), axis=1)
    along = np.concatenate([[0.0], np.cumsum(steps)])
    end = max(along[-1] - by, 0.02 * along[-1])
    cut = np.array([np.interp(end, along, path[:, axis]) for axis in range(3)])
    return np.concatenate([path[along < end], cut[None]])


def bone_colour(segment: str) -> palette.Colour:
    """Warm on the right, cool on the left, so that a side view can be read."""
    colours = {"right": palette.RIGHT_BONE, "left": palette.LEFT_BONE}
    return colours.get(side_of(segment), palette.MIDDLE_BONE)


class Scene:
    """One motion's skeleton in one offscreen window; use it in a ``with`` block.

    Parameters
    ----------
    figure : Figure
    size : (width, height)
        Pixels of the finished picture.
    """

    def __init__(self, figure: Figure, size: tuple[int, int]) -> None:
        self.figure = figure
        self.motion = figure.motion
        self.size = size
        self._pyvista = open_pyvista()
        self._plotter = self._open_window()
        self._bone_actors = [
            self._add_bone(name, bone)
            for name, bone in zip(self.motion.segment_names, figure.bones, strict=True)
        ]

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
        self._plotter.close()

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
        markers = place_markers(self.motion, row, exaggeration=exaggeration)
        self._move_bones(row)
        if not with_bones:
            for actor in self._bone_actors:
                actor.visibility = False
        self._draw_markers(markers, marker_radius or MARKER_SIZE * camera.visible_height())
        self._draw_floor(row, camera, markers)
        self._aim(camera)
        self._plotter.render()
        return Image.fromarray(self._plotter.screenshot(return_img=True))

    def draw_balls(self, name: str, centres: FloatArray, radius: float, colour: Any) -> None:
        """Balls at centres (n, 3) m in place of those last drawn under that name; none where n is 0."""
        self._balls(name, centres, radius, colour)

    def draw_paths(
        self, name: str, paths: Sequence[FloatArray], radius: float, colour: Any, *, heads: bool
    ) -> None:
        """Round bars along paths (n, 3) m, with arrowheads at their ends or without.

        They stand in place of those last drawn under that name.
        """
        self._plotter.remove_actor(name, render=False)
        if not paths:
            return
        head = ARROWHEAD_LENGTH * radius if heads else 0.0
        parts = []
        for path in paths:
            line = self._pyvista.MultipleLines(shortened(path, 0.8 * head))
            parts.append(line.tube(radius=radius, n_sides=14))
            if heads:
                tangent = path[-1] - shortened(path, head)[-1]
                cone = self._pyvista.Cone(
                    center=path[-1] - 0.5 * head * unit(tangent),
                    direction=unit(tangent),
                    height=head,
                    radius=ARROWHEAD_RADIUS * radius,
                    resolution=28,
                )
                parts.append(cone.compute_normals(split_vertices=True, feature_angle=50))
        mesh = self._pyvista.merge(parts)
        self._show(name, mesh, color=colour, interpolation="Phong", **MARKER_LOOK)

    def _open_window(self) -> Any:
        size = [SUPERSAMPLING * side for side in self.size]
        plotter = self._pyvista.Plotter(off_screen=True, window_size=size, lighting="none")
        plotter.render_window.SetMultiSamples(0)
        plotter.set_background(palette.GROUND, top=palette.SKY)
        return plotter

    def _add_bone(self, name: str, bone: Surface) -> Any:
        mesh = self._pyvista.PolyData.from_regular_faces(bone.points, bone.faces)
        mesh.point_data.active_normals = bone.normals
        return self._plotter.add_mesh(
            mesh,
            color=bone_colour(name),
            interpolation="Phong",
            reset_camera=False,
            render=False,
            **BONE_LOOK,
        )

    def _move_bones(self, row: int) -> None:
        for index, posed in enumerate(self.figure.posed(row)):
            actor = self._bone_actors[index]
            actor.visibility = bool(posed)
            if posed:
                actor.user_matrix = self.motion.laboratory_from_segment[row, index]

    def _draw_markers(self, markers: DrawnMarkers, radius: float) -> None:
        self._balls("fitted", markers.fitted, 0.8 * radius, palette.ORANGE)
        self._balls("measured", markers.measured, radius, palette.BLUE)
        self._balls("alone", markers.alone, 0.8 * radius, palette.PALE_ORANGE)
        pairs = np.stack([markers.fitted, markers.measured], axis=1)
        long = np.linalg.norm(pairs[:, 0] - pairs[:, 1], axis=1) > 1e-6
        self._bars("residuals", pairs[long], 0.36 * radius, palette.VERMILLION)

    def _balls(self, name: str, centres: FloatArray, radius: float, colour: Any) -> None:
        self._plotter.remove_actor(name, render=False)
        if len(centres):
            ball = self._pyvista.Sphere(radius=radius, theta_resolution=20, phi_resolution=14)
            mesh = self._pyvista.PolyData(centres).glyph(geom=ball, scale=False, orient=False)
            self._show(name, mesh, color=colour, interpolation="Phong", **MARKER_LOOK)

    def _bars(self, name: str, pairs: FloatArray, radius: float, colour: Any) -> None:
        self._plotter.remove_actor(name, render=False)
        if len(pairs):
            lines = self._pyvista.line_segments_from_points(pairs.reshape(-1, 3))
            mesh = lines.tube(radius=radius, n_sides=10)
            self._show(name, mesh, color=colour, interpolation="Phong", **MARKER_LOOK)

    def _show(self, name: str, mesh: Any, **look: Any) -> None:
        self._plotter.add_mesh(mesh, name=name, reset_camera=False, render=False, **look)

    def _draw_floor(self, row: int, camera: Camera, markers: DrawnMarkers) -> None:
        first, second, _ = level_axes(self.figure.up)
        points = self.figure.points(row, markers)
        middle = 0.5 * (points.min(axis=0) + points.max(axis=0))
        centre = np.array([middle @ first, middle @ second])
        reach = max(2.6 * camera.visible_height(), 2.0)
        for spacing, strength, width in ((floor.NARROW, 0.34, 1.4), (floor.WIDE, 0.78, 2.2)):
            lines = floor.grid_lines(centre, reach, spacing)
            opacity = strength * floor.fade(lines, centre, reach)
            self._draw_grid(f"grid {spacing}", self._on_floor(lines), opacity, width)
        self._draw_shadow(row, camera, centre)

    def _on_floor(self, level: FloatArray, lift: float = 0.0) -> FloatArray:
        first, second, up = level_axes(self.figure.up)
        flat = level[..., :1] * first + level[..., 1:] * second
        return np.asarray(flat + (self.figure.floor + lift) * up)

    def _draw_grid(self, name: str, lines: FloatArray, opacity: FloatArray, width: float) -> None:
        count, length = lines.shape[:2]
        links = np.arange(count * length).reshape(count, length)
        cells = np.concatenate([np.full((count, 1), length), links], axis=1).ravel()
        mesh = self._pyvista.PolyData(lines.reshape(-1, 3), lines=cells)
        colours = np.empty((count * length, 4), dtype=np.uint8)
        colours[:, :3] = palette.GRID
        colours[:, 3] = np.round(255 * opacity.ravel())
        mesh["colour"] = colours
        self._plotter.remove_actor(name, render=False)
        self._show(name, mesh, scalars="colour", rgb=True, lighting=False, line_width=width)

    def _draw_shadow(self, row: int, camera: Camera, centre: FloatArray) -> None:
        self._plotter.remove_actor("shadow", render=False)
        points = self.figure.bone_points(row, SHADOW_POINTS)
        if not len(points):
            return
        first, second, up = level_axes(self.figure.up)
        right, _, back = camera.axes()
        light = up + 0.16 * back - 0.22 * right
        heights = points @ up - self.figure.floor
        thrown = points - heights[:, None] * light / (light @ up)
        level = np.stack([thrown @ first, thrown @ second], axis=1)
        half = float(np.abs(level - centre).max()) + 0.35
        corners = centre + half * np.array([[-1, -1], [1, -1], [1, 1], [-1, 1]])
        mesh = self._pyvista.PolyData.from_regular_faces(
            self._on_floor(corners, -0.001), np.array([[0, 1, 2, 3]])
        )
        mesh.active_texture_coordinates = np.array([[0, 0], [1, 0], [1, 1], [0, 1]], dtype=float)
        image = floor.shadow_image(level, heights, centre, half)
        texture = self._pyvista.Texture(image[::-1].copy())
        texture.interpolate = True
        self._show("shadow", mesh, texture=texture, lighting=False)

    def _aim(self, camera: Camera) -> None:
        plotter = self._plotter
        plotter.camera.position = tuple(camera.position)
        plotter.camera.focal_point = tuple(camera.focal_point)
        plotter.camera.up = tuple(camera.up)
        plotter.camera.view_angle = camera.view_angle
        plotter.reset_camera_clipping_range()
        right, upright, back = camera.axes()
        plotter.remove_all_lights()
        for direction, strength in (
            (back + 1.3 * upright - 0.9 * right, 0.72),
            (1.0 * back - 0.6 * upright + 0.6 * right, 0.36),
            (-0.9 * back + 0.9 * upright + 0.8 * right, 0.26),
        ):
            light = self._pyvista.Light(
                position=tuple(camera.focal_point + direction),
                focal_point=tuple(camera.focal_point),
                intensity=strength,
                light_type="scene light",
            )
            light.positional = False
            plotter.add_light(light)
