"""Check images, judged by what they must show: a colour at the place where geometry puts it."""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from PIL import Image
from scipy.ndimage import label

from condyle.model.errors import CondyleError
from condyle.solver.results import FittedMotion
from condyle.viz.overlays import (
    PictureError,
    draw_contact_sheet,
    draw_overlay,
    overlay_camera,
    save_picture,
)
from condyle.viz.viewpoint import Camera, ViewError

Change = Callable[..., FittedMotion]
SIZE = (640, 480)


def project(point: np.ndarray, camera: Camera, size: tuple[int, int]) -> np.ndarray:
    """A pinhole camera, written out again: pixels from the top left corner."""
    ahead = camera.focal_point - camera.position
    ahead = ahead / np.linalg.norm(ahead)
    right = np.cross(ahead, camera.up)
    right = right / np.linalg.norm(right)
    down = np.cross(ahead, right)
    ray = point - camera.position
    focal_length = size[1] / (2.0 * np.tan(np.radians(camera.view_angle) / 2.0))
    return np.array(
        [
            size[0] / 2.0 + focal_length * (ray @ right) / (ray @ ahead),
            size[1] / 2.0 + focal_length * (ray @ down) / (ray @ ahead),
        ]
    )


def channels(image: Image.Image) -> tuple[np.ndarray, np.ndarray, np.ndarray]:
    red, green, blue = np.moveaxis(np.asarray(image.convert("RGB"), dtype=float), 2, 0)
    return red, green, blue


def orange(image: Image.Image) -> np.ndarray:
    red, green, blue = channels(image)
    return (red - blue > 90) & (green > 0.56 * red) & (green < 0.86 * red)


def blue(image: Image.Image) -> np.ndarray:
    red, green, blue_ = channels(image)
    return (blue_ - red > 70) & (green > red)


def above_legend(mask: np.ndarray) -> np.ndarray:
    inside = mask.copy()
    inside[int(0.80 * len(mask)) :] = False
    return inside


def blob_near(mask: np.ndarray, pixel: np.ndarray) -> np.ndarray:
    """The centroid (x, y) of the blob nearest to a pixel; pixel centres are at halves."""
    labels, count = label(mask)
    assert count, "no blob of that colour"
    centres = [np.argwhere(labels == k + 1).mean(axis=0)[::-1] + 0.5 for k in range(count)]
    return min(centres, key=lambda centre: float(np.linalg.norm(centre - pixel)))


@pytest.mark.parametrize("view", ["side", "oblique"])
@pytest.mark.parametrize("row", [2, 15])
def test_the_orange_disc_is_where_a_pinhole_camera_puts_the_fitted_marker(
    leg: FittedMotion, view: str, row: int
) -> None:
    image = draw_overlay(leg, row, view=view, size=SIZE)
    camera = overlay_camera(leg, row, view=view, size=SIZE)
    expected = project(leg.fitted[row, 0], camera, SIZE)
    found = blob_near(above_legend(orange(image)), expected)
    np.testing.assert_allclose(found, expected, atol=1.0)


def test_the_blue_disc_stands_at_the_end_of_the_lengthened_residual(leg: FittedMotion) -> None:
    row, times = 15, 4.0
    image = draw_overlay(leg, row, view="side", size=SIZE, exaggeration=times)
    camera = overlay_camera(leg, row, view="side", size=SIZE, exaggeration=times)
    end = leg.fitted[row, 0] + times * (leg.measured[row, 0] - leg.fitted[row, 0])
    expected = project(end, camera, SIZE)
    found = blob_near(above_legend(blue(image)), expected)
    np.testing.assert_allclose(found, expected, atol=1.0)


def test_the_drawing_camera_and_the_plain_one_agree(leg: FittedMotion) -> None:
    camera = overlay_camera(leg, 0)
    for point in leg.fitted[0]:
        np.testing.assert_allclose(
            camera.project(point, (1280, 960)), project(point, camera, (1280, 960)), atol=1e-9
        )


