"""The demo's movements: within a person's range, feet on the ground, arms outside the body."""

from __future__ import annotations

from functools import cache

import numpy as np
import pytest
from numpy.typing import NDArray

from condyle.demo_data import Study, copy_study, read_truth
from condyle.demo_data.foot_tracks import FootTrack, Step, foot_track
from condyle.demo_data.movements import Plan, reach_aside_plan, static_plan, step_up_plan, times
from condyle.demo_data.person import invent_person
from condyle.demo_data.reaching import (
    PROBE,
    UPRIGHT,
    foot_targets,
    heading_turn,
    pelvis_path,
    posture_of,
)
from condyle.model.growth import sized_numbers
from condyle.model.loading import load_skeleton
from condyle.solver.frame_problem import SkeletonFunctions

FloatArray = NDArray[np.float64]

SKELETON = invent_person().skeleton
PLANS = [static_plan(), step_up_plan(), reach_aside_plan()]

TRUNK = {
    "thorax": (-0.05, 0.105, 0.140, -0.33, -0.03),
    "abdomen": (0.0, 0.110, 0.130, -0.05, 0.20),
    "pelvis": (-0.04, 0.110, 0.160, -0.05, 0.12),
}
"""m, our own round figures of a lean trunk in each segment's axes: middle along X, half depth, half
width, and from where to where along Y."""

TIPS = (0.0, -0.17, 0.0)
"""m, in a hand: where the fingers end."""

HEAD, ARM_AND_HEAD, ARM_AND_THIGH = (0.0, 0.08, 0.0), 0.14, 0.10
"""m: the middle of the head; how near an arm's bones come to it, and to a thigh's axis, with flesh on."""


@pytest.fixture(scope="module")
def study(tmp_path_factory: pytest.TempPathFactory) -> Study:
    return copy_study(tmp_path_factory.mktemp("demo") / "study")


@cache
def poses_of(plan: str) -> FloatArray:
    numbers = sized_numbers(SKELETON, UPRIGHT.laboratory_from_upright)
    posture = posture_of(next(p for p in PLANS if p.name == plan), SKELETON)
    return SkeletonFunctions(SKELETON).poses(posture, numbers)


def test_no_coordinate_of_the_truth_leaves_its_range(study: Study) -> None:
    skeleton = load_skeleton(study.model)
    for trial in (study.static, *study.trials):
        truth = read_truth(trial.truth)
        for coordinate in skeleton.coordinates:
            values = truth.values[coordinate.name]
            assert coordinate.lower < values.min(), coordinate.name
            assert values.max() < coordinate.upper, coordinate.name


def test_the_movements_are_those_of_a_person(study: Study) -> None:
    # Soucie et al. 2011, adults, passive, from memory (loose bound): hip flexion 130, knee 138;
    # squatting bends the ankle further than that table's 13 degrees, handbooks say 20.
    # Handbooks, from memory (loose bound): elbow 150, the arm 180 up.
    most = {
        "hip_flexion": 130,
        "knee_flexion": 138,
        "ankle_dorsiflexion": 40,
        "elbow_flexion": 150,
        "shoulder_elevation": 180,
    }
    for trial in study.trials:
        truth = read_truth(trial.truth)
        for name, limit in most.items():
            for side in ("right", "left"):
                values = np.rad2deg(truth.values[f"{name}_{side}"])
                assert values.max() < limit
                assert np.abs(np.diff(values) / np.diff(truth.time)).max() < 500
    step_up = read_truth(study.trials[0].truth)
    assert step_up.values["pelvis_z"][-1] - step_up.values["pelvis_z"][0] > 0.4
    assert (
        max(np.rad2deg(step_up.values[f"knee_flexion_{s}"]).max() for s in ("right", "left")) > 80
    )


@pytest.mark.parametrize("plan", PLANS, ids=lambda plan: plan.name)
def test_the_feet_are_where_they_were_planned(plan: Plan) -> None:
    skeleton, turn, poses = SKELETON, heading_turn(plan), poses_of(plan.name)
    for side, track in (("right", plan.right), ("left", plan.left)):
        foot = poses[:, skeleton.segment_index(f"foot_{side}")]
        target = foot_targets(track, skeleton, turn).reshape(-1, 3, 3).swapaxes(1, 2)
        np.testing.assert_allclose(
            foot[:, :3, 3:] + PROBE * foot[:, :3, :3], target, rtol=0, atol=1e-9
        )
    pelvis = pelvis_path(plan, skeleton)
    np.testing.assert_allclose(poses[:, 0, 2, 3], pelvis.origin[:, 1], rtol=0, atol=1e-12)


