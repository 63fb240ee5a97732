"""Stills with everything that can be asked for, judged by what they must show."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
from PIL import Image
from scipy.ndimage import label

from condyle.solver.results import FittedMotion
from condyle.viz.extras import Axes, Clouds, Extras, Forces, ghost_of
from condyle.viz.look import Look, printed
from condyle.viz.overlays import camera_of
from condyle.viz.stills import draw_still
from condyle.viz.theme import DARK, LIGHT, PURPLE, SKY_BLUE, THEMES, Theme
from condyle.viz.viewpoint import VIEWS, Camera, ViewError

Change = Callable[..., FittedMotion]
SIZE = (640, 480)


def pinhole(points: np.ndarray, camera: Camera, size: tuple[int, int]) -> np.ndarray:
    """(n, 2) pixels of points (n, 3), by a projection matrix: K [R | t], as textbooks write it.

    Hartley & Zisserman 2004, Multiple View Geometry, section 6.1: x right, y down, z ahead.
    """
    ahead = camera.focal_point - camera.position
    ahead = ahead / np.linalg.norm(ahead)
    right = np.cross(ahead, camera.up)
    right = right / np.linalg.norm(right)
    R = np.stack([right, np.cross(ahead, right), ahead])
    f = 0.5 * size[1] / np.tan(np.radians(0.5 * camera.view_angle))
    K = np.array([[f, 0.0, 0.5 * size[0]], [0.0, f, 0.5 * size[1]], [0.0, 0.0, 1.0]])
    homogeneous = (K @ np.c_[R, -R @ camera.position] @ np.c_[points, np.ones(len(points))].T).T
    return np.asarray(homogeneous[:, :2] / homogeneous[:, 2:])


def near_colour(image: Image.Image, colour: tuple[int, int, int], within: float) -> np.ndarray:
    """(height, width): where the direction of the colour, whatever its brightness, is that one."""
    pixels = np.asarray(image.convert("RGB"), dtype=float)
    wanted = np.array(colour) / np.linalg.norm(colour)
    lengths = np.linalg.norm(pixels, axis=2)
    cosine = pixels @ wanted / np.maximum(lengths, 1.0)
    return (cosine > np.cos(within)) & (lengths > 60)


def nearest_blob(mask: np.ndarray, pixel: np.ndarray) -> np.ndarray:
    labels, count = label(mask)
    assert count, "nothing of that colour"
    centres = [np.argwhere(labels == k + 1).mean(axis=0)[::-1] + 0.5 for k in range(count)]
    return min(centres, key=lambda centre: float(np.linalg.norm(centre - pixel)))


FIXED = Camera(np.array([1.9, 1.3, 2.2]), np.array([0.3, 0.45, 0.0]), np.array([0.0, 1.0, 0.0]), 26)


@pytest.mark.parametrize("theme", [LIGHT, DARK], ids=lambda theme: theme.name)
@pytest.mark.parametrize("view", ["front", "top", "oblique", FIXED], ids=str)
def test_a_fitted_markers_pixel_is_where_an_independent_pinhole_puts_it(
    leg: FittedMotion, view: str | Camera, theme: Theme
) -> None:
    look = Look(view, (900, 700), theme=theme)
    image = draw_still(leg, 9, look)
    expected = pinhole(leg.fitted[9, :1], camera_of(leg, 9, look), image.size)[0]
    orange = near_colour(image, theme.fitted, 0.16)
    orange[int(0.80 * image.height) :] = False
    np.testing.assert_allclose(nearest_blob(orange, expected), expected, atol=1.0)


def test_a_camera_file_and_every_named_view_show_the_whole_figure(leg: FittedMotion) -> None:
    for view in VIEWS:
        look = Look(view, SIZE)
        pixels = pinhole(leg.fitted[9], camera_of(leg, 9, look), SIZE)
        assert ((pixels > 0) & (pixels < SIZE)).all(), view


def test_a_transparent_still_has_no_ground_and_the_same_figure(leg: FittedMotion) -> None:
    opaque, clear = (
        draw_still(leg, 9, Look(size=SIZE)),
        draw_still(leg, 9, Look(size=SIZE, transparent=True)),
    )
    assert opaque.mode == "RGB"
    assert clear.mode == "RGBA"
    opacity = np.asarray(clear)[..., 3]
    assert (opacity[110:130, :60] == 0).all()
    assert (opacity == 255).sum() > 2000
    inside = (opacity == 255) & (np.indices(opacity.shape)[0] < 0.75 * SIZE[1])
    inside &= np.indices(opacity.shape)[0] > 0.2 * SIZE[1]
    apart = np.asarray(clear.convert("RGB"), dtype=float)[inside] - np.asarray(opaque)[inside]
    assert np.abs(apart).mean() < 3.0


def test_a_ghost_is_purple_beside_the_figure_or_laid_onto_it(
    leg: FittedMotion, change: Change
) -> None:
    aside = leg.laboratory_from_segment.copy()
    aside[..., 2, 3] += 0.5  # to the person's right: leftwards in a view from the front
    other = change(leg, name="other", laboratory_from_segment=aside)

    def columns(*, together: bool) -> np.ndarray:
        ghost = ghost_of(other, float(leg.time[9]), beside=leg, row=9, together=together)
        extras, look = Extras(ghosts=(ghost,)), Look("front", SIZE)
        image = draw_still(leg, 9, look, extras)
        pixels = np.asarray(image, dtype=float)[: int(0.75 * SIZE[1])]
        purple = (pixels[..., 0] - pixels[..., 1] > 25) & (pixels[..., 2] - pixels[..., 1] > 8)
        assert purple.sum() > 1500
        hip = leg.laboratory_from_segment[9, :1, :3, 3]
        hips = pinhole(hip, camera_of(leg, 9, look, extras), SIZE)
        return np.nonzero(purple)[1] - hips[0, 0]

    assert PURPLE[0] - PURPLE[1] > 25
    assert np.median(columns(together=False)) < -100
    assert abs(np.median(columns(together=True))) < 25


def test_bringing_together_keeps_heights_and_makes_roots_meet(
    leg: FittedMotion, change: Change
) -> None:
    angle = 1.1
    move = np.eye(4)
    move[:3, :3] = [
        [np.cos(angle), 0, np.sin(angle)],
        [0, 1, 0],
        [-np.sin(angle), 0, np.cos(angle)],
    ]
    move[:3, 3] = 2.0, 0.25, -1.0
    other = change(leg, laboratory_from_segment=move @ leg.laboratory_from_segment)
    ghost = ghost_of(other, float(leg.time[4]), beside=leg, row=4, together=True)
    expected = leg.laboratory_from_segment[4].copy()
    expected[:, 1, 3] += 0.25
    np.testing.assert_allclose(ghost.poses, expected, atol=1e-9)


def test_a_force_arrow_points_from_its_place_to_its_tip(leg: FittedMotion) -> None:
    place, force = np.array([[0.7, 0.0, 0.3]]), np.array([[0.0, 700.0, 0.0]])
    extras = Extras(forces=Forces(place, force, 1000.0))
    look = Look("oblique", SIZE)
    image = draw_still(leg, 9, look, extras)
    green = near_colour(image, (0, 158, 115), 0.10)
    green[int(0.80 * SIZE[1]) :] = False
    tail, tip = pinhole(
        np.array([place[0], place[0] + [0.0, 0.7, 0.0]]), camera_of(leg, 9, look, extras), SIZE
    )
    rows, columns = np.nonzero(green)
    assert abs(rows.min() - tip[1]) < 4
    assert abs(columns.mean() - tip[0]) < 4
    assert rows.max() > 0.5 * (tip[1] + min(tail[1], 0.8 * SIZE[1]))


def test_an_unloaded_plate_has_no_arrow() -> None:
    forces = Forces(np.full((1, 3), np.nan), np.array([[0.0, 5.0, 0.0]]), 1000.0)
    assert len(forces.arrows()) == 0


def test_an_ellipsoid_is_as_wide_as_its_covariance_says(leg: FittedMotion) -> None:
    place, sd = np.array([[0.3, 0.5, 0.5]]), 0.02
    clouds = Clouds(place, np.array([np.diag([sd**2, sd**2, sd**2])]))
    look = Look("side", SIZE, exaggeration=1.0)
    extras = Extras(clouds=clouds)
    image = draw_still(leg, 9, look, extras)
    plain = draw_still(leg, 9, Look(FIXED, SIZE, exaggeration=1.0))
    assert image.size == plain.size
    camera = camera_of(leg, 9, look, extras)
    # chi-squared with 3 freedoms, 95 %: 7.815 (any table); a ball's picture is about its radius.
    radius = np.sqrt(7.815) * sd
    middle, edge = pinhole(np.array([place[0], place[0] + radius * camera.axes()[0]]), camera, SIZE)
    cloud = near_colour(image, (178, 214, 236), 0.08) & near_colour(image, SKY_BLUE, 0.40)
    row = cloud[int(middle[1])]
    near = np.flatnonzero(
        row & (np.abs(np.arange(SIZE[0]) - middle[0]) < 2 * (edge[0] - middle[0]))
    )
    assert abs((near.max() - near.min() + 1) / 2 - (edge[0] - middle[0])) < 2.0


def test_joint_axes_show_through_the_bones(leg: FittedMotion) -> None:
    knee = leg.laboratory_from_segment[9, 1, :3, 3]
    axes = Axes(knee[None], np.array([[0.0, 0.0, 1.0]]))
    with_axes = np.asarray(
        draw_still(leg, 9, Look("front", SIZE), Extras(axes=axes)).convert("L"), float
    )
    without = np.asarray(draw_still(leg, 9, Look("front", SIZE)).convert("L"), float)
    changed = np.abs(with_axes - without)[: int(0.8 * SIZE[1])] > 25
    assert changed.sum() > 40


def test_a_printed_column_has_its_width_and_letters_of_seven_points(leg: FittedMotion) -> None:
    size, letters = printed(width_mm=85.0, dpi=300.0, size=None)
    assert size[0] == 1004  # 85 / 25.4 * 300
    assert letters == pytest.approx(7.5 / 72 * 300)
    image = draw_still(leg, 9, Look(size=size, letters=letters, grows=True))
    assert image.width == 1004
    assert image.height > size[1]
    dark = np.asarray(image.convert("L")) < 110
    assert not dark[:, -10:].any()


@pytest.mark.parametrize(
    ("wrong", "said"),
    [
        ({"size": (100, 100)}, "cannot be drawn here"),
        ({"exaggeration": 0.0}, "0 times as long"),
        ({"exaggeration": float("nan")}, "nan times as long"),
        ({"view": "beneath"}, "no view is called 'beneath'"),
    ],
)
def test_a_look_that_cannot_be_is_told(wrong: dict[str, object], said: str) -> None:
    with pytest.raises(ViewError, match=said):
        Look(**wrong)  # type: ignore[arg-type]


def relative_luminance(colour: tuple[int, int, int]) -> float:
    """WCAG 2.2's definition."""
    c = np.array(colour) / 255.0
    linear = np.where(c <= 0.04045, c / 12.92, ((c + 0.055) / 1.055) ** 2.4)
    return float(linear @ [0.2126, 0.7152, 0.0722])


def contrast(one: tuple[int, int, int], other: tuple[int, int, int]) -> float:
    """WCAG 2.2: (lighter + 0.05) / (darker + 0.05)."""
    high, low = sorted((relative_luminance(one), relative_luminance(other)), reverse=True)
    return (high + 0.05) / (low + 0.05)


@pytest.mark.parametrize("theme", THEMES.values(), ids=THEMES)
def test_letters_can_be_read_on_every_ground(theme: Theme) -> None:
    for ground in (theme.sky, theme.ground, theme.page):
        assert contrast(theme.ink, ground) > 7.0
        assert contrast(theme.soft_ink, ground) > 4.5
        assert contrast(theme.measured, ground) > 3.0
    for marker in (theme.measured, theme.fitted):  # a rim parts a marker from what is behind it
        assert contrast(marker, theme.outline) > 1.1