def dark(image: Image.Image) -> np.ndarray:
    return np.asarray(image.convert("L")) < 110


def test_the_picture_has_words_at_the_top_and_at_the_foot_and_none_at_its_edges(
    leg: FittedMotion,
) -> None:
    image = draw_overlay(leg, 5, size=SIZE)
    assert image.size == SIZE
    ink = dark(image)
    assert ink[: int(0.13 * SIZE[1])].sum() > 300
    assert ink[int(0.85 * SIZE[1]) :].sum() > 300
    for edge in (ink[:, :8], ink[:, -8:], ink[:4], ink[-4:]):
        assert not edge.any()


def test_a_name_of_any_length_stays_inside_the_picture(leg: FittedMotion, change: Change) -> None:
    image = draw_overlay(change(leg, name="trial " * 60), 5, size=SIZE)
    assert not dark(image)[:, -12:].any()


def with_nothing_used(leg: FittedMotion, change: Change) -> FittedMotion:
    return change(leg, used=np.zeros_like(leg.used))


def with_nothing_measured(leg: FittedMotion, change: Change) -> FittedMotion:
    missing = with_nothing_used(leg, change)
    return change(missing, measured=np.full_like(leg.measured, np.nan))


def with_nothing_at_all(leg: FittedMotion, change: Change) -> FittedMotion:
    return change(
        with_nothing_measured(leg, change),
        fitted=np.full_like(leg.fitted, np.nan),
        laboratory_from_segment=np.full_like(leg.laboratory_from_segment, np.nan),
    )


def test_markers_left_out_are_grey_crosses_and_never_blue(
    leg: FittedMotion, change: Change
) -> None:
    motion = with_nothing_used(leg, change)
    image = draw_overlay(motion, 5, view="side", size=SIZE)
    assert not blue(image).any()
    camera = overlay_camera(motion, 5, view="side", size=SIZE)
    x, y = np.round(project(motion.measured[5, 0], camera, SIZE)).astype(int)
    around = np.asarray(image.convert("RGB"))[y - 2 : y + 2, x - 2 : x + 2].astype(float)
    grey = np.abs(around - (122, 126, 134)).max(axis=2) < 40
    assert grey.any()


def test_a_frame_without_measurements_shows_the_skeleton_alone(
    leg: FittedMotion, change: Change
) -> None:
    image = draw_overlay(with_nothing_measured(leg, change), 5, size=SIZE)
    assert not blue(image).any()
    assert not orange(image).any()
    assert bone_pixels(image) > 1500


def bone_pixels(image: Image.Image) -> int:
    """Pixels of the warm right-hand bone: the background is never warm."""
    red, _, blue_ = channels(image)
    return int(above_legend((red - blue_ > 8) & (red - blue_ < 70)).sum())


def test_a_frame_of_which_nothing_is_known_is_an_empty_room(
    leg: FittedMotion, change: Change
) -> None:
    image = draw_overlay(with_nothing_at_all(leg, change), 5, size=SIZE)
    assert bone_pixels(image) == 0
    assert dark(image)[: int(0.13 * SIZE[1])].sum() > 200


def test_one_frame_without_a_pose_does_not_spoil_the_others(
    leg: FittedMotion, change: Change
) -> None:
    poses, fitted = leg.laboratory_from_segment.copy(), leg.fitted.copy()
    measured, used = leg.measured.copy(), leg.used.copy()
    poses[5], fitted[5], measured[5], used[5] = np.nan, np.nan, np.nan, False
    broken = change(leg, laboratory_from_segment=poses, fitted=fitted, measured=measured, used=used)
    assert bone_pixels(draw_overlay(broken, 5, size=SIZE)) == 0
    assert bone_pixels(draw_overlay(broken, 6, size=SIZE)) > 1500


