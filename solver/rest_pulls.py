"""The weak pull of a spherical joint to its zero posture: rest_sd on each component of log R."""

from __future__ import annotations

from dataclasses import dataclass

import casadi as ca
import numpy as np
from numpy.typing import NDArray

from condyle.model.elementary import Expression
from condyle.model.kinematics import Kinematics
from condyle.model.skeleton import Spherical
from condyle.solver.over_frames import FrameFunction, over_frames
from condyle.solver.posture import Posture

FloatArray = NDArray[np.float64]

SMALL_SINE = 1e-4
"""Half-angle sine below which series stand in for quotients of small numbers; their error is 1e-17."""


@dataclass(frozen=True, slots=True)
class BallPull:
    """The pull of one spherical joint: its ball, its sd (rad), and what evaluates it over frames."""

    ball: int
    sd: float
    evaluate: FrameFunction

    def terms(
        self, posture: Posture, *, share: float = 1.0
    ) -> tuple[FloatArray, FloatArray, FloatArray]:
        """What share |log R|^2 / (2 sd^2) adds to H (frames, 3, 3), g (frames, 3) and cost (frames,).

        Parameters
        ----------
        share : float
            What the pull weighs, relative to one measurement of its sd.
        """
        weight = share / self.sd**2
        squared, push, length = self.evaluate(posture.quaternions[:, self.ball])
        return weight * squared.reshape(-1, 3, 3), -weight * push, weight / 2 * length[:, 0]


def pulled_balls(kinematics: Kinematics) -> tuple[BallPull, ...]:
    """The pulls of every spherical joint that has one."""
    motions = {joint.name: joint.motion for joint in kinematics.skeleton.joints}
    found = []
    for ball, name in enumerate(kinematics.freedoms.balls):
        motion = motions[name]
        if isinstance(motion, Spherical) and motion.rest_sd is not None:
            found.append((ball, motion.rest_sd))
    if not found:
        return ()
    evaluate = _over_frames()
    return tuple(BallPull(ball, sd, evaluate) for ball, sd in found)


def _over_frames() -> FrameFunction:
    """J'J (row by row), J'v and v'v of v = log R and its derivative J."""
    quaternion = ca.SX.sym("quaternion", 4)
    vector, J = _logarithm(quaternion)
    outputs = [ca.vec(J.T @ J), J.T @ vector, ca.sumsqr(vector)]
    return over_frames(
        ca.Function("rest_pull", [quaternion], [ca.densify(x) for x in outputs], {"cse": True})
    )


def _logarithm(quaternion: Expression) -> tuple[Expression, Expression]:
    """Log R of a unit quaternion, and its derivative for a small turn in the child's axes.

    The derivative is that of `posture.inverse_right_jacobian`, in half-angles:
    I + K/2 + (1 - (t/2) cot(t/2)) / t^2 K^2.
    """
    # The quaternion and its negative are one rotation; the one with w >= 0 turns by half a turn at most.
    sign = ca.if_else(quaternion[0] < 0, -1, 1)
    cosine, along = sign * quaternion[0], sign * quaternion[1:4]
    squared = ca.sumsqr(along)
    small = squared < SMALL_SINE**2
    sine = ca.sqrt(ca.if_else(small, 1.0, squared))
    angle = 2 * ca.atan2(sine, cosine)
    vector = along * ca.if_else(small, 2 + squared / 3, angle / sine)
    quotient = (1 - angle / 2 * cosine / sine) / angle**2
    coefficient = ca.if_else(small, 1 / 12 + squared / 180, quotient)
    K = ca.skew(vector)
    return vector, ca.SX.eye(3) + K / 2 + coefficient * (K @ K)
