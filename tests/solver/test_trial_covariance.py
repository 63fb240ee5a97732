"""The two parts of a trial's uncertainty, against dense algebra."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray

from condyle.model.growth import sized_numbers
from condyle.solver.covariances import all_pairs
from condyle.solver.frame_fit import fit_frames
from condyle.solver.frame_problem import FrameProblem, SkeletonFunctions
from condyle.solver.posture import Posture
from condyle.solver.trial_covariance import lasting_covariance, quickness, white_covariances
from condyle.solver.trial_estimate import memory, smooth_trial
from condyle.solver.trial_plan import TrialPlan, plan_trial

FloatArray = NDArray[np.float64]
RATE, SD = 100.0, 0.004

POINT = """\
condyle: 1
name: a point on rails
segments: {car: {}}
joints:
  rails:
    from: laboratory
    to: car
    moves:
      - {translate: x, coordinate: x}
      - {translate: y, coordinate: y}
      - {translate: z, coordinate: z}
markers:
  m: {segment: car, at: [0, 0, 0], sd: 0.004}
  n: {segment: car, at: [0.1, 0.2, 0], sd: 0.004}
"""
PENDULUM = """\
condyle: 1
name: a trunk and a pendulum
segments: {trunk: {}, arm: {}}
joints:
  root:
    from: laboratory
    to: trunk
    floating: {position: [px, py, pz], angles: {sequence: [y, x, -z], names: [turn, side, tilt]}}
  hinge:
    from: trunk
    to: arm
    at: [0.03, 0.4, 0.2]
    moves: [{rotate: z, coordinate: bend, range: [-170, 170]}]
markers:
  t1: {segment: trunk, at: [0.12, 0.1, 0.05], sd: 0.004}
  t2: {segment: trunk, at: [-0.1, 0.3, 0.02], sd: 0.004}
  t3: {segment: trunk, at: [0.02, 0.5, -0.12], sd: 0.004}
  a1: {segment: arm, at: [0.05, -0.2, 0.02], sd: 0.004}
  a2: {segment: arm, at: [-0.05, -0.3, 0.06], sd: 0.004}
