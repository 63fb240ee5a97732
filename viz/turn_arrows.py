"""Arrows that show a positive sense: round the axis for a turn, along it for a slide.

Decided here: how large arrows are and where along its axis each stands, so that those of one joint
and its neighbours stay apart. A turn is right-handed about its direction; its arrow runs most of the
way round, and its head comes to lie on the side that faces the camera.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from condyle.viz.coordinate_senses import Sense
from condyle.viz.viewpoint import unit

FloatArray = NDArray[np.float64]

SWEEP = np.radians(285.0)
"""How far round a turn's arrow runs."""

HEAD_BEYOND = np.radians(55.0)
"""How far past the point nearest to the camera a turn's arrow ends."""

ARC_POINTS = 60

LARGEST, SMALLEST = 0.030, 0.014
"""A turn's radius at most and at least, as a share of the figure's size."""

OF_NEIGHBOUR = 0.48
"""A turn's radius at most, as a share of the distance to the next joint."""

SAME_PLACE = 0.03
"""Joints closer than this share of the figure's size count as one place."""

ALONG, HALF_WAY = 1.55, 0.5
"""How far along its axis a turn's arrow stands from the joint: in its own radii, and at most so much of
the distance to the next joint."""

CROWDED = 0.95
"""An arrow smaller than this share of the largest has too little room."""

AMONG = 0.8
"""Joints count as among crowded ones up to so far from them, as a share of their extent."""

ROOT = 1.75
"""A root's arrows are so much larger than the largest: they move everything."""

SIDEWAYS = 0.3
"""An axis that faces the camera less than this (cosine) is drawn on the side of the moved segment."""


@dataclass(frozen=True, slots=True)
class Arrow:
    """An arrow of one coordinate, in laboratory axes (m).

    Attributes
    ----------
    path : (n, 3)
        From tail to head.
    rod : (2, 3)
        From the joint to where the arrow stands on its axis.
    """

    sense: Sense
    path: FloatArray
    rod: FloatArray


def arrows_of(
    senses: Sequence[Sense],
    *,
    size: float,
    roots: frozenset[str],
    bodies: dict[str, FloatArray],
    towards_camera: FloatArray,
) -> tuple[Arrow, ...]:
    """An arrow for every sense.

    Parameters
    ----------
    size : float
        m; the figure's largest extent.
    roots : joints whose parent is the laboratory
    bodies : segment -> (3,) m, the middle of what is drawn of it
    towards_camera : (3,) unit
    """
    radii = radii_of(senses, size=size, roots=roots)
    room = room_of(senses, size=size)
    taken: list[tuple[str, FloatArray]] = []
    arrows = []
    for sense, radius, free in zip(senses, radii, room, strict=True):
        side = outward(sense, bodies, towards_camera)
        if any(joint == sense.joint and float(d @ side) > 0.9 for joint, d in taken):
            side = -side
        taken.append((sense.joint, side))
        if sense.turns:
            along = ALONG * radius if sense.joint in roots else min(ALONG * radius, HALF_WAY * free)
            middle = sense.centre + along * side
            path = turn_path(middle, sense.direction, radius, towards_camera)
            beyond = middle + 0.5 * radius * side
        else:
            start = sense.centre + 0.35 * radius * sense.direction
            path = slide_path(start, sense.direction, 2.6 * radius)
            beyond = start
        arrows.append(Arrow(sense, path, np.stack([sense.centre, beyond])))
    return tuple(arrows)


def radii_of(senses: Sequence[Sense], *, size: float, roots: frozenset[str]) -> FloatArray:
    """(senses,) m: as large as the distance to the next joint leaves room for."""
    room = room_of(senses, size=size)
    radii = np.clip(OF_NEIGHBOUR * room, SMALLEST * size, LARGEST * size)
    root = np.array([sense.joint in roots for sense in senses], dtype=bool)
    return np.where(root & (len(roots) < len(senses)), ROOT * LARGEST * size, radii)


def room_of(senses: Sequence[Sense], *, size: float) -> FloatArray:
    """(senses,) m: the distance to the next joint; infinite where there is none."""
    centres = np.array([sense.centre for sense in senses]).reshape(-1, 3)
    distance = np.linalg.norm(centres[:, None] - centres[None], axis=2)
    distance[distance < SAME_PLACE * size] = np.inf
    return np.asarray(distance.min(axis=1, initial=np.inf))


def crowded(senses: Sequence[Sense], *, size: float, roots: frozenset[str]) -> list[bool]:
    """Which senses have so little room that their arrows come out small, or stand among such."""
    small = radii_of(senses, size=size, roots=roots) < CROWDED * LARGEST * size
    if not small.any():
        return [False] * len(senses)
    centres = np.array([sense.centre for sense in senses])
    low, high = centres[small].min(axis=0), centres[small].max(axis=0)
    slack = AMONG * float((high - low).max())
    among = ((centres > low - slack) & (centres < high + slack)).all(axis=1)
    return [bool(one) for one in small | among]


def outward(sense: Sense, bodies: dict[str, FloatArray], towards_camera: FloatArray) -> FloatArray:
    """The end of the axis on which an arrow is seen best: towards the camera, else the segment."""
    facing = float(sense.direction @ towards_camera)
    if abs(facing) > SIDEWAYS:
        return sense.direction if facing > 0 else -sense.direction
    along = float(sense.direction @ (bodies[sense.segment] - sense.centre))
    return sense.direction if along > 0 else -sense.direction


def turn_path(
    centre: FloatArray, direction: FloatArray, radius: float, towards_camera: FloatArray
) -> FloatArray:
    """(points, 3) m: right-handed about `direction`, past the side that faces the camera."""
    near = towards_camera - direction * float(towards_camera @ direction)
    if np.linalg.norm(near) < 1e-3:
        near = np.cross(direction, np.eye(3)[int(np.abs(direction).argmin())])
    u = unit(near)
    v = np.cross(direction, u)
    angle = np.linspace(HEAD_BEYOND - SWEEP, HEAD_BEYOND, ARC_POINTS)[:, None]
    return np.asarray(centre + radius * (np.cos(angle) * u + np.sin(angle) * v))


def slide_path(start: FloatArray, direction: FloatArray, length: float) -> FloatArray:
    """(points, 3) m: straight along `direction`."""
    return np.asarray(start + np.linspace(0.0, length, 8)[:, None] * direction)
