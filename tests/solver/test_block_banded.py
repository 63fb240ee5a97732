"""The banded system of a trial against dense matrices."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray

from condyle.solver.block_banded import (
    FRAMES_A_BLOCK,
    band_of_frames,
    factored,
    selected_inverse,
    times,
    without,
)

FloatArray = NDArray[np.float64]


def made(frames: int, n: int, reach: int, seed: int) -> tuple[FloatArray, FloatArray]:
    """A random symmetric positive definite banded matrix, dense and as a band."""
    rng = np.random.default_rng(seed)
    size = frames * n
    root = np.tril(rng.normal(0, 1, (size, size)))
    root[np.subtract.outer(np.arange(size), np.arange(size)) > reach] = 0.0
    dense = root @ root.T + np.eye(size)
    band = np.zeros((reach + 1, size), order="F")
    for below in range(reach + 1):
        band[below, : size - below] = np.diagonal(dense, -below)
    return dense, band


@pytest.mark.parametrize(("frames", "n", "reach"), [(9, 3, 8), (12, 5, 17), (4, 4, 10), (13, 2, 8)])
def test_solving_and_multiplying_agree_with_dense_algebra(frames: int, n: int, reach: int) -> None:
    dense, band = made(frames, n, reach, seed=frames)
    x = np.random.default_rng(1).normal(0, 1, frames * n)
    np.testing.assert_allclose(times(band, x), dense @ x, rtol=1e-12, atol=1e-12)
    factor = factored(band)
    assert factor is not None
    np.testing.assert_allclose(factor.solve(dense @ x), x, rtol=1e-9, atol=1e-9)


@pytest.mark.parametrize(("frames", "n", "reach"), [(9, 3, 8), (12, 5, 17), (4, 4, 10), (13, 2, 8)])
def test_joint_covariances_are_blocks_of_the_inverse(frames: int, n: int, reach: int) -> None:
    dense, band = made(frames, n, reach, seed=frames + 100)
    factor = factored(band)
    assert factor is not None
    inverse, seen = np.linalg.inv(dense), set()
    for first, joint in selected_inverse(factor, n):
        here = slice(first * n, first * n + len(joint))
        np.testing.assert_allclose(joint, inverse[here, here], rtol=1e-9, atol=1e-12)
        assert len(joint) == n * min(2 * FRAMES_A_BLOCK, frames - first)
        seen.update(range(first, min(first + FRAMES_A_BLOCK, frames)))
    assert seen == set(range(frames))


def test_fixed_unknowns_leave_the_system() -> None:
    dense, band = made(6, 3, 7, seed=5)
    fixed = np.random.default_rng(2).random(18) < 0.3
    factor = factored(without(band, fixed))
    assert factor is not None
    rhs = np.random.default_rng(3).normal(0, 1, 18)
    found = factor.solve(np.where(fixed, 7.0, rhs))
    free = ~fixed
    expected = np.linalg.solve(dense[np.ix_(free, free)], rhs[free])
    np.testing.assert_allclose(found[free], expected, rtol=1e-9)
    np.testing.assert_array_equal(found[fixed], 7.0)


def test_a_matrix_that_is_not_positive_definite_has_no_factor() -> None:
    _, band = made(5, 2, 4, seed=9)
    band[0] -= 2 * band[0].max()
    assert factored(band) is None


def test_blocks_of_frames_stand_on_the_diagonal() -> None:
    rng = np.random.default_rng(4)
    H = rng.normal(0, 1, (3, 4, 4))
    H = H + np.swapaxes(H, 1, 2)
    x = rng.normal(0, 1, 12)
    expected = np.einsum("nij,nj->ni", H, x.reshape(3, 4)).ravel()
    np.testing.assert_allclose(times(band_of_frames(H, 9), x), expected, atol=1e-12)


@pytest.mark.parametrize("frames", [1, FRAMES_A_BLOCK - 1, FRAMES_A_BLOCK, FRAMES_A_BLOCK + 1])
def test_the_inverse_of_few_frames_is_whole(frames: int) -> None:
    n = 3
    dense, band = made(frames, n, min(7, frames * n - 1), seed=frames)
    factor = factored(band)
    assert factor is not None
    inverse = np.linalg.inv(dense)
    for first, joint in selected_inverse(factor, n):
        here = slice(first * n, first * n + len(joint))
        np.testing.assert_allclose(joint, inverse[here, here], rtol=1e-9, atol=1e-12)


def test_room_that_was_used_before_is_written_over() -> None:
    dense, band = made(7, 3, 8, seed=21)
    fixed = np.random.default_rng(5).random(21) < 0.4
    fresh = without(band, fixed)
    expected = np.where(fixed[:, None] | fixed, np.eye(21), dense)
    x = np.random.default_rng(6).normal(0, 1, 21)
    np.testing.assert_allclose(times(fresh, x), expected @ x, rtol=1e-12, atol=1e-12)
    dirty = np.full(band.shape, 7.0, order="F")
    np.testing.assert_array_equal(without(band, fixed, dirty), fresh)
    kept = band.copy(order="F")
    np.testing.assert_array_equal(without(kept, fixed, kept), fresh)  # where it stood


def test_a_factor_in_place_is_the_same_factor_and_stands_there() -> None:
    _, band = made(8, 3, 8, seed=22)
    apart = factored(band)
    untouched = band.copy(order="F")
    within = factored(untouched, in_place=True)
    assert apart is not None
    assert within is not None
    np.testing.assert_array_equal(within.band, apart.band)
    assert np.shares_memory(within.band, untouched)
    assert not np.shares_memory(apart.band, band)
