"""Limits of spherical joints, freed joints, and what calibration found of them."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from math import pi, radians
from pathlib import Path

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from condyle.model import load_skeleton, load_tree, write_subject
from condyle.model.skeleton import FreedJoint, Joint, Skeleton, Spherical

Reader = Callable[..., Skeleton]

TWO_SIDES = """\
condyle: 1
mirror: {_right: _left}
segments:
  pelvis: {landmarks: {ASIS_right: [0, 0, 0.1], PSIS_right: [-0.1, 0, 0.1]}}
  thigh_right: {}
  arm_right: {}
joints:
  root: {from: laboratory, to: pelvis, fixed: true}
  hip_right:
    from: pelvis
    to: thigh_right
    at: [0, 0, 0.09]
    moves: [{rotate: z, coordinate: hip_right}]
    placed: [0.01, 0.02, 0.095]
    placed_sd: [0.001, 0.002, 0.003]
    axis_turn: [1, 2, 3]
    axis_turn_sd: [0.1, 0.2, 0.3]
  shoulder_right:
    from: pelvis
    to: arm_right
    spherical: {angles: {sequence: [y, -x, y], names: [p_right, e_right, a_right]}, cone: 150, twist: [-100, 70]}
sizing:
  joints:
    hip_right: {place_sd: 0.012, axis_sd: 4, centre_from: harrington_2007}
"""


def _joint(skeleton: Skeleton, name: str) -> Joint:
    return next(joint for joint in skeleton.joints if joint.name == name)


def _spherical(skeleton: Skeleton, name: str) -> Spherical:
    motion = _joint(skeleton, name).motion
    assert isinstance(motion, Spherical)
    return motion


def test_cone_and_twist_are_read_in_radians(read: Reader, tied: str) -> None:
    motion = _spherical(read(tied), "scapula")
    assert motion.cone == pytest.approx(radians(60))
    assert motion.twist == pytest.approx((radians(-40), radians(40)))


def test_without_cone_and_twist_a_spherical_joint_is_free(read: Reader, tied: str) -> None:
    motion = _spherical(read(tied.replace(", cone: 60, twist: [-40, 40]", "")), "scapula")
    assert (motion.cone, motion.twist) == (None, None)


def test_a_cone_of_half_a_turn_is_taken(read: Reader, tied: str) -> None:
    assert _spherical(read(tied.replace("cone: 60", "cone: 180")), "scapula").cone == pi


def test_a_mirrored_orientation_is_within_the_twin_s_limits_where_the_first_is_within_its_own(
    read: Reader,
) -> None:
    body = read(TWO_SIDES)
    right, left = (_spherical(body, f"shoulder_{side}") for side in ("right", "left"))
    assert left.twist == pytest.approx((radians(-70), radians(100)))
    mirror = np.diag([1.0, 1.0, -1.0])
    within = 0
    for rotation in Rotation.random(200, random_state=5):
        image = Rotation.from_matrix(mirror @ rotation.as_matrix() @ mirror)
        assert _allowed(right, rotation) == _allowed(left, image)
        within += _allowed(right, rotation)
    assert 20 < within < 180


def _allowed(motion: Spherical, rotation: Rotation) -> bool:
    """Whether R = swing . turn(y, twist) is within both limits, with scipy's quaternions."""
    assert motion.cone is not None
    assert motion.twist is not None
    _, y, _, w = rotation.as_quat()
    twist = (2 * np.arctan2(y, w) + pi) % (2 * pi) - pi
    swing = np.arccos(np.clip(rotation.as_matrix()[1, 1], -1, 1))
    return bool(swing <= motion.cone and motion.twist[0] <= twist <= motion.twist[1])


def test_freed_joints_are_read_in_metres_and_radians(read: Reader, tied: str) -> None:
    assert read(tied).sizing.joints == {"hip": FreedJoint(0.012, radians(4))}