"""


def seen_with_noise(
    functions: SkeletonFunctions, posture: Posture, noise: float, seed: int = 1
) -> FrameProblem:
    numbers = sized_numbers(functions.skeleton, np.eye(3))
    places = functions.marker_positions(posture, numbers)
    places = places + np.random.default_rng(seed).normal(0, noise, places.shape)
    return FrameProblem(functions, places, np.full(places.shape[:2], SD**-2), numbers)


def hidden(problem: FrameProblem, markers: slice, frames: slice) -> FrameProblem:
    weights = problem.weights.copy()
    weights[frames, markers] = 0.0
    return replace(problem, weights=weights)


def planned(problem: FrameProblem) -> TrialPlan:
    plan = plan_trial(
        problem, fit_frames(problem, kept=all_pairs(problem.functions.kinematics.freedoms.size))
    )
    assert plan is not None
    return plan


def whitened(plan: TrialPlan, posture: Posture) -> list[FloatArray]:
    """All of them, dense."""
    return [np.asarray(part) for part in white_covariances(plan, posture, RATE)]


def lasting(plan: TrialPlan, part: slice) -> FloatArray:
    return np.asarray(lasting_covariance(plan, part))


def rails(frames: int) -> FloatArray:
    t = np.arange(frames) / RATE
    return np.column_stack([0.2 * np.sin(5 * t), 0.1 * np.sin(8 * t), 0.05 * np.cos(9 * t)])


@pytest.fixture(scope="module")
def point(skeleton_of) -> SkeletonFunctions:
    return SkeletonFunctions(skeleton_of(POINT))


@pytest.fixture(scope="module")
def pendulum(skeleton_of) -> SkeletonFunctions:
    return SkeletonFunctions(skeleton_of(PENDULUM))


def on_rails(point: SkeletonFunctions, frames: int, noise: float = 0.002) -> FrameProblem:
    return seen_with_noise(point, Posture(rails(frames), np.zeros((frames, 0, 4))), noise)


def differentiating(frames: int, order: int) -> FloatArray:
    """(frames, frames) The derivative of the quartic through the five nearest frames, by numpy's
    polynomial algebra."""
    matrix = np.zeros((frames, frames))
    for k in range(frames):
        first = min(max(k - 2, 0), frames - 5)
        at = np.arange(first, first + 5)
        for j in at:
            others = at[at != j]
            lagrange = np.polynomial.Polynomial.fromroots(others)
            matrix[k, j] = lagrange.deriv(order)(k) / lagrange(j) * RATE**order
    return matrix


def test_on_rails_it_is_the_dense_posterior_and_its_derivatives(point: SkeletonFunctions) -> None:
    """Linear and normal: posterior (W + r D'D)^-1 kappa^2, and S of it for any linear formula S."""
    frames = 43
    plan = planned(on_rails(point, frames))
    white, rates, accelerations = whitened(plan, plan.start)
    D = np.diff(np.eye(frames), plan.evidence.order, axis=0)
    first, second = differentiating(frames, 1), differentiating(frames, 2)
    for d in range(3):
        # Two markers of one sd see each coordinate.
        A = 2 / SD**2 * np.eye(frames) + plan.evidence.ratio[d] * D.T @ D
        posterior = np.linalg.inv(A) * plan.evidence.kappa[d] ** 2
        np.testing.assert_allclose(white[:, d, d], np.diag(posterior), rtol=1e-6)
        of_rates = np.diag(first @ posterior @ first.T)
        np.testing.assert_allclose(rates[:, d, d], of_rates, rtol=1e-5)
        of_accelerations = np.diag(second @ posterior @ second.T)
        np.testing.assert_allclose(accelerations[:, d, d], of_accelerations, rtol=1e-5)
    across = white[:, ~np.eye(3, dtype=bool)]
    assert np.abs(across).max() < 1e-9 * white.max()


def test_with_orientations_it_is_the_inverse_of_a_jacobian_by_finite_differences(
    pendulum: SkeletonFunctions,
) -> None:
    frames, size = 26, 7
    t = np.arange(frames) / RATE
    scalars = np.column_stack([0.3 * t, 0.1 * t**2, 0 * t, np.sin(6 * t)])
    spin = np.column_stack([np.cos(2 * t), 0 * t, np.sin(2 * t), 0 * t])[:, None]
    problem = seen_with_noise(pendulum, Posture(scalars, spin), 0.002)
    problem = hidden(problem, slice(3, 5), slice(9, 12))
    plan = planned(problem)
    assert plan.estimated.all()
    posture = plan.start

    def residuals(x: FloatArray) -> FloatArray:
        there = posture.after(x.reshape(frames, size))
        places = pendulum.marker_positions(there, problem.numbers)
        markers = np.sqrt(problem.weights)[..., None] * (places - problem.measured)
        differences, _ = plan.prior.residuals(there)
        return np.concatenate(
            [markers.ravel(), (np.sqrt(plan.evidence.ratio) * differences).ravel()]
        )

    h = 1e-5
    steps = h * np.eye(frames * size)
    J = np.column_stack([(residuals(x) - residuals(-x)) / (2 * h) for x in steps])
    scale = np.tile(plan.evidence.kappa, frames)
    dense = np.linalg.inv(J.T @ J) * np.outer(scale, scale)
    blocks = dense.reshape(frames, size, frames, size)
    white, rates, accelerations = whitened(plan, posture)
    root = np.sqrt(np.einsum("nii->ni", white))
    for k in range(frames):
        beside = np.outer(root[k], root[k])
        np.testing.assert_allclose(white[k] / beside, blocks[k, :, k] / beside, atol=1e-4)
    for order, told in ((1, rates), (2, accelerations)):
        S = differentiating(frames, order)
        expected = np.einsum("ka,aibi,kb->ki", S, blocks, S)
        np.testing.assert_allclose(np.einsum("nii->ni", told), expected, rtol=1e-3)
    # The hidden stretch is known less well.
    assert root[10, 3] > 1.1 * root[6, 3]


def test_what_is_not_told_has_no_covariance_and_its_neighbours_no_rate(
    pendulum: SkeletonFunctions,
) -> None:
    frames = 700
    t = np.arange(frames) / RATE
    scalars = np.column_stack([0.1 * np.sin(5 * t), 0 * t, 0 * t, np.sin(7 * t)])
    spin = np.column_stack([np.cos(0.3 * t), 0 * t, np.sin(0.3 * t), 0 * t])[:, None]
    problem = seen_with_noise(pendulum, Posture(scalars, spin), 0.001)
    plan = planned(hidden(problem, slice(3, 5), slice(200, 500)))
    white, rates, _ = whitened(plan, plan.start)
    assert (white[200:500, 3] == 0).all()
    assert (white[[199, 500], 3, 3] > 0).all()
    assert (rates[198:502, 3] == 0).all()
    assert (rates[[197, 502], 3, 3] > 0).all()
    assert (rates[:, 0, 0] > 0).all()


def test_what_persists_is_what_white_noise_leaves(point: SkeletonFunctions) -> None:
    plan = planned(on_rails(point, 200, noise=0.002))
    found = lasting(plan, slice(0, 200))
    kappa = np.median(plan.evidence.kappa)
    assert kappa == pytest.approx(0.5, rel=0.15)
    expected = (1 - kappa**2) * SD**2 / 2 * np.eye(3)
    np.testing.assert_allclose(found, np.tile(expected, (200, 1, 1)), rtol=1e-9, atol=1e-18)
    noisier = planned(on_rails(point, 200, noise=0.006))
    assert (lasting(noisier, slice(0, 200)) == 0).all()


def test_across_a_gap_it_is_that_of_the_edges_in_every_window(point: SkeletonFunctions) -> None:
    frames = 400
    problem = on_rails(point, frames)
    weights = problem.weights.copy()
    weights[:190, 1] = 0.0  # one marker before the gap, two behind it
    weights[190:202] = 0.0
    plan = planned(replace(problem, weights=weights))
    whole = lasting(plan, slice(0, frames))
    before, behind = whole[189, 0, 0], whole[202, 0, 0]
    assert before == pytest.approx(2 * behind)
    between = np.interp(np.arange(190, 202), [189, 202], [before, behind])
    np.testing.assert_allclose(whole[190:202, 0, 0], between)
    for part in (slice(0, 195), slice(192, 198), slice(196, 400)):
        np.testing.assert_array_equal(lasting(plan, part), whole[part])


def test_quickness_is_that_of_a_swing(pendulum: SkeletonFunctions) -> None:
    """A sinusoid of angular frequency w: w, and w^2."""
    frames, w = 800, 2 * np.pi
    t = np.arange(frames) / RATE
    scalars = np.column_stack([0 * t, 0 * t, 0 * t, np.sin(w * t)])
    upright = np.tile([1.0, 0, 0, 0], (frames, 1, 1))
    problem = seen_with_noise(pendulum, Posture(scalars, upright), 0.0005)
    assert quickness(planned(problem), RATE) == pytest.approx((w, w**2), rel=0.02)


def test_a_gap_that_nothing_bridges_is_no_quickness(pendulum: SkeletonFunctions) -> None:
    """The jump to rest and back is no movement."""
    frames, w = 1000, 2 * np.pi
    t = np.arange(frames) / RATE
    scalars = np.column_stack([0 * t, 0 * t, 0 * t, 1 + np.sin(w * t)])
    turn = 0.3 * np.sin(w * t)
    spin = np.column_stack([np.cos(turn + 1), 0 * t, np.sin(turn + 1), 0 * t])[:, None]
    problem = seen_with_noise(pendulum, Posture(scalars, spin), 0.0005)
    plan = planned(hidden(problem, slice(0, 5), slice(300, 700)))
    assert not plan.estimated[500, 3:].any()
    assert quickness(plan, RATE) == pytest.approx((w, w**2), rel=0.05)


def test_windows_agree_where_a_long_gap_lies_across_them(skeleton_of) -> None:
    """Within a gap nothing is forgotten but by a pull, so windows must look further."""
    text = POINT.replace("coordinate: z}", "coordinate: z, rest: 0, rest_sd: 0.1}")
    functions = SkeletonFunctions(skeleton_of(text))
    frames, window = 3000, 150
    quick = Posture(rails(3 * frames)[::3], np.zeros((frames, 0, 4)))
    problem = seen_with_noise(functions, quick, 0.002)
    for gap in (slice(285, 305), slice(600, 2400)):
        weights = problem.weights.copy()
        weights[gap] = 0.0
        part = replace(problem, weights=weights)
        fits = fit_frames(part)
        plan = plan_trial(part, fits)
        assert plan is not None
        assert window + 2 * memory(plan) < frames  # else there is one window only
        whole, split = (smooth_trial(part, fits, RATE, window=w) for w in (frames, window))
        assert whole is not None
        assert split is not None
        z = whole.fits.posture.scalars[:, 2]
        assert not whole.fits.involved[:, 2].any()
        np.testing.assert_allclose(split.fits.posture.scalars[:, 2], z, rtol=0, atol=1e-6)
        np.testing.assert_allclose(
            np.asarray(split.fits.covariance)[:, 2, 2],
            np.asarray(whole.fits.covariance)[:, 2, 2],
            rtol=1e-4,
        )
    # In the middle of a long time without markers: at rest, and no surer than the pull.
    assert abs(z[1500]) < 0.02
    assert np.sqrt(np.asarray(whole.fits.covariance)[1500, 2, 2]) == pytest.approx(0.1, rel=0.05)
