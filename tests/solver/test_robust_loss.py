"""Losses against their definitions, and what wrong markers do to a fit with and without them."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.optimize import least_squares

from condyle.model.growth import sized_numbers
from condyle.solver.frame_fit import fit_frames
from condyle.solver.frame_problem import FrameProblem, SkeletonFunctions
from condyle.solver.posture import Posture
from condyle.solver.robust_loss import LOSSES, GemanMcClure, Huber, Loss

FloatArray = NDArray[np.float64]
ROBUST = [loss for loss in LOSSES.values() if loss is not None]


@pytest.mark.parametrize("loss", ROBUST, ids=lambda loss: type(loss).__name__)
def test_a_weight_is_the_losss_derivative(loss: Loss) -> None:
    squared = np.array([0.1, 2.0, 6.0, 30.0, 900.0])
    h = 1e-6 * squared
    rate = (loss.value(squared + h) - loss.value(squared - h)) / (2 * h)
    np.testing.assert_allclose(loss.weight(squared), rate, rtol=1e-6)
    assert loss.weight(np.zeros(1))[0] == pytest.approx(1.0)


def test_huber_is_scipys() -> None:
    """scipy.optimize.least_squares, loss='huber': rho(z) = z, then 2 sqrt(z) - 1, f_scale the bend."""
    found = least_squares(
        lambda x: x[0] - np.array([0.0, 0.1, -0.1, 50.0]), [3.0], loss="huber", f_scale=1.5
    )
    ours = Huber(bend=1.5).value((found.x[0] - np.array([0.0, 0.1, -0.1, 50.0])) ** 2).sum() / 2
    assert ours == pytest.approx(found.cost)


def test_graduation_ends_at_the_loss_itself_and_begins_nearly_convex() -> None:
    stages = GemanMcClure().stages(largest=400.0)
    assert stages[-1] == GemanMcClure()
    mu = [stage.mu for stage in stages if isinstance(stage, GemanMcClure)]
    assert mu == sorted(mu, reverse=True)
    # Convex where e^2 < mu c^2 / 3 (its second derivative's sign): the worst marker nearly lies there.
    assert stages[0].weight(np.array([400.0]))[0] > 0.35


@pytest.fixture(scope="module")
def spoiled(limbs_functions: SkeletonFunctions) -> tuple[FrameProblem, FloatArray]:
    """Walking-like postures, 2 mm of noise, and one marker in twelve 150 mm away."""
    rng = np.random.default_rng(4)
    names = limbs_functions.kinematics.freedoms.scalars
    truth = np.zeros((40, len(names)))
    for k, name in enumerate(names):
        if name.startswith(("hip_flexion", "knee_flexion")):
            truth[:, k] = 0.5 + 0.3 * np.sin(np.arange(40) / 6 + k)
    posture = Posture(truth, np.tile([1.0, 0, 0, 0], (40, 1, 1)))
    numbers = sized_numbers(limbs_functions.skeleton, np.eye(3))
    places = limbs_functions.marker_positions(posture, numbers)
    places = places + rng.normal(0, 0.002, places.shape)
    wrong = rng.random(places.shape[:2]) < 1 / 12
    away = rng.standard_normal((int(wrong.sum()), 3))
    places[wrong] += 0.15 * away / np.linalg.norm(away, axis=1, keepdims=True)
    sd = np.array([m.sd for m in limbs_functions.skeleton.markers])
    weights = np.tile(sd**-2, (40, 1))
    return FrameProblem(limbs_functions, places, weights, numbers), truth


def test_a_robust_fit_is_nearer_to_the_truth_and_can_prove_itself(
    spoiled: tuple[FrameProblem, FloatArray],
) -> None:
    problem, truth = spoiled
    errors = {}
    for name, loss in LOSSES.items():
        fits = fit_frames(problem.with_loss(loss))
        assert fits.solution.converged.all(), name
        assert fits.optimality.max() < 1e-6, name
        seen = ~fits.involved[:, : truth.shape[1]].any(axis=0)
        errors[name] = np.sqrt(np.mean((fits.posture.scalars - truth)[:, seen] ** 2))
    assert errors["huber"] < 0.6 * errors["squares"]
    assert errors["geman_mcclure"] < 0.3 * errors["squares"]


def test_its_gradient_is_that_of_its_cost(spoiled: tuple[FrameProblem, FloatArray]) -> None:
    problem, truth = spoiled
    few = replace(problem.take(np.arange(3)), loss=GemanMcClure())
    posture = Posture(truth[:3] + 0.02, np.tile([1.0, 0, 0, 0], (3, 1, 1)))
    _, g, _ = few(posture, np.arange(3))
    h = 1e-6
    for k in range(g.shape[1]):
        step = np.zeros_like(g)
        step[:, k] = h
        up, down = (few(posture.after(s * step), np.arange(3))[2] for s in (1, -1))
        np.testing.assert_allclose(-(up - down) / (2 * h), g[:, k], rtol=1e-4, atol=1e-2)


def test_without_wrong_markers_the_losses_change_next_to_nothing(
    limbs_functions: SkeletonFunctions, spoiled: tuple[FrameProblem, FloatArray]
) -> None:
    problem, truth = spoiled
    posture = Posture(truth, np.tile([1.0, 0, 0, 0], (40, 1, 1)))
    clean = replace(
        problem, measured=limbs_functions.marker_positions(posture, problem.numbers)
    ).take(np.arange(5))
    plain = fit_frames(clean).posture.scalars
    for loss in ROBUST:
        np.testing.assert_allclose(
            fit_frames(clean.with_loss(loss)).posture.scalars, plain, atol=1e-5
        )
