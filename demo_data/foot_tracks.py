"""Where a foot goes: standing still between steps, and each step one smooth swing.

A foot is told by the point under its toe joint, about which the heel rises and falls, by the pitch
of its sole and by how far it points outwards. Everything is built of minimum-jerk passages (Flash &
Hogan 1985, J Neurosci 5:1688), so feet stand exactly still between steps.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

FloatArray = NDArray[np.float64]

HEEL_RISE = 0.28
"""s; the heel rises before a step."""

HEEL_TO_TOE_JOINT = 0.17
"""m; a foot that lands on its heel holds its toe joint up by this times the sine of its pitch."""


@dataclass(frozen=True, slots=True)
class Step:
    """One swing of one foot.

    Attributes
    ----------
    start, end : float
        s; lift-off and landing.
    by : (forward, up, right) m
        From where the foot stood to where it lands.
    clearance : float
        m, above the straight way, half-way.
    push_pitch, land_pitch : float
        degrees; heel up (+) when it leaves, heel or toes (-) up when it lands.
    settling : float
        s; how long after landing the sole takes to come down.
    turn, roll : float
        degrees, gained by the end of the swing: the toes further out, the outer edge further up.
    """

    start: float
    end: float
    by: tuple[float, float, float]
    clearance: float = 0.05
    push_pitch: float = 30.0
    land_pitch: float = -8.0
    settling: float = 0.14
    turn: float = 0.0
    roll: float = 0.0


@dataclass(frozen=True, slots=True)
class FootTrack:
    """A foot over time, in the walking person's axes (forward, up, right).

    Attributes
    ----------
    toe_joint : (frames, 3) m
        The point of the sole below the toe joint.
    pitch, outward, roll : (frames,) rad
        Heel up; toes to the foot's own side; outer edge up.
    side : +1 right, -1 left
    """

    toe_joint: FloatArray
    pitch: FloatArray
    outward: FloatArray
    roll: FloatArray
    side: int

    def orientation(self) -> Rotation:
        """Foot axes in the walking person's axes, (frames,)."""
        turns = [-self.side * self.outward, -self.side * self.roll, -self.pitch]
        return Rotation.from_euler("YXZ", np.column_stack(turns))


def passage(time: FloatArray, start: float, end: float) -> FloatArray:
    """From 0 to 1 with the least jerk, at rest before and after."""
    s = np.clip((time - start) / (end - start), 0.0, 1.0)
    return np.asarray(s**3 * (10 - 15 * s + 6 * s**2))


def bump(time: FloatArray, start: float, end: float) -> FloatArray:
    """From 0 over 1 half-way to 0, smooth to the second derivative."""
    s = np.clip((time - start) / (end - start), 0.0, 1.0)
    return np.asarray(64 * (s * (1 - s)) ** 3)


def foot_track(
    time: FloatArray,
    standing: tuple[float, float, float],
    steps: Sequence[Step],
    *,
    outward_deg: float,
    side: int,
) -> FootTrack:
    """A foot that stands at `standing` (forward, up, right; m) and then takes `steps`."""
    place = np.tile(standing, (len(time), 1))
    pitch, roll = np.zeros_like(time), np.zeros_like(time)
    outward = np.full_like(time, np.deg2rad(outward_deg))
    for step in steps:
        duration = step.end - step.start
        push, land = np.deg2rad([step.push_pitch, step.land_pitch])
        forward = passage(time, step.start + 0.1 * duration, step.end)
        upward = passage(time, step.start, step.start + 0.8 * duration)
        place += np.column_stack([forward, upward, forward]) * step.by
        place[:, 1] += step.clearance * bump(time, step.start, step.end)
        rise = passage(time, step.start - HEEL_RISE, step.start)
        swing = passage(time, step.start + 0.25 * duration, step.end)
        settle = passage(time, step.end, step.end + step.settling)
        pitch += push * (rise - swing) + land * (swing - settle)
        outward += np.deg2rad(step.turn) * swing
        roll += np.deg2rad(step.roll) * swing
        place[:, 1] += HEEL_TO_TOE_JOINT * np.sin(max(-land, 0.0)) * (swing - settle)
    return FootTrack(place, pitch, outward, roll, side)
