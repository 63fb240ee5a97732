"""Which way every coordinate moves its segment: the axis and positive sense of each, at rest.

Nothing is read off the model's text: each coordinate is changed a little and the poses tell what
moved, so a drawing shows what a fit does. Decided here: a coordinate that drives several joints is
shown at the first segment, from the root, that it moves; one that follows another is not shown, for
it is part of that one's motion.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from condyle.model.growth import (
    sized_joint_centres,
    sized_landmarks,
    sized_marker_at,
    sized_numbers,
)
from condyle.model.kinematics import angle_report
from condyle.model.meshes import grown_shapes
from condyle.model.skeleton import LABORATORY, Coordinate, Skeleton
from condyle.solver.frame_problem import SkeletonFunctions
from condyle.solver.posture import Posture, upright_posture
from condyle.solver.results import FittedMotion
from condyle.solver.upright import Upright

FloatArray = NDArray[np.float64]

STEP = 1e-4
"""rad or m to either side of rest; central differences are then exact to about 1e-8."""

STILL = 1e-7
"""rad or m per unit of a coordinate below which nothing moved."""

UP = "+Y"


@dataclass(frozen=True, slots=True)
class Sense:
    """How one coordinate or reported angle moves its segment, at rest.

    Attributes
    ----------
    name, joint, segment : str
    turns : bool
        True for a turn about the axis (right-handed), False for a slide along it.
    centre : (3,) m, laboratory axes
        On the axis, nearest to the joint's centre.
    direction : (3,) unit, laboratory axes
        The axis, towards its positive end.
    unit : "rad" or "m"
    lower, upper : float
        The range; infinite where unlimited.
    held : float or None
    """

    name: str
    joint: str
    segment: str
    turns: bool
    centre: FloatArray
    direction: FloatArray
    unit: str
    lower: float
    upper: float
    held: float | None


@dataclass(frozen=True, slots=True)
class RestingModel:
    """A skeleton at rest: something to draw, and to change a little.

    Attributes
    ----------
    posture : one frame, every coordinate at rest (or held), every orientation at zero
    """

    skeleton: Skeleton
    functions: SkeletonFunctions
    posture: Posture
    numbers: FloatArray

    def poses(self, step: FloatArray | None = None) -> FloatArray:
        """(segments, 4, 4) laboratory-from-segment, at rest or a step away from it."""
        posture = self.posture if step is None else self.posture.after(step[None])
        return np.asarray(self.functions.poses(posture, self.numbers)[0])

    def motion(self, *, with_markers: bool) -> FittedMotion:
        """The rest posture as a motion of one frame, its markers where the model has them."""
        known = np.isfinite(sized_marker_at(self.skeleton)).all(axis=1)
        placed = np.asarray(known & with_markers)
        positions = self.functions.marker_positions(self.posture, self.numbers)[:, placed]
        names = self.skeleton.marker_names
        return FittedMotion(
            name=self.skeleton.name,
            frame=np.array([1]),
            time=np.zeros(1),
            up=UP,
            segment_names=self.skeleton.segment_names,
            laboratory_from_segment=self.poses()[None],
            marker_names=tuple(n for n, there in zip(names, placed, strict=True) if there),
            measured=positions,
            fitted=positions,
            used=np.ones(positions.shape[:2], dtype=bool),
            joint_centres=sized_joint_centres(self.skeleton),
            landmarks=sized_landmarks(self.skeleton),
            shapes=grown_shapes(self.skeleton),
        )


def resting_model(skeleton: Skeleton) -> RestingModel:
    """A skeleton at rest in a laboratory whose up is +Y."""
    functions = SkeletonFunctions(skeleton)
    free = [c for c in skeleton.coordinates if c.follows is None]
    rest = np.array([c.rest if c.held is None else c.held for c in free])
    posture = upright_posture(rest, len(functions.kinematics.freedoms.balls), 1)
    numbers = sized_numbers(skeleton, Upright(UP, "chosen").laboratory_from_upright)
    return RestingModel(skeleton, functions, posture, numbers)


def coordinate_senses(resting: RestingModel) -> tuple[Sense, ...]:
    """The sense of every coordinate that is not a function of another, joint by joint."""
    freedoms = resting.functions.kinematics.freedoms
    skeleton = resting.skeleton
    free = {c.name: c for c in skeleton.coordinates if c.follows is None}
    senses = []
    for name, coordinate in free.items():
        step = np.zeros(freedoms.size)
        step[freedoms.scalars.index(name)] = STEP
        senses.append(_sense(resting, coordinate, step))
    for number, ball in enumerate(freedoms.balls):
        joint = next(j for j in skeleton.joints if j.name == ball)
        report = angle_report(joint)
        for name, axis, sign in zip(report.names, report.axes, report.signs, strict=True):
            step = np.zeros(freedoms.size)
            step[freedoms.ball_slice(number).start + axis] = sign * STEP
            senses.append(_sense(resting, Coordinate(name, "rad"), step))
    order = {joint.name: i for i, joint in enumerate(skeleton.joints)}
    moved = [sense for sense in senses if sense is not None]
    return tuple(sorted(moved, key=lambda sense: order[sense.joint]))


def _sense(resting: RestingModel, coordinate: Coordinate, step: FloatArray) -> Sense | None:
    """The screw of the first segment that a step moves; None where nothing moves."""
    before, after = resting.poses(-step), resting.poses(step)
    at_rest = resting.poses()
    for index, joint in enumerate(resting.skeleton.joints):
        turned = Rotation.from_matrix(after[index, :3, :3] @ before[index, :3, :3].T).as_rotvec()
        angular = turned / (2 * STEP)
        linear = (after[index, :3, 3] - before[index, :3, 3]) / (2 * STEP)
        rate = float(np.linalg.norm(angular))
        if max(rate, float(np.linalg.norm(linear))) < STILL:
            continue
        origin, centre = at_rest[index, :3, 3], _joint_centre(resting, index, at_rest)
        turns = rate >= STILL
        if turns:
            direction = angular / rate
            on_axis = origin + np.cross(angular, linear) / rate**2
            centre = on_axis + direction * float(direction @ (centre - on_axis))
        else:
            direction = linear / np.linalg.norm(linear)
        return Sense(
            coordinate.name,
            joint.name,
            joint.child,
            turns,
            centre,
            direction,
            coordinate.unit,
            coordinate.lower,
            coordinate.upper,
            coordinate.held,
        )
    return None


def _joint_centre(resting: RestingModel, index: int, poses: FloatArray) -> FloatArray:
    """(3,) m: the joint's centre in its parent; the segment's origin for a root."""
    joint = resting.skeleton.joints[index]
    if joint.parent == LABORATORY:
        return np.asarray(poses[index, :3, 3])
    at = sized_joint_centres(resting.skeleton)[joint.parent][joint.child]
    parent = poses[resting.skeleton.segment_index(joint.parent)]
    return np.asarray(parent[:3, :3] @ at + parent[:3, 3])
