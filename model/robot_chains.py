"""How each joint of a sized skeleton becomes a chain of joints with one freedom each.

Decided here: the order of the chain, what its joints and links are called, and what goes into the
origins because it never moves. The frame of a segment's link is the segment's own.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field, replace
from math import inf, pi
from typing import Literal

import casadi as ca
import numpy as np
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from condyle.model.elementary import rotation_about, rotation_of_turn
from condyle.model.growth import number_layout, sized_numbers
from condyle.model.robot import (
    WORLD,
    Function,
    JointValue,
    Mimic,
    RobotDescription,
    RobotJoint,
    function_samples,
)
from condyle.model.skeleton import (
    LABORATORY,
    Fixed,
    Floating,
    Joint,
    Move,
    Moves,
    Skeleton,
    Spherical,
    Vector,
)

FloatArray = NDArray[np.float64]

Y = 1
"""The axis along a segment, which a cone is counted from."""

LIMIT_SAMPLES = 2001
"""Points over the driver's range that give a tabulated joint its limits."""


def robot_description(skeleton: Skeleton, laboratory_from_upright: FloatArray) -> RobotDescription:
    """The links and joints of a sized skeleton.

    Parameters
    ----------
    laboratory_from_upright : (3, 3)
        Matters only to joints from the laboratory that are turned upright.
    """
    return _Builder(skeleton, laboratory_from_upright).description()


@dataclass(frozen=True, slots=True)
class _Step:
    """One elementary move of a joint, and the range of its driver."""

    kind: Literal["rotate", "translate"]
    axis: Vector
    value: JointValue
    lower: float
    upper: float
    coordinate: str | None
    constant: float | None = None


@dataclass(slots=True)
class _Names:
    """Names given so far, so that each is given once."""

    taken: set[str] = field(default_factory=set)

    def fresh(self, wanted: str) -> str:
        name, number = wanted, 2
        while name in self.taken:
            name, number = f"{wanted}_{number}", number + 1
        self.taken.add(name)
        return name


class _Builder:
    """Walks the joints of a skeleton from the laboratory outwards."""

    def __init__(self, skeleton: Skeleton, laboratory_from_upright: FloatArray) -> None:
        layout = number_layout(skeleton)
        numbers = sized_numbers(skeleton, laboratory_from_upright)
        self.skeleton = skeleton
        self.upright = laboratory_from_upright
        self.at = numbers[layout.at].reshape(-1, 3)
        self.in_child = numbers[layout.in_child].reshape(-1, 3)
        self.gains = iter(numbers[layout.gains])
        self.joints: list[RobotJoint] = []
        self.link_of = {LABORATORY: WORLD}
        self.links = [WORLD]
        self.floating: dict[str, str] = {}
        self.link_names = _Names({WORLD})
        segments = {name: self.link_names.fresh(name) for name in skeleton.segment_names}
        self.link_of |= segments
        self.joint_names = _Names(_own_names(skeleton))
        self.named: set[str] = set()
        self.functions = _functions_of_coordinates(skeleton)

    def description(self) -> RobotDescription:
        for index, joint in enumerate(self.skeleton.joints):
            if isinstance(joint.motion, Floating):
                self._add_floating(joint)
            else:
                self._add_chain(index, joint)
        segments = {name: link for name, link in self.link_of.items() if name != LABORATORY}
        return RobotDescription(
            self.skeleton.name, tuple(self.links), self._with_mimics(), segments, self.floating
        )

    def _add_floating(self, joint: Joint) -> None:
        name = self.joint_names.fresh(joint.name)
        self.floating[name] = joint.child
        self._add(RobotJoint(name, "floating", WORLD, self.link_of[joint.child], np.eye(4)))

    def _add(self, joint: RobotJoint) -> None:
        self.joints.append(joint)
        self.links.append(joint.child)

    def _add_chain(self, index: int, joint: Joint) -> None:
        """One joint of theirs for each elementary move; what is constant goes into the origins."""
        link, here = self.link_of[joint.parent], self._start(index, joint)
        end = self._end(index, joint)
        steps = self._steps(joint)
        moving = [i for i, step in enumerate(steps) if step.constant is None]
        ends_at_segment = (
            bool(moving) and moving[-1] == len(steps) - 1 and np.array_equal(end, np.eye(4))
        )
        for i, step in enumerate(steps):
            if step.constant is not None:
                here = here @ _moved(step, step.constant)
                continue
            name = self._joint_name(step, f"{joint.name}_move_{i + 1}", joint)
            is_last = ends_at_segment and i == moving[-1]
            child = self.link_of[joint.child] if is_last else self.link_names.fresh(f"{name}_link")
            self._add(_one_freedom(name, step, link, child, here))
            link, here = child, np.eye(4)
        if not ends_at_segment:
            name, child = self.joint_names.fresh(joint.name), self.link_of[joint.child]
            self._add(RobotJoint(name, "fixed", link, child, here @ end))

    def _start(self, index: int, joint: Joint) -> FloatArray:
        """Joint frame in the parent: at its centre, its axes turned as calibration found them."""
        start = _translation(self.at[index])
        start[:3, :3] = _axis_turn(joint) @ self._turned(joint)
        return start

    def _end(self, index: int, joint: Joint) -> FloatArray:
        """Segment in the frame reached by the moves: T M T^-1 leaves T^-1 behind them."""
        turned = self._turned(joint)
        end = np.eye(4)
        if joint.axis_turn is not None:
            end[:3, :3] = turned.T @ _axis_turn(joint).T @ turned
        return np.asarray(end @ _translation(-self.in_child[index]))

    def _turned(self, joint: Joint) -> FloatArray:
        if isinstance(joint.turned, str):
            return self.upright
        return rotation_of_turn(joint.turned)

    def _joint_name(self, step: _Step, otherwise: str, joint: Joint) -> str:
        """The coordinate's own name where it moves a joint for the first time."""
        if step.coordinate is None:
            return self.joint_names.fresh(otherwise)
        if step.coordinate in self.named:
            return self.joint_names.fresh(f"{joint.name}_{step.coordinate}")
        self.named.add(step.coordinate)
        return step.coordinate

    def _steps(self, joint: Joint) -> list[_Step]:
        motion = joint.motion
        if isinstance(motion, Fixed | Floating):
            return []
        if isinstance(motion, Spherical):
            return _turns(motion)
        return [self._step(move) for move in motion.moves]

    def _step(self, move: Move) -> _Step:
        if move.function is None or move.follows is None:
            driver, functions = self._followed(str(move.coordinate))
            value = JointValue(driver, functions)
        else:
            driver, functions = self._followed(move.follows)
            gain = float(next(self.gains)) if move.kind == "translate" else 1.0
            value = JointValue(driver, (*functions, move.function), gain)
        coordinate = self.skeleton.coordinate(driver)
        line = value.line()
        constant = None
        if coordinate.held is not None:
            constant = float(value(np.array([coordinate.held]))[0])
        elif line is not None and line[0] == 0.0:
            constant = line[1]
        lower, upper = coordinate.lower, coordinate.upper
        return _Step(move.kind, move.axis, value, lower, upper, move.coordinate, constant)

    def _followed(self, name: str) -> tuple[str, tuple[Function, ...]]:
        """The free coordinate that drives another one, and the functions from it to that one."""
        functions: tuple[Function, ...] = ()
        while name in self.functions:
            name, function = self.functions[name]
            functions = (function, *functions)
        return name, functions

    def _with_mimics(self) -> tuple[RobotJoint, ...]:
        """The joints with what follows what, and the limits that follow from it."""
        own = {j.coordinate for j in self.joints if j.value and j.name == j.value.driver}
        return tuple(self._following(joint, own) for joint in self.joints)

    def _following(self, joint: RobotJoint, own: set[str | None]) -> RobotJoint:
        value = joint.value
        if value is None or joint.name == value.driver:
            return joint
        line = value.line()
        if line is None or value.driver not in own:
            _, numbers = function_samples(joint, self.skeleton, LIMIT_SAMPLES)
            return replace(joint, lower=float(numbers.min()), upper=float(numbers.max()))
        ends = sorted((line[0] * joint.lower + line[1], line[0] * joint.upper + line[1]))
        mimic = Mimic(value.driver, *line)
        return replace(joint, lower=ends[0], upper=ends[1], mimic=mimic)


