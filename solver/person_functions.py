"""Where markers and ties are, as functions of posture and person, for many frames at once.

A *person* is one vector: ln of each size factor, ln of the overall scale, the departures of freed joint
centres from the grown ones, and the small turns of freed joint axes. Growth enters through
`model.growth` as CasADi expressions, so every derivative that calibration needs is exact.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import casadi as ca
import numpy as np
from numpy.typing import NDArray

from condyle.model.elementary import Expression
from condyle.model.growth import grown_marker_at_expression, grown_numbers_expression
from condyle.model.skeleton import Size, Skeleton, Vector
from condyle.solver.frame_problem import SkeletonFunctions
from condyle.solver.over_frames import FrameFunction, over_frames
from condyle.solver.posture import Posture
from condyle.solver.upright import Upright

FloatArray = NDArray[np.float64]


@dataclass(frozen=True, slots=True)
class PersonLayout:
    """Where each kind of number stands in a person's vector.

    Attributes
    ----------
    groups : int
        Of size factors.
    placed, turned : joint names
        Whose centre, and whose axes, calibration may move.
    """

    groups: int
    placed: tuple[str, ...]
    turned: tuple[str, ...]

    @property
    def sizes(self) -> slice:
        """Size factors, as ln."""
        return slice(0, self.groups)

    @property
    def scale(self) -> int:
        """Overall scale, as ln."""
        return self.groups

    def centre(self, joint: str) -> slice:
        """m, in the sized parent."""
        first = self.groups + 1 + 3 * self.placed.index(joint)
        return slice(first, first + 3)

    def turn(self, joint: str) -> slice:
        """rad, a rotation vector in the parent."""
        first = self.groups + 1 + 3 * (len(self.placed) + self.turned.index(joint))
        return slice(first, first + 3)

    @property
    def size(self) -> int:
        """Length of the vector."""
        return self.groups + 1 + 3 * (len(self.placed) + len(self.turned))


def person_layout(skeleton: Skeleton) -> PersonLayout:
    """What calibration may change of a skeleton."""
    freed = skeleton.sizing.joints
    names = [joint.name for joint in skeleton.joints if joint.name in freed]
    return PersonLayout(
        len(skeleton.sizing.groups),
        tuple(
            n for n in names if freed[n].place_sd is not None or freed[n].centre_from is not None
        ),
        tuple(n for n in names if freed[n].axis_sd is not None),
    )


@dataclass(frozen=True, slots=True)
class Rows:
    """Points or equations of many frames, with their derivatives.

    Attributes
    ----------
    values : (frames, rows)
    by_step : (frames, rows, freedoms)
    by_person : (frames, rows, person)
    """

    values: FloatArray
    by_step: FloatArray
    by_person: FloatArray


class PersonFunctions:
    """A skeleton's markers and ties, as a function of posture and person.

    Parameters
    ----------
    functions : SkeletonFunctions
        Of the skeleton with its nominal places.
    """

    def __init__(self, functions: SkeletonFunctions) -> None:
        skeleton, kinematics = functions.skeleton, functions.kinematics
        self.functions = functions
        self.layout = person_layout(skeleton)
        person = ca.SX.sym("person", self.layout.size)
        upright = ca.SX.sym("upright", 9)
        places = ca.SX.sym("places", 3 * len(skeleton.markers))
        factors = factors_expression(skeleton, person[self.layout.sizes])
        numbers = grown_numbers_expression(
            skeleton,
            factors,
            places,
            upright,
            departures={n: person[self.layout.centre(n)] for n in self.layout.placed},
            axis_turns={n: person[self.layout.turn(n)] for n in self.layout.turned},
        )
        nominal = grown_marker_at_expression(skeleton, factors)
        self._numbers = ca.Function("numbers", [person, places, upright], [numbers])
        rates = ca.densify(ca.jacobian(nominal, person))
        self._nominal = ca.Function("nominal", [person], [nominal, rates])
        inputs = [kinematics.scalars, kinematics.quaternions, person, places, upright]

        def rows_of(name: str, expression: Expression) -> FrameFunction:
            after, step = kinematics.perturbed(expression)
            sized = ca.substitute(after, kinematics.numbers, numbers)
            derivatives = ca.substitute(
                ca.horzcat(ca.jacobian(sized, step), ca.jacobian(sized, person)),
                step,
                ca.SX.zeros(step.numel()),
            )
            values = ca.substitute(sized, step, ca.SX.zeros(step.numel()))
            outputs = [ca.densify(values), ca.densify(ca.vec(derivatives.T))]
            return over_frames(ca.Function(name, inputs, outputs, {"cse": True}))

        self._markers = rows_of("markers", kinematics.marker_positions)
        ties = functions.ties
        self._ties = rows_of("ties", ties.expression / ca.DM(ties.sd)) if len(ties) else None

    def markers(
        self, posture: Posture, person: FloatArray, places: FloatArray, upright: Upright
    ) -> Rows:
        """Marker positions in the laboratory, m; at fixed `places` (frames, markers, 3)."""
        flat = places.reshape(len(posture), -1)
        return self._rows(self._markers(*self._inputs(posture, person, flat, upright)))

    def ties(self, posture: Posture, person: FloatArray, upright: Upright) -> Rows:
        """Tie residuals over their sd; no rows where there are no ties."""
        frames, freedoms = len(posture), self.functions.kinematics.freedoms.size
        if self._ties is None:
            sizes = [(0,), (0, freedoms), (0, self.layout.size)]
            return Rows(*(np.zeros((frames, *size)) for size in sizes))
        places = np.zeros((frames, 3 * len(self.functions.skeleton.markers)))
        return self._rows(self._ties(*self._inputs(posture, person, places, upright)))

    def nominal_places(self, person: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Grown nominal places (markers, 3), m, and (markers, 3, person) derivatives."""
        places, rates = self._nominal(person)
        count = len(self.functions.skeleton.markers)
        return (
            np.asarray(places, dtype=np.float64).reshape(count, 3),
            np.asarray(rates, dtype=np.float64).reshape(count, 3, self.layout.size),
        )

    def numbers(self, person: FloatArray, places: FloatArray, upright: Upright) -> FloatArray:
        """The flat vector that kinematics takes."""
        turn = upright.laboratory_from_upright.ravel()
        return np.asarray(self._numbers(person, places.ravel(), turn), dtype=np.float64).ravel()

    def factors(self, person: FloatArray, sd: FloatArray) -> dict[str, Size]:
        """Segment -> its factors and their sd; `sd` is that of the person's vector."""
        skeleton = self.functions.skeleton
        factors = np.ones((len(skeleton.segments), 3))
        spread = np.zeros((len(skeleton.segments), 3))
        for row, group in group_members(skeleton):
            factors.flat[row] = np.exp(person[group])
            spread.flat[row] = factors.flat[row] * sd[group]
        return {
            segment.name: Size(as_vector(factors[i]), as_vector(spread[i]))
            for i, segment in enumerate(skeleton.segments)
        }

    def _inputs(
        self, posture: Posture, person: FloatArray, places: FloatArray, upright: Upright
    ) -> list[FloatArray]:
        balls = posture.quaternions.reshape(len(posture), -1)
        turn = upright.laboratory_from_upright.ravel()
        return [posture.scalars, balls, person, places, turn]

    def _rows(self, outputs: Sequence[FloatArray]) -> Rows:
        values, flat = outputs
        frames, freedoms = len(values), self.functions.kinematics.freedoms.size
        J = flat.reshape(frames, values.shape[1], freedoms + self.layout.size)
        return Rows(values, J[:, :, :freedoms], J[:, :, freedoms:])


def factors_expression(skeleton: Skeleton, log_sizes: Expression) -> Expression:
    """(3 segments) Size factors, x, y, z of each segment in turn."""
    factors = ca.SX.ones(3 * len(skeleton.segments))
    for row, group in group_members(skeleton):
        factors[row] = ca.exp(log_sizes[group])
    return factors


def group_members(skeleton: Skeleton) -> list[tuple[int, int]]:
    """(row among the factors, group) for every sized axis."""
    return [
        (3 * skeleton.segment_index(segment) + axis, g)
        for g, group in enumerate(skeleton.sizing.groups)
        for segment, axis in group.members
    ]


def as_vector(values: FloatArray) -> Vector:
    """Three numbers of an array as plain floats."""
    x, y, z = (float(v) for v in values)
    return (x, y, z)
