"""Where angles cannot be told apart, against the rank of the angles' own derivatives."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from condyle.model import load_skeleton
from condyle.model.skeleton import Skeleton
from condyle.solver.singular_regions import NEAR, said, singular_regions

BALL = """
condyle: 1
name: ball
segments: {{base: {{}}, ball: {{}}}}
joints:
  root: {{from: laboratory, to: base, fixed: true}}
  socket: {{from: base, to: ball, spherical: {{angles: {{sequence: [{sequence}], names: [a, b, c]}}{limits}}}}}
"""

MOVES = """
condyle: 1
name: wrist
segments: {{arm: {{}}, hand: {{}}}}
joints:
  root: {{from: laboratory, to: arm, fixed: true}}
  wrist:
    from: arm
    to: hand
    moves:
      - {{rotate: {first}, coordinate: a}}
      - {{rotate: {middle}, coordinate: b, range: [{low}, {high}]}}
      - {{rotate: {third}, coordinate: c}}
"""


def _turning(sequence: str, angles: tuple[float, float, float]) -> np.ndarray:
    """(3, 3) The axes of the three turns in the base, by scipy's rotations."""
    axes = np.eye(3)
    before = Rotation.identity()
    columns = []
    for letter, angle in zip(sequence, angles, strict=True):
        axis = axes["xyz".index(letter)]
        columns.append(before.apply(axis))
        before = before * Rotation.from_rotvec(angle * axis)
    return np.stack(columns, axis=1)


@pytest.mark.parametrize("sequence", ["zxy", "yxy", "xyz", "yxz", "zyz", "xzx"])
def test_an_orientation_is_singular_exactly_where_its_turns_lose_their_rank(
    skeleton_of: Callable[[str], Skeleton], sequence: str
) -> None:
    text = BALL.format(sequence=", ".join(sequence), limits="")
    (region,) = singular_regions(skeleton_of(text))
    assert (region.first, region.middle, region.third) == ("a", "b", "c")
    assert region.stays_told == "a_sum"
    rng = np.random.default_rng(0)
    for value in region.at:
        turns = _turning(sequence, (rng.uniform(-3, 3), value, rng.uniform(-3, 3)))
        assert np.linalg.svd(turns, compute_uv=False)[2] < 1e-12
    low, high = (0, np.pi) if sequence[0] == sequence[2] else (-np.pi / 2, np.pi / 2)
    for value in np.linspace(low, high, 181):
        if np.abs(value - np.array(region.at)).min() > NEAR:
            smallest = np.linalg.svd(_turning(sequence, (0.3, value, 0.7)), compute_uv=False)[2]
            assert smallest > 0.05


def test_a_cone_keeps_a_region_out_of_reach(skeleton_of: Callable[[str], Skeleton]) -> None:
    (region,) = singular_regions(
        skeleton_of(BALL.format(sequence="y, -x, y", limits=", cone: 120"))
    )
    assert np.degrees(region.at) == pytest.approx([0.0])  # 180 would lean by 180
    inside = BALL.format(sequence="z, x, y", limits=", cone: 60")
    assert singular_regions(skeleton_of(inside)) == ()  # b = 90 lays the child's Y level
    reached = BALL.format(sequence="z, x, y", limits=", cone: 100")
    (region,) = singular_regions(skeleton_of(reached))
    assert np.degrees(region.at) == pytest.approx([-90.0, 90.0])


def test_moves_are_singular_where_the_middle_turn_aligns_the_others(
    skeleton_of: Callable[[str], Skeleton],
) -> None:
    text = MOVES.format(first="z", middle="x", third="y", low=-100, high=60)
    (region,) = singular_regions(skeleton_of(text))
    assert np.degrees(region.at) == pytest.approx([-90.0])
    assert region.stays_told is None
    text = MOVES.format(first="z", middle="x", third="y", low=-65, high=55)
    assert singular_regions(skeleton_of(text)) == ()


def test_oblique_moves_align_where_scipy_says(skeleton_of: Callable[[str], Skeleton]) -> None:
    """A third axis made by turning the first about the middle one by -40 degrees."""
    first, middle = np.array([0.0, 0.6, 0.8]), np.array([1.0, 0.0, 0.0])
    third = Rotation.from_rotvec(np.radians(-40) * middle).apply(first)
    text = MOVES.format(
        first=first.tolist(),
        middle=middle.tolist(),
        third=third.round(9).tolist(),
        low=-170,
        high=170,
    )
    (region,) = singular_regions(skeleton_of(text))
    assert np.degrees(region.at) == pytest.approx([-140.0, 40.0], abs=1e-4)
    apart = MOVES.format(first="x", middle="z", third=[0, 0.6, 0.8], low=-170, high=170)
    assert singular_regions(skeleton_of(apart)) == ()  # no turn about z makes it meet x


def test_the_shoulder_and_the_pelvis_are_told_and_the_spine_is_not() -> None:
    regions = singular_regions(load_skeleton("full_body"))
    assert {region.joint for region in regions} == {"root", "shoulder_right", "shoulder_left"}
    (shoulder,) = (region for region in regions if region.joint == "shoulder_right")
    assert said(shoulder) == (
        "shoulder_plane_right and shoulder_axial_right cannot be told apart within 5 deg of "
        "shoulder_elevation_right 0 or 180; read shoulder_plane_right_sum there"
    )
