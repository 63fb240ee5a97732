"""The invented person: nobody's body, but one that the model's own expectations allow.

Decided here: how this body departs from `full_body`. Sizes are drawn from the model's prior.
Hips and knees depart in ways that sizing cannot follow (a hip beside its nominal place, a knee axis
a little askew), so that the demo's errors contain what a real person's would.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from condyle.model.growth import size_factors, sized_marker_at
from condyle.model.loading import load_skeleton
from condyle.model.skeleton import Joint, Move, Moves, Person, Size, Skeleton, Vector

FloatArray = NDArray[np.float64]

MODEL = "full_body"
"""The shipped model that this person is built from."""

SEED = 1
"""Of every draw in the study: the first number tried, and the only one."""

PERSON = Person(stature=1.68, mass=64.0)
"""m and kg."""

LANDMARK_SD, TECHNICAL_SD = 0.006, 0.015
"""m per axis: how far a marker sits from its nominal place, on a landmark and anywhere on a side.
Less than palpation's 6 to 25 mm (Della Croce 1999; from memory, loose bound): one practised hand."""

TECHNICAL_WITHIN = 0.04
"""m; markers that the model expects to sit further than this from their place are technical."""

HIP_SD = 0.006
"""m per axis, a hip centre beside its nominal place. Regressions miss by about as much (Harrington
2007; from memory, loose bound)."""

KNEE_SD, KNEE_AXIS_SD = 0.003, 3.0
"""m per axis and degrees per axis: knee centre beside the middle of the epicondyles, and axis."""


@dataclass(frozen=True, slots=True)
class InventedPerson:
    """A body whose every number is known.

    Attributes
    ----------
    skeleton : Skeleton
        Sized, every marker placed where it truly sits, joints departing from the model's.
    departures : joint name -> what was changed
        ``centre`` (m, in the sized parent) and, for a knee, ``axis`` (rotation vector, degrees).
    """

    skeleton: Skeleton
    departures: dict[str, dict[str, list[float]]]


def invent_person() -> InventedPerson:
    """Draw the person; always the same one."""
    rng = np.random.default_rng([SEED, 0])
    nominal = load_skeleton(MODEL)
    grown = replace(nominal, sizes=draw_sizes(nominal, rng), subject=PERSON)
    joints, departures = [], {}
    for joint in grown.joints:
        if joint.name.startswith(("hip_", "knee_")):
            joint, departures[joint.name] = departing(joint, grown, rng)
        joints.append(joint)
    skeleton = replace(grown, joints=tuple(joints), name="invented person")
    return InventedPerson(with_marker_places(skeleton, rng), departures)


def draw_sizes(skeleton: Skeleton, rng: np.random.Generator) -> dict[str, Size]:
    """Segment -> factors: ln f about the stature's ratio, with the model's own spread."""
    if skeleton.person is None:
        raise ValueError(f"{skeleton.name} does not say whom its numbers describe")
    scale = np.log(PERSON.stature / skeleton.person.stature)
    factors = np.ones((len(skeleton.segments), 3))
    for group in skeleton.sizing.groups:
        factor = np.exp(rng.normal(scale, skeleton.sizing.factor_sd))
        for segment, axis in group.members:
            factors[skeleton.segment_index(segment), axis] = factor
    names = skeleton.segment_names
    return {name: Size(vector(row)) for name, row in zip(names, factors, strict=True)}


def departing(
    joint: Joint, skeleton: Skeleton, rng: np.random.Generator
) -> tuple[Joint, dict[str, list[float]]]:
    """A hip or a knee beside its nominal place; a knee also about an axis a little askew."""
    knee = joint.name.startswith("knee_")
    shift = rng.normal(0.0, KNEE_SD if knee else HIP_SD, 3)
    growth = size_factors(skeleton)[skeleton.segment_index(joint.parent)]
    moved = replace(joint, at=vector(np.array(joint.at) + shift / growth))
    departure = {"centre": shift.tolist()}
    if knee and isinstance(joint.motion, Moves):
        turn_deg = rng.normal(0.0, KNEE_AXIS_SD, 3)
        departure["axis"] = turn_deg.tolist()
        turn = Rotation.from_rotvec(turn_deg, degrees=True)
        moved = replace(moved, motion=Moves(tuple(turned(m, turn) for m in joint.motion.moves)))
    return moved, departure


def turned(move: Move, turn: Rotation) -> Move:
    """The move about or along the turned axis: T M T^-1, which leaves the zero posture as it is."""
    return replace(move, axis=vector(turn.apply(move.axis)))


def with_marker_places(skeleton: Skeleton, rng: np.random.Generator) -> Skeleton:
    """Every marker where it truly sits: the grown nominal place and a departure."""
    within = np.array([marker.placed_within for marker in skeleton.markers])
    sd = np.where(within > TECHNICAL_WITHIN, TECHNICAL_SD, LANDMARK_SD)
    places = sized_marker_at(skeleton) + rng.normal(size=(len(within), 3)) * sd[:, None]
    markers = [
        replace(marker, placed=vector(place))
        for marker, place in zip(skeleton.markers, places, strict=True)
    ]
    return replace(skeleton, markers=tuple(markers))


def vector(values: FloatArray) -> Vector:
    """Three plain floats."""
    x, y, z = (float(value) for value in values)
    return (x, y, z)
