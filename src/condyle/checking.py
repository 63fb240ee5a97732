"""A model looked at before any recording: its tree, its coordinates, what its markers can tell.

Observability is judged at postures drawn over the ranges with every marker present: a coordinate is
called unseen when it takes part in an undetermined combination in all of them.
"""

from __future__ import annotations

from dataclasses import asdict, dataclass
from pathlib import Path
from typing import Any

import numpy as np

from condyle.model import load_skeleton
from condyle.model.growth import sized_marker_at
from condyle.model.meshes import grown_shapes, mesh_remarks
from condyle.model.skeleton import (
    Coordinate,
    Fixed,
    Floating,
    Joint,
    Moves,
    Skeleton,
    Spherical,
)
from condyle.solver.frame_problem import FrameProblem, SkeletonFunctions
from condyle.solver.observability import undetermined
from condyle.solver.posture import Posture
from condyle.solver.trial_fit import frame_problem
from condyle.solver.upright import Upright

POSTURES = 25
"""How many postures observability is judged at; degenerate ones are rare and need only one to pass."""
SHARE_OF_RANGE = 0.8
UNLIMITED_HALF = 0.5
"""rad or m to either side of rest, for a coordinate without a range."""


@dataclass(frozen=True, slots=True)
class CoordinateReport:
    """One coordinate: unit ``deg`` or ``m``, range and rest in it, and whether markers tell it."""

    name: str
    joint: str
    unit: str
    lower: float | None
    upper: float | None
    rest: float
    role: str
    seen: bool


@dataclass(frozen=True, slots=True)
class ModelReport:
    """A model in short.

    Attributes
    ----------
    tree : (depth, segment, joint, kind of joint) in order
    coordinates : CoordinateReports
    markers : segment -> marker names
    without_place : markers that only a static can place
    unseen : coordinates and orientations that the markers cannot tell
    mesh_remarks : what is odd about the model's meshes
    """

    name: str
    about: str
    sources: tuple[str, ...]
    sized: bool
    tree: tuple[tuple[int, str, str, str], ...]
    coordinates: tuple[CoordinateReport, ...]
    markers: dict[str, tuple[str, ...]]
    without_place: tuple[str, ...]
    unseen: tuple[str, ...]
    mesh_remarks: tuple[str, ...]

    def as_dict(self) -> dict[str, Any]:
        """Plain values, for JSON."""
        return asdict(self)


def check(model: str | Path) -> ModelReport:
    """Read a model and say what it holds.

    Raises
    ------
    ModelError
        With every mistake.
    """
    skeleton = load_skeleton(model)
    unseen = unseen_freedoms(skeleton)
    return ModelReport(
        name=skeleton.name,
        about=skeleton.about,
        sources=skeleton.sources,
        sized=bool(skeleton.sizes),
        tree=_tree(skeleton),
        coordinates=tuple(_coordinate(skeleton, c, unseen) for c in skeleton.coordinates),
        markers={
            segment: tuple(m.name for m in skeleton.markers if m.segment == segment)
            for segment in skeleton.segment_names
        },
        without_place=tuple(
            m.name
            for m, place in zip(skeleton.markers, sized_marker_at(skeleton), strict=True)
            if np.isnan(place).any()
        ),
        unseen=unseen,
        mesh_remarks=tuple(mesh_remarks(grown_shapes(skeleton))),
    )


def _tree(skeleton: Skeleton) -> tuple[tuple[int, str, str, str], ...]:
    """Depth first, so that a child stands under its parent."""
    rows: list[tuple[int, str, str, str]] = []

    def visit(parent: str, depth: int) -> None:
        for joint in skeleton.joints:
            if joint.parent == parent:
                rows.append((depth, joint.child, joint.name, kind_of(joint)))
                visit(joint.child, depth + 1)

    visit("laboratory", 0)
    return tuple(rows)


