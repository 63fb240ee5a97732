"""What a still shows beyond bones and markers, when asked: other trials, joint axes, doubt, forces.

All of it comes as places in the laboratory, so that drawing knows neither models nor result files.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray
from scipy.stats import chi2

from condyle.solver.results import FittedMotion
from condyle.viz.figure import Figure, build_figure
from condyle.viz.legend import Entry
from condyle.viz.palette import GREEN
from condyle.viz.scene import MARKER_NAMES, Scene
from condyle.viz.theme import GHOSTS, SKY_BLUE, Theme
from condyle.viz.viewpoint import facing, main_root, up_vector
from condyle.viz.window import unit_ball

FloatArray = NDArray[np.float64]

CONFIDENCE = 0.95
"""Of the ellipsoids: the share of cases in which the true place lies inside, if the sds are right."""

SIGMAS = float(np.sqrt(chi2.ppf(CONFIDENCE, 3)))
"""Standard deviations from an ellipsoid's centre to its surface."""

GHOST_OPACITY, AXIS_HIDDEN = 0.50, 0.45
CLOUD_OPACITY, CLOUD_HIDDEN = 0.34, 0.16

CLOUD_BALL = (32, 20)
"""Corners of an ellipsoid, round it and from pole to pole."""

AXIS_LENGTH, AXIS_BAR = 0.038, 0.0018
"""Half of what is drawn of a joint's axis, and its radius, as shares of the picture's visible height."""

FORCE_BAR = 0.0042
"""Radius of a force's arrow, as a share of the picture's visible height."""

FORCE_SCALES = (200.0, 500.0, 1000.0, 2000.0, 5000.0, 10000.0)
"""N drawn as one metre."""

LONGEST_ARROW = 1.1
"""m, for the largest force of a trial."""


@dataclass(frozen=True, slots=True)
class Ghost:
    """Another trial's figure in one of its rows, drawn where `poses` (segments, 4, 4) puts it."""

    figure: Figure
    row: int
    poses: FloatArray
    name: str


@dataclass(frozen=True, slots=True)
class Axes:
    """Joint axes at one instant, laboratory axes.

    Attributes
    ----------
    centres : (n, 3) m
    directions : (n, 3) unit
        Towards the positive end: a positive turn is right-handed about it.
    """

    centres: FloatArray
    directions: FloatArray


@dataclass(frozen=True, slots=True)
class Clouds:
    """Places (n, 3) m with their covariances (n, 3, 3) m^2, laboratory axes."""

    places: FloatArray
    covariances: FloatArray

    def ends(self, exaggeration: float) -> tuple[FloatArray, FloatArray]:
        """(n, 3) m twice: the corners of the ellipsoids' boxes."""
        variances = np.diagonal(self.covariances, axis1=1, axis2=2)
        reach = exaggeration * SIGMAS * np.sqrt(variances)
        return self.places - reach, self.places + reach


@dataclass(frozen=True, slots=True)
class Forces:
    """Forces of the ground on the person at one instant.

    Attributes
    ----------
    places, vectors : (n, 3) m and N, laboratory axes
    scale : float
        N drawn as one metre.
    """

    places: FloatArray
    vectors: FloatArray
    scale: float

    def arrows(self) -> FloatArray:
        """(loaded, 2, 3) m: from where each acts to its tip; a plate without a place is unloaded."""
        loaded = np.isfinite(self.places).all(axis=1)
        tails = self.places[loaded]
        return np.stack([tails, tails + self.vectors[loaded] / self.scale], axis=1)


@dataclass(frozen=True, slots=True)
class Extras:
    """Everything beyond bones and markers; nothing by default."""

    ghosts: tuple[Ghost, ...] = ()
    axes: Axes | None = None
    clouds: Clouds | None = None
    forces: Forces | None = None
    notes: tuple[str, ...] = field(default=())

    def points(self, exaggeration: float) -> FloatArray:
        """(n, 3) m: what the camera must also see."""
        parts = [np.empty((0, 3))]
        for ghost in self.ghosts:
            posed = np.flatnonzero(ghost.figure.posed(ghost.row))
            for index in posed:
                local = ghost.figure.bones[index].points[::40]
                parts.append(local @ ghost.poses[index, :3, :3].T + ghost.poses[index, :3, 3])
        if self.forces is not None:
            parts.append(self.forces.arrows().reshape(-1, 3))
        if self.clouds is not None:
            parts += list(self.clouds.ends(exaggeration))
        return np.concatenate(parts)


def ghost_of(
    motion: FittedMotion, time: float, *, beside: FittedMotion, row: int, together: bool
) -> Ghost:
    """Another motion at the nearest time, where it was, or moved level onto the first one's root.

    Parameters
    ----------
    beside, row : the motion that is drawn in full, and its row
    together : bool
        Whether the ghost is turned and shifted on the level so that both roots face the same way from
        one place; heights stay as they are.
    """
    there = int(np.argmin(np.abs(motion.time - time)))
    poses = motion.laboratory_from_segment[there]
    if together:
        poses = onto_root(motion, there, beside, row) @ poses
    return Ghost(build_figure(motion), there, poses, motion.name)


