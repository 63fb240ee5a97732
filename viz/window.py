"""The offscreen window: named things in it, a camera, three lights, and what the camera sees.

Everything of PyVista and VTK that drawing needs is here. A thing shown again under its name only gets its new
shape, which is what makes films quick.
"""

from __future__ import annotations

from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from functools import cache
from typing import Any

import numpy as np
from numpy.typing import NDArray

from condyle.viz.layers import Depths, Layer, Pixels
from condyle.viz.offscreen import open_pyvista
from condyle.viz.palette import Colour
from condyle.viz.viewpoint import Camera, unit

FloatArray = NDArray[np.float64]

BONE_LOOK = {"ambient": 0.38, "diffuse": 0.80, "specular": 0.08, "specular_power": 18}
SIGN_LOOK = {"ambient": 0.55, "diffuse": 0.60, "specular": 0.12, "specular_power": 25}

FINE_BALL, COARSE_BALL = (20, 13), (14, 9)
"""Corners of a ball, round it and from pole to pole: for stills, and for films, whose time goes into them."""

ARROWHEAD_LENGTH, ARROWHEAD_RADIUS = 7.5, 2.9
"""Of the radius of the arrow's bar."""

LIGHTS = (
    ((-0.9, 1.3, 1.0), 0.72),
    ((0.6, -0.6, 1.0), 0.36),
    ((0.8, 0.9, -0.9), 0.26),
)
"""(right, up, back) of the camera, and strength: a main light, a soft one from below, one from behind."""


