"""The weak pull of a spherical joint to its zero posture: rest_sd on each component of log R."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from condyle.model.kinematics import Kinematics
from condyle.model.skeleton import Spherical
from condyle.solver.posture import Posture, inverse_right_jacobian, rotations

FloatArray = NDArray[np.float64]


def pulled_balls(kinematics: Kinematics) -> tuple[tuple[int, float], ...]:
    """(ball, rest_sd in rad) of every spherical joint that is pulled."""
    motions = {joint.name: joint.motion for joint in kinematics.skeleton.joints}
    found = []
    for ball, name in enumerate(kinematics.freedoms.balls):
        motion = motions[name]
        if isinstance(motion, Spherical) and motion.rest_sd is not None:
            found.append((ball, motion.rest_sd))
    return tuple(found)


def add_ball_pull(
    pulled: tuple[int, float],
    posture: Posture,
    here: slice,
    H: FloatArray,
    g: FloatArray,
    cost: FloatArray,
) -> None:
    """Add |log R|^2 / (2 sd^2) to the normal equations of each frame.

    Parameters
    ----------
    pulled : (ball, rest_sd)
    here : where the ball's three numbers stand in a step
    H, g, cost : (frames, n, n), (frames, n), (frames,); changed in place
    """
    ball, sd = pulled
    vector = rotations(posture.quaternions[:, ball]).as_rotvec()
    J = inverse_right_jacobian(vector)
    H[:, here, here] += np.swapaxes(J, 1, 2) @ J / sd**2
    g[:, here] -= np.einsum("nij,ni->nj", J, vector) / sd**2
    cost += (vector**2).sum(axis=1) / (2 * sd**2)
