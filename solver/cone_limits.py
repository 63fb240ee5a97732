"""Limits of spherical joints: a cone for the swing, a range for the twist.

R = swing . turn(y, twist), the swing being the shortest turn from the joint's Y to the child's
(the swing-twist decomposition of the quaternion). Beyond a limit a very stiff one-sided residual
acts; it gives way by microradians at the gradients that markers make.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from condyle.model.kinematics import Kinematics
from condyle.model.skeleton import Spherical
from condyle.solver.posture import Posture

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

STIFFNESS_SD = 1e-4
"""rad; a hundredth of what markers tell of an orientation, so that a limit yields by 1e-4 of that."""
LEAST_SINE = 1e-9


@dataclass(frozen=True, slots=True)
class LimitedBall:
    """One spherical joint with a limit: its ball, cone and twist (rad; infinite where unlimited)."""

    ball: int
    cone: float
    twist: tuple[float, float]


def limited_balls(kinematics: Kinematics) -> tuple[LimitedBall, ...]:
    """The spherical joints of a skeleton that have a cone or a twist range."""
    found = []
    for joint in kinematics.skeleton.joints:
        motion = joint.motion
        if isinstance(motion, Spherical) and (motion.cone is not None or motion.twist is not None):
            ball = kinematics.freedoms.balls.index(joint.name)
            cone = np.inf if motion.cone is None else motion.cone
            found.append(LimitedBall(ball, cone, motion.twist or (-np.inf, np.inf)))
    return tuple(found)


def swing_and_twist(quaternions: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Angle of the child's Y from the joint's Y, twist about Y, and their rates.

    Parameters
    ----------
    quaternions : (frames, 4) unit, scalar first

    Returns
    -------
    swing (frames,) rad in [0, pi], twist (frames,) rad in (-pi, pi], rates (frames, 2, 3)
        The rates are for a small rotation vector in the child's axes. Where the swing is pi the
        twist is undefined, and its rate is taken as 0.
    """
    w, x, y, z = quaternions.T
    about, across = np.hypot(w, y), np.hypot(x, z)
    swing = 2 * np.arctan2(across, about)
    twist = 2 * np.arctan2(y, w)
    twist = np.where(twist > np.pi, twist - 2 * np.pi, twist)
    twist = np.where(twist <= -np.pi, twist + 2 * np.pi, twist)
    rates = np.zeros((len(w), 2, 3))
    # d theta = -d . (e_y x R' e_y) / sin theta, with R' e_y the joint's Y in the child.
    joint_y = np.column_stack([2 * (x * y + w * z), 1 - 2 * (x * x + z * z), 2 * (y * z - w * x)])
    sine = np.maximum(np.sin(swing), LEAST_SINE)[:, None]
    rates[:, 0] = -np.cross([0.0, 1.0, 0.0], joint_y) / sine
    squared = np.maximum(about**2, LEAST_SINE**2)
    of_y = np.column_stack([z, w, -x]) / 2
    of_w = -np.column_stack([x, y, z]) / 2
    rates[:, 1] = 2 * (w[:, None] * of_y - y[:, None] * of_w) / squared[:, None]
    return swing, twist, rates


def excesses(ball: LimitedBall, posture: Posture) -> tuple[FloatArray, FloatArray]:
    """How far a ball is beyond its limits.

    Returns
    -------
    (frames, 2) rad, signed, 0 inside; and rates (frames, 2, 3), 0 inside
    """
    swing, twist, rates = swing_and_twist(posture.quaternions[:, ball.ball])
    low, high = ball.twist
    beyond = np.where(twist > high, twist - high, np.where(twist < low, twist - low, 0.0))
    over = np.column_stack([np.maximum(swing - ball.cone, 0.0), beyond])
    return over, np.where(over[..., None] != 0, rates, 0.0)


def limit_terms(ball: LimitedBall, posture: Posture) -> tuple[FloatArray, FloatArray, FloatArray]:
    """What a ball's one-sided residuals add to H (frames, 3, 3), g (frames, 3) and cost (frames,)."""
    over, rates = excesses(ball, posture)
    H = np.einsum("nki,nkj->nij", rates, rates) / STIFFNESS_SD**2
    g = -np.einsum("nki,nk->ni", rates, over) / STIFFNESS_SD**2
    return H, g, (over**2).sum(axis=1) / (2 * STIFFNESS_SD**2)


def at_limit(ball: LimitedBall, posture: Posture) -> BoolArray:
    """(frames,) Whether a cone or twist limit is active."""
    return np.asarray((excesses(ball, posture)[0] != 0).any(axis=1))
