"""Cameras: where they stand, and that a figure fills the room it is given."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from condyle.solver.results import FittedMotion
from condyle.viz.viewpoint import (
    NEAREST,
    VIEWS,
    Room,
    ViewError,
    facing,
    frame_points,
    level_axes,
    look_from,
    main_root,
    picture_up,
    up_vector,
)

FORWARD, UP, RIGHT = np.eye(3)  # ISB axes


def test_the_views_stand_in_front_and_at_the_right() -> None:
    assert look_from("front", FORWARD, UP) @ FORWARD > 0.99
    assert look_from("side", FORWARD, UP) @ RIGHT > 0.99
    oblique = look_from("oblique", FORWARD, UP)
    assert oblique @ FORWARD > 0.5
    assert oblique @ RIGHT > 0.5


def test_an_unknown_view_is_told_with_the_known_ones() -> None:
    with pytest.raises(ViewError, match="'beneath'; the views are front, side, oblique"):
        look_from("beneath", FORWARD, UP)


@pytest.mark.parametrize("up", ["Y up", "", "+W", "++Y", "XY"])
def test_a_wrong_up_axis_is_refused(up: str) -> None:
    with pytest.raises(ViewError, match="up is one of"):
        up_vector(up)


@pytest.mark.parametrize("up", ["+X", "Y", "z", "-X", "-Y", "-Z"])
def test_the_level_axes_are_right_handed_with_up(up: str) -> None:
    axes = level_axes(up_vector(up))
    np.testing.assert_allclose(axes @ axes.T, np.eye(3), atol=1e-15)
    assert np.linalg.det(axes) == pytest.approx(1.0)


def test_a_person_faces_along_the_level_part_of_the_roots_forward_axis(leg: FittedMotion) -> None:
    np.testing.assert_allclose(facing(leg, np.array([3])), [1.0, 0.0, 0.0], atol=1e-12)


def test_a_motion_without_any_pose_still_faces_somewhere_level(
    leg: FittedMotion, change: Callable[..., FittedMotion]
) -> None:
    lost = change(leg, laboratory_from_segment=np.full((21, 2, 4, 4), np.nan))
    direction = facing(lost, slice(None))
    assert np.linalg.norm(direction) == pytest.approx(1.0)
    assert direction @ UP == 0.0


def test_the_root_with_the_larger_family_is_the_person(
    leg: FittedMotion, change: Callable[..., FittedMotion]
) -> None:
    poses = np.concatenate(
        [leg.laboratory_from_segment[:, :1], leg.laboratory_from_segment], axis=1
    )
    both = change(leg, segment_names=("bar", *leg.segment_names), laboratory_from_segment=poses)
    assert main_root(both) == 1


@given(
    seed=st.integers(0, 10_000),
    view=st.sampled_from(sorted(VIEWS)),
    width=st.integers(200, 1500),
    height=st.integers(200, 1500),
)
def test_the_framed_points_are_inside_the_room_and_touch_it(
    seed: int, view: str, width: int, height: int
) -> None:
    rng = np.random.default_rng(seed)
    points = rng.normal(size=(30, 3)) * rng.uniform(0.05, 1.0, 3) + rng.normal(size=3)
    room, size = Room(0.1, 0.9, 0.15, 0.8), (width, height)
    upright = picture_up(view, FORWARD, UP)
    camera = frame_points(points, look_from(view, FORWARD, UP), upright, size, room)
    x, y = (camera.project(points, size) / size).T
    slack = np.array([x.min() - 0.1, 0.9 - x.max(), y.min() - 0.15, 0.8 - y.max()])
    assert slack.min() > -1e-9
    nearest = float(((camera.position - points) @ camera.axes()[2]).min())
    if nearest < NEAREST + 1e-9:  # then nearness, not the room, decides the distance
        return
    assert slack.min() == pytest.approx(0.0, abs=1e-9)
    assert slack[:2].max() < 1e-9 or slack[2:].max() < 1e-9
