"""Rates from five frames: exact where they say so, and as good as they say elsewhere."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from condyle.solver.posture import quaternions_of
from condyle.solver.time_derivatives import (
    ball_series,
    derivatives,
    formulas,
    segment_velocities,
    whole_windows,
)

RATE = 100.0


def test_the_central_formulas_are_fornbergs() -> None:
    """Fornberg 1988, Math Comput 51:699, table 1: order of accuracy four."""
    first, second = formulas(9, 1.0)
    np.testing.assert_allclose(first[4], np.array([1, -8, 0, 8, -1]) / 12, atol=1e-14)
    np.testing.assert_allclose(second[4], np.array([-1, 16, -30, 16, -1]) / 12, atol=1e-14)


def test_polynomials_of_degree_four_are_exact_up_to_the_ends() -> None:
    time = np.arange(12) / RATE
    polynomial = np.polynomial.Polynomial([0.3, -2.0, 5.0, 40.0, -90.0])
    first, second = derivatives(polynomial(time), RATE)
    np.testing.assert_allclose(first, polynomial.deriv()(time), rtol=1e-9)
    np.testing.assert_allclose(second, polynomial.deriv(2)(time), rtol=1e-7)


def test_six_hertz_is_told_within_a_tenth_of_a_per_cent() -> None:
    w = 2 * np.pi * 6
    time = np.arange(400) / RATE
    first, second = derivatives(np.sin(w * time), RATE)
    inner = slice(2, -2)
    assert np.abs(first - w * np.cos(w * time))[inner].max() < 0.001 * w
    assert np.abs(second + w**2 * np.sin(w * time))[inner].max() < 0.001 * w**2


def test_fewer_than_five_frames_have_no_rate() -> None:
    first, second = derivatives(np.zeros((4, 2)), RATE)
    assert np.isnan(first).all()
    assert np.isnan(second).all()


def test_a_spinning_body_tells_its_spin_in_laboratory_axes() -> None:
    spin = np.array([1.5, -4.0, 2.0])
    time = np.arange(50) / RATE
    start = Rotation.from_euler("xyz", [0.4, -1.0, 2.0])
    # About an axis fixed in the laboratory, while the origin goes round a circle.
    turns = Rotation.from_rotvec(time[:, None] * spin) * start
    poses = np.tile(np.eye(4), (50, 1, 1, 1))
    poses[:, 0, :3, :3] = turns.as_matrix()
    poses[:, 0, :3, 3] = np.column_stack([np.cos(3 * time), np.sin(3 * time), 0 * time])
    linear, angular = segment_velocities(poses, RATE)
    np.testing.assert_allclose(angular[:, 0], np.tile(spin, (50, 1)), atol=1e-9)
    expected = 3 * np.column_stack([-np.sin(3 * time), np.cos(3 * time), 0 * time])
    np.testing.assert_allclose(linear[:, 0], expected, atol=1e-5)


def test_a_balls_series_has_the_turns_as_its_steps() -> None:
    rng = np.random.default_rng(0)
    steps = rng.normal(0, 0.3, (20, 3))
    turn = Rotation.identity()
    path = [turn]
    for step in steps:
        turn = turn * Rotation.from_rotvec(step)
        path.append(turn)
    series = ball_series(np.stack([quaternions_of(r) for r in path]))
    np.testing.assert_allclose(np.diff(series, axis=0), steps, atol=1e-12)
    assert series[0] == pytest.approx([0, 0, 0])


def test_the_one_sided_formulas_are_fornbergs() -> None:
    """Fornberg 1988, table 3: five points, at the edge; rational weights, so exact."""
    first, second = formulas(5, 1.0)
    np.testing.assert_allclose(first[0], np.array([-25, 48, -36, 16, -3]) / 12, atol=1e-12)
    np.testing.assert_allclose(second[0], np.array([35, -104, 114, -56, 11]) / 12, atol=1e-12)
    np.testing.assert_allclose(first[4], -first[0][::-1], atol=1e-12)
    np.testing.assert_allclose(second[4], second[0][::-1], atol=1e-12)


def test_at_the_ends_the_formulas_are_as_bad_as_they_say() -> None:
    """Taylor: h^4 f^(5) / 5 of the first derivative, 5 h^3 f^(5) / 6 of the second."""
    w, time = 2 * np.pi * 2, np.arange(400) / RATE
    worst = [0.0, 0.0]
    for phase in np.linspace(0, np.pi, 16):
        first, second = derivatives(np.sin(w * time + phase), RATE)
        for i, (told, true, size) in enumerate(
            (
                (first, w * np.cos(w * time + phase), w),
                (second, -(w**2) * np.sin(w * time + phase), w**2),
            )
        ):
            worst[i] = max(worst[i], float(np.abs(told - true)[[0, -1]].max() / size))
    h = w / RATE
    assert worst[0] == pytest.approx(h**4 / 5, rel=0.25)
    assert worst[1] == pytest.approx(5 * h**3 / 6, rel=0.25)


def test_a_window_is_whole_where_all_five_of_its_frames_are() -> None:
    told = np.ones((12, 2), dtype=bool)
    told[6, 0] = False
    whole = whole_windows(told)
    np.testing.assert_array_equal(np.flatnonzero(~whole[:, 0]), [4, 5, 6, 7, 8])
    assert whole[:, 1].all()
    told[:, 1] = np.arange(12) != 0
    np.testing.assert_array_equal(np.flatnonzero(~whole_windows(told)[:, 1]), [0, 1, 2])
    assert not whole_windows(np.ones((4, 1), dtype=bool)).any()


def test_an_even_spin_is_told_to_the_ends() -> None:
    spin = np.array([0.0, 12.0, 5.0])
    time = np.arange(20) / RATE
    poses = np.tile(np.eye(4), (20, 1, 1, 1))
    poses[:, 0, :3, :3] = Rotation.from_rotvec(time[:, None] * spin).as_matrix()
    _, angular = segment_velocities(poses, RATE)
    np.testing.assert_allclose(angular[[0, 1, -2, -1], 0], np.tile(spin, (4, 1)), atol=1e-9)
