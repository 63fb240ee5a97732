"""Surfaces against solid geometry: closed, outward, and as large as the formulas say."""

from __future__ import annotations

import numpy as np
import pytest

from condyle.viz.shapes import Ball, Chain, Limb, Plate, Surface, skin, smooth_minimum


def volume(surface: Surface) -> float:
    """By the divergence theorem: positive only where triangles are wound outwards."""
    a, b, c = (surface.points[surface.faces[:, k]] for k in range(3))
    return float(np.einsum("ij,ij->i", a, np.cross(b, c)).sum() / 6.0)


def open_edges(surface: Surface) -> int:
    edges = np.sort(np.concatenate([surface.faces[:, [i, (i + 1) % 3]] for i in range(3)]), axis=1)
    _, counts = np.unique(edges, axis=0, return_counts=True)
    return int((counts != 2).sum())


def test_a_ball_has_the_volume_of_an_ellipsoid() -> None:
    radii = np.array([0.05, 0.04, 0.06])
    surface = skin([Ball(np.array([0.1, -0.2, 0.3]), radii)], blend=0.01)
    assert volume(surface) == pytest.approx(4.0 / 3.0 * np.pi * np.prod(radii), rel=0.02)


def test_a_straight_limb_has_the_volume_of_a_capsule() -> None:
    length, radius = 0.3, 0.03
    surface = skin([Limb(np.zeros(3), np.array([0, -length, 0]), radius, radius)], blend=0.01)
    capsule = np.pi * radius**2 * length + 4.0 / 3.0 * np.pi * radius**3
    assert volume(surface) == pytest.approx(capsule, rel=0.03)


@pytest.mark.parametrize(
    "shape",
    [
        Ball(np.zeros(3), np.array([0.02, 0.03, 0.04])),
        Limb(np.zeros(3), np.array([0.1, 0.2, 0.0]), 0.02, 0.01, 0.7, np.array([0, 0, 0.02])),
        Limb(np.zeros(3), np.zeros(3), 0.02, 0.02),
        Chain(np.array([[0, 0, 0], [0.1, 0, 0], [0.1, 0.1, 0.0]]), 0.01),
        Plate(np.array([[[0, 0, 0], [0.1, 0, 0], [0, 0.1, 0.0]]]), 0.008),
    ],
)
def test_every_shape_is_closed_and_its_normals_point_outwards(
    shape: Ball | Limb | Chain | Plate,
) -> None:
    surface = skin([shape], blend=0.01)
    assert open_edges(surface) == 0
    outside = shape.distance(surface.points + 0.004 * surface.normals)
    inside = shape.distance(surface.points - 0.004 * surface.normals)
    assert np.median(outside) > 0.003
    assert np.median(inside) < -0.003


def test_the_distance_to_a_plate_is_the_distance_to_its_nearest_point() -> None:
    plate = Plate(np.array([[[0, 0, 0], [1, 0, 0], [0, 1, 0.0]]]), 0.1)
    points = np.array([[0.25, 0.25, 0.7], [-3.0, -4.0, 0.0], [0.5, -2.0, 0.0], [1.0, 1.0, 0.0]])
    expected = np.array([0.7, 5.0, 2.0, np.sqrt(0.5)]) - 0.1
    np.testing.assert_allclose(plate.distance(points), expected, atol=1e-12)


def test_the_smooth_minimum_is_the_minimum_where_the_distances_differ_enough() -> None:
    rng = np.random.default_rng(3)
    first, second = rng.normal(size=(2, 500))
    blended = smooth_minimum(first, second, 0.2)
    apart = np.abs(first - second) >= 0.2
    np.testing.assert_array_equal(blended[apart], np.minimum(first, second)[apart])
    assert np.all(blended <= np.minimum(first, second))
    assert np.all(blended >= np.minimum(first, second) - 0.05)
