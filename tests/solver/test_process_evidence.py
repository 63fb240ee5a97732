"""Noise and movement read from a series: the likelihood against a dense one, and known truth."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray

from condyle.solver import process_evidence
from condyle.solver.backends import Backend, backend
from condyle.solver.process_evidence import (
    LONGEST_HOLE,
    _log_determinant,
    _SeriesTogether,
    pieces,
    smoothed,
    smoothed_at,
    weigh,
)

FloatArray = NDArray[np.float64]
NOISE = 0.005


class _Series:
    """One series by itself."""

    def __init__(
        self, y: FloatArray, variance: FloatArray, seen: NDArray[np.bool_], order: int
    ) -> None:
        self.together = _SeriesTogether(y[:, None], variance[:, None], seen[:, None], order)

    def at(self, log_ratio: float) -> tuple[float, float]:
        rss, determinant = self.together.at(np.array([log_ratio]))
        return float(rss[0]), float(determinant[0])

    def best(self, least_kappa: float) -> tuple[float, float, float, bool]:
        ratio, kappa, likelihood, moving = (x[0] for x in self.together.best(least_kappa))
        return float(ratio), float(kappa), float(likelihood), bool(moving)


def simulated(order: int, cutoff: float, frames: int, seed: int) -> FloatArray:
    """A process whose spectrum equals the noise's at `cutoff` (Hz at 100 frames a second), and noise."""
    rng = np.random.default_rng(seed)
    step = (2 * np.sin(np.pi * cutoff / 100)) ** order
    q = rng.normal(0, step, frames)
    for _ in range(order):
        q = np.cumsum(q)
    x = np.linspace(-1, 1, frames)
    q = q - np.polynomial.polynomial.polyval(x, np.polynomial.polynomial.polyfit(x, q, order - 1))
    return np.asarray(NOISE * (q + rng.normal(0, 1, frames)))


@pytest.mark.parametrize("order", [3, 4])
def test_the_determinant_of_the_differences_is_that_of_dense_algebra(order: int) -> None:
    D = np.diff(np.eye(40), order, axis=0)
    assert _log_determinant(order, 40) == pytest.approx(np.linalg.slogdet(D @ D.T)[1], rel=1e-9)


def test_the_likelihood_differs_from_a_dense_normal_one_by_a_constant() -> None:
    """Marginal over a process with a wide normal prior on its polynomials, by numpy alone."""
    order, frames = 3, 30
    rng = np.random.default_rng(1)
    y = simulated(order, 6.0, frames, 3)
    variance = NOISE**2 * rng.uniform(0.5, 2.0, frames)
    seen = np.ones(frames, dtype=bool)
    seen[[4, 5, 17]] = False
    series = _Series(y, variance, seen, order)
    D = np.diff(np.eye(frames), order, axis=0)
    x = np.linspace(-1, 1, frames)
    basis = np.linalg.qr(np.vander(x, order, increasing=True))[0]
    differences = []
    for log_ratio in (0.0, 3.0, 6.0):
        rss, determinant = series.at(log_ratio)
        noise = rss / (seen.sum() - order)
        ours = -0.5 * ((seen.sum() - order) * (np.log(noise) + 1) + determinant)
        scale = float(np.median(1 / variance[seen]))
        # kappa^2 C for the noise, kappa^2 (r D'D)^+ for the process, and next to anything for the rest.
        kappa2 = noise * scale
        process = kappa2 * np.linalg.pinv(np.exp(log_ratio) * scale * D.T @ D)
        cov = process + 1e8 * basis @ basis.T + np.diag(kappa2 * variance)
        kept = cov[np.ix_(seen, seen)]
        z = (y - np.median(y[seen]))[seen]
        dense = -0.5 * (np.linalg.slogdet(kept)[1] + z @ np.linalg.solve(kept, z))
        differences.append(ours - dense)
    np.testing.assert_allclose(np.diff(differences), 0, atol=2e-3)


