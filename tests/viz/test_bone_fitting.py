"""A stored bone laid into other segments, against movements that are known."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.spatial.transform import Rotation

from condyle.viz.bone_fitting import fit_bone
from condyle.viz.bone_library import StoredBone, shipped_bone
from condyle.viz.bones import segment_bone
from condyle.viz.skeleton_plan import SegmentPlan

factors = st.floats(0.75, 1.35)


@pytest.mark.parametrize("name", ["femur", "scapula", "humerus", "pelvis", "rib_cage", "foot"])
def test_a_moved_turned_and_resized_person_has_the_same_bone_moved(name: str) -> None:
    bone, turn = shipped_bone(name), Rotation.from_euler("xyz", [25.0, -140.0, 70.0], degrees=True)
    shift = np.array([0.3, -1.1, 0.2])
    known = {anchor: 1.2 * turn.apply(at) + shift for anchor, at in bone.anchors.items()}
    fitted = fit_bone(bone, known)
    assert fitted is not None
    np.testing.assert_allclose(fitted, 1.2 * turn.apply(bone.points) + shift, atol=0.002)


@settings(max_examples=30, deadline=None)
@given(
    x=factors,
    y=factors,
    z=factors,
    name=st.sampled_from(["femur", "shank", "scapula", "radius", "rib_cage", "pelvis"]),
)
def test_a_stretched_person_s_bone_meets_every_joint_and_landmark(
    x: float, y: float, z: float, name: str
) -> None:
    reference = shipped_bone(name)
    places = np.array(list(reference.anchors.values()))
    bone = StoredBone(
        np.concatenate([reference.points, places]), reference.faces, reference.anchors
    )
    known = {anchor: at * [x, y, z] for anchor, at in reference.anchors.items()}
    fitted = fit_bone(bone, known)
    assert fitted is not None
    np.testing.assert_allclose(fitted[-len(places) :], places * [x, y, z], atol=1e-6)
    assert np.abs(fitted - bone.points * [x, y, z]).max() < 0.06


def test_two_points_leave_the_turn_about_their_line_at_none() -> None:
    bone = shipped_bone("lumbar_spine")
    known = {"proximal": np.zeros(3), "distal": 1.1 * bone.anchors["distal"]}
    fitted = fit_bone(bone, known)
    assert fitted is not None
    np.testing.assert_allclose(fitted, 1.1 * bone.points, atol=1e-9)


def test_toes_take_their_size_from_the_foot_and_their_turn_from_nothing() -> None:
    bone = shipped_bone("toes")
    turn = Rotation.from_euler("z", 40.0, degrees=True)
    known = {
        name: turn.apply(1.3 * at) if name.startswith("parent.") else np.zeros(3)
        for name, at in bone.anchors.items()
    }
    fitted = fit_bone(bone, known)
    assert fitted is not None
    shares = fitted / np.where(np.abs(bone.points) > 0.005, bone.points, np.nan)
    np.testing.assert_allclose(shares[np.isfinite(shares)], shares[0, 0], rtol=1e-9)
    assert 1.2 < shares[0, 0] < 1.35


def test_points_that_do_not_suit_a_bone_are_refused() -> None:
    bone = shipped_bone("femur")
    wrong = {name: at * [1.0, 1.0, 1.0] for name, at in bone.anchors.items()}
    wrong["GT"] = np.array([0.4, -0.3, 0.4])
    assert fit_bone(bone, wrong) is None
    assert fit_bone(bone, {name: 20.0 * at for name, at in bone.anchors.items()}) is None
    assert fit_bone(bone, {}) is None


def test_an_arm_that_hangs_on_the_rib_cage_itself_is_joined_to_it_by_a_bar() -> None:
    marks = {name: shipped_bone("rib_cage").anchors[name] for name in ("IJ", "PX", "C7", "T8")}
    shoulder = np.array([-0.06, -0.02, 0.19])
    plan = SegmentPlan("thorax", None, np.zeros(3), {"arm_right": shoulder}, marks, {})
    bone = segment_bone(plan)
    assert np.linalg.norm(bone.points - shoulder, axis=1).min() < 0.01
