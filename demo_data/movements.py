"""What the invented person does: stands, steps up a ladder, reaches aside for a branch.

A movement is planned as people plan it: where the feet go and how the pelvis travels; the joints
follow (`reaching`). All numbers are invented. The ladder's rungs are 0.23 m apart.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import CubicSpline

from condyle.demo_data.foot_tracks import FootTrack, Step, bump, foot_track, passage

FloatArray = NDArray[np.float64]

RATE = 100.0
"""Hz."""

RUNG = 0.23
"""m from rung to rung."""

Keys = Sequence[tuple[float, float]]
"""(time, value) pairs that a smooth curve passes through, at rest at both ends."""


@dataclass(frozen=True, slots=True)
class Plan:
    """A movement, in the walking person's axes (forward, up, right), before any joint is bent.

    Attributes
    ----------
    name : str
    first_frame : int
        The recording's own number of its first frame.
    heading : float
        rad; how far forward is turned from the laboratory's X, to the left.
    right, left : FootTrack
    forward, rightward : (frames,) m
        Of the pelvis.
    height : (frames,) m
        What the pelvis would like to be raised to above its height with straight legs on the
        ground; it comes lower wherever a leg cannot reach.
    rotation, obliquity, tilt : (frames,) rad
        Of the pelvis; rotation counts from the heading.
    straightness : float
        The longest that hip to ankle becomes, as a share of the straight leg.
    """

    name: str
    first_frame: int
    heading: float
    right: FootTrack
    left: FootTrack
    forward: FloatArray
    rightward: FloatArray
    height: FloatArray
    rotation: FloatArray
    obliquity: FloatArray
    tilt: FloatArray
    straightness: float


def times(duration: float) -> FloatArray:
    """Sampling instants from 0 to `duration` (s)."""
    return np.arange(round(duration * RATE) + 1) / RATE


def curve(time: FloatArray, keys: Keys) -> FloatArray:
    """A cubic spline through the keys, at rest at both ends."""
    instants, values = np.transpose(keys)
    spline = CubicSpline(instants, values, bc_type="clamped")
    return np.asarray(spline(np.clip(time, instants[0], instants[-1])), dtype=np.float64)


def curve_deg(time: FloatArray, keys: Keys) -> FloatArray:
    """The same, keys in degrees, in radians."""
    return np.deg2rad(curve(time, keys))


def sway(time: FloatArray, *tones: tuple[float, float, float]) -> FloatArray:
    """A sum of slow sines: (amplitude, Hz, phase in turns)."""
    waves = [a * np.sin(2 * np.pi * (f * time + p)) for a, f, p in tones]
    return np.asarray(np.sum(waves, axis=0), dtype=np.float64)


def static_plan() -> Plan:
    """Quiet standing with sway, feet a hand's breadth apart."""
    time = times(2.0)
    return Plan(
        name="static",
        first_frame=1,
        heading=np.deg2rad(3.0),
        right=foot_track(time, (0.125, 0.0, 0.10), (), outward_deg=9, side=1),
        left=foot_track(time, (0.115, 0.0, -0.10), (), outward_deg=11, side=-1),
        forward=0.03 + sway(time, (0.003, 0.45, 0.1), (0.001, 1.3, 0.4)),
        rightward=0.004 + sway(time, (0.002, 0.35, 0.7), (0.0007, 1.1, 0.2)),
        height=np.zeros_like(time),
        rotation=np.deg2rad(1.0 + sway(time, (0.25, 0.4, 0.3))),
        obliquity=np.deg2rad(0.3 + sway(time, (0.15, 0.5, 0.9))),
        tilt=np.deg2rad(11.0 + sway(time, (0.3, 0.6, 0.5))),
        straightness=0.998,
    )


