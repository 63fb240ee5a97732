"""The animal's bones reach where its landmarks are, and are alike on both sides."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray

from condyle.model import load_skeleton
from condyle.solver.results import FittedMotion
from condyle.viz.animal_bones import animal_bone
from condyle.viz.bones import plain_bone
from condyle.viz.coordinate_senses import resting_model
from condyle.viz.skeleton_plan import SegmentPlan, plan_segments

FloatArray = NDArray[np.float64]
BONES = {"chest", "pelvis", "skull", "tail"} | {
    f"{name}_{side}" for name in ("scapula", "forepaw", "hind_toes") for side in ("right", "left")
}


def motion_of(name: str) -> FittedMotion:
    return resting_model(load_skeleton(name)).motion(with_markers=False)


@pytest.fixture(scope="module")
def plans() -> dict[str, SegmentPlan]:
    return {plan.name: plan for plan in plan_segments(motion_of("four_legged"))}


def test_the_animals_landmarks_tell_its_bones(plans: dict[str, SegmentPlan]) -> None:
    assert {name for name, plan in plans.items() if animal_bone(plan)} == BONES


@pytest.mark.parametrize("model", ["full_body", "hand", "sagittal_leg", "planar_linkage"])
def test_no_other_shipped_model_gets_an_animals_bone(model: str) -> None:
    for plan in plan_segments(motion_of(model)):
        assert animal_bone(plan) == [], plan.name


@pytest.mark.parametrize("name", sorted(BONES))
def test_a_bone_reaches_every_landmark_of_its_segment(
    plans: dict[str, SegmentPlan], name: str
) -> None:
    surface = plain_bone(plans[name])
    for landmark, point in plans[name].landmarks.items():
        # Spines lean back from the withers, and a brow or rib is drawn by eye.
        off = np.linalg.norm(surface.points - point, axis=1).min()
        assert off < 0.02, landmark


@pytest.mark.parametrize("name", ["scapula", "forepaw", "hind_toes"])
def test_a_left_bone_is_the_right_one_in_the_mirror(
    plans: dict[str, SegmentPlan], name: str
) -> None:
    right, left = (plain_bone(plans[f"{name}_{side}"]).points for side in ("right", "left"))
    low, high = right.min(axis=0), right.max(axis=0)
    np.testing.assert_allclose(left.min(axis=0), [low[0], low[1], -high[2]], atol=0.002)
    np.testing.assert_allclose(left.max(axis=0), [high[0], high[1], -low[2]], atol=0.002)


def test_children_that_hang_at_one_place_make_one_shaft() -> None:
    thigh = next(p for p in plan_segments(motion_of("sagittal_leg")) if p.name == "thigh")
    assert len(thigh.centres) == 2
    assert len(thigh.far_centres()) == 1
