"""A skeleton as robotics sees it: links, and joints of one freedom each between them.

Decided here: which functions of coordinates such a description can hold. A joint of theirs moves
by its own number or by a straight line of another's; everything else is refused, or tabulated.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from math import inf, pi
from typing import Literal

import casadi as ca
import numpy as np
from numpy.typing import NDArray

from condyle.model.elementary import coupled
from condyle.model.errors import CondyleError
from condyle.model.skeleton import Polynomial, Skeleton, Spline, Vector

FloatArray = NDArray[np.float64]

WORLD = "world"
"""The link of the laboratory: what robotics tools call their fixed frame by common practice."""

DRIVER_REACH = {"rad": pi, "m": 1.0}
"""How far to either side of rest a function of an unlimited coordinate is tabulated."""

STRAIGHT = 1e-12
"""Departure, as a share of the largest value, within which a spline's points lie on one line."""

Function = Polynomial | Spline


@dataclass(frozen=True, slots=True)
class JointValue:
    """How a joint's number comes from one coordinate or reported angle, its driver.

    Attributes
    ----------
    driver : str
    functions : applied in order; none where the number is the driver itself
    gain : float
        Growth of a dependent translation.
    """

    driver: str
    functions: tuple[Function, ...] = ()
    gain: float = 1.0

    def line(self) -> tuple[float, float] | None:
        """Slope and intercept where the number is a straight line of the driver, else None."""
        slope, intercept = 1.0, 0.0
        for function in self.functions:
            line = straight_line(function)
            if line is None:
                return None
            slope, intercept = line[0] * slope, line[0] * intercept + line[1]
        return self.gain * slope, self.gain * intercept

    def __call__(self, driver: FloatArray) -> FloatArray:
        """The joint's numbers (n,) at some values of the driver (n,), rad or m."""
        if not self.functions:
            return self.gain * np.asarray(driver, dtype=np.float64)
        x = ca.SX.sym("x")
        value = x
        for function in self.functions:
            value = coupled(function, value)
        evaluate = ca.Function("value", [x], [ca.densify(ca.SX(self.gain * value))])
        return np.asarray(evaluate(ca.DM(driver).T), dtype=np.float64).ravel()


@dataclass(frozen=True, slots=True)
class Mimic:
    """A joint whose number is ``multiplier * (that of joint) + offset``."""

    joint: str
    multiplier: float
    offset: float


@dataclass(frozen=True, slots=True)
class RobotJoint:
    """A joint between two links, of one freedom, six or none.

    Attributes
    ----------
    parent, child : link names
    parent_from_joint : (4, 4)
        Where the child's frame is while the joint's number is zero; m.
    axis : Vector
        Unit, in that frame.
    value : JointValue or None
        None where the joint is fixed or floating.
    lower, upper : float
        rad or m; infinite where unlimited.
    mimic : Mimic or None
    coordinate : str or None
        Of which named coordinate or reported angle the number is.
    """

    name: str
    kind: Literal["fixed", "floating", "revolute", "prismatic"]
    parent: str
    child: str
    parent_from_joint: FloatArray
    axis: Vector = (1.0, 0.0, 0.0)
    value: JointValue | None = None
    lower: float = -inf
    upper: float = inf
    mimic: Mimic | None = None
    coordinate: str | None = None

    @property
    def is_tabulated(self) -> bool:
        """Whether its number follows another's in a way that only a table can tell."""
        return self.value is not None and self.mimic is None and self.name != self.value.driver


@dataclass(frozen=True, slots=True)
class RobotDescription:
    """Links and joints, parents before children; the first link is `WORLD`.

    Attributes
    ----------
    link_of_segment : segment -> link
        The link whose frame is the segment's own.
    segment_of_floating : floating joint -> segment
        Its pose is laboratory-from-segment.
    """

    name: str
    links: tuple[str, ...]
    joints: tuple[RobotJoint, ...]
    link_of_segment: Mapping[str, str]
    segment_of_floating: Mapping[str, str]


def straight_line(function: Function) -> tuple[float, float] | None:
    """Slope and intercept of a function that is a straight line; None where it is not."""
    if isinstance(function, Polynomial):
        coefficients = np.trim_zeros(np.array([*function.coefficients]), trim="b")
        padded = np.append(coefficients, [0.0, 0.0])
        return None if len(coefficients) > 2 else (float(padded[1]), float(padded[0]))
    x, y = np.array(function.points).T
    slope = (y[-1] - y[0]) / (x[-1] - x[0])
    intercept = y[0] - slope * x[0]
    departure = np.abs(y - slope * x - intercept).max()
    if departure > STRAIGHT * np.abs(y).max(initial=0.0):
        return None
    return float(slope), float(intercept)


def refuse_curves(description: RobotDescription) -> None:
    """Refuse functions of coordinates that no straight line can say.

    Raises
    ------
    CondyleError
        Naming every one of them.
    """
    told = [
        f"  {joint.coordinate or joint.name} follows {joint.value.driver}"
        for joint in description.joints
        if joint.value is not None and joint.is_tabulated
    ]
    if told:
        raise CondyleError(
            f"{description.name}: a URDF can only say that one joint follows another in a "
            "straight line, and these do not:\n" + "\n".join(told) + "\n"
            "  Give --sampled N: they become joints of their own, and a table of N samples of each "
            "function is written beside. Or extend the model by a joint without them."
        )


def function_samples(
    joint: RobotJoint, skeleton: Skeleton, count: int
) -> tuple[FloatArray, FloatArray]:
    """(count,) values of a joint's driver over its range, and the joint's at each; rad or m."""
    if joint.value is None:
        raise TypeError(f"{joint.name} follows nothing")
    coordinate = skeleton.coordinate(joint.value.driver)
    reach = DRIVER_REACH[coordinate.unit]
    lower = coordinate.lower if coordinate.lower > -inf else coordinate.rest - reach
    upper = coordinate.upper if coordinate.upper < inf else coordinate.rest + reach
    driver = np.linspace(lower, upper, count)
    return driver, joint.value(driver)


def joint_numbers(
    description: RobotDescription, drivers: Mapping[str, FloatArray]
) -> dict[str, FloatArray]:
    """Joint -> its numbers (frames,), rad or m, for every joint of one freedom.

    Parameters
    ----------
    drivers : coordinate or reported angle -> (frames,) rad or m
    """
    return {
        joint.name: joint.value(drivers[joint.value.driver])
        for joint in description.joints
        if joint.value is not None
    }
