"""What a trial's estimate starts from: pulls, gaps, series without jumps."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from condyle.model.growth import sized_numbers
from condyle.solver.frame_fit import fit_frames
from condyle.solver.frame_problem import FrameProblem, SkeletonFunctions
from condyle.solver.posture import Posture, held_over, quaternions_of, rotations
from condyle.solver.process_prior import mean_reversion
from condyle.solver.trial_estimate import smooth_trial
from condyle.solver.trial_plan import TrialPlan, freedom_series, plan_trial, rest_sds

FloatArray = NDArray[np.float64]
RATE, SD, FRAMES = 100.0, 0.004, 400

BODY = """\
condyle: 1
name: trunk, arm and crank
segments: {trunk: {}, arm: {}, crank: {}}
joints:
  root:
    from: laboratory
    to: trunk
    floating: {position: [px, py, pz], angles: {sequence: [y, x, -z], names: [turn, side, tilt]}}
  shoulder:
    from: trunk
    to: arm
    at: [0.03, 0.4, 0.2]
    spherical: {rest_sd: 60, angles: {sequence: [y, -x, y], names: [plane, elevation, axial]}}
  axle:
    from: laboratory
    to: crank
    at: [1, 0, 0]
    moves: [{rotate: z, coordinate: round}]
markers:
  t1: {segment: trunk, at: [0.12, 0.1, 0.05], sd: 0.004}
  t2: {segment: trunk, at: [-0.1, 0.3, 0.02], sd: 0.004}
  t3: {segment: trunk, at: [0.02, 0.5, -0.12], sd: 0.004}
  a1: {segment: arm, at: [0.05, -0.1, 0.02], sd: 0.004}
  a2: {segment: arm, at: [-0.05, -0.2, 0.06], sd: 0.004}
  a3: {segment: arm, at: [0.01, -0.3, -0.07], sd: 0.004}
  c1: {segment: crank, at: [0.17, 0, 0], sd: 0.004}
