"""The bones of the package on every shipped model: closed, where the joints are, the same on both sides."""

from __future__ import annotations

import tomllib
from functools import cache
from pathlib import Path

import numpy as np
import pytest
import trimesh

from condyle.model import load_skeleton
from condyle.viz.bone_library import FOLDER, STEP, StoredBone, read_bone, shipped_bone, store_bone
from condyle.viz.bone_signs import bone_of
from condyle.viz.bones import segment_bone
from condyle.viz.build_bones import DESIGNS, make_bone
from condyle.viz.coordinate_senses import resting_model
from condyle.viz.shapes import Surface
from condyle.viz.skeleton_plan import SegmentPlan, plan_segments

ROOT = Path(__file__).resolve().parents[2]
MODELS = sorted(path.stem for path in (ROOT / "models_yaml").glob("*.yaml"))

AT_JOINT, ACROSS_JOINT = 0.006, 0.032
"""m; a joint's centre lies in the one bone or a cartilage away, and in the other's hollow: the largest
is that of the shoulder, a head's radius with its cartilage."""

LARGEST_KB = 300


@cache
def model_bones(name: str) -> dict[str, tuple[SegmentPlan, Surface]]:
    motion = resting_model(load_skeleton(name)).motion(with_markers=False)
    return {plan.name: (plan, segment_bone(plan)) for plan in plan_segments(motion)}


def triangles(bone: Surface | StoredBone) -> trimesh.Trimesh:
    return trimesh.Trimesh(bone.points, bone.faces, process=False)


def outside(bone: Surface, point: np.ndarray) -> float:
    """m from a point to the surface; 0 inside, by the solid angles (van Oosterom & Strackee 1983)."""
    a, b, c = np.moveaxis(bone.points[bone.faces] - point, 1, 0)
    la, lb, lc = (np.linalg.norm(corner, axis=1) for corner in (a, b, c))
    above = np.einsum("ij,ij->i", a, np.cross(b, c))
    below = la * lb * lc + (a * b).sum(1) * lc + (b * c).sum(1) * la + (c * a).sum(1) * lb
    if 2.0 * np.arctan2(above, below).sum() > 2.0 * np.pi:
        return 0.0
    corners = bone.points[bone.faces]
    nearest = trimesh.triangles.closest_point(corners, np.tile(point, (len(corners), 1)))
    return float(np.linalg.norm(nearest - point, axis=1).min())


@pytest.mark.parametrize("name", MODELS)
def test_every_segment_of_a_shipped_model_has_a_closed_bone(name: str) -> None:
    for segment, (_, bone) in model_bones(name).items():
        mesh = triangles(bone)
        assert mesh.is_watertight, segment
        assert mesh.is_winding_consistent, segment
        assert mesh.volume > 0.0, segment  # wound outwards
        np.testing.assert_allclose(np.linalg.norm(bone.normals, axis=1), 1.0, atol=1e-5)


@pytest.mark.parametrize("name", MODELS)
def test_every_bone_stays_about_its_segment(name: str) -> None:
    for segment, (plan, bone) in model_bones(name).items():
        known = np.array([plan.proximal, *plan.centres.values(), *plan.landmarks.values()])
        room = (
            0.15 if segment in ("thorax", "head") else 0.10
        )  # ribs and skull: half a body's width
        assert np.all(bone.points > known.min(axis=0) - room), segment
        assert np.all(bone.points < known.max(axis=0) + room), segment


@pytest.mark.parametrize("name", MODELS)
def test_two_bones_meet_at_every_joint(name: str) -> None:
    bones = model_bones(name)
    for parent, (plan, bone) in bones.items():
        for child, centre in plan.centres.items():
            child_plan, child_bone = bones[child]
            gaps = outside(bone, centre), outside(child_bone, child_plan.proximal)
            assert min(gaps) < AT_JOINT, (parent, child, gaps)
            assert max(gaps) < ACROSS_JOINT, (parent, child, gaps)


@pytest.mark.parametrize("name", MODELS)
def test_left_bones_are_the_mirror_images_of_right_ones(name: str) -> None:
    bones = model_bones(name)
    pairs = [(s, f"{s.removesuffix('_right')}_left") for s in bones if s.endswith("_right")]
    for right, left in pairs:
        if left in bones and bone_of(bones[right][0]) is not None:
            reflected = bones[left][1].points * [1.0, 1.0, -1.0]
            np.testing.assert_allclose(reflected, bones[right][1].points, atol=1e-9)


@pytest.mark.parametrize("name", ["pelvis", "rib_cage", "skull", "lumbar_spine", "cervical_spine"])
def test_bones_in_the_middle_are_as_symmetric_as_thinning_leaves_them(name: str) -> None:
    points = shipped_bone(name).points
    extremes = np.abs(points[:, 2].min()), points[:, 2].max()
    assert extremes[0] == pytest.approx(extremes[1], abs=0.001)
    reflected = points[::7] * [1.0, 1.0, -1.0]
    nearest = [np.linalg.norm(points - point, axis=1).min() for point in reflected]
    assert np.percentile(nearest, 95) < 0.008  # about the length of an edge


