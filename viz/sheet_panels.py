"""What the panels of a model's sheet show, from where, and with which arrows.

Decided here: a model with a right and a left shows its arrows from either side, the right and the middle
in one panel, the left and the root in the other; arrows that come out small beside the figure get a
nearer view; and each marker is named in the one of two views that it faces.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from condyle.model.skeleton import LABORATORY
from condyle.viz.coordinate_senses import RestingModel, Sense
from condyle.viz.figure import Figure
from condyle.viz.skeleton_plan import side_of
from condyle.viz.turn_arrows import Arrow, arrows_of, crowded
from condyle.viz.viewpoint import facing

FloatArray = NDArray[np.float64]

WORTH_A_NEARER_VIEW = 8
"""Arrows, small beside the figure, that get a panel of their own."""

NEAR_SIZE = 3.0
"""In a nearer view arrows are as large as in a whole figure so many times the extent of its joints."""

FRONT_FIRST = 0.02
"""m; a marker is named in the second of two views only where it faces that one by so much more."""

PLANAR = 0.985
"""Cosine: where all turns are about axes as parallel as this, the model is looked at along them."""


@dataclass(frozen=True, slots=True)
class View:
    """Degrees turned from the front to the right, degrees above level, and the view in words."""

    turned: float
    raised: float
    words: str


FRONT_RIGHT, FRONT_LEFT = (
    View(40.0, 14.0, "from the front right"),
    View(-40.0, 14.0, "from the front left"),
)
FRONT_NEAR = View(30.0, 16.0, "from the front right")
FRONT, BACK = View(0.0, 6.0, "from the front"), View(180.0, 6.0, "from behind")
RIGHT, LEFT = View(78.0, 12.0, "from the right"), View(-78.0, 12.0, "from the left")


@dataclass(frozen=True, slots=True)
class Panel:
    """What one panel shows: arrows, or markers and landmarks; `near` frames its own joints only."""

    view: View
    title: str
    senses: tuple[Sense, ...] = ()
    names: tuple[str, ...] = ()
    near: bool = False


def plan_panels(
    resting: RestingModel, figure: Figure, senses: Sequence[Sense]
) -> tuple[Panel, ...]:
    """Which panels a model needs: its arrows from one or both sides, its markers from two."""
    roots = {j.name for j in resting.skeleton.joints if j.parent == LABORATORY}
    # How the whole is placed says nothing of the plane that its parts move in.
    planar = _is_planar([s for s in senses if s.joint not in roots] or senses)
    panels = list(_arrow_panels(resting, figure, senses, planar=planar))
    views: tuple[View, ...] = (RIGHT, LEFT) if planar or _is_long(figure) else (FRONT, BACK)
    if views[0] == RIGHT and not {side_of(name) for name in resting.skeleton.segment_names} - {""}:
        views = (RIGHT,)
    for view, names in zip(views, _marker_sides(resting, figure, views), strict=True):
        if names:
            panels.append(Panel(view, f"Markers, seen {view.words}", names=names))
    return tuple(panels)


def _arrow_panels(
    resting: RestingModel, figure: Figure, senses: Sequence[Sense], *, planar: bool
) -> list[Panel]:
    """The arrows from one side or both; many that are small beside the figure in a nearer view."""
    roots = {j.name for j in resting.skeleton.joints if j.parent == LABORATORY}
    if {"right", "left"} <= {side_of(sense.name) for sense in senses}:
        first, second = (RIGHT, LEFT) if planar else (FRONT_RIGHT, FRONT_LEFT)
        beyond = [side_of(s.name) == "left" or s.joint in roots for s in senses]
        near = False
    else:
        first, second = (RIGHT, RIGHT) if planar else (FRONT_RIGHT, FRONT_NEAR)
        beyond = crowded(senses, size=size_of(figure), roots=frozenset(roots))
        near = True
        if sum(beyond) < WORTH_A_NEARER_VIEW or all(beyond):
            beyond = [False] * len(senses)
    panels = []
    for view, side, words in ((first, False, ""), (second, True, ", nearer" if near else "")):
        own = tuple(s for s, other in zip(senses, beyond, strict=True) if other == side)
        if own:
            title = f"Joint axes, seen {view.words}{words}"
            panels.append(Panel(view, title, senses=own, near=near and side))
    return panels


def _is_planar(senses: Sequence[Sense]) -> bool:
    axes = np.array([sense.direction for sense in senses if sense.turns]).reshape(-1, 3)
    return len(axes) > 0 and bool((np.abs(axes @ axes[0]) > PLANAR).all())


def extent_of(figure: Figure) -> FloatArray:
    """(3,) m: forward, up, to the right."""
    points = figure.bone_points(0, 200)
    forward = facing(figure.motion, np.array([0]))
    axes = np.stack([forward, figure.up, np.cross(forward, figure.up)])
    return np.asarray(np.ptp(points @ axes.T, axis=0))


def _is_long(figure: Figure) -> bool:
    forward, up, right = extent_of(figure)
    return bool(forward > 1.2 * right and forward > 0.8 * up)


def is_wide(figure: Figure) -> bool:
    """Whether a figure is wider, or deeper, than it is tall."""
    forward, up, right = extent_of(figure)
    return bool(max(forward, right) > 1.15 * up)


def size_of(figure: Figure) -> float:
    """A figure's largest extent, m."""
    return float(max(extent_of(figure).max(), 1e-3))