"""
TRUNK, ARM, CRANK = slice(0, 3), slice(3, 6), slice(6, 7)
SHOULDER = slice(7, 10)  # freedoms: px py pz round | root | shoulder


@pytest.fixture(scope="module")
def functions(skeleton_of) -> SkeletonFunctions:
    return SkeletonFunctions(skeleton_of(BODY))


def truth() -> Posture:
    """Walks, turns round, swings an arm held forward, and pedals twice a second."""
    t = np.arange(FRAMES) / RATE
    scalars = np.column_stack([0.2 * t, 0.02 * np.sin(9 * t), 0.05 * np.sin(5 * t), 4 * np.pi * t])
    lean = 0.2 * np.sin(5 * t) + 0.1 * np.sin(17 * t + 1)
    root = Rotation.from_rotvec(np.column_stack([lean, 1.5 + 0.5 * t, 0.1 * np.sin(12 * t)]))
    arm = Rotation.from_rotvec(
        np.column_stack([1 + 0.5 * np.sin(6 * t), 0.4 * np.sin(4 * t), 0.6 * np.sin(5 * t) - 1])
    )
    return Posture(scalars, np.stack([quaternions_of(root), quaternions_of(arm)], axis=1))


@pytest.fixture(scope="module")
def problem(functions: SkeletonFunctions) -> FrameProblem:
    numbers = sized_numbers(functions.skeleton, np.eye(3))
    places = functions.marker_positions(truth(), numbers)
    places = places + np.random.default_rng(3).normal(0, 0.002, places.shape)
    return FrameProblem(functions, places, np.full(places.shape[:2], SD**-2), numbers)


def hidden(problem: FrameProblem, markers: slice, frames: slice) -> FrameProblem:
    weights = problem.weights.copy()
    weights[frames, markers] = 0.0
    return replace(problem, weights=weights)


def planned(problem: FrameProblem) -> TrialPlan:
    plan = plan_trial(problem, fit_frames(problem))
    assert plan is not None
    return plan


def ball_errors(posture: Posture) -> FloatArray:
    """(frames, balls) rad"""
    wrong = [
        (
            rotations(truth().quaternions[:, b]).inv() * rotations(posture.quaternions[:, b])
        ).magnitude()
        for b in range(2)
    ]
    return np.stack(wrong, axis=1)


def test_a_floating_trial_is_smoothed_and_bridged_with_its_orientations(
    problem: FrameProblem,
) -> None:
    fits = fit_frames(hidden(problem, slice(0, 7), slice(150, 162)))  # nobody in sight
    found = smooth_trial(hidden(problem, slice(0, 7), slice(150, 162)), fits, RATE)
    assert found is not None
    assert found.fits.solution.converged.all()
    assert not found.fits.involved.any()
    seen = np.r_[0:150, 162:FRAMES]
    before, after = (
        np.sqrt((ball_errors(p)[seen] ** 2).mean(axis=0))
        for p in (fits.posture, found.fits.posture)
    )
    assert (after < 0.6 * before).all()
    gap = slice(150, 162)
    sd = np.sqrt(np.einsum("nii->ni", found.fits.covariance))
    balls = np.sqrt(
        np.stack([(sd[:, 4:7] ** 2).sum(axis=1), (sd[:, SHOULDER] ** 2).sum(axis=1)], axis=1)
    )
    assert (ball_errors(found.fits.posture)[gap] < 3 * balls[gap]).all()
    white = np.asarray(found.white)[:, SHOULDER, SHOULDER]
    assert np.trace(white[156]) > 1.5 * np.trace(white[100])


def test_a_crank_goes_round_without_jumps_by_whole_turns(problem: FrameProblem) -> None:
    """Eight turns: a frame by itself cannot tell which."""
    fits = fit_frames(problem)
    assert np.abs(np.diff(fits.posture.scalars[:, 3])).max() > 6
    found = smooth_trial(problem, fits, RATE)
    assert found is not None
    steps = np.diff(found.fits.posture.scalars[:, 3])
    np.testing.assert_allclose(steps, 4 * np.pi / RATE, atol=0.01)
    assert found.evidence.kappa[3] == pytest.approx(0.5, rel=0.2)


SCREW = BODY.replace(
    "moves: [{rotate: z, coordinate: round}]",
    "moves: [{rotate: z, coordinate: round}, "
    "{translate: z, follows: round, polynomial: [0, 0.0001]}]",
)
LIMITED = BODY.replace("coordinate: round}", "coordinate: round, range: [-9000, 9000]}")


@pytest.mark.parametrize(("text", "kept"), [(BODY, 0), (SCREW, 1), (LIMITED, 1)])
def test_whole_turns_are_kept_where_something_tells_them(skeleton_of, text: str, kept: int) -> None:
    """A screw's markers tell them, and so does a range."""
    functions = SkeletonFunctions(skeleton_of(text))
    numbers = sized_numbers(functions.skeleton, np.eye(3))
    places = functions.marker_positions(truth(), numbers)
    turning = FrameProblem(functions, places, np.full(places.shape[:2], SD**-2), numbers)
    fits = fit_frames(turning)
    scalars = truth().scalars.copy()
    scalars[200:, 3] += 2 * np.pi
    solution = replace(fits.solution, posture=Posture(scalars, truth().quaternions))
    plan = plan_trial(turning, replace(fits, solution=solution))
    assert plan is not None
    turns = (plan.start.scalars[[100, 300], 3] - truth().scalars[[100, 300], 3]) / (2 * np.pi)
    np.testing.assert_allclose(turns, [0, kept], atol=0.05)


@pytest.mark.parametrize("length", [2, 10, 20, 40])
def test_a_hidden_orientation_does_not_pass_for_movement(
    problem: FrameProblem, length: int
) -> None:
    """Turning to rest in a gap and back: two large turns that do not commute."""
    whole = planned(problem).evidence
    gap = planned(hidden(problem, ARM, slice(150, 150 + length))).evidence
    np.testing.assert_allclose(np.log(gap.ratio[SHOULDER] / whole.ratio[SHOULDER]), 0, atol=0.4)
    np.testing.assert_allclose(gap.kappa, whole.kappa, rtol=0.05)


def test_series_have_the_turns_between_frames_that_are_known(problem: FrameProblem) -> None:
    posture = truth()
    known = np.ones((FRAMES, 10), dtype=bool)
    known[100:130, SHOULDER] = False
    spoilt = posture.quaternions.copy()
    spoilt[100:130, 1] = [1.0, 0, 0, 0]
    series = freedom_series(problem, Posture(posture.scalars, spoilt), known)[:, SHOULDER]
    R = rotations(posture.quaternions[:, 1])
    steps = np.diff(series, axis=0)
    np.testing.assert_allclose(steps[:99], (R[:99].inv() * R[1:100]).as_rotvec(), atol=1e-12)
    np.testing.assert_allclose(steps[129], (R[99].inv() * R[130]).as_rotvec(), atol=1e-12)
    assert (steps[99:129] == 0).all()


def test_orientations_are_held_over_from_the_last_that_is_known() -> None:
    q = quaternions_of(Rotation.random(6, rng=np.random.default_rng(1)))
    known = np.array([False, True, False, False, True, False])
    np.testing.assert_array_equal(held_over(q, known), q[[1, 1, 1, 1, 4, 4]])
    np.testing.assert_array_equal(held_over(q, np.zeros(6, dtype=bool)), q[[0] * 6])