def test_a_joint_may_be_freed_in_one_way_only(read: Reader, tied: str) -> None:
    freed = read(tied.replace("place_sd: 0.012, axis_sd: 4", "axis_sd: 4")).sizing.joints
    assert freed == {"hip": FreedJoint(None, radians(4), None)}


def test_a_joint_that_is_not_listed_is_not_freed(read: Reader, leg: str) -> None:
    assert read(leg).sizing.joints == {}


def test_both_sides_are_freed_alike(read: Reader) -> None:
    freed = read(TWO_SIDES).sizing.joints
    assert freed["hip_right"] == FreedJoint(0.012, radians(4), "harrington_2007")
    assert freed["hip_left"] == freed["hip_right"]


def test_a_found_place_and_turn_are_mirrored_as_places_and_turns_are(read: Reader) -> None:
    body = read(TWO_SIDES)
    right, left = (_joint(body, f"hip_{side}") for side in ("right", "left"))
    assert right.placed == (0.01, 0.02, 0.095)
    assert left.placed == (0.01, 0.02, -0.095)
    assert left.placed_sd == right.placed_sd == (0.001, 0.002, 0.003)
    assert right.axis_turn == pytest.approx(np.radians([1, 2, 3]))
    assert left.axis_turn == pytest.approx(np.radians([-1, -2, 3]))
    assert left.axis_turn_sd == right.axis_turn_sd == pytest.approx(np.radians([0.1, 0.2, 0.3]))


def test_a_joint_without_findings_has_none(read: Reader, leg: str) -> None:
    joint = read(leg).joints[1]
    assert (joint.placed, joint.placed_sd, joint.axis_turn, joint.axis_turn_sd) == (None,) * 4


def _written(path: Path, model: Path, *joints: Joint) -> Skeleton:
    write_subject(
        path, load_tree(model), sizes={}, placed={}, subject=None, labels={}, up=None,
        calibration={}, joints=joints,
    )  # fmt: skip
    return load_skeleton(path)


def test_what_calibration_found_of_a_joint_survives_writing(tmp_path: Path, tied: str) -> None:
    model = tmp_path / "tied.yaml"
    model.write_text(tied)
    skeleton = load_skeleton(model)
    found = replace(
        _joint(skeleton, "hip"),
        placed=(0.01, -0.02, 0.0912345),
        placed_sd=(0.001, 0.002, 0.003),
        axis_turn=(0.01, -0.02, 0.03),
        axis_turn_sd=(0.001, 0.002, 0.003),
    )
    read = _written(tmp_path / "S.yaml", model, found, _joint(skeleton, "back"))
    hip = _joint(read, "hip")
    for key in ("placed", "placed_sd", "axis_turn", "axis_turn_sd"):
        assert getattr(hip, key) == pytest.approx(getattr(found, key), abs=1e-6)
    assert hip.at == found.at
    assert read.ties == skeleton.ties
    assert read.sizing.joints == skeleton.sizing.joints
    assert _spherical(read, "scapula") == _spherical(skeleton, "scapula")
    assert _joint(read, "back") == _joint(skeleton, "back")


def test_writing_again_replaces_what_an_earlier_calibration_found(
    tmp_path: Path, tied: str
) -> None:
    model = tmp_path / "tied.yaml"
    model.write_text(
        tied.replace("hip: {from", "hip: {placed: [1, 2, 3], axis_turn: [1, 2, 3], from")
    )
    assert _joint(load_skeleton(model), "hip").placed == (1, 2, 3)
    hip = _joint(_written(tmp_path / "S.yaml", model), "hip")
    assert (hip.placed, hip.axis_turn) == (None, None)


def test_a_mirrored_model_is_written_with_the_twin_s_own_twist(tmp_path: Path) -> None:
    model = tmp_path / "body.yaml"
    model.write_text(TWO_SIDES)
    before = load_skeleton(model)
    after = _written(tmp_path / "S.yaml", model)
    assert _spherical(after, "shoulder_left") == _spherical(before, "shoulder_left")
