"""Forward kinematics as CasADi expressions: freedoms in, segment poses, markers and screws out.

Fitting, calibrating and drawing all read what is built here, so how a joint moves its child is
written once. The model's numbers (joint places, marker places) are inputs, never constants: one
expression serves every subject of a model.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import casadi as ca

from condyle.model.elementary import (
    Expression,
    coupled,
    cross_matrix,
    rotation_about,
    rotation_of_quaternion,
    rotation_of_turn,
    rotation_of_vector,
)
from condyle.model.growth import NumberLayout, number_layout, turning_joints
from condyle.model.skeleton import (
    LABORATORY,
    AngleReport,
    Fixed,
    Floating,
    Joint,
    Move,
    Moves,
    Skeleton,
    Spherical,
)


@dataclass(frozen=True, slots=True)
class Freedoms:
    """What a fit may change: scalar coordinates, then orientations (one ball a joint).

    A step is a vector of `size` numbers: one for each scalar, then three for each ball, a small
    rotation vector in the child's axes (R becomes R Exp(step)).

    Attributes
    ----------
    scalars : coordinate names, those held included
    balls : names of the floating and spherical joints
    """

    scalars: tuple[str, ...]
    balls: tuple[str, ...]

    @property
    def size(self) -> int:
        """Length of a step."""
        return len(self.scalars) + 3 * len(self.balls)

    def ball_slice(self, ball: int) -> slice:
        """Where the three numbers of a ball stand in a step."""
        start = len(self.scalars) + 3 * ball
        return slice(start, start + 3)


def freedoms_of(skeleton: Skeleton) -> Freedoms:
    """The freedoms of a skeleton, in the order of its coordinates and joints."""
    scalars = tuple(c.name for c in skeleton.coordinates if c.follows is None)
    balls = tuple(j.name for j in skeleton.joints if isinstance(j.motion, Floating | Spherical))
    return Freedoms(scalars, balls)


def angle_report(joint: Joint) -> AngleReport:
    """How the orientation of a floating or spherical joint is told."""
    if not isinstance(joint.motion, Floating | Spherical):
        raise TypeError(f"{joint.name} has no orientation to report")
    return joint.motion.angles


@dataclass(frozen=True, slots=True)
class Screw:
    """How one freedom moves everything beyond one joint, per unit of the freedom.

    A point p of any segment beyond moves with velocity ``linear + angular x p`` (laboratory axes).
    """

    freedom: int
    joint: int
    linear: Expression
    angular: Expression


@dataclass(frozen=True, slots=True)
class Bend:
    """How two freedoms of one joint together accelerate everything beyond it.

    The second derivative of a point p of any segment beyond is ``constant + linear @ p``.
    """

    freedoms: tuple[int, int]
    joint: int
    constant: Expression
    linear: Expression


@dataclass(frozen=True, slots=True)
class _ElementaryScrew:
    """One move's screw per unit of its value, with the value's first and second derivatives."""

    linear: Expression
    angular: Expression
    rates: dict[int, Expression]
    curvatures: dict[tuple[int, int], Expression]


class Kinematics:
    """The expressions of one skeleton.

    Attributes
    ----------
    scalars : SX (number of scalar freedoms) rad or m
    quaternions : SX (4 balls) unit, scalar first
    numbers : SX, laid out by `layout`
    rotations, origins : SX 3x3 and 3 for each segment
        Laboratory-from-segment.
    screws : every way in which a freedom moves a subtree
    bends : every way in which two freedoms of one joint accelerate its subtree
        Freedoms of two joints need none: the upper one turns the lower one's velocity.
    """

    def __init__(self, skeleton: Skeleton) -> None:
        self.skeleton = skeleton
        self.freedoms = freedoms_of(skeleton)
        self.layout: NumberLayout = number_layout(skeleton)
        self.scalars = ca.SX.sym("scalars", len(self.freedoms.scalars))
        self.quaternions = ca.SX.sym("quaternions", 4 * len(self.freedoms.balls))
        self.numbers = ca.SX.sym("numbers", self.layout.size)
        self.rotations: list[Expression] = []
        self.origins: list[Expression] = []
        self.screws: list[Screw] = []
        self.bends: list[Bend] = []
        self._gain = 0
        self._turning = [joint.name for joint in turning_joints(skeleton)]
        self._values = self._coordinate_values()
        for index, joint in enumerate(skeleton.joints):
            self._add_joint(index, joint)

    @cached_property
    def coordinate_values(self) -> Expression:
        """SX of every named coordinate, free, held and dependent, in the skeleton's order."""
        return ca.vertcat(ca.SX(0, 1), *[self._values[c.name] for c in self.skeleton.coordinates])

    @cached_property
    def marker_positions(self) -> Expression:
        """SX (3 markers) m, laboratory axes."""
        places = self.numbers[self.layout.marker_at]
        points = []
        for i, marker in enumerate(self.skeleton.markers):
            segment = self.skeleton.segment_index(marker.segment)
            marker_in_segment = places[3 * i : 3 * i + 3]
            points.append(self.rotations[segment] @ marker_in_segment + self.origins[segment])
        return ca.vertcat(ca.SX(0, 1), *points)

    def _coordinate_values(self) -> dict[str, Expression]:
        values = {name: self.scalars[i] for i, name in enumerate(self.freedoms.scalars)}
        pending = [
            move
            for joint in self.skeleton.joints
            if isinstance(joint.motion, Moves)
            for move in joint.motion.moves
            if move.function is not None and move.coordinate is not None
        ]
        while pending:
            ready = [move for move in pending if move.follows in values]
            if not ready:
                raise ValueError("coordinates follow one another in a circle")
            for move in ready:
                values[str(move.coordinate)] = self._followed(move, values)
            pending = [move for move in pending if move not in ready]
        return values

    @staticmethod
    def _followed(move: Move, values: dict[str, Expression]) -> Expression:
        if move.function is None or move.follows is None:
            raise ValueError(f"{move.coordinate} does not follow anything")
        return coupled(move.function, values[move.follows])

    def _add_joint(self, index: int, joint: Joint) -> None:
        rotation, origin = ca.SX.eye(3), ca.SX.zeros(3)
        if joint.parent != LABORATORY:
            parent = self.skeleton.segment_index(joint.parent)
            rotation, origin = self.rotations[parent], self.origins[parent]
        origin = origin + rotation @ self.numbers[self.layout.at][3 * index : 3 * index + 3]
        rotation, origin = self._through_turned_motion(index, joint, rotation, origin)
        in_child = self.numbers[self.layout.in_child][3 * index : 3 * index + 3]
        self.rotations.append(rotation)
        self.origins.append(origin - rotation @ in_child)

    def _through_turned_motion(
        self, index: int, joint: Joint, rotation: Expression, origin: Expression
    ) -> tuple[Expression, Expression]:
        """The motion M in the joint's own frame: turned . M, or T . turned . M . (its turn back).

        T, a small turn of the joint's axes in the parent, leaves the zero posture as it is.
        """
        turned = ca.SX.eye(3)
        if joint.turned == "upright":
            turned = self._laboratory_from_upright()
        elif joint.turned is not None:
            turned = ca.sparsify(ca.SX(ca.DM(rotation_of_turn(joint.turned))))
        if joint.name not in self._turning:
            return self._through_motion(index, joint, rotation @ turned, origin)
        vector = self.numbers[self.layout.axis_turns]
        first = 3 * self._turning.index(joint.name)
        small = rotation_of_vector(vector[first : first + 3])
        rotation, origin = self._through_motion(index, joint, rotation @ small @ turned, origin)
        return rotation @ turned.T @ small.T @ turned, origin

    def _laboratory_from_upright(self) -> Expression:
        return ca.reshape(self.numbers[self.layout.laboratory_from_upright], 3, 3).T

    def _through_motion(
        self, index: int, joint: Joint, rotation: Expression, origin: Expression
    ) -> tuple[Expression, Expression]:
        motion = joint.motion
        if isinstance(motion, Fixed):
            return rotation, origin
        if isinstance(motion, Moves):
            return self._through_moves(index, motion, rotation, origin)
        if isinstance(motion, Floating):
            for axis, name in enumerate(motion.position):
                direction = rotation[:, axis]
                freedom = self.freedoms.scalars.index(name)
                self.screws.append(Screw(freedom, index, direction, ca.SX.zeros(3)))
                origin = origin + direction * self._values[name]
            if joint.parent == LABORATORY:
                rotation = rotation @ self._laboratory_from_upright()
        ball = self.freedoms.balls.index(joint.name)
        rotation = rotation @ rotation_of_quaternion(self.quaternions[4 * ball : 4 * ball + 4])
        self._add_ball(index, self.freedoms.ball_slice(ball).start, rotation, origin)
        return rotation, origin

    def _add_ball(self, index: int, first: int, rotation: Expression, origin: Expression) -> None:
        """Three turns at once: R Exp(d), whose second derivative is symmetric in its turns."""
        axes = [rotation[:, axis] for axis in range(3)]
        crosses = [cross_matrix(axis) for axis in axes]
        for i, angular in enumerate(axes):
            self.screws.append(Screw(first + i, index, ca.cross(origin, angular), angular))
            for j in range(i + 1):
                linear = (crosses[i] @ crosses[j] + crosses[j] @ crosses[i]) / 2
                pair = (first + i, first + j)
                self.bends.append(Bend(pair, index, -linear @ origin, linear))

    def _through_moves(
        self, index: int, motion: Moves, rotation: Expression, origin: Expression
    ) -> tuple[Expression, Expression]:
        parts: list[_ElementaryScrew] = []
        for move in motion.moves:
            value = self._move_value(move)
            direction = rotation @ ca.sparsify(ca.DM(move.axis))
            gain = self._next_gain(move)
            rates, curvatures = self._value_derivatives(value)
            if move.kind == "rotate":
                linear, angular = ca.cross(origin, direction), direction
                rotation = rotation @ rotation_about(move.axis, value)
            else:
                linear, angular = gain * direction, ca.SX.zeros(3)
                origin = origin + direction * (gain * value)
            parts.append(_ElementaryScrew(linear, angular, rates, curvatures))
        self._add_moves(index, parts)
        return rotation, origin

    def _value_derivatives(
        self, value: Expression
    ) -> tuple[dict[int, Expression], dict[tuple[int, int], Expression]]:
        """First and second derivatives of a move's value for the scalar freedoms it has."""
        gradient = ca.jacobian(value, self.scalars)
        rates = {
            k: gradient[k]
            for k in range(len(self.freedoms.scalars))
            if gradient.sparsity().has_nz(0, k)
        }
        curvatures = {}
        for k, rate in rates.items():
            second = ca.jacobian(rate, self.scalars)
            for other in rates:
                if other <= k and second.sparsity().has_nz(0, other):
                    curvatures[k, other] = second[other]
        return rates, curvatures

    def _add_moves(self, index: int, parts: list[_ElementaryScrew]) -> None:
        """Sum the moves of a joint into one screw a freedom and one bend a pair of freedoms."""
        freedoms = sorted({k for part in parts for k in part.rates})
        for k in freedoms:
            own = [part for part in parts if k in part.rates]
            linear = sum((part.rates[k] * part.linear for part in own), ca.SX.zeros(3))
            angular = sum((part.rates[k] * part.angular for part in own), ca.SX.zeros(3))
            self.screws.append(Screw(k, index, linear, angular))
            for other in freedoms:
                if other <= k:
                    self.bends.append(self._bend(index, parts, (k, other)))

    @staticmethod
    def _bend(index: int, parts: list[_ElementaryScrew], pair: tuple[int, int]) -> Bend:
        """An earlier move turns the velocity of a later one, and of itself."""
        k, other = pair
        constant, linear = ca.SX.zeros(3), ca.SX(3, 3)
        for later, part in enumerate(parts):
            for before in parts[: later + 1]:
                share = _product(before.rates, part.rates, pair, twice=before is not part)
                if share is None:
                    continue
                turning = cross_matrix(before.angular)
                constant = constant + share * (turning @ part.linear)
                linear = linear + share * (turning @ cross_matrix(part.angular))
            if (k, other) in part.curvatures:
                bend = part.curvatures[k, other]
                constant = constant + bend * part.linear
                linear = linear + bend * cross_matrix(part.angular)
        return Bend(pair, index, constant, linear)

    def _move_value(self, move: Move) -> Expression:
        if move.coordinate is not None:
            return self._values[move.coordinate]
        return self._followed(move, self._values)

    def _next_gain(self, move: Move) -> Expression:
        if move.kind != "translate" or move.function is None:
            return ca.SX(1)
        gain = self.numbers[self.layout.gains][self._gain]
        self._gain += 1
        return gain

    def perturbed_marker_positions(self) -> tuple[Expression, Expression]:
        """Marker positions after a step, and the step's symbol: for derivatives by CasADi."""
        return self.perturbed(self.marker_positions)

    def perturbed(self, expression: Expression) -> tuple[Expression, Expression]:
        """An expression of the freedoms after a step, and the step's symbol.

        The balls' small rotations enter to first order, which is exact for the first derivative
        at step zero.
        """
        step = ca.SX.sym("step", self.freedoms.size)
        quaternions = []
        for ball in range(len(self.freedoms.balls)):
            q = self.quaternions[4 * ball : 4 * ball + 4]
            quaternions.append(_quaternion_after(q, step[self.freedoms.ball_slice(ball)]))
        after = ca.substitute(
            [expression],
            [self.scalars, self.quaternions],
            [
                self.scalars + step[: len(self.freedoms.scalars)],
                ca.vertcat(ca.SX(0, 1), *quaternions),
            ],
        )[0]
        return after, step


def _product(
    first: dict[int, Expression],
    second: dict[int, Expression],
    pair: tuple[int, int],
    *,
    twice: bool,
) -> Expression | None:
    """What a pair of moves contributes to a pair of freedoms; None where nothing."""
    k, other = pair
    share = None
    for a, b in ((k, other), (other, k)) if twice else ((k, other),):
        if a in first and b in second:
            share = (0 if share is None else share) + first[a] * second[b]
    return share


def _quaternion_after(q: Expression, step: Expression) -> Expression:
    """Q times the quaternion of a small rotation vector, to first order in the step."""
    scalar, vector = q[0], q[1:]
    half = step / 2
    return ca.vertcat(
        scalar - ca.dot(vector, half),
        vector + scalar * half + cross_matrix(vector) @ half,
    )
