"""What trunk, head and arms do while the legs carry them: curves for every coordinate above the pelvis.

Decided here: the arms, as the ISB tells them (plane, elevation, axial turn), because that is how one says
where an arm goes. All numbers are invented; a coordinate that is not named stays as in standing.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray
from scipy.interpolate import CubicSpline
from scipy.spatial.transform import Rotation

FloatArray = NDArray[np.float64]

Keys = tuple[tuple[float, float], ...]
"""(s, degrees) that a smooth curve passes through, at rest at both ends."""

STANDING_DEG: Mapping[str, float] = {
    "lumbar_flexion": -9,
    "neck_flexion": 4,
    "clavicle_protraction": 0,
    "clavicle_elevation": 0,
    "shoulder_plane": 20,
    "shoulder_elevation": 11,
    "shoulder_axial": -20,
    "elbow_flexion": 16,
    "forearm_pronation": 82,
    "wrist_flexion": -3,
    "wrist_deviation": 3,
}
"""Quiet standing, the same on both sides; all others 0."""

MOVING_DEG: Mapping[str, Mapping[str, Keys]] = {
    "static": {},
    # Arms swing against the legs, then the right hand and after it the left takes the ladder.
    "step_up": {
        "lumbar_flexion": ((0, -9), (1.8, -6), (2.6, 6), (3.4, 2), (4.9, -4)),
        "lumbar_twist": ((0, 0), (0.75, 6), (1.4, -6), (2.3, 4), (3.2, -5), (4.1, 4), (4.9, 0)),
        "lumbar_side_bend": ((0, 0), (2.3, -4), (3.3, 5), (4.2, -3), (4.9, 0)),
        "neck_flexion": ((0, 4), (1.6, 16), (2.4, -8), (3.6, -14), (4.9, 0)),
        "neck_twist": ((0, 0), (1.5, -8), (2.6, 10), (4.9, 0)),
        "shoulder_plane_right": ((0, 20), (0.8, 60), (1.5, 35), (2.4, 75), (4.0, 72), (4.9, 60)),
        "shoulder_elevation_right": (
            (0, 11),
            (0.8, 24),
            (1.5, 14),
            (2.5, 98),
            (3.6, 84),
            (4.9, 52),
        ),
        "shoulder_axial_right": ((0, -20), (0.8, -58), (1.5, -35), (2.4, -50), (4.9, -40)),
        "clavicle_elevation_right": ((0, 0), (1.6, 0), (2.5, 11), (3.6, 8), (4.9, 3)),
        "clavicle_protraction_right": ((0, 0), (1.6, 2), (2.5, 10), (4.9, 4)),
        "elbow_flexion_right": ((0, 16), (0.8, 28), (1.5, 18), (2.5, 32), (3.6, 74), (4.9, 88)),
        "forearm_pronation_right": ((0, 82), (1.6, 90), (2.5, 120), (4.9, 105)),
        "wrist_flexion_right": ((0, -3), (1.7, -5), (2.5, -25), (4.9, -18)),
        "shoulder_plane_left": ((0, 20), (0.8, 8), (1.5, 55), (2.4, 45), (3.7, 74), (4.9, 70)),
        "shoulder_elevation_left": (
            (0, 11),
            (0.8, 17),
            (1.5, 23),
            (2.4, 20),
            (3.8, 104),
            (4.9, 88),
        ),
        "shoulder_axial_left": ((0, -20), (0.8, -12), (1.5, -54), (2.4, -40), (4.9, -52)),
        "clavicle_elevation_left": ((0, 0), (2.6, 1), (3.8, 13), (4.9, 9)),
        "clavicle_protraction_left": ((0, 0), (2.6, 1), (3.8, 9), (4.9, 6)),
        "elbow_flexion_left": ((0, 16), (0.8, 20), (1.5, 30), (2.6, 34), (3.8, 30), (4.9, 58)),
        "forearm_pronation_left": ((0, 82), (2.7, 92), (3.8, 122), (4.9, 115)),
        "wrist_flexion_left": ((0, -3), (2.9, -6), (3.8, -24), (4.9, -20)),
    },
    # Both hands down to the basket, then the right one high up and aside to the branch.
    "reach_aside": {
        "lumbar_flexion": ((0, -9), (0.4, -7), (1.0, 24), (1.8, -6), (2.6, -12), (4.2, -9)),
        "lumbar_side_bend": ((0, 0), (1.1, 0), (2.1, 13), (2.7, 12), (3.6, 0), (4.2, 0)),
        "lumbar_twist": ((0, 0), (1.1, -4), (2.1, -12), (2.7, -11), (4.2, 0)),
        "neck_flexion": ((0, 4), (1.0, 12), (2.1, -24), (2.7, -22), (4.2, 4)),
        "neck_twist": ((0, 0), (1.1, 2), (2.1, -28), (2.7, -26), (4.2, 0)),
        "neck_side_bend": ((0, 0), (2.1, 6), (2.7, 6), (4.2, 0)),
        "shoulder_plane_right": ((0, 20), (1.0, 78), (2.1, 28), (2.7, 30), (4.2, 22)),
        "shoulder_elevation_right": (
            (0, 11),
            (1.0, 46),
            (1.4, 52),
            (2.1, 132),
            (2.7, 128),
            (4.2, 12),
        ),
        "shoulder_axial_right": ((0, -20), (1.0, -60), (2.1, -48), (2.7, -46), (4.2, -20)),
        "clavicle_elevation_right": ((0, 0), (1.1, 2), (2.1, 21), (2.7, 20), (4.2, 0)),
        "clavicle_protraction_right": ((0, 0), (1.0, 11), (2.1, -9), (2.7, -8), (4.2, 0)),
        "elbow_flexion_right": (
            (0, 16),
            (1.0, 22),
            (1.5, 62),
            (2.1, 19),
            (2.45, 34),
            (2.7, 48),
            (4.2, 18),
        ),
        "forearm_pronation_right": ((0, 82), (1.0, 95), (2.1, 48), (2.5, 70), (4.2, 84)),
        "wrist_flexion_right": ((0, -3), (1.0, 10), (2.1, -28), (2.5, 14), (4.2, -3)),
        "wrist_deviation_right": ((0, 3), (1.0, 8), (2.1, 16), (4.2, 3)),
        "shoulder_plane_left": ((0, 20), (1.0, 76), (1.7, 62), (2.4, 40), (4.2, 20)),
        "shoulder_elevation_left": ((0, 11), (1.0, 44), (1.7, 30), (2.4, 24), (4.2, 11)),
        "shoulder_axial_left": ((0, -20), (1.0, -58), (1.7, -40), (2.4, -30), (4.2, -20)),
        "clavicle_protraction_left": ((0, 0), (1.0, 11), (1.8, 3), (4.2, 0)),
        "elbow_flexion_left": ((0, 16), (1.0, 20), (1.7, 68), (2.5, 74), (3.2, 52), (4.2, 17)),
        "forearm_pronation_left": ((0, 82), (1.0, 96), (1.8, 60), (4.2, 83)),
        "wrist_flexion_left": ((0, -3), (1.0, 9), (1.8, -8), (4.2, -3)),
    },
}


def curve(time: FloatArray, keys: Keys) -> FloatArray:
    """A clamped cubic spline through keys in degrees, in radians."""
    instants, values = np.transpose(keys)
    spline = CubicSpline(instants, np.deg2rad(values), bc_type="clamped")
    return np.asarray(spline(np.clip(time, instants[0], instants[-1])), dtype=np.float64)


def angle(trial: str, name: str, time: FloatArray) -> FloatArray:
    """(frames,) rad: one coordinate, or reported angle of a shoulder, during a trial."""
    keys = MOVING_DEG[trial].get(name)
    if keys is not None:
        return curve(time, keys)
    standing = STANDING_DEG.get(name.removesuffix("_right").removesuffix("_left"), 0.0)
    return np.full(len(time), np.deg2rad(standing))


def shoulder(trial: str, side: str, time: FloatArray) -> Rotation:
    """(frames,) The upper arm in the thorax: turns about Y, X, Y, mirrored on the left."""
    plane, elevation, axial = (
        angle(trial, f"shoulder_{word}_{side}", time) for word in ("plane", "elevation", "axial")
    )
    turns = np.column_stack([plane, -elevation, axial])
    return Rotation.from_euler("YXY", turns if side == "right" else -turns)