class Window:
    """An offscreen window of (width, height) pixels.

    Parameters
    ----------
    ball : (round, high)
        Corners of a ball, round it and from pole to pole.
    """

    def __init__(self, size: tuple[int, int], ball: tuple[int, int] = FINE_BALL) -> None:
        self.pyvista = open_pyvista()
        self._ball = ball
        self._actors: dict[str, Any] = {}
        self._plotter = self.pyvista.Plotter(off_screen=True, window_size=size, lighting="none")
        self._plotter.render_window.SetMultiSamples(0)
        self._lights = [self._add_light(strength) for _, strength in LIGHTS]

    def close(self) -> None:
        """Give the window back."""
        self._plotter.close()

    def ground(self, foot: Colour, top: Colour) -> None:
        """Set the background, from its foot to its top."""
        self._plotter.set_background(foot, top=top)

    def show(self, name: str, mesh: Any, **look: Any) -> Any:
        """Show a mesh under a name, in place of what stood there; gives its actor."""
        actor = self._actors.get(name)
        if actor is not None and not look.keys() & {"texture", "scalars"}:
            actor.mapper.SetInputData(mesh)
            actor.SetVisibility(True)
            return actor
        self.remove(name)
        actor = self._plotter.add_mesh(mesh, reset_camera=False, render=False, **look)
        self._actors[name] = actor
        return actor

    def show_bone(self, name: str, surface: Any, colour: Colour) -> Any:
        """Show a `Surface` that will be moved by its actor's matrix."""
        mesh = self.pyvista.PolyData.from_regular_faces(surface.points, surface.faces)
        mesh.point_data.active_normals = surface.normals
        return self.show(name, mesh, color=colour, interpolation="Phong", **BONE_LOOK)

    def remove(self, name: str) -> None:
        """Take away what stands under a name, if anything does."""
        actor = self._actors.pop(name, None)
        if actor is not None:
            self._plotter.renderer.RemoveActor(actor)

    def balls(
        self,
        name: str,
        centres: FloatArray,
        radius: float,
        colour: Colour,
        *,
        outline: Colour | None = None,
    ) -> None:
        """Balls at centres (n, 3) m, with a dark rim where an outline is given; none where n is 0."""
        rim = f"{name} rim"
        if not len(centres):
            self.remove(name)
            self.remove(rim)
            return
        mesh = self._ball_mesh(centres, radius)
        self.show(name, mesh, color=colour, interpolation="Phong", **SIGN_LOOK)
        if outline is not None:
            wider = self._ball_mesh(centres, 1.17 * radius)
            self.show(rim, wider, color=outline, lighting=False, culling="front")

    def bars(self, name: str, pairs: FloatArray, radius: float, colour: Colour) -> None:
        """Round bars between pairs (n, 2, 3) m; none where n is 0."""
        if not len(pairs):
            self.remove(name)
            return
        lines = self.pyvista.line_segments_from_points(pairs.reshape(-1, 3))
        mesh = lines.tube(radius=radius, n_sides=10)
        self.show(name, mesh, color=colour, interpolation="Phong", **SIGN_LOOK)

    def paths(
        self, name: str, paths: Sequence[FloatArray], radius: float, colour: Colour, *, heads: bool
    ) -> None:
        """Round bars along paths (n, 3) m, with arrowheads at their ends or without."""
        if not paths:
            self.remove(name)
            return
        parts = [part for path in paths for part in self._path(path, radius, heads)]
        mesh = self.pyvista.merge(parts)
        self.show(name, mesh, color=colour, interpolation="Phong", **SIGN_LOOK)

    def aim(self, camera: Camera) -> None:
        """Look as the camera does, with the lights at their places beside it."""
        plotter = self._plotter
        plotter.camera.position = tuple(camera.position)
        plotter.camera.focal_point = tuple(camera.focal_point)
        plotter.camera.up = tuple(camera.up)
        plotter.camera.view_angle = camera.view_angle
        plotter.reset_camera_clipping_range()
        for light, (direction, _) in zip(self._lights, LIGHTS, strict=True):
            light.position = tuple(camera.focal_point + np.array(direction) @ camera.axes())
            light.focal_point = tuple(camera.focal_point)

    def _add_light(self, strength: float) -> Any:
        light = self.pyvista.Light(intensity=strength, light_type="scene light")
        light.positional = False
        self._plotter.add_light(light)
        return light

    def shoot(self) -> Pixels:
        """(height, width, 3): what the camera sees."""
        self._plotter.render()
        return np.asarray(self._plotter.screenshot(return_img=True))

    def depth(self) -> Depths:
        """(height, width): how far away it was, from 0 (near) to 1 (nothing there)."""
        from vtkmodules.util.numpy_support import vtk_to_numpy
        from vtkmodules.vtkCommonCore import vtkFloatArray  # with the window, never before

        width, height = self._plotter.window_size
        values = vtkFloatArray()
        self._plotter.render_window.GetZbufferData(0, 0, width - 1, height - 1, values)
        return np.asarray(vtk_to_numpy(values).reshape(height, width)[::-1].copy())

    def layer(self, names: Sequence[str]) -> Layer:
        """What the camera sees of these things alone."""
        with self._shown(lambda name: name in names):
            colour = self.shoot()
            return Layer(colour, self.depth())

    @contextmanager
    def without(self, names: Sequence[str]) -> Iterator[None]:
        """Inside the block these things are not in the picture."""
        with self._shown(lambda name: name not in names):
            yield

    @contextmanager
    def _shown(self, wanted: Callable[[str], bool]) -> Iterator[None]:
        shown = {n: a for n, a in self._actors.items() if a.GetVisibility()}
        for name, actor in shown.items():
            actor.SetVisibility(wanted(name))
        try:
            yield
        finally:
            for actor in shown.values():
                actor.SetVisibility(True)

    def _path(self, path: FloatArray, radius: float, heads: bool) -> list[Any]:
        head = ARROWHEAD_LENGTH * radius if heads else 0.0
        line = self.pyvista.MultipleLines(shortened(path, 0.8 * head))
        bar = line.tube(radius=radius, n_sides=14)
        if not heads:
            return [bar]
        tangent = path[-1] - shortened(path, head)[-1]
        cone = self.pyvista.Cone(
            center=path[-1] - 0.5 * head * unit(tangent),
            direction=unit(tangent),
            height=head,
            radius=ARROWHEAD_RADIUS * radius,
            resolution=28,
        )
        return [bar, cone.compute_normals(split_vertices=True, feature_angle=50)]

    def _ball_mesh(self, centres: FloatArray, radius: float) -> Any:
        points, faces = unit_ball(self._ball)
        many = (centres[:, None] + radius * points).reshape(-1, 3)
        offsets = len(points) * np.arange(len(centres))[:, None, None]
        mesh = self.pyvista.PolyData.from_regular_faces(many, (offsets + faces).reshape(-1, 3))
        mesh.point_data.active_normals = np.tile(points, (len(centres), 1))
        return mesh


@cache
def unit_ball(corners: tuple[int, int]) -> tuple[FloatArray, NDArray[np.int64]]:
    """Points (n, 3) on the unit sphere and triangles (m, 3)."""
    ball = open_pyvista().Sphere(theta_resolution=corners[0], phi_resolution=corners[1], radius=1.0)
    points = np.asarray(ball.points, dtype=np.float64)
    return points, np.asarray(ball.regular_faces, dtype=np.int64)


def shortened(path: FloatArray, by: float) -> FloatArray:
    """A path (n, 3) without the last `by` metres of its length; two points at least."""
    if by <= 0.0:
        return path
    steps = np.linalg.norm(np.diff(path, axis=0), axis=1)
    along = np.concatenate([[0.0], np.cumsum(steps)])
    end = max(along[-1] - by, 0.02 * along[-1])
    cut = np.array([np.interp(end, along, path[:, axis]) for axis in range(3)])
    return np.concatenate([path[along < end], cut[None]])
