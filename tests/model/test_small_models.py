"""The shipped models that are small enough for closed forms: the linkage and the sagittal leg."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray

from condyle.model import load_skeleton
from condyle.model.growth import sized_numbers
from condyle.solver.frame_fit import FrameFits, fit_frames
from condyle.solver.frame_problem import FrameProblem, SkeletonFunctions
from condyle.solver.posture import Posture

FloatArray = NDArray[np.float64]

CRANK, COUPLER, ROCKER, BASE = 0.060, 0.180, 0.140, 0.200
"""m, the bars of `planar_linkage`, typed in again."""


def fitted(
    name: str, free: dict[str, FloatArray], seen: tuple[str, ...]
) -> tuple[FrameFits, SkeletonFunctions]:
    """Fit markers that a posture made, without noise; only the markers named are seen."""
    skeleton = load_skeleton(name)
    functions = SkeletonFunctions(skeleton)
    numbers = sized_numbers(skeleton, np.eye(3))
    frames = len(next(iter(free.values())))
    scalars = np.zeros((frames, len(functions.kinematics.freedoms.scalars)))
    for key, values in free.items():
        scalars[:, functions.kinematics.freedoms.scalars.index(key)] = values
    truth = Posture(scalars, np.zeros((frames, 0, 4)))
    measured = functions.marker_positions(truth, numbers)
    sd = np.array([m.sd for m in skeleton.markers])
    known = np.array([m.name in seen for m in skeleton.markers])
    weights = np.tile(known / sd**2, (frames, 1))
    measured = np.where(weights[..., None] > 0, measured, 0.0)
    return fit_frames(FrameProblem(functions, measured, weights, numbers)), functions


def column(fits: FrameFits, functions: SkeletonFunctions, name: str) -> FloatArray:
    return fits.posture.scalars[:, functions.kinematics.freedoms.scalars.index(name)]


def test_the_linkage_obeys_the_law_of_cosines_over_a_full_turn() -> None:
    crank = np.radians(np.linspace(0, 360, 361))
    # The crank's own end is all that is seen of the moving bars; the tie tells the rest.
    seen = ("frame_left", "frame_right", "frame_below", "crank_end")
    fits, functions = fitted("planar_linkage", {"crank_angle": crank}, seen)
    assert fits.solution.converged.all()
    numbers = sized_numbers(functions.skeleton, np.eye(3))
    residual, _ = functions.ties.residuals(fits.posture, numbers)
    assert np.abs(residual).max() < 1e-4
    assert functions.ties.freedom_taken(fits.posture, numbers) == 2
    # Diagonal from the crank's end to the rocker's pin, then the law of cosines in the triangle of
    # diagonal, coupler and rocker.
    diagonal = np.sqrt(CRANK**2 + BASE**2 - 2 * CRANK * BASE * np.cos(crank))
    inner = np.arccos((diagonal**2 + ROCKER**2 - COUPLER**2) / (2 * diagonal * ROCKER))
    below = np.arctan2(CRANK * np.sin(crank), BASE - CRANK * np.cos(crank))
    expected = np.degrees(np.pi - inner - below)
    found = np.degrees(column(fits, functions, "rocker_angle"))
    np.testing.assert_allclose(found, expected, atol=0.01)


def test_the_sagittal_legs_joint_angles_are_differences_of_its_segment_angles() -> None:
    time = np.linspace(0, 1, 60)
    thigh = np.radians(10 + 25 * np.sin(2 * np.pi * time))
    shank = thigh - np.radians(35 + 30 * np.sin(2 * np.pi * time + 1))
    foot = shank + np.radians(-5 + 15 * np.sin(2 * np.pi * time + 2))
    skeleton = load_skeleton("sagittal_leg")
    free = {"thigh_angle": thigh, "shank_angle": shank, "foot_angle": foot, "hip_y": 0.9 + 0 * time}
    fits, functions = fitted("sagittal_leg", free, skeleton.marker_names)
    for name, expected in (
        ("thigh_angle", thigh),
        ("shank_angle", shank),
        ("foot_angle", foot),
        ("knee_flexion", thigh - shank),
        ("ankle_dorsiflexion", foot - shank),
    ):
        np.testing.assert_allclose(column(fits, functions, name), expected, atol=1e-6, err_msg=name)
    numbers = sized_numbers(skeleton, np.eye(3))
    assert functions.ties.freedom_taken(fits.posture, numbers) == 2


@pytest.mark.parametrize("name", ["planar_linkage", "sagittal_leg"])
def test_a_small_models_markers_tell_every_coordinate(name: str) -> None:
    from condyle.solver.telling import tell

    assert tell(load_skeleton(name)).unseen == ()