@pytest.mark.parametrize(("order", "cutoff"), [(3, 5.0), (4, 5.0), (3, 9.0)])
def test_noise_and_process_are_recovered(order: int, cutoff: float) -> None:
    kappas, ratios = [], []
    for seed in range(12):
        y = simulated(order, cutoff, 600, seed)
        variance = np.full(
            600, (2 * NOISE) ** 2
        )  # as if the markers' whole sd were twice the noise
        series = _Series(y, variance, np.ones(600, dtype=bool), order)
        ratio, kappa, _, moving = series.best(0.01)
        assert moving
        kappas.append(kappa)
        ratios.append(np.log(ratio * variance[0]))
    true = -2 * order * np.log(2 * np.sin(np.pi * cutoff / 100)) + np.log(
        (2 * NOISE) ** 2 / NOISE**2 / 4
    )
    assert np.mean(kappas) == pytest.approx(0.5, rel=0.05)
    # In the frequency where they are equal, a factor of e in r is a factor of e^(1/2p).
    assert np.mean(ratios) == pytest.approx(true, abs=0.5)


def test_a_still_series_is_smoothed_hard_and_said_not_to_move() -> None:
    y = np.random.default_rng(1).normal(0, NOISE, 500)
    ratio, kappa, _, moving = _Series(y, np.full(500, NOISE**2), np.full(500, True), 4).best(0.01)
    assert not moving
    assert kappa == pytest.approx(1.0, rel=0.15)
    assert np.std(smoothed(y[:, None], np.full(500, 1 / NOISE**2), ratio, 4)) < 0.25 * NOISE


def test_a_series_without_noise_falls_back_on_the_floor_and_is_not_flattened() -> None:
    time = np.arange(500) / 100
    y = 0.5 * np.sin(2 * np.pi * 1.3 * time)
    found = weigh(y[:, None], np.full((500, 1), 0.01**2), np.full((500, 1), True), least_kappa=0.02)
    assert found.kappa[0] == pytest.approx(0.02)
    x = smoothed(y[:, None], np.full(500, 1 / 0.01**2), found.ratio[0], found.order)
    assert np.abs(x[:, 0] - y).max() < 1e-4


def test_an_order_of_three_is_taken_where_it_explains_far_better() -> None:
    rough = np.stack([simulated(3, 14.0, 800, seed) for seed in range(4)], axis=1)
    fine = np.stack([simulated(4, 5.0, 800, seed) for seed in range(4)], axis=1)
    variance, seen = np.full(rough.shape, NOISE**2), np.full(rough.shape, True)
    assert weigh(rough, variance, seen, least_kappa=0.01).order == 3
    assert weigh(fine, variance, seen, least_kappa=0.01).order == 4


def test_too_few_frames_are_not_smoothed() -> None:
    y = np.random.default_rng(0).normal(0, 1, (50, 1))
    seen = np.arange(50)[:, None] < 10
    assert weigh(y, np.ones((50, 1)), seen, least_kappa=0.01).ratio[0] == 0.0


@pytest.mark.parametrize("order", [3, 4])
@pytest.mark.parametrize("hole", [40, 200, 450, 900, 3000])
def test_a_hole_of_any_length_leaves_noise_and_process_as_they_are(order: int, hole: int) -> None:
    """A time out of sight: over some hundred frames, r D'D + W has no factor in double precision."""
    kappas, ratios = [], []
    for seed in range(6):
        y = simulated(order, 5.0, 600 + hole, seed)
        seen = np.ones(len(y), dtype=bool)
        seen[300 : 300 + hole] = False
        series = _Series(y, np.full(len(y), (2 * NOISE) ** 2), seen, order)
        ratio, kappa, likelihood, _ = series.best(0.01)
        assert np.isfinite(likelihood)
        kappas.append(kappa)
        ratios.append(np.log(ratio * (2 * NOISE) ** 2))
    assert np.mean(kappas) == pytest.approx(0.5, rel=0.05)
    true = -2 * order * np.log(2 * np.sin(np.pi * 0.05))
    assert np.mean(ratios) == pytest.approx(true, abs=0.6)


def test_a_long_hole_does_not_change_the_order() -> None:
    fine = np.stack([simulated(4, 5.0, 1600, seed) for seed in range(3)], axis=1)
    seen = np.full(fine.shape, True)
    seen[400:1200, 1] = False
    found = weigh(fine, np.full(fine.shape, NOISE**2), seen, least_kappa=0.01)
    assert found.order == 4
    np.testing.assert_allclose(found.kappa, 1, rtol=0.15)


