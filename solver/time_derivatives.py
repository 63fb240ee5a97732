"""First and second derivatives in time of what a trial's estimate holds, and their covariance.

Both are read from the estimate by the five-point formulas of fourth order (Fornberg 1988, Math
Comput 51:699), one-sided at the ends: exact for polynomials of degree four, within 0.1 per cent for
movement up to 6 Hz at 100 frames a second; at the ends up to 4 Hz for the first derivative and
1.6 Hz for the second (5 per cent at 6 Hz). Noise is not differenced: the estimate's own covariance
of the five frames gives the derivative's.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from condyle.solver.posture import quaternions_of, turn_between

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

POINTS = 5


def first_frames(frames: int) -> IntArray:
    """(frames,) Where the five frames of each frame's formula begin."""
    return np.clip(np.arange(frames) - POINTS // 2, 0, max(frames - POINTS, 0))


def whole_windows(told: BoolArray) -> BoolArray:
    """(frames, ...) Whether all five frames of each frame's formula are told."""
    if len(told) < POINTS:
        return np.zeros_like(told)
    return np.asarray(told[first_frames(len(told))[:, None] + np.arange(POINTS)].all(axis=1))


def formulas(frames: int, rate: float) -> tuple[FloatArray, FloatArray]:
    """(frames, 5) Weights of the five frames for the first derivative (Hz) and the second (Hz^2)."""
    at = np.arange(frames) - first_frames(frames)
    first = np.array([_weights(place, 1) for place in range(POINTS)])
    second = np.array([_weights(place, 2) for place in range(POINTS)])
    return first[at] * rate, second[at] * rate**2


def _weights(place: int, order: int) -> FloatArray:
    """Weights that make a derivative at one of five places exact up to degree four."""
    powers = np.vander(np.arange(POINTS) - place, increasing=True).T.astype(np.float64)
    wanted = np.zeros(POINTS)
    wanted[order] = 1.0 if order == 1 else 2.0
    return np.asarray(np.linalg.solve(powers, wanted), dtype=np.float64)


def derivatives(values: FloatArray, rate: float) -> tuple[FloatArray, FloatArray]:
    """First and second derivative of a series (frames, ...) along its first axis; NaN if too short."""
    frames = len(values)
    if frames < POINTS:
        missing = np.full(values.shape, np.nan)
        return missing, missing.copy()
    window = first_frames(frames)[:, None] + np.arange(POINTS)
    first, second = formulas(frames, rate)
    around = values[window]
    return (
        np.einsum("nw,nw...->n...", first, around),
        np.einsum("nw,nw...->n...", second, around),
    )


def segment_velocities(
    laboratory_from_segment: FloatArray, rate: float
) -> tuple[FloatArray, FloatArray]:
    """Velocity of each segment's origin and its angular velocity, in laboratory axes.

    Parameters
    ----------
    laboratory_from_segment : (frames, segments, 4, 4) m
    rate : Hz

    Returns
    -------
    linear (frames, segments, 3) m/s, angular (frames, segments, 3) rad/s
    """
    frames, segments = laboratory_from_segment.shape[:2]
    linear, _ = derivatives(laboratory_from_segment[..., :3, 3], rate)
    if frames < POINTS:
        return linear, np.full((frames, segments, 3), np.nan)
    window = first_frames(frames)[:, None] + np.arange(POINTS)
    first, _ = formulas(frames, rate)
    flat = laboratory_from_segment[..., :3, :3].reshape(-1, 3, 3)
    inverse = quaternions_of(Rotation.from_matrix(flat)) * [1.0, -1.0, -1.0, -1.0]
    inverse = inverse.reshape(frames, segments, 4)
    angular = np.zeros((frames, segments, 3))
    for w in range(POINTS):
        # R_later R_here' = Exp(turn), in laboratory axes.
        turn = turn_between(inverse[window[:, w]], inverse)
        angular += first[:, w, None, None] * turn
    return linear, angular


def ball_series(quaternions: FloatArray) -> FloatArray:
    """(frames, 3) One orientation's turns from frame to frame, summed in the child's own axes.

    An error of one frame enters and leaves again, so the series has the noise of the frames.
    """
    steps = turn_between(quaternions[:-1], quaternions[1:])
    return np.concatenate([np.zeros((1, 3)), np.cumsum(steps, axis=0)])