def step_up_plan() -> Plan:
    """Two steps up to a ladder, two rungs up with alternating legs, the other foot beside."""
    time = times(4.9)
    left = (
        Step(0.50, 1.02, (0.43, 0, 0)),
        Step(1.88, 2.60, (0.62, RUNG, 0), 0.07, 30, 12, settling=1.0),
        Step(3.95, 4.58, (0.10, RUNG, 0), 0.07, 30, 8, settling=0.3),
    )
    right = (
        Step(1.14, 1.68, (0.80, 0, 0)),
        Step(2.86, 3.66, (0.35, 2 * RUNG, 0), 0.05, 42, 12, settling=0.9),
    )
    rise = RUNG * (passage(time, 2.45, 3.60) + passage(time, 3.55, 4.60))
    return Plan(
        name="step_up",
        first_frame=1,
        heading=np.deg2rad(7.0),
        right=foot_track(time, (0.12, 0.0, 0.085), right, outward_deg=6, side=1),
        left=foot_track(time, (0.12, 0.0, -0.085), left, outward_deg=7, side=-1),
        forward=curve(
            time,
            [
                (0, 0.03),
                (0.35, 0.04),
                (0.75, 0.18),
                (1.07, 0.36),
                (1.42, 0.57),
                (1.78, 0.75),
                (2.20, 0.84),
                (2.60, 0.91),
                (3.00, 1.00),
                (3.40, 1.06),
                (3.85, 1.10),
                (4.35, 1.16),
                (4.90, 1.18),
            ],
        ),
        rightward=curve(
            time,
            [
                (0, 0.0),
                (0.35, 0.02),
                (0.76, 0.035),
                (1.08, 0.0),
                (1.42, -0.035),
                (1.78, 0.01),
                (2.22, 0.05),
                (2.70, 0.0),
                (3.25, -0.05),
                (3.72, 0.0),
                (4.2, 0.05),
                (4.9, 0.0),
            ],
        ),
        height=rise,
        rotation=curve_deg(
            time,
            [(0, 0), (0.4, 2), (1.05, -7), (1.70, 7), (2.55, -8), (3.60, 9), (4.4, -1), (4.9, 0)],
        ),
        obliquity=curve_deg(
            time,
            [
                (0, 0),
                (0.45, 0),
                (0.72, -4),
                (1.08, 0),
                (1.38, 4),
                (1.75, 0),
                (2.25, 5),
                (2.75, 1),
                (3.25, -6),
                (3.75, -1),
                (4.15, 4),
                (4.9, 0),
            ],
        ),
        tilt=curve_deg(
            time,
            [(0, 11), (0.8, 13), (1.7, 13), (2.4, 20), (3.0, 24), (3.6, 18), (4.1, 17), (4.9, 13)],
        ),
        straightness=0.993,
    )


def reach_aside_plan() -> Plan:
    """A small squat, then all weight on the right foot and the pelvis after the reaching arm."""
    time = times(4.2)
    left = (
        Step(1.78, 2.28, (-0.04, 0.13, -0.15), 0.0, 24, 16, turn=-14, roll=16),
        Step(2.75, 3.30, (0.04, -0.13, 0.15), 0.03, 8, -2, turn=14, roll=-16),
    )
    squat = -0.09 * bump(time, 0.35, 1.75) - 0.025 * bump(time, 1.7, 3.3)
    reach = passage(time, 1.20, 2.10) - passage(time, 2.70, 3.60)
    return Plan(
        name="reach_aside",
        first_frame=151,
        heading=np.deg2rad(-4.0),
        right=foot_track(time, (0.12, 0.0, 0.15), (), outward_deg=12, side=1),
        left=foot_track(time, (0.10, 0.0, -0.15), left, outward_deg=13, side=-1),
        forward=0.03 + 0.02 * reach - 0.04 * bump(time, 0.35, 1.75),
        rightward=0.155 * reach + sway(time, (0.003, 0.5, 0.0)),
        height=squat,
        rotation=np.deg2rad(-16 * reach + sway(time, (0.6, 0.6, 0.1))),
        obliquity=np.deg2rad(11 * reach + sway(time, (0.4, 0.7, 0.6))),
        tilt=np.deg2rad(12 + 16 * bump(time, 0.3, 1.8) + 5 * reach),
        straightness=0.993,
    )