def test_a_foot_stands_exactly_still_between_steps() -> None:
    time = times(3.0)
    steps = [Step(0.5, 1.0, (0.5, 0.0, 0.0)), Step(2.0, 2.5, (0.5, 0.2, 0.0))]
    track = foot_track(time, (0.0, 0.0, 0.1), steps, outward_deg=5, side=1)
    standing = (time > 1.15) & (time < 1.7)
    assert np.ptp(track.toe_joint[standing], axis=0).max() < 1e-12
    assert np.abs(track.pitch[standing]).max() < 1e-12
    np.testing.assert_allclose(track.toe_joint[-1], [1.0, 0.2, 0.1], atol=1e-12)


def heel_height(track: FootTrack) -> np.ndarray:
    behind = track.orientation().apply([-0.17, 0.0, 0.0])
    return np.asarray((track.toe_joint + behind)[:, 1])


@pytest.mark.parametrize("plan", PLANS, ids=lambda plan: plan.name)
def test_no_foot_goes_through_the_ground(plan: Plan) -> None:
    for track in (plan.right, plan.left):
        assert track.toe_joint[:, 1].min() > -1e-9
        assert heel_height(track).min() > -0.002


def origin(
    poses: FloatArray, segment: str, at: tuple[float, float, float] = (0, 0, 0)
) -> FloatArray:
    pose = poses[:, SKELETON.segment_index(segment)]
    return np.asarray(pose[:, :3, :3] @ np.array(at) + pose[:, :3, 3])


def line(start: FloatArray, end: FloatArray) -> FloatArray:
    along = np.linspace(0, 1, 9)[:, None]
    return start[:, None] * (1 - along) + end[:, None] * along


def lower_arm(poses: FloatArray, side: str) -> FloatArray:
    """(frames, points, 3) from the elbow to the finger tips."""
    elbow, wrist = origin(poses, f"ulna_{side}"), origin(poses, f"hand_{side}")
    tips = origin(poses, f"hand_{side}", TIPS)
    return np.concatenate([line(elbow, wrist), line(wrist, tips)], axis=1)


def least_distance(points: FloatArray, others: FloatArray) -> float:
    return float(np.linalg.norm(points[:, :, None] - others[:, None], axis=3).min())


@pytest.mark.parametrize("side", ["right", "left"])
@pytest.mark.parametrize("plan", PLANS, ids=lambda plan: plan.name)
def test_no_arm_goes_through_the_body(plan: Plan, side: str) -> None:
    poses = poses_of(plan.name)
    arm = lower_arm(poses, side)
    for segment, (middle, depth, width, low, high) in TRUNK.items():
        pose = poses[:, SKELETON.segment_index(segment)]
        x, y, z = np.moveaxis((arm - pose[:, None, :3, 3]) @ pose[:, :3, :3], 2, 0)
        beside = (low < y) & (y < high)
        assert np.hypot((x - middle) / depth, z / width)[beside].min(initial=9.0) > 1, segment
    assert least_distance(arm, origin(poses, "head", HEAD)[:, None]) > ARM_AND_HEAD
    for leg in ("right", "left"):
        thigh = line(origin(poses, f"thigh_{leg}"), origin(poses, f"shank_{leg}"))
        assert least_distance(arm, thigh) > ARM_AND_THIGH
    other = lower_arm(poses, "left" if side == "right" else "right")
    assert least_distance(arm, other) > ARM_AND_HEAD / 2


def test_the_hands_go_down_to_the_basket_and_up_to_the_branch() -> None:
    poses = poses_of("reach_aside")
    up = UPRIGHT.laboratory_from_upright[:, 1]
    right, left = (origin(poses, f"hand_{side}", TIPS) @ up for side in ("right", "left"))
    crown, knee = origin(poses, "head", HEAD) @ up + 0.1, origin(poses, "shank_right") @ up
    assert (right - crown).max() > 0  # the finger tips come higher than the head is
    assert (np.maximum(right, left) - knee).min() < 0.1
    assert right[left.argmin()] == pytest.approx(left.min(), abs=0.05)  # both hands together
    thorax = poses[:, SKELETON.segment_index("thorax"), :3, :3]
    reach = origin(poses, "hand_right", TIPS) - origin(poses, "thorax")
    aside = np.einsum("ni,ni->n", reach, thorax[:, :, 2])
    assert aside[right.argmax()] > 0.3
