"""Bones for any skeleton: always something to see, always where the joints are."""

from __future__ import annotations

from collections.abc import Callable
from itertools import combinations
from pathlib import Path

import numpy as np
import pytest
import trimesh
from hypothesis import given, settings
from hypothesis import strategies as st
from hypothesis.extra.numpy import arrays

from condyle.model.meshes import GrownShape
from condyle.model.skeleton import Shape
from condyle.solver.results import FittedMotion
from condyle.viz.bones import build_bones, generic, known_bone, segment_bone
from condyle.viz.skeleton_plan import SegmentPlan, plan_segments

places = arrays(np.float64, 3, elements=st.floats(-0.5, 0.5).map(lambda value: round(value, 3)))
names = st.sampled_from(
    ["GT", "FE_lateral", "FE_medial", "LM", "MM", "TT", "FH", "CA", "MT1", "MT2", "MT5"]
)
points = st.dictionaries(names, places, max_size=7)


@settings(max_examples=25, deadline=None)
@given(
    landmarks=points,
    parent_points=points,
    centres=st.dictionaries(st.sampled_from(["a", "b_right", "b_left"]), places),
    proximal=places,
)
def test_any_segment_has_finite_parts_of_positive_size(
    landmarks: dict[str, np.ndarray],
    parent_points: dict[str, np.ndarray],
    centres: dict[str, np.ndarray],
    proximal: np.ndarray,
) -> None:
    plan = SegmentPlan("part", "whole", proximal, centres, landmarks, parent_points)
    bone = known_bone(plan)
    if bone is not None:
        assert np.isfinite(bone.points).all()
        assert np.ptp(bone.points, axis=0).max() > 0.01
    for shape in generic(plan):
        assert shape.thinnest > 0.0
        assert np.isfinite(shape.bounds()).all()


PELVIS = {
    f"{stem}_{side}": np.array([x, y, sign * z])
    for stem, (x, y, z) in {"ASIS": (0.05, 0.09, 0.12), "PSIS": (-0.11, 0.08, 0.04)}.items()
    for side, sign in (("right", 1.0), ("left", -1.0))
}
HIPS = {"thigh_right": np.array([0, 0, 0.085]), "thigh_left": np.array([0, 0, -0.085])}


def test_a_pelvis_is_one_closed_ring_under_its_landmarks_and_around_the_hips() -> None:
    plan = SegmentPlan("pelvis", None, np.zeros(3), HIPS, PELVIS, {})
    surface = segment_bone(plan)
    for point in (*PELVIS.values(), *HIPS.values()):
        assert np.linalg.norm(surface.points - point, axis=1).min() < 0.03
    edges = {tuple(sorted(edge)) for face in surface.faces for edge in combinations(face, 2)}
    handles = 1 - (len(surface.points) - len(edges) + len(surface.faces)) / 2
    assert handles >= 3  # the ring itself, and a hole below each hip


FOOT = {
    "CA_right": np.array([-0.06, -0.045, 0.0]),
    "MT1_right": np.array([0.12, -0.05, -0.04]),
    "MT5_right": np.array([0.09, -0.055, 0.05]),
}


def test_toes_go_on_ahead_of_the_metatarsals() -> None:
    toes = SegmentPlan("toes_right", "foot_right", np.array([0.1, -0.05, 0.0]), {}, {}, FOOT)
    surface = segment_bone(toes)
    assert surface.points[:, 0].min() > 0.08
    assert 0.14 < surface.points[:, 0].max() < 0.20


@pytest.mark.parametrize("missing", ["ASIS_left", "PSIS_right"])
def test_a_pelvis_without_all_its_landmarks_is_still_drawn(missing: str) -> None:
    landmarks = {name: place for name, place in PELVIS.items() if name != missing}
    plan = SegmentPlan("pelvis", None, np.zeros(3), HIPS, landmarks, {})
    assert known_bone(plan) is None
    assert np.ptp(segment_bone(plan).points[:, 2]) > 0.15  # from hip to hip