def towards(figure: Figure, view: View) -> FloatArray:
    """(3,) unit, from the figure to the camera."""
    turned, raised = np.radians([view.turned, view.raised])
    forward = facing(figure.motion, np.array([0]))
    level = np.cos(turned) * forward + np.sin(turned) * np.cross(forward, figure.up)
    return np.asarray(np.cos(raised) * level + np.sin(raised) * figure.up)


def _marker_sides(
    resting: RestingModel, figure: Figure, views: Sequence[View]
) -> list[tuple[str, ...]]:
    """For each view the markers that face it best: away from the nearest bone, and from its middle."""
    motion = resting.motion(with_markers=True)
    segment_of = {marker.name: marker.segment for marker in resting.skeleton.markers}
    directions = np.stack([towards(figure, view) for view in views])
    sides: list[list[str]] = [[] for _ in views]
    poses = motion.laboratory_from_segment[0]
    for name, point in zip(motion.marker_names, motion.fitted[0], strict=True):
        index = motion.segment_names.index(segment_of[name])
        bone = figure.bones[index].points @ poses[index, :3, :3].T + poses[index, :3, 3]
        nearest = bone[int(np.linalg.norm(bone - point, axis=1).argmin())]
        facing_by = directions @ (point - nearest + (point - bone.mean(axis=0)) / 2)
        slack = 0.0 if views[0] == RIGHT and side_of(name) else FRONT_FIRST
        first = len(views) == 1 or facing_by[0] > facing_by[1] - slack
        sides[0 if first else 1].append(name)
    return [tuple(names) for names in sides]


def panel_arrows(resting: RestingModel, figure: Figure, panel: Panel) -> tuple[Arrow, ...]:
    """The arrows of a panel, as its camera wants them."""
    roots = frozenset(j.name for j in resting.skeleton.joints if j.parent == LABORATORY)
    poses = figure.motion.laboratory_from_segment[0]
    bodies = {
        name: poses[i, :3, :3] @ figure.bones[i].points.mean(axis=0) + poses[i, :3, 3]
        for i, name in enumerate(figure.motion.segment_names)
    }
    centres = np.array([sense.centre for sense in panel.senses]).reshape(-1, 3)
    size = NEAR_SIZE * float(np.ptp(centres, axis=0).max()) if panel.near else size_of(figure)
    return arrows_of(
        panel.senses,
        size=size,
        roots=roots,
        bodies=bodies,
        towards_camera=towards(figure, panel.view),
    )


def panel_points(resting: RestingModel, figure: Figure, panel: Panel) -> FloatArray:
    """(n, 3) m: everything that a panel must hold."""
    arrows = [arrow.path for arrow in panel_arrows(resting, figure, panel)]
    if panel.near:
        return np.concatenate(arrows)
    parts = [figure.bone_points(0, 300), *arrows]
    if panel.names:
        parts.append(resting.motion(with_markers=True).fitted[0])
    return np.concatenate(parts)