def test_a_pull_weighs_what_its_stationary_sd_asks(problem: FrameProblem) -> None:
    plan = planned(problem)
    sd = np.radians(60)
    np.testing.assert_allclose(rest_sds(problem)[SHOULDER], sd)
    assert np.isnan(rest_sds(problem)[:7]).all()
    share = plan.problem.pull_share
    assert share is not None
    evidence = plan.evidence
    r, kappa = evidence.ratio[SHOULDER], evidence.kappa[SHOULDER]
    expected = r * mean_reversion(np.full(3, sd), r / kappa**2, evidence.order) * sd**2
    np.testing.assert_allclose(share[SHOULDER], expected, rtol=1e-12)
    assert (share[SHOULDER] < 0.05).all()  # not one measurement a frame
    assert (share[:7] == 1).all()


def test_a_balls_three_freedoms_are_bridged_together(problem: FrameProblem) -> None:
    plan = planned(hidden(problem, slice(0, 6), slice(100, 300)))
    root = plan.estimated[:, 4:7]
    assert (root == root[:, :1]).all()
    assert not root[200].any()
    short = planned(hidden(problem, TRUNK, slice(100, 106)))
    assert short.estimated.all()


def test_no_bridge_stands_beside_a_joint_at_rest(skeleton_of) -> None:
    """Without the trunk's markers, the arm's tell only trunk and shoulder together: were the trunk
    bridged and the shoulder at rest, the trunk would turn until the arm's markers fit."""
    functions = SkeletonFunctions(skeleton_of(BODY.replace("rest_sd: 60, ", "")))
    numbers = sized_numbers(functions.skeleton, np.eye(3))
    t = np.arange(FRAMES) / RATE
    slow = Rotation.from_rotvec(np.column_stack([0.2 * np.sin(5 * t), 1.5 + 0.5 * t, 0 * t]))
    posture = Posture(
        truth().scalars, np.stack([quaternions_of(slow), truth().quaternions[:, 1]], axis=1)
    )
    places = functions.marker_positions(posture, numbers)
    places = places + np.random.default_rng(3).normal(0, 0.002, places.shape)
    whole = FrameProblem(functions, places, np.full(places.shape[:2], SD**-2), numbers)
    body = np.r_[0:3, 4:10]
    plan = planned(hidden(whole, TRUNK, slice(100, 300)))
    assert not plan.estimated[100:300][:, body].any()
    assert plan.estimated[:, 3].all()  # the crank is no concern of theirs
    # A short gap is bridged for all of them, and the posture is right.
    short = hidden(whole, TRUNK, slice(100, 115))
    found = smooth_trial(short, fit_frames(short), RATE)
    assert found is not None
    assert not found.fits.involved.any()
    wrong = rotations(posture.quaternions[:, 0]).inv() * rotations(
        found.fits.posture.quaternions[:, 0]
    )
    assert wrong.magnitude()[100:115].max() < np.radians(2)
    # With the arm's markers hidden too, each goes by its own.
    both = planned(hidden(whole, slice(0, 6), slice(100, 300)))
    assert both.estimated[200, 6]
    assert not both.estimated[200, SHOULDER].any()


def test_a_window_has_the_plans_own_frames(problem: FrameProblem) -> None:
    plan = planned(hidden(problem, CRANK, slice(40, 240)))
    part = plan.window(slice(30, 130))
    assert len(part) == 100
    np.testing.assert_array_equal(part.estimated, plan.estimated[30:130])
    np.testing.assert_array_equal(part.start.scalars, plan.start.scalars[30:130])
    whole = plan.prior.cost(plan.start)
    np.testing.assert_allclose(part.prior.cost(part.start), whole[30 : 130 - plan.prior.order])


def test_a_link_needs_every_frame_of_its_window(problem: FrameProblem) -> None:
    plan = planned(hidden(problem, slice(0, 6), slice(100, 300)))
    p = plan.prior.order
    assert not plan.estimated[100:300, 4].any()
    assert plan.prior.linked[: 100 - p, 4].all()
    assert not plan.prior.linked[100 - p : 300, 4].any()
    assert plan.prior.linked[300:, 4].all()
    assert plan.prior.linked[:, 3].all()


def test_a_trial_of_which_nothing_is_seen_long_enough_is_left_alone(problem: FrameProblem) -> None:
    few = hidden(problem, slice(0, 7), slice(15, FRAMES))
    assert plan_trial(few, fit_frames(few)) is None