def test_a_thigh_reaches_from_the_hip_to_the_knee(leg: FittedMotion) -> None:
    thigh, shank = build_bones(leg)
    assert thigh.points[:, 1].max() == pytest.approx(0.0, abs=0.03)
    assert thigh.points[:, 1].min() == pytest.approx(-0.42, abs=0.03)
    assert shank.points[:, 1].min() == pytest.approx(-0.40, abs=0.03)


def test_a_femur_ends_under_the_skin_of_its_landmarks(leg: FittedMotion) -> None:
    thigh = build_bones(leg)[0]
    for mark in leg.landmarks["thigh_right"].values():
        nearest = np.linalg.norm(thigh.points - mark, axis=1).min()
        assert 0.0 < nearest < 0.03


def test_a_segment_without_joints_or_landmarks_becomes_a_small_ball(
    leg: FittedMotion, change: Callable[..., FittedMotion]
) -> None:
    bare = change(leg, joint_centres={}, landmarks={})
    for bone in build_bones(bare):
        assert 0.01 < np.ptp(bone.points, axis=0).max() < 0.06


def test_the_proximal_joint_is_found_though_the_origin_is_elsewhere(
    leg: FittedMotion, change: Callable[..., FittedMotion]
) -> None:
    poses = leg.laboratory_from_segment.copy()
    shank_from_new = np.eye(4)
    shank_from_new[:3, 3] = 0.01, -0.2, 0.03
    poses[:, 1] = poses[:, 1] @ shank_from_new
    plan = plan_segments(change(leg, laboratory_from_segment=poses))[1]
    np.testing.assert_allclose(plan.proximal, [-0.01, 0.2, -0.03], atol=1e-12)


def test_a_segment_with_meshes_is_drawn_by_them(
    leg: FittedMotion, change: Callable[..., FittedMotion], tmp_path: Path
) -> None:
    boxes = [trimesh.creation.box((0.05, 0.4, 0.04)), trimesh.creation.icosphere(radius=0.03)]
    shapes = []
    for index, (box, y) in enumerate(zip(boxes, (-0.2, -0.4), strict=True)):
        path = tmp_path / f"{index}.ply"
        box.export(path)
        shapes.append(GrownShape(Shape(str(path), at=(0.0, y, 0.0)), (1.0, 1.1, 1.0)))
    thigh, shank = build_bones(change(leg, shapes={"thigh_right": tuple(shapes)}))
    assert thigh.points[:, 1].max() == pytest.approx(0.0, abs=1e-6)
    assert thigh.points[:, 1].min() == pytest.approx(-1.1 * 0.43, abs=1e-3)
    volume = trimesh.Trimesh(thigh.points, thigh.faces, process=False).volume
    assert volume == pytest.approx(1.1 * sum(box.volume for box in boxes), rel=1e-4)
    np.testing.assert_allclose(np.linalg.norm(thigh.normals, axis=1), 1.0, atol=1e-12)
    middle = np.array([0.0, -0.22, 0.0])
    box_points = thigh.points[:8]
    assert np.all(np.sum(thigh.normals[:8] * (box_points - middle), axis=1) > 0)
    np.testing.assert_array_equal(shank.points, build_bones(leg)[1].points)


def test_a_mesh_that_has_gone_leaves_a_plain_bone_and_a_warning(
    leg: FittedMotion, change: Callable[..., FittedMotion], tmp_path: Path
) -> None:
    gone = GrownShape(Shape(str(tmp_path / "gone.stl")))
    with pytest.warns(UserWarning, match=r"gone\.stl is not there; thigh_right is drawn"):
        thigh = build_bones(change(leg, shapes={"thigh_right": (gone,)}))[0]
    np.testing.assert_array_equal(thigh.points, build_bones(leg)[0].points)