def turned_to_z_up(leg: FittedMotion, change: Change) -> FittedMotion:
    turn = np.eye(4)
    turn[1:3, 1:3] = [[0.0, -1.0], [1.0, 0.0]]
    return change(
        leg,
        up="+Z",
        laboratory_from_segment=turn @ leg.laboratory_from_segment,
        measured=leg.measured @ turn[:3, :3].T,
        fitted=leg.fitted @ turn[:3, :3].T,
    )


def test_turning_the_laboratory_turns_the_picture_with_it(
    leg: FittedMotion, change: Change
) -> None:
    y_up = np.asarray(draw_overlay(leg, 8, size=SIZE), dtype=float)
    z_up = np.asarray(draw_overlay(turned_to_z_up(leg, change), 8, size=SIZE), dtype=float)
    assert np.abs(y_up - z_up).mean() < 0.5


def test_a_second_root_is_drawn_beside_the_person(leg: FittedMotion, change: Change) -> None:
    ball = np.broadcast_to(np.eye(4), (len(leg.time), 1, 4, 4)).copy()
    ball[:, 0, :3, 3] = 1.0, 0.5, 0.0
    both = change(
        leg,
        segment_names=(*leg.segment_names, "bar_right"),
        laboratory_from_segment=np.concatenate([leg.laboratory_from_segment, ball], axis=1),
        landmarks={
            **leg.landmarks,
            "bar_right": {"a": np.array([0.2, 0, 0]), "b": np.array([-0.2, 0, 0])},
        },
    )
    image = draw_overlay(both, 5, view="side", size=SIZE)
    camera = overlay_camera(both, 5, view="side", size=SIZE)
    x, y = np.round(project(np.array([1.1, 0.5, 0.0]), camera, SIZE)).astype(int)
    red, _, blue_ = channels(image)
    assert (red - blue_)[y, x] > 8


def test_an_unknown_row_or_view_is_told(leg: FittedMotion) -> None:
    with pytest.raises(ViewError, match="no row 21; its rows are 0 to 20"):
        draw_overlay(leg, 21)
    with pytest.raises(ViewError, match="no view is called 'above'"):
        draw_overlay(leg, 0, view="above")


def test_a_contact_sheet_has_as_many_panels_as_asked_for(leg: FittedMotion) -> None:
    eight, sixteen = (draw_contact_sheet(leg, panels=count) for count in (8, 16))
    assert eight.width == sixteen.width == 1600
    assert sixteen.height > eight.height
    for sheet in (eight, sixteen):
        assert above_legend(orange(sheet)).sum() > 50
        assert not dark(sheet)[:, -8:].any()


def test_a_contact_sheet_of_nothing_is_still_a_sheet(leg: FittedMotion, change: Change) -> None:
    sheet = draw_contact_sheet(with_nothing_at_all(leg, change), panels=2)
    assert bone_pixels(sheet) == 0


def test_a_contact_sheet_needs_a_panel(leg: FittedMotion) -> None:
    with pytest.raises(ViewError, match="0 panels were asked for"):
        draw_contact_sheet(leg, panels=0)


def test_a_picture_is_saved_whole_and_leaves_nothing_beside_it(tmp_path: Path) -> None:
    image = Image.new("RGB", (20, 10), (1, 2, 3))
    save_picture(image, tmp_path / "fit.png")
    assert [entry.name for entry in tmp_path.iterdir()] == ["fit.png"]
    assert Image.open(tmp_path / "fit.png").size == (20, 10)


def test_a_picture_that_cannot_be_written_is_told_and_leaves_nothing(tmp_path: Path) -> None:
    image = Image.new("RGB", (20, 10))
    with pytest.raises(CondyleError, match="cannot be written"):
        save_picture(image, tmp_path / "missing" / "fit.png")
    with pytest.raises(PictureError, match="not a kind of picture"):
        save_picture(image, tmp_path / "fit.docx")
    assert not list(tmp_path.iterdir())
