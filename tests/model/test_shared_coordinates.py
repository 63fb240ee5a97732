"""Coordinates that follow, that drive several joints, or both sides; and markers without a place."""

from __future__ import annotations

from collections.abc import Callable

import pytest

from condyle.model.skeleton import Coordinate, Move, Moves, Polynomial, Skeleton, Spline

Reader = Callable[..., Skeleton]

ARMS = """\
condyle: 1
mirror: {_right: _left}
segments: {trunk: {}, blade_right: {}, arm_right: {}}
joints:
  root: {from: laboratory, to: trunk, fixed: true}
  blade_right:
    from: trunk
    to: blade_right
    moves:
      - {rotate: x, coordinate: blade_lift_right, follows: lift_right, spline: [[0, 0], [90, 30]]}
      - {rotate: y, follows: blade_lift_right, polynomial: [0, 0.5]}
      - {translate: y, coordinate: breath, range: [0, 0.02], rest: 0.01}
  arm_right:
    from: blade_right
    to: arm_right
    moves:
      - {rotate: x, coordinate: lift_right, range: [0, 180]}
      - {rotate: z, coordinate: swing_right}
      - {rotate: x, coordinate: lift_right}
      - {translate: z, coordinate: slide_right, follows: breath, polynomial: [0, 2], between: [0, 0.01]}
coordinates:
  swing_right: {held: 3}
markers:
  cluster_right: {segment: arm_right, sd: 0.01}
"""


def _moves(skeleton: Skeleton, joint: str) -> tuple[Move, ...]:
    motion = next(one for one in skeleton.joints if one.name == joint).motion
    assert isinstance(motion, Moves)
    return motion.moves


def test_a_following_coordinate_is_named_reported_and_mirrored(read: Reader) -> None:
    body = read(ARMS)
    for side in ("right", "left"):
        lift = body.coordinate(f"blade_lift_{side}")
        assert lift == Coordinate(f"blade_lift_{side}", "rad", follows=f"lift_{side}")
        first, second, _ = _moves(body, f"blade_{side}")
        assert (first.coordinate, first.follows) == (f"blade_lift_{side}", f"lift_{side}")
        assert (second.coordinate, second.follows) == (None, f"blade_lift_{side}")
        assert isinstance(first.function, Spline)


def test_one_coordinate_drives_moves_of_several_joints_on_each_side(read: Reader) -> None:
    body = read(ARMS)
    for side in ("right", "left"):
        named = [move.coordinate for move in _moves(body, f"arm_{side}")]
        assert named.count(f"lift_{side}") == 2
        assert body.coordinate(f"lift_{side}").upper == pytest.approx(3.14159265)
    assert body.coordinate("swing_left").held == body.coordinate("swing_right").held


def test_a_coordinate_without_the_ending_drives_both_sides(read: Reader) -> None:
    body = read(ARMS)
    assert [c.name for c in body.coordinates].count("breath") == 1
    assert all(
        _moves(body, f"blade_{side}")[2].coordinate == "breath" for side in ("right", "left")
    )
    slide = _moves(body, "arm_left")[3]
    assert (slide.follows, slide.axis) == ("breath", (0, 0, -1))
    assert slide.function == Polynomial((0, 2), (0, 0.01))
    assert body.coordinate("slide_left") == Coordinate("slide_left", "m", follows="breath")


def test_a_marker_without_a_place_has_none_on_either_side(read: Reader) -> None:
    for marker in read(ARMS).markers:
        assert (marker.at, marker.landmark, marker.placed) == (None, None, None)
        assert (marker.sd, marker.placed_within) == (0.01, 0.05)
    assert read(ARMS).marker_names == ("cluster_right", "cluster_left")


def test_what_follows_takes_no_held_or_rest_of_its_own(
    read: Reader, report: Callable[..., str]
) -> None:
    told = report(ARMS.replace("swing_right: {held: 3}", "blade_lift_right: {held: 3}"))
    assert told == (
        "leg.yaml:22: 'blade_lift_right' follows 'lift_right' and takes no range, rest or held.\n"
        "  Set them for the coordinate that it follows."
    )
