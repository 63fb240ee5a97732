"""The process between frames: its differences, their derivatives, and what mean reversion amounts to."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.integrate import quad
from scipy.linalg import solveh_banded
from scipy.spatial.transform import Rotation

from condyle.solver.block_banded import system_band
from condyle.solver.posture import Posture, quaternions_of
from condyle.solver.process_prior import ProcessPrior, difference_weights, mean_reversion

FloatArray = NDArray[np.float64]
FRAMES, SCALARS, BALLS = 9, 3, 2


def wild(rng: np.random.Generator) -> Posture:
    """Orientations that differ by half a radian from frame to frame: nothing here is small."""
    turns = Rotation.from_rotvec(rng.normal(0, 0.5, (FRAMES * BALLS, 3)))
    balls = quaternions_of(turns).reshape(FRAMES, BALLS, 4)
    return Posture(rng.normal(0, 1, (FRAMES, SCALARS)), balls)


def prior(order: int, rng: np.random.Generator) -> ProcessPrior:
    size = SCALARS + 3 * BALLS
    linked = rng.random((FRAMES - order, size)) > 0.2
    return ProcessPrior(order, rng.uniform(0.5, 2.0, size), linked)


def moved(posture: Posture, step: FloatArray) -> Posture:
    return posture.after(step.reshape(FRAMES, -1))


@pytest.mark.parametrize("order", [3, 4])
def test_its_force_is_minus_the_gradient_of_its_cost(order: int) -> None:
    rng = np.random.default_rng(order)
    posture, process = wild(rng), prior(order, rng)
    force = process.force(*process.residuals(posture)).ravel()
    h = 1e-6
    for k in range(len(force)):
        step = np.zeros_like(force)
        step[k] = h
        up, down = (process.cost(moved(posture, s * step)).sum() for s in (1, -1))
        assert -(up - down) / (2 * h) == pytest.approx(force[k], rel=1e-6, abs=1e-6)


@pytest.mark.parametrize("order", [3, 4])
def test_its_band_is_that_of_its_jacobian(order: int) -> None:
    rng = np.random.default_rng(10 + order)
    posture, process = wild(rng), prior(order, rng)
    size = len(process.ratio)
    h = 1e-6
    columns = []
    for k in range(FRAMES * size):
        step = np.zeros(FRAMES * size)
        step[k] = h
        up, down = (process.residuals(moved(posture, s * step))[0] for s in (1, -1))
        columns.append(((up - down) / (2 * h)).ravel())
    J = np.stack(columns, axis=1)
    expected = J.T @ (process.weights().ravel()[:, None] * J)
    _, turns = process.residuals(posture)
    band = system_band(np.zeros((FRAMES, size, size)), process, turns)
    dense = np.zeros_like(expected)
    for below in range(len(band)):
        length = FRAMES * size - below
        dense[np.arange(length) + below, np.arange(length)] = band[below, :length]
    np.testing.assert_allclose(dense, np.tril(expected), atol=2e-7)


@pytest.mark.parametrize("order", [3, 4])
def test_polynomials_below_its_order_and_even_turns_cost_nothing(order: int) -> None:
    time = np.arange(FRAMES) * 0.1
    scalars = np.stack([time**k for k in range(order)][:SCALARS], axis=1)
    spin = Rotation.from_rotvec(time[:, None] * [0.9, -2.0, 1.1])
    posture = Posture(scalars, np.stack([quaternions_of(spin)] * BALLS, axis=1))
    size = scalars.shape[1] + 3 * BALLS
    process = ProcessPrior(order, np.ones(size), np.ones((FRAMES - order, size), dtype=bool))
    assert process.cost(posture).max() < 1e-24


@pytest.mark.parametrize("order", [3, 4])
def test_a_mean_reverting_process_has_the_stationary_sd_that_was_asked(order: int) -> None:
    """The spectrum's integral by scipy: variance = int dw / 2pi / (s (|1 - e^iw|^2p + L))."""
    sd, density = np.array([0.7]), np.array([3e5])
    (pull,) = mean_reversion(sd, density, order)

    def spectrum(w: float) -> float:
        return float(1 / (density[0] * ((2 * np.sin(w / 2)) ** (2 * order) + pull)))

    corner = pull ** (1 / (2 * order))
    variance = 2 * (quad(spectrum, 0, 5 * corner)[0] + quad(spectrum, 5 * corner, np.pi)[0])
    assert np.sqrt(variance / (2 * np.pi)) == pytest.approx(0.7, rel=0.01)


def test_difference_weights_are_binomial() -> None:
    np.testing.assert_array_equal(difference_weights(3), [-1, 3, -3, 1])
    np.testing.assert_array_equal(difference_weights(4), [1, -4, 6, -4, 1])


@pytest.mark.parametrize(("order", "density"), [(3, 2e4), (4, 3e5)])
def test_a_long_mean_reverting_series_has_that_sd_in_its_middle(order: int, density: float) -> None:
    """The inverse of the banded precision s (D'D + L) of a long series, by scipy."""
    sd, frames = 0.7, 900
    (pull,) = mean_reversion(np.array([sd]), np.array([density]), order)
    D = np.diff(np.eye(frames), order, axis=0)
    precision = density * (D.T @ D + pull * np.eye(frames))
    band = np.zeros((order + 1, frames))
    for below in range(order + 1):
        band[below, : frames - below] = np.diagonal(precision, -below)
    unit = np.zeros(frames)
    unit[frames // 2] = 1.0
    variance = solveh_banded(band, unit, lower=True)[frames // 2]
    assert np.sqrt(variance) == pytest.approx(sd, rel=0.02)


@pytest.mark.parametrize("order", [3, 4])
def test_what_is_not_linked_costs_nothing_and_pushes_nothing(order: int) -> None:
    rng = np.random.default_rng(7)
    size = SCALARS + 3 * BALLS
    none = ProcessPrior(order, np.ones(size), np.zeros((FRAMES - order, size), dtype=bool))
    posture = wild(rng)
    assert (none.cost(posture) == 0).all()
    assert (none.force(*none.residuals(posture)) == 0).all()
