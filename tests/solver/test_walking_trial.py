"""A published walking trial fitted as a planar chain.

Winter 2009, Biomechanics and Motor Control of Human Movement, Table A.1: right side, sagittal plane,
cm, X forward, Y up, 69.9 Hz. The rows typed in below are from a public transcription of it; the
whole table is read where the folder of real data is present.
"""

from __future__ import annotations

import csv
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray

from condyle.model.skeleton import Skeleton
from condyle.recording.recording import Recording
from condyle.solver.results import TrialFit
from condyle.solver.trial_fit import fit_trial

FloatArray = NDArray[np.float64]

# Frame: hip, knee, fibula, ankle (cm) and the knee flexion that follows from them directly, as the
# angle between hip-knee and fibula-ankle (degrees).
ROWS = {
    1: ((44.94, 78.58), (41.00, 47.40), (35.91, 40.53), (9.31, 21.44), 47.13),
    10: ((62.78, 82.01), (73.22, 51.73), (71.31, 43.84), (48.15, 21.06), 64.50),
    20: ((83.12, 82.14), (96.10, 54.02), (96.99, 45.24), (101.45, 11.77), 17.19),
    28: ((101.53, 79.34), (112.34, 50.46), (113.87, 41.80), (124.94, 10.63), 0.97),
    38: ((123.10, 82.27), (130.86, 51.60), (131.49, 42.18), (130.10, 9.23), 16.61),
    44: ((133.03, 83.41), (135.70, 52.62), (134.56, 43.20), (130.23, 9.61), 12.30),
    56: ((152.46, 81.00), (145.59, 50.71), (141.52, 42.31), (131.34, 10.63), 5.04),
    66: ((175.16, 78.83), (166.89, 48.55), (161.03, 41.04), (139.14, 17.37), 27.49),
    70: ((185.67, 78.83), (181.73, 47.53), (176.00, 40.15), (149.53, 21.82), 48.12),
    76: ((196.42, 80.10), (202.66, 49.31), (199.47, 41.55), (172.50, 23.61), 67.83),
    84: ((212.97, 82.78), (226.20, 54.40), (225.70, 45.49), (213.86, 13.68), 45.41),
    97: ((241.60, 79.21), (252.80, 50.33), (254.32, 42.06), (266.41, 9.86), 0.62),
    106: ((260.92, 81.63), (270.34, 51.60), (270.85, 42.44), (270.85, 8.84), 17.42),
}

# Places are means over the trial; the shank's Y runs from ankle to fibula, as the direct angle has it.
CHAIN = """\
condyle: 1
name: planar leg
segments: {thigh: {}, shank: {}}
joints:
  root:
    from: laboratory
    to: thigh
    moves:
      - {translate: x, coordinate: forward}
      - {translate: y, coordinate: height, rest: 0.8}
      - {rotate: z, coordinate: thigh_lean}
  knee:
    from: thigh
    to: shank
    at: [0, -0.314, 0]
    moves: [{rotate: -z, coordinate: knee_flexion, range: [-10, 150], rest: 10}]
markers:
  hip: {segment: thigh, at: [0, 0, 0]}
  knee: {segment: thigh, at: [0, -0.314, 0]}
  fibula: {segment: shank, at: [0.008, -0.084, 0]}
  ankle: {segment: shank, at: [0.008, -0.416, 0]}
"""
MARKERS = ("hip", "knee", "fibula", "ankle")


def direct_flexion(points: FloatArray) -> FloatArray:
    """(frames,) degrees between hip-knee and fibula-ankle, from (frames, 4, 3) m."""
    thigh, leg = points[:, 0] - points[:, 1], points[:, 2] - points[:, 3]
    angles = [np.arctan2(v[:, 1], v[:, 0]) for v in (thigh, leg)]
    return np.degrees(np.unwrap(angles[0]) - np.unwrap(angles[1]))


def fitted(
    skeleton: Skeleton, points: FloatArray, recording_of: Callable[..., Recording]
) -> tuple[TrialFit, FloatArray]:
    found = fit_trial(skeleton, recording_of(MARKERS, points, rate=69.9))
    return found, np.degrees(found.values[:, found.column("knee_flexion")])


def test_the_published_rows_give_the_knee_angle_of_their_own_points(
    skeleton_of: Callable[[str], Skeleton], recording_of: Callable[..., Recording]
) -> None:
    points = np.zeros((len(ROWS), 4, 3))
    points[:, :, :2] = np.array([row[:4] for row in ROWS.values()]) / 100
    printed = np.array([row[4] for row in ROWS.values()])
    np.testing.assert_allclose(direct_flexion(points), printed, atol=0.006)
    found, flexion = fitted(skeleton_of(CHAIN), points, recording_of)
    assert found.converged.all()
    # A rigid chain cannot follow skin that moves: the source's points differ by centimetres from it.
    assert np.abs(flexion - printed).max() < 3.0
    assert 60 <= flexion.max() <= 70
    assert found.not_observed == {}


@pytest.mark.real
def test_the_whole_trial_has_its_peaks_in_loading_and_swing(
    skeleton_of: Callable[[str], Skeleton],
    recording_of: Callable[..., Recording],
    real_data: Path,
) -> None:
    table = real_data / "tables" / "walking_trial_winter_table_a1.csv"
    with table.open() as file:
        rows = list(csv.DictReader(file))
    points = np.zeros((len(rows), 4, 3))
    for m, name in enumerate(MARKERS):
        for axis, letter in enumerate("xy"):
            points[:, m, axis] = [float(row[f"{name}.{letter}_cm"]) / 100 for row in rows]
    found, flexion = fitted(skeleton_of(CHAIN), points, recording_of)
    assert len(found.values) == 106
    direct = direct_flexion(points)
    assert np.abs(flexion - direct).max() < 3.0
    assert np.sqrt(np.mean((flexion - direct) ** 2)) < 2.0
    # Heel contact at frame 28, toe-off at 70, contact at 97 (from memory, consistent with the feet).
    loading, swing = flexion[27:50].max(), flexion[69:97].max()
    assert 15 <= loading <= 18
    assert 60 <= swing <= 70
    assert abs(flexion[27]) < 4
    assert (97 - 28) / found.rate == pytest.approx(0.987, abs=0.001)
    # The chain yields most where the skin moves most: in swing, when the knee is bent.
    rms = found.motion.rms_of_frames()
    assert rms[69:90].mean() > rms[30:60].mean()