HUMAN = {
    "pelvis": "pelvis",
    "thigh_right": "femur",
    "shank_left": "shank",
    "talus_right": "talus",
    "foot_left": "foot",
    "toes_right": "toes",
    "abdomen": "lumbar_spine",
    "thorax": "rib_cage",
    "neck": "cervical_spine",
    "head": "skull",
    "clavicle_left": "clavicle",
    "scapula_right": "scapula",
    "shoulder_centre_left": None,
    "upper_arm_right": "humerus",
    "ulna_left": "ulna",
    "forearm_right": "radius",
    "hand_left": "whole_hand",
}


def test_each_segment_of_the_full_body_gets_its_own_bone() -> None:
    bones = model_bones("full_body")
    assert {segment: bone_of(bones[segment][0]) for segment in HUMAN} == HUMAN


def test_a_hand_with_fingers_gets_a_palm_and_phalanges() -> None:
    bones = {segment: bone_of(plan) for segment, (plan, _) in model_bones("hand").items()}
    assert bones["forearm_right"] == "forearm"
    assert bones["hand_right"] == "palm"
    assert bones["thumb_distal_right"] == "thumb_last_phalanx"
    assert bones["little_middle_right"] == "middle_phalanx"
    assert None not in bones.values()


def test_an_animal_gets_no_bone_of_a_person() -> None:
    assert all(bone_of(plan) is None for plan, _ in model_bones("four_legged").values())


# From memory, loose bounds on an adult's bones (lengths of dry bones in anatomy's textbooks).
LENGTHS = {
    "femur": (1, 0.41, 0.50),
    "shank": (1, 0.36, 0.48),
    "humerus": (1, 0.28, 0.36),
    "ulna": (1, 0.23, 0.31),
    "radius": (1, 0.22, 0.29),
    "clavicle": (2, 0.13, 0.18),
    "scapula": (1, 0.13, 0.20),
    "skull": (0, 0.16, 0.22),
    "rib_cage": (2, 0.23, 0.32),
    "pelvis": (2, 0.25, 0.31),
}


@pytest.mark.parametrize("name", sorted(LENGTHS))
def test_a_bone_is_as_long_as_an_adult_s(name: str) -> None:
    axis, shortest, longest = LENGTHS[name]
    assert shortest < np.ptp(shipped_bone(name).points[:, axis]) < longest


def test_the_shipped_bones_are_those_that_have_a_design() -> None:
    assert {path.stem for path in FOLDER.glob("*.npz")} == set(DESIGNS)


def test_the_shipped_bones_are_small_and_go_into_the_package() -> None:
    assert sum(path.stat().st_size for path in FOLDER.glob("*.npz")) < LARGEST_KB * 1000
    settings = tomllib.loads((ROOT / "pyproject.toml").read_text())["tool"]["setuptools"]
    assert f"{FOLDER.name}/*.npz" in settings["package-data"]["condyle.viz"]


def test_building_a_bone_twice_gives_the_same_bytes(tmp_path: Path) -> None:
    for file in ("first.npz", "second.npz"):
        store_bone(tmp_path / file, make_bone("talus"))
    assert (tmp_path / "first.npz").read_bytes() == (tmp_path / "second.npz").read_bytes()


@pytest.mark.parametrize(
    "name",
    [
        name
        if name in ("talus", "last_phalanx", "clavicle")
        else pytest.param(name, marks=pytest.mark.slow)
        for name in DESIGNS
    ],
)
def test_a_shipped_bone_is_what_its_design_gives(name: str) -> None:
    built, shipped = make_bone(name), shipped_bone(name)
    assert triangles(built).volume == pytest.approx(triangles(shipped).volume, rel=0.01)
    for side in (np.min, np.max):
        np.testing.assert_allclose(side(built.points, 0), side(shipped.points, 0), atol=0.0005)
    assert built.anchors.keys() == shipped.anchors.keys()
    for anchor, place in built.anchors.items():
        np.testing.assert_allclose(shipped.anchors[anchor], place, atol=1e-12)


def test_a_stored_bone_is_read_as_it_was_to_half_a_step(tmp_path: Path) -> None:
    ball = trimesh.creation.icosphere(radius=0.7)
    bone = StoredBone(
        np.array(ball.vertices), np.array(ball.faces), {"a": np.array([0.1, 0.2, 0.3])}
    )
    store_bone(tmp_path / "ball.npz", bone)
    back = read_bone(tmp_path / "ball.npz")
    np.testing.assert_allclose(back.points, bone.points, atol=0.5 * STEP + 1e-12)
    turned = {tuple(np.roll(face, -int(np.argmin(face)))) for face in bone.faces}
    assert {tuple(face) for face in back.faces} == turned
    np.testing.assert_array_equal(back.anchors["a"], bone.anchors["a"])