def test_series_are_cut_at_long_holes_only() -> None:
    seen = np.zeros(1000, dtype=bool)
    seen[10:60] = True
    seen[60 + LONGEST_HOLE - 1 : 300] = True  # near enough
    seen[300 + LONGEST_HOLE + 1 : 500] = True  # too far
    seen[900:910] = True  # too few
    assert pieces(seen) == [slice(10, 300), slice(300 + LONGEST_HOLE + 1, 500)]
    assert pieces(np.zeros(50, dtype=bool)) == []


def test_the_likelihood_of_two_pieces_is_that_of_each() -> None:
    y, variance = simulated(4, 5.0, 1200, 1), np.full(1200, NOISE**2)
    seen = np.ones(1200, dtype=bool)
    seen[400:800] = False
    first, last = (y[part] for part in (slice(0, 400), slice(800, 1200)))
    both = _Series(y, variance, seen, 4).at(3.0)
    alone = [_Series(z, variance[:400], seen[:400], 4).at(3.0) for z in (first, last)]
    np.testing.assert_allclose(both, np.sum(alone, axis=0), rtol=1e-6)


def test_smoothing_goes_straight_across_a_long_hole_and_level_beyond_the_ends() -> None:
    y = simulated(4, 5.0, 1000, 2)
    precision = np.full(1000, NOISE**-2)
    precision[:50] = precision[300:700] = 0.0
    x = smoothed(y[:, None], precision, 1e4 / NOISE**2, 4)[:, 0]
    np.testing.assert_allclose(np.diff(x[299:701], 2), 0, atol=1e-12)
    assert (x[:50] == x[50]).all()
    D = np.diff(np.eye(250), 4, axis=0)
    A = NOISE**-2 * (np.eye(250) + 1e4 * D.T @ D)
    np.testing.assert_allclose(x[50:300], np.linalg.solve(A, y[50:300] / NOISE**2), rtol=1e-6)


def test_a_constant_series_stands_still_at_the_floor() -> None:
    found = weigh(
        np.full((300, 1), 0.4), np.full((300, 1), 1e-4), np.full((300, 1), True), least_kappa=0.02
    )
    assert not found.moving[0]
    assert found.kappa[0] == pytest.approx(0.02)
    assert np.isfinite(found.ratio[0])
    x = smoothed(np.full((300, 1), 0.4), np.full(300, 1e4), found.ratio[0], found.order)
    np.testing.assert_allclose(x, 0.4, atol=1e-5)  # a thousandth of the sd


def test_scattered_gaps_are_no_loss() -> None:
    y = simulated(4, 5.0, 800, 5)
    seen = np.random.default_rng(2).random(800) > 0.3
    spoilt = np.where(seen, y, 1e3)  # what stands in a gap is nobody's concern
    variance = np.full((800, 1), NOISE**2)
    found = weigh(spoilt[:, None], variance, seen[:, None], least_kappa=0.01)
    assert found.kappa[0] == pytest.approx(1.0, rel=0.15)
    assert found.moving[0]


@pytest.mark.parametrize("order", [3, 4])
def test_the_compiled_kernel_and_lapack_weigh_a_series_alike(
    order: int, monkeypatch: pytest.MonkeyPatch
) -> None:
    if backend().library is None:
        pytest.skip("there is no compiler here")
    rng = np.random.default_rng(2)
    y = np.column_stack([simulated(order, 5.0, 400, seed) for seed in range(11)])
    precision = np.where(rng.random(y.shape) < 0.1, 0.0, 1.0)
    squares = process_evidence._squares_band(order, 400)
    ratios = 10.0 ** np.linspace(-2, 7, 11)
    compiled = smoothed_at(y, precision, squares, order, ratios)
    spoilt = smoothed_at(y, -precision, squares, order, ratios)
    monkeypatch.setattr(process_evidence, "backend", lambda: Backend("replay"))
    for one, other in zip(compiled, smoothed_at(y, precision, squares, order, ratios), strict=True):
        np.testing.assert_allclose(one, other, rtol=1e-6)
    np.testing.assert_array_equal(smoothed_at(y, -precision, squares, order, ratios), spoilt)
    assert np.isinf(spoilt[0][:5]).all()
