"""The variance of a triangulated point from its residual and its number of cameras."""

from __future__ import annotations

import numpy as np
import pytest

from condyle.recording.precision import measurement_variance


def triangulated(
    cameras: int, sd: float, rng: np.random.Generator
) -> tuple[np.ndarray, np.ndarray]:
    """Errors (points, 3) and mean ray distances (points,) of points seen from random directions.

    Linear least squares on the camera rays' two lateral coordinates: the textbook problem, solved by
    numpy alone.
    """
    points = 4000
    direction = rng.standard_normal((points, cameras, 3))
    direction /= np.linalg.norm(direction, axis=2, keepdims=True)
    across = np.eye(3) - direction[..., :, None] * direction[..., None, :]
    noise = np.einsum("pcij,pcj->pci", across, rng.normal(0, sd, (points, cameras, 3)))
    found = np.linalg.solve(across.sum(axis=1), noise.sum(axis=1)[..., None])[..., 0]
    away = np.einsum("pcij,pcj->pci", across, found[:, None]) - noise
    return found, np.sqrt((away**2).sum(axis=2).mean(axis=1))


@pytest.mark.parametrize("cameras", [4, 6, 10])
def test_variance_is_that_of_points_triangulated_from_all_around(cameras: int) -> None:
    error, residual = triangulated(cameras, 0.001, np.random.default_rng(cameras))
    told = measurement_variance(residual, np.full(len(residual), cameras)).mean()
    # Directions drawn at random are never as even as the formula has it, which only makes points worse.
    assert 1.0 < (error**2).mean() / told < 1.3
    assert (residual**2).mean() == pytest.approx((2 - 3 / cameras) * 0.001**2, rel=0.02)


def test_more_cameras_are_more_precise_and_nothing_known_adds_nothing() -> None:
    few, many, unknown = measurement_variance(np.array([0.002, 0.002, np.nan]), np.array([2, 8, 8]))
    assert few == pytest.approx(3 * 0.002**2 / 2)
    assert many == pytest.approx(3 * 0.002**2 / 26)
    assert unknown == 0.0