def onto_root(motion: FittedMotion, there: int, beside: FittedMotion, row: int) -> FloatArray:
    """(4, 4) The level move that brings one motion's root onto another's, in place and heading."""
    up = up_vector(beside.up)
    ahead = facing(beside, np.array([row]))
    now = facing(motion, np.array([there]))
    sine, cosine = float(np.cross(now, ahead) @ up), float(now @ ahead)
    angle = np.arctan2(sine, cosine)
    K = np.cross(up, np.eye(3)).T  # K v = up x v
    move = np.eye(4)
    move[:3, :3] += np.sin(angle) * K + (1.0 - np.cos(angle)) * (K @ K)
    target = beside.laboratory_from_segment[row, main_root(beside), :3, 3]
    origin = motion.laboratory_from_segment[there, main_root(motion), :3, 3]
    shift = target - move[:3, :3] @ origin
    move[:3, 3] = shift - (shift @ up) * up
    return move


def force_scale(largest: float) -> float:
    """N drawn as one metre, so that the largest force of a trial is about a metre long."""
    return next((s for s in FORCE_SCALES if largest <= LONGEST_ARROW * s), FORCE_SCALES[-1])


def force_entry(scale: float) -> Entry:
    """What the legend says of forces; `scale` in N drawn as one metre."""
    return Entry("arrow", GREEN, f"force on the person, 100 N drawn {100.0 / scale:.2g} m")


def entries_of(extras: Extras, *, exaggeration: float, theme: Theme) -> list[Entry]:
    """What the legend says of them."""
    entries = []
    if extras.forces is not None and len(extras.forces.arrows()):
        entries.append(force_entry(extras.forces.scale))
    if extras.clouds is not None and len(extras.clouds.places):
        longer = "" if exaggeration == 1.0 else f", drawn ×{exaggeration:g}"
        entries.append(Entry("cloud", SKY_BLUE, f"95 % ellipsoid of a fitted place{longer}"))
    if extras.axes is not None:
        entries.append(Entry("arrow", theme.ink, "joint axis, towards its positive end"))
    for number, ghost in enumerate(extras.ghosts):
        time = ghost.figure.motion.time[ghost.row]
        colour = GHOSTS[number % len(GHOSTS)]
        entries.append(Entry("dot", colour, f"{ghost.name} at {time:.2f} s"))
    return entries


@dataclass(frozen=True, slots=True)
class SeeThrough:
    """Names of things that are laid over the picture, and how strongly."""

    names: tuple[str, ...]
    in_front: float
    hidden: float


def place_extras(
    scene: Scene, extras: Extras, *, visible_height: float, exaggeration: float
) -> list[SeeThrough]:
    """Put the extras into the scene; gives those that must be laid over it, in order."""
    layers = []
    for number, ghost in enumerate(extras.ghosts):
        colour = GHOSTS[number % len(GHOSTS)]
        names = scene.add_ghost(ghost.figure, ghost.row, ghost.poses, colour)
        layers.append(SeeThrough(tuple(names), GHOST_OPACITY, 0.0))
    if extras.forces is not None:
        place_forces(scene, extras.forces, visible_height)
    if extras.clouds is not None:
        place_clouds(scene, extras.clouds, exaggeration)
        layers.append(SeeThrough(("clouds",), CLOUD_OPACITY, CLOUD_HIDDEN))
        layers.append(SeeThrough(MARKER_NAMES, 1.0, 0.0))  # once more, so that they stay crisp
    if extras.axes is not None:
        place_axes(scene, extras.axes, visible_height)
        layers.append(SeeThrough(("axes",), 1.0, AXIS_HIDDEN))
    return layers


def place_forces(scene: Scene, forces: Forces, visible_height: float) -> None:
    """An arrow for every loaded plate."""
    arrows = list(forces.arrows())
    scene.draw_paths("forces", arrows, FORCE_BAR * visible_height, GREEN, heads=True)


def place_axes(scene: Scene, axes: Axes, visible_height: float) -> None:
    """A bar along every axis, its head at the positive end."""
    half = AXIS_LENGTH * visible_height * axes.directions
    paths = np.stack([axes.centres - half, axes.centres, axes.centres + half], axis=1)
    bar = AXIS_BAR * visible_height
    scene.draw_paths("axes", list(paths), bar, scene.theme.ink, heads=True)


def place_clouds(scene: Scene, clouds: Clouds, exaggeration: float) -> None:
    """An ellipsoid about every place."""
    if not len(clouds.places):
        return
    ball, faces = unit_ball(CLOUD_BALL)
    values, vectors = np.linalg.eigh(clouds.covariances)
    axes = vectors * np.sqrt(np.maximum(values, 0.0))[:, None, :] * exaggeration * SIGMAS
    points = clouds.places[:, None] + ball @ np.swapaxes(axes, 1, 2)
    offsets = len(ball) * np.arange(len(points))[:, None, None]
    mesh = scene.window.pyvista.PolyData.from_regular_faces(
        points.reshape(-1, 3), (offsets + faces).reshape(-1, 3)
    ).compute_normals(consistent_normals=False)
    scene.window.show("clouds", mesh, color=SKY_BLUE, interpolation="Phong", ambient=0.5)