def kind_of(joint: Joint) -> str:
    """A joint's motion in words."""
    motion = joint.motion
    if isinstance(motion, Floating):
        return "floating"
    if isinstance(motion, Spherical):
        return "spherical"
    if isinstance(motion, Fixed):
        return "fixed"
    free = sum(1 for move in motion.moves if move.function is None)
    coupled = len(motion.moves) - free
    return f"{free} free move{'s' * (free != 1)}" + (f", {coupled} coupled" if coupled else "")


def _coordinate(
    skeleton: Skeleton, coordinate: Coordinate, unseen: tuple[str, ...]
) -> CoordinateReport:
    factor = float(np.degrees(1.0)) if coordinate.unit == "rad" else 1.0

    def bound(value: float) -> float | None:
        return round(value * factor, 9) if np.isfinite(value) else None

    role = "free"
    if coordinate.held is not None:
        role = "held"
    elif coordinate.follows is not None:
        role = f"follows {coordinate.follows}"
    return CoordinateReport(
        name=coordinate.name,
        joint=_joint_of(skeleton, coordinate.name),
        unit="deg" if coordinate.unit == "rad" else "m",
        lower=bound(coordinate.lower),
        upper=bound(coordinate.upper),
        rest=round(coordinate.rest * factor, 9),
        role=role,
        seen=coordinate.name not in unseen,
    )


def _joint_of(skeleton: Skeleton, coordinate: str) -> str:
    for joint in skeleton.joints:
        motion = joint.motion
        if isinstance(motion, Floating) and coordinate in motion.position:
            return joint.name
        if isinstance(motion, Moves) and any(m.coordinate == coordinate for m in motion.moves):
            return joint.name
    return ""


def unseen_freedoms(skeleton: Skeleton) -> tuple[str, ...]:
    """Coordinates, and joints whose orientation, no marker of the model can tell."""
    if not skeleton.markers:
        return tuple(c.name for c in skeleton.coordinates if c.held is None)
    functions = SkeletonFunctions(skeleton)
    rng = np.random.default_rng(0)
    markers = np.zeros((POSTURES, len(skeleton.markers), 3))
    problem = frame_problem(skeleton, functions, markers, Upright("+Y", "any"))
    postures = _postures(problem, rng)
    bounds = problem.bounds()
    H, _, _ = problem(postures, np.arange(POSTURES))
    _, involved = undetermined(H, ~bounds.pinned)
    never = np.asarray((involved | ~problem.seen()).all(axis=0))
    freedoms = functions.kinematics.freedoms
    names = [name for k, name in enumerate(freedoms.scalars) if never[k]]
    for ball, joint in enumerate(freedoms.balls):
        if never[freedoms.ball_slice(ball)].any():
            names.append(f"orientation of {joint}")
    held = {c.name for c in skeleton.coordinates if c.held is not None}
    lost = {name for name in names if name not in held}
    lost |= {c.name for c in skeleton.coordinates if c.follows in lost}
    return tuple(
        [c.name for c in skeleton.coordinates if c.name in lost]
        + [name for name in names if name.startswith("orientation of ")]
    )


def _postures(problem: FrameProblem, rng: np.random.Generator) -> Posture:
    rest, bounds = problem.rest(), problem.bounds()
    limited = np.isfinite(bounds.lower) & np.isfinite(bounds.upper)
    low = np.where(limited, bounds.lower, rest.scalars - UNLIMITED_HALF)
    high = np.where(limited, bounds.upper, rest.scalars + UNLIMITED_HALF)
    middle, half = (low + high) / 2, (high - low) / 2
    scalars = middle + SHARE_OF_RANGE * half * rng.uniform(-1, 1, middle.shape)
    balls = rest.quaternions.shape[1]
    turn = np.zeros((len(problem), scalars.shape[1] + 3 * balls))
    turn[:, scalars.shape[1] :] = rng.uniform(-0.5, 0.5, (len(problem), 3 * balls))
    return Posture(scalars, rest.quaternions).after(turn)
