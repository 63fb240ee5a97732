"""Where the angles of a joint cannot be told apart: a property of their sequence, not of the markers.

Three turns one after another lose one where the first and the third axis come to lie along one line:
there only their sum or difference is determined, and near it both are told worse by the sine of the
distance. Decided here: with first and third axis alike that happens where the middle angle is 0 or
180 degrees, with three different ones at 90 either way (Diebel 2006,
Representing Attitude); for the moves of a joint, whose axes need not be at right angles, where the middle move lays
the third axis along the first. A region that the joint's limits keep out of reach is not told.
"""

from __future__ import annotations

from dataclasses import dataclass
from math import atan2, cos, degrees, hypot, pi, radians, sin

import numpy as np

from condyle.model.elementary import rotation_of_turn
from condyle.model.skeleton import (
    AngleReport,
    Coordinate,
    Floating,
    Joint,
    Move,
    Moves,
    Skeleton,
    Spherical,
    Turn,
)

NEAR = radians(5.0)
"""rad; closer than this first and third are told about eleven times (1 / sin 5 deg) worse, or more."""

ALIGNED = cos(radians(1.0))
"""Cosine from which two axes count as one line."""

LEAN_STEPS = 360
"""Orientations tried around a singularity when a cone may keep it out of reach."""


@dataclass(frozen=True, slots=True)
class SingularRegion:
    """Two numbers that cannot be told apart near some values of a third.

    Attributes
    ----------
    joint : str
    first, middle, third : names of the joint's three numbers
    at : values of `middle`, rad, ascending
    within : float
        rad, to either side of each.
    stays_told : str or None
        The reported number that stays determined there; None for moves, which have none.
    """

    joint: str
    first: str
    middle: str
    third: str
    at: tuple[float, ...]
    within: float
    stays_told: str | None


def singular_regions(skeleton: Skeleton) -> tuple[SingularRegion, ...]:
    """The singular regions of a skeleton's reported angles and of its moves, joint by joint."""
    found: list[SingularRegion] = []
    for joint in skeleton.joints:
        motion = joint.motion
        if isinstance(motion, Floating):
            found.append(_of_angles(joint, motion.angles, cone=None))
        elif isinstance(motion, Spherical):
            found.append(_of_angles(joint, motion.angles, cone=motion.cone))
        elif isinstance(motion, Moves):
            found += _of_moves(skeleton, joint, motion)
    return tuple(region for region in found if region.at)


def _of_angles(joint: Joint, report: AngleReport, *, cone: float | None) -> SingularRegion:
    alike = report.axes[0] == report.axes[2]
    at = (0.0, pi) if alike else (-pi / 2, pi / 2)
    reached = tuple(
        value for value in at if cone is None or _least_lean(report, value) < cone + NEAR
    )
    first, middle, third = report.names
    return SingularRegion(joint.name, first, middle, third, reached, NEAR, report.sum_name)


def _least_lean(report: AngleReport, middle: float) -> float:
    """How far (rad) the child's Y leans at least where the middle angle is singular.

    There the third turn adds nothing that the first does not do, so the first alone is tried.
    """
    i, j, _ = report.axes
    axes = np.eye(3)
    turned = rotation_of_turn(Turn(tuple(axes[j]), report.signs[1] * middle))
    firsts = np.linspace(0, 2 * pi, LEAN_STEPS, endpoint=False)
    upright = [
        (rotation_of_turn(Turn(tuple(axes[i]), float(first))) @ turned)[1, 1] for first in firsts
    ]
    return float(np.arccos(np.clip(max(upright), -1.0, 1.0)))


def _of_moves(skeleton: Skeleton, joint: Joint, motion: Moves) -> list[SingularRegion]:
    """Every three free turns in a row; turns that another joint or move shares are left out."""
    turns = [move for move in motion.moves if move.kind == "rotate"]
    found = []
    for first, middle, third in zip(turns, turns[1:], turns[2:], strict=False):
        names = [move.coordinate for move in (first, middle, third) if move.follows is None]
        if len(names) != 3 or any(_is_shared(skeleton, name) for name in names):
            continue
        a, b, c = (str(name) for name in names)
        here = skeleton.coordinate(b)
        at = tuple(v for v in _alignments(first, middle, third) if _in_range(here, v))
        found.append(SingularRegion(joint.name, a, b, c, at, NEAR, None))
    return found


def _is_shared(skeleton: Skeleton, name: str | None) -> bool:
    """Whether a coordinate turns something by more than one move, so that one joint is not all."""
    turning = [
        move
        for joint in skeleton.joints
        if isinstance(joint.motion, Moves)
        for move in joint.motion.moves
        if move.kind == "rotate" and name in (move.coordinate, move.follows)
        if move.coordinate is None or move.coordinate == name
    ]
    return len(turning) > 1


def _alignments(first: Move, middle: Move, third: Move) -> tuple[float, ...]:
    """Values (rad) of the middle turn that lay the third axis along the first, either way.

    By Rodrigues' formula a . R(m, t) c = p + q cos t + r sin t with p = (a.m)(m.c), q = a.c - p and
    r = a.(m x c): largest at atan2(r, q), smallest half a turn from there.
    """
    a, m, c = (np.array(move.axis) for move in (first, middle, third))
    p = float(a @ m) * float(m @ c)
    q, r = float(a @ c) - p, float(a @ np.cross(m, c))
    size, best = hypot(q, r), atan2(r, q)
    values = []
    if p + size > ALIGNED:
        values.append(best)
    if p - size < -ALIGNED:
        values.append(best + pi if best <= 0 else best - pi)
    return tuple(sorted(values))


def _in_range(coordinate: Coordinate, value: float) -> bool:
    """Whether a turn comes within `NEAR` of a value, whole turns apart."""
    if coordinate.held is not None:
        return abs(atan2(sin(coordinate.held - value), cos(coordinate.held - value))) < NEAR
    return any(
        coordinate.lower - NEAR < value + 2 * pi * turns < coordinate.upper + NEAR
        for turns in (-1, 0, 1)
    )


def said(region: SingularRegion) -> str:
    """A region as one sentence, in degrees."""
    values = " or ".join(f"{degrees(value):.0f}" for value in region.at)
    remedy = (
        f"; read {region.stays_told} there"
        if region.stays_told
        else "; a spherical joint with another sequence of angles would tell them"
    )
    return (
        f"{region.first} and {region.third} cannot be told apart within "
        f"{degrees(region.within):.0f} deg of {region.middle} {values}{remedy}"
    )