def _own_names(skeleton: Skeleton) -> set[str]:
    """Coordinates and reported angles: their joints keep these names, no other joint has them."""
    names = {coordinate.name for coordinate in skeleton.coordinates}
    for joint in skeleton.joints:
        if isinstance(joint.motion, Floating | Spherical):
            names |= set(joint.motion.angles.names)
    return names


def _functions_of_coordinates(skeleton: Skeleton) -> dict[str, tuple[str, Function]]:
    """Dependent coordinate -> the one it follows, and how."""
    return {
        move.coordinate: (move.follows, move.function)
        for joint in skeleton.joints
        if isinstance(joint.motion, Moves)
        for move in joint.motion.moves
        if move.coordinate and move.follows and move.function is not None
    }


def _turns(motion: Spherical) -> list[_Step]:
    """Three turns in the reported sequence; the middle one stays on the reported branch.

    With y first and third the middle angle is the child's Y from the joint's Y: the cone's angle.
    """
    angles = motion.angles
    middle = (0.0, pi) if angles.axes[0] == angles.axes[2] else (-pi / 2, pi / 2)
    if angles.axes[0] == angles.axes[2] == Y and motion.cone is not None:
        middle = (0.0, motion.cone)
    ranges: Sequence[tuple[float, float]] = ((-inf, inf), middle, (-inf, inf))
    steps = []
    for axis, sign, name, (lower, upper) in zip(
        angles.axes, angles.signs, angles.names, ranges, strict=True
    ):
        direction = [0.0, 0.0, 0.0]
        direction[axis] = float(sign)
        x, y, z = direction
        steps.append(_Step("rotate", (x, y, z), JointValue(name), lower, upper, name))
    return steps


def _one_freedom(
    name: str, step: _Step, parent: str, child: str, parent_from_joint: FloatArray
) -> RobotJoint:
    return RobotJoint(
        name=name,
        kind="revolute" if step.kind == "rotate" else "prismatic",
        parent=parent,
        child=child,
        parent_from_joint=parent_from_joint,
        axis=step.axis,
        value=step.value,
        lower=step.lower,
        upper=step.upper,
        coordinate=step.coordinate,
    )


def _translation(place: FloatArray) -> FloatArray:
    pose = np.eye(4)
    pose[:3, 3] = place
    return pose


def _axis_turn(joint: Joint) -> FloatArray:
    turn = Rotation.from_rotvec(joint.axis_turn or (0.0, 0.0, 0.0))
    return np.asarray(turn.as_matrix(), dtype=np.float64)


def _moved(step: _Step, value: float) -> FloatArray:
    """The pose that an elementary move makes at a constant value."""
    if step.kind == "translate":
        return _translation(np.array(step.axis) * value)
    pose = np.eye(4)
    pose[:3, :3] = np.asarray(ca.evalf(rotation_about(step.axis, ca.SX(value))))
    return pose
