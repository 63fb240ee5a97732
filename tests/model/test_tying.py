"""Ties as the file says them: the four kinds, their defaults, their mirror image."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from condyle.model.skeleton import MeetsPoint, OnEllipsoid, OnPlane, Skeleton, StaysAt, Tie

Reader = Callable[..., Skeleton]
FloatArray = NDArray[np.float64]

TWO_ARMS = """\
condyle: 1
mirror: {_right: _left}
segments:
  trunk: {landmarks: {SN: [0.1, 0.4, 0], AC_right: [0, 0.4, 0.2]}}
  hand_right: {landmarks: {MC_right: [0.01, -0.09, 0.03]}}
joints:
  root: {from: laboratory, to: trunk, fixed: true}
  arm_right: {from: trunk, to: hand_right, fixed: true}
ties:
  hang_right: {point: [hand_right, MC_right], meets: [trunk, AC_left], sd: 0.0001}
  wall_right: {point: [hand_right, MC_right], on_plane: {of: laboratory, through: [1, 2, 3], normal: [1, 2, 2]}}
  floor_right: {point: [hand_right, [0, 0, 0.1]], on_plane: {of: trunk, through: AC_right, normal: z}}
  glide_right: {point: [trunk, [0.1, 0.2, 0.3]], on_ellipsoid: {of: hand_right, centre: [1, 2, 3], radii: [0.1, 0.2, 0.3]}}
  reach_right: {point: [hand_right, MC_right], stays: {distance: 0.7, from: [trunk, AC_right]}}
  clap: {point: [hand_right, MC_right], meets: [hand_left, MC_left]}
"""


def _named(skeleton: Skeleton) -> dict[str, Tie]:
    return {tie.name: tie for tie in skeleton.ties}


def test_the_four_kinds_are_read_with_their_landmarks_as_places(read: Reader, tied: str) -> None:
    assert read(tied).ties == (
        Tie("grip", "scapula", (-0.02, -0.12, 0), MeetsPoint("bar", (0, 0, 0.25))),
        Tie("seat", "thorax", (0, 0, 0), OnPlane("laboratory", (0, 0, 0), (0, 1, 0))),
        Tie("glide", "scapula", (-0.02, -0.12, 0), OnEllipsoid("thorax", (0, 0, 0), (0.1, 0.2, 0.1))),
        Tie("rod", "bar", (0, 0, 0), StaysAt("thorax", (0, 0, 0), 0.3)),
    )  # fmt: skip
    assert [tie.other for tie in read(tied).ties] == ["bar", "laboratory", "thorax", "thorax"]


def test_a_tie_is_met_within_two_millimetres_unless_it_says_otherwise(
    read: Reader, tied: str
) -> None:
    assert [tie.sd for tie in read(tied).ties] == [0.002] * 4
    assert read(tied.replace("0.25]]}", "0.25]], sd: 1e-5}")).ties[0].sd == 1e-5


def test_a_normal_is_normalised(read: Reader, tied: str) -> None:
    kind = read(tied.replace("normal: y", "normal: [0, 3, 4]")).ties[1].kind
    assert isinstance(kind, OnPlane)
    assert kind.normal == pytest.approx((0, 0.6, 0.8))


def test_a_model_without_ties_has_none(read: Reader, leg: str) -> None:
    assert read(leg).ties == ()


def test_a_base_model_s_tie_can_be_changed_and_removed(read: Reader, tied: str) -> None:
    over = "condyle: 1\nextends: base.yaml\nties: {grip: null, rod: {stays: {distance: 0.4}}}"
    ties = _named(read(over, base=tied))
    assert list(ties) == ["seat", "glide", "rod"]
    assert ties["rod"].kind == StaysAt("thorax", (0, 0, 0), 0.4)


def test_a_base_model_s_tie_becomes_another_kind(read: Reader, tied: str) -> None:
    change = "ties: {grip: {meets: null, stays: {distance: 0.4, from: [bar, [0, 0, 0]]}}}"
    ties = _named(read(f"condyle: 1\nextends: base.yaml\n{change}", base=tied))
    assert ties["grip"].kind == StaysAt("bar", (0, 0, 0), 0.4)


def test_the_left_tie_names_the_left_side_and_the_middle_stays_one(read: Reader) -> None:
    ties = _named(read(TWO_ARMS))
    assert list(ties)[5:] == [
        "clap", "hang_left", "wall_left", "floor_left", "glide_left", "reach_left",
    ]  # fmt: skip
    assert ties["hang_left"] == Tie(
        "hang_left", "hand_left", (0.01, -0.09, -0.03), MeetsPoint("trunk", (0, 0.4, 0.2)), 0.0001
    )
    assert ties["wall_left"].kind == OnPlane("laboratory", (1, 2, -3), (1 / 3, 2 / 3, -2 / 3))
    assert ties["floor_left"].kind == OnPlane("trunk", (0, 0.4, -0.2), (0, 0, -1))
    assert ties["glide_left"].kind == OnEllipsoid("hand_left", (1, 2, -3), (0.1, 0.2, 0.3))
    assert ties["reach_left"].kind == StaysAt("trunk", (0, 0.4, -0.2), 0.7)


def test_mirrored_postures_leave_a_tie_and_its_twin_equally_far_from_met(read: Reader) -> None:
    """The law behind the signs: residuals are lengths, and a mirror image changes no length."""
    random = np.random.default_rng(3)
    ties = _named(read(TWO_ARMS))
    mirror = np.diag([1.0, 1.0, -1.0, 1.0])
    for _ in range(20):
        poses = {name: _random_pose(random) for name in ("trunk", "hand_right")}
        poses["laboratory"] = np.eye(4)
        images = {
            name.replace("_right", "_left"): mirror @ pose @ mirror for name, pose in poses.items()
        }
        for name in ("hang", "wall", "floor", "glide", "reach"):
            right = _residual(ties[f"{name}_right"], poses)
            assert _residual(ties[f"{name}_left"], images) == pytest.approx(right, rel=1e-12)
            assert abs(right) > 1e-6


def _random_pose(random: np.random.Generator) -> FloatArray:
    pose = np.eye(4)
    pose[:3, :3] = Rotation.random(random_state=int(random.integers(2**31))).as_matrix()
    pose[:3, 3] = random.normal(size=3)
    return pose


def _residual(tie: Tie, world_from: dict[str, FloatArray]) -> float:
    """How far a tie is from being met, straight from its definition."""
    other_from_segment = np.linalg.inv(world_from[tie.other]) @ world_from[tie.segment]
    point = (other_from_segment @ [*tie.point, 1])[:3]
    match tie.kind:
        case MeetsPoint(point=met):
            return float(np.linalg.norm(point - met))
        case OnPlane(through=through, normal=normal):
            return float((point - through) @ normal)
        case OnEllipsoid(centre=centre, radii=radii):
            return float(np.linalg.norm((point - centre) / np.array(radii)) - 1)
        case StaysAt(point=end, distance=distance):
            return float(np.linalg.norm(point - end) - distance)
