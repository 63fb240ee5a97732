"""Rigid alignment against scipy and the worked example of Umeyama 1991."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.spatial.transform import Rotation

from condyle.solver.rigid_alignment import align


# Same problem as scipy.spatial.transform.Rotation.align_vectors about the weighted centroids.
@settings(max_examples=60, deadline=None)
@given(seed=st.integers(0, 2**32 - 1), points=st.integers(3, 12), noise=st.floats(0, 0.3))
def test_rotation_is_that_of_scipys_align_vectors(seed: int, points: int, noise: float) -> None:
    rng = np.random.default_rng(seed)
    reference = rng.normal(size=(points, 3))
    truth = Rotation.random(5, rng=rng)
    shift = rng.normal(size=(5, 1, 3))
    measured = np.array([r.apply(reference) for r in truth]) + shift
    measured += noise * rng.normal(size=measured.shape)
    weights = rng.uniform(0.5, 2, (5, points))
    found = align(reference, measured, weights)
    for n in range(5):
        of = np.average(reference, axis=0, weights=weights[n])
        to = np.average(measured[n], axis=0, weights=weights[n])
        expected, distance = Rotation.align_vectors(
            measured[n] - to, reference - of, weights=weights[n]
        )
        matrix = expected.as_matrix()
        back = found.rotation[n] @ (reference - of).T
        least = np.sqrt((weights[n] * ((measured[n] - to - back.T) ** 2).sum(axis=1)).sum())
        # scipy takes the root of a difference: near zero it is good to the root of rounding.
        assert least == pytest.approx(distance, rel=1e-6, abs=1e-6)
        np.testing.assert_allclose(found.translation[n], to - found.rotation[n] @ of, atol=1e-12)
        if noise < 0.05 and points > 3:
            np.testing.assert_allclose(found.rotation[n], matrix, atol=1e-6)


# Umeyama 1991, IEEE Trans Pattern Anal Mach Intell 13:376, the two-dimensional example that needs
# the reflection guard: X = (0,0), (1,0), (0,2); Y = (0,0), (-1,0), (0,2). (Example from memory;
# the numbers follow from it: R, t = (-0.8, 0.4), c = 0.72111, mean-square error 0.5333.)
X = np.array([[0.0, 0.0], [1.0, 0.0], [0.0, 2.0]])
Y = np.array([[0.0, 0.0], [-1.0, 0.0], [0.0, 2.0]])
HEIGHT = 2.0


def raised(points: np.ndarray) -> np.ndarray:
    """Each point twice, above and below the plane: then no turn out of the plane can help."""
    lifts = np.repeat([HEIGHT, -HEIGHT], len(points))[:, None]
    return np.hstack([np.tile(points, (2, 1)), lifts])


def test_the_example_of_umeyama_comes_out_as_published() -> None:
    found = align(raised(X), raised(Y)[None], np.ones((1, 6)))
    expected = [[0.83205, 0.55470, 0], [-0.55470, 0.83205, 0], [0, 0, 1]]
    np.testing.assert_allclose(found.rotation[0], expected, atol=5e-6)
    # In the plane: trace and variances without the share of the two heights.
    variance = X.var(axis=0).sum()
    trace = found.scale[0] * (variance + HEIGHT**2) - HEIGHT**2
    scale = trace / variance
    assert scale == pytest.approx(0.72111, abs=5e-6)
    assert Y.var(axis=0).sum() - scale**2 * variance == pytest.approx(0.5333, abs=5e-5)
    rotation = found.rotation[0][:2, :2]
    np.testing.assert_allclose(
        Y.mean(axis=0) - scale * rotation @ X.mean(axis=0), [-0.8, 0.4], atol=1e-6
    )
    assert found.mirrored[0]


def test_a_mirror_image_is_told_and_still_gets_a_rotation() -> None:
    rng = np.random.default_rng(1)
    reference = rng.normal(size=(8, 3))
    found = align(reference, (reference * [1, 1, -1])[None], np.ones((1, 8)))
    assert found.mirrored[0]
    assert np.linalg.det(found.rotation[0]) == pytest.approx(1.0)
    assert not align(reference, reference[None], np.ones((1, 8))).mirrored[0]


def test_a_missing_marker_counts_for_nothing_whatever_stands_in_its_place() -> None:
    rng = np.random.default_rng(2)
    reference = rng.normal(size=(6, 3))
    measured = Rotation.random(rng=rng).apply(reference) + rng.normal(size=(1, 6, 3))
    weights = np.array([[1.0, 1, 0, 1, 1, 1]])
    with_nan = measured.copy()
    with_nan[0, 2] = np.nan
    keep = weights[0] > 0
    expected = align(reference[keep], measured[:, keep], weights[:, keep])
    found = align(reference, with_nan, weights)
    np.testing.assert_allclose(found.rotation, expected.rotation, atol=1e-12)
    np.testing.assert_allclose(found.translation, expected.translation, atol=1e-12)
    np.testing.assert_allclose(found.scale, expected.scale, rtol=1e-12)


def test_the_best_scale_and_what_it_leaves() -> None:
    rng = np.random.default_rng(3)
    reference = rng.normal(size=(7, 3))
    turned = Rotation.random(rng=rng).apply(reference)
    exact = align(reference, 1.7 * turned[None] + 3, np.ones((1, 7)))
    assert exact.scale[0] == pytest.approx(1.7)
    # The misfit is that of the best similarity, as scale and rotation together leave it.
    noisy = 1.7 * turned + 0.2 * rng.normal(size=(7, 3))
    found = align(reference, noisy[None], np.ones((1, 7)))
    of, to = reference.mean(axis=0), noisy.mean(axis=0)
    left = noisy - to - found.scale[0] * (reference - of) @ found.rotation[0].T
    assert found.misfit[0] == pytest.approx(np.sqrt((left**2).sum(axis=1).mean()))


# Soederkvist & Wedin 1993: three markers that are not on one line, or the turn about it is free.
@pytest.mark.parametrize(("off_line", "collinear"), [(0.0, True), (1e-5, True), (0.05, False)])
def test_markers_on_one_line_show_in_the_spread(off_line: float, *, collinear: bool) -> None:
    reference = np.array([[0.0, 0, 0], [0.1, off_line, 0], [0.2, 0, 0], [0.3, 0, 0]])
    rotation = Rotation.random(rng=np.random.default_rng(5))
    found = align(reference, rotation.apply(reference)[None], np.ones((1, 4)))
    assert (found.spread[0] < 1e-3) == collinear


def test_a_frame_without_weight_is_the_identity_at_the_origin() -> None:
    found = align(np.eye(3), np.full((1, 3, 3), np.nan), np.zeros((1, 3)))
    np.testing.assert_allclose(found.rotation[0], np.eye(3), atol=1e-12)
    np.testing.assert_allclose(found.translation[0], 0, atol=1e-12)


# Covariance to first order (any textbook of least squares): sigma^2 [sum |r|^2 I - r r']^-1, r from
# the centroid. A square of 100 mm, four markers, 1 mm: 0.573, 0.573, 0.405 degrees. With 4000
# draws an sd is known to 1.1 %.
def test_orientation_noise_of_a_square_cluster_is_the_closed_form() -> None:
    rng = np.random.default_rng(6)
    square = 0.05 * np.array([[1.0, 1, 0], [1, -1, 0], [-1, -1, 0], [-1, 1, 0]])
    measured = square + 0.001 * rng.normal(size=(4000, 4, 3))
    turns = Rotation.from_matrix(align(square, measured, np.ones((4000, 4))).rotation)
    sd = np.degrees(turns.as_rotvec().std(axis=0))
    np.testing.assert_allclose(sd, [0.573, 0.573, 0.405], rtol=0.04)
