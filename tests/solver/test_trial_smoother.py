"""The minimum of a trial with orientations, against scipy on a cost that is written out here anew."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.optimize import approx_fprime, least_squares
from scipy.spatial.transform import Rotation

from condyle.model.growth import sized_numbers
from condyle.solver import trial_smoother
from condyle.solver.frame_problem import FrameProblem, SkeletonFunctions
from condyle.solver.least_squares import Bounds
from condyle.solver.posture import Posture, quaternions_of, rotations
from condyle.solver.process_prior import ProcessPrior
from condyle.solver.trial_smoother import SmoothSolution, minimise_trial

FloatArray = NDArray[np.float64]
FRAMES, ORDER, SD = 8, 3, 0.004

TRUNK_AND_ARM = """\
condyle: 1
name: trunk and arm
segments: {trunk: {}, arm: {}}
joints:
  root:
    from: laboratory
    to: trunk
    floating: {position: [px, py, pz], angles: {sequence: [y, x, -z], names: [turn, side, tilt]}}
  shoulder:
    from: trunk
    to: arm
    at: [0.03, 0.4, 0.2]
    moves:
      - {rotate: x, coordinate: lift, range: [-20, 60]}
      - {rotate: z, coordinate: reach, range: [-90, 90]}
markers:
  t1: {segment: trunk, at: [0.12, 0.1, 0.05], sd: 0.004}
  t2: {segment: trunk, at: [-0.1, 0.3, 0.02], sd: 0.004}
  t3: {segment: trunk, at: [0.02, 0.5, -0.12], sd: 0.004}
  a1: {segment: arm, at: [0.05, -0.1, 0.02], sd: 0.004}
  a2: {segment: arm, at: [-0.05, -0.3, 0.06], sd: 0.004}
"""
RATIO = np.array([1e6, 1e6, 1e6, 1e5, 1e5, 1e4, 1e4, 1e4])
SIZE = len(RATIO)


@pytest.fixture(scope="module")
def functions(skeleton_of) -> SkeletonFunctions:
    return SkeletonFunctions(skeleton_of(TRUNK_AND_ARM))


def truth() -> Posture:
    """A quick turn and a lift that its range stops."""
    t = np.arange(FRAMES) / 20
    scalars = np.column_stack(
        [0.4 * t, 0.1 * np.sin(6 * t), 0 * t, 0.7 + 0.9 * np.sin(4 * t), 0.8 * np.cos(5 * t)]
    )
    turn = Rotation.from_rotvec(
        np.column_stack([0.6 * np.sin(5 * t), 2.5 + 3 * t, 0.5 * np.cos(6 * t)])
    )
    return Posture(scalars, quaternions_of(turn)[:, None])


@pytest.fixture(scope="module")
def problem(functions: SkeletonFunctions) -> FrameProblem:
    numbers = sized_numbers(functions.skeleton, np.eye(3))
    places = functions.marker_positions(truth(), numbers)
    rng = np.random.default_rng(3)
    seen = rng.random(places.shape[:2]) > 0.15
    places = np.where(seen[..., None], places + rng.normal(0, 0.01, places.shape), 0.0)
    return FrameProblem(functions, places, seen / SD**2, numbers)


@pytest.fixture(scope="module")
def prior() -> ProcessPrior:
    return ProcessPrior(ORDER, RATIO, np.ones((FRAMES - ORDER, SIZE), dtype=bool))


@pytest.fixture(scope="module")
def start(problem: FrameProblem) -> Posture:
    inside: Posture = problem.bounds().inside(truth())
    return inside


@pytest.fixture(scope="module")
def found(problem: FrameProblem, prior: ProcessPrior, start: Posture) -> SmoothSolution:
    return minimise_trial(problem, prior, start, problem.bounds())


def residuals(problem: FrameProblem, posture: Posture) -> FloatArray:
    """F is half their sum of squares. Rotations by scipy alone, as the prior's docstring defines it."""
    places = problem.functions.marker_positions(posture, problem.numbers)
    markers = np.sqrt(problem.weights)[..., None] * (problem.measured - places)
    scalars = np.diff(posture.scalars, ORDER, axis=0) * np.sqrt(RATIO[:5])
    R = rotations(posture.quaternions[:, 0])
    turns = []
    for k in range(FRAMES - ORDER):
        middle = R[k + ORDER // 2].inv()
        away = [(middle * R[k + i]).as_rotvec() for i in range(ORDER + 1)]
        turns.append(-away[0] + 3 * away[1] - 3 * away[2] + away[3])
    balls = np.array(turns) * np.sqrt(RATIO[5:])
    return np.concatenate([markers.ravel(), scalars.ravel(), balls.ravel()])


def cost(problem: FrameProblem, posture: Posture) -> float:
    return float((residuals(problem, posture) ** 2).sum() / 2)


def test_no_dense_solver_finds_less(
    problem: FrameProblem, found: SmoothSolution, start: Posture
) -> None:
    """scipy least_squares, trust-region reflective with bounds, J by finite differences."""
    assert found.converged
    ours = cost(problem, found.posture)

    def posture(x: FloatArray) -> Posture:
        return start.after(x.reshape(FRAMES, SIZE))

    low, high = (x.ravel() for x in problem.bounds().steps(start))
    first = np.clip(np.zeros(FRAMES * SIZE), low + 1e-9, high - 1e-9)
    peer = least_squares(
        lambda x: residuals(problem, posture(x)),
        first,
        bounds=(low, high),
        x_scale="jac",
        xtol=1e-11,
        ftol=1e-12,
        gtol=None,
    )
    assert ours <= peer.cost * (1 + 1e-9)
    assert ours == pytest.approx(peer.cost, rel=1e-6)
    np.testing.assert_allclose(found.posture.scalars, posture(peer.x).scalars, rtol=0, atol=2e-5)
    assert (found.active[:, 3] == 1).any()  # the range is felt
    assert ours < cost(problem, start)


def test_the_cost_it_tells_is_the_cost(problem: FrameProblem, found: SmoothSolution) -> None:
    places = problem.functions.marker_positions(found.posture, problem.numbers)
    squares = problem.weights * ((problem.measured - places) ** 2).sum(axis=2)
    np.testing.assert_allclose(found.cost, squares.sum(axis=1) / 2, rtol=1e-9)


def test_its_gradient_is_next_to_nothing_but_against_limits(
    problem: FrameProblem, found: SmoothSolution
) -> None:
    """By finite differences of the cost above: Karush, Kuhn and Tucker's conditions."""
    assert found.optimality.max() < 1e-7

    def moved(x: FloatArray) -> float:
        return cost(problem, found.posture.after(x.reshape(FRAMES, SIZE)))

    up = approx_fprime(np.zeros(FRAMES * SIZE), moved, 1e-6)
    down = -approx_fprime(np.zeros(FRAMES * SIZE), lambda x: moved(-x), 1e-6)
    gradient = ((up + down) / 2).reshape(FRAMES, SIZE)
    free = found.active == 0
    # In units of one sd of a marker a radian away: about 1 / SD.
    assert np.abs(gradient[free]).max() < 1e-4 / SD
    assert (gradient[found.active == 1] < 0).all()
    assert (gradient[found.active == -1] > 0).all()
    assert (~free).any()


def test_other_starts_lead_to_no_other_minimum(
    problem: FrameProblem, prior: ProcessPrior, found: SmoothSolution, start: Posture
) -> None:
    ours = cost(problem, found.posture)
    for seed in range(4):
        step = np.random.default_rng(seed).normal(0, 0.25, (FRAMES, SIZE))
        again = minimise_trial(problem, prior, start.after(step), problem.bounds())
        assert again.converged
        assert cost(problem, again.posture) == pytest.approx(ours, rel=1e-9)


def test_pinned_freedoms_stay_and_limits_hold(
    problem: FrameProblem, prior: ProcessPrior, start: Posture
) -> None:
    own = problem.bounds()
    pinned = own.pinned.copy()
    pinned[2:5, 4] = True
    pinned[6, 5:] = True
    bounds = Bounds(own.lower, own.upper, pinned)
    result = minimise_trial(problem, prior, start, bounds)
    assert result.converged
    np.testing.assert_array_equal(result.posture.scalars[2:5, 4], start.scalars[2:5, 4])
    np.testing.assert_allclose(
        result.posture.quaternions[6], start.quaternions[6], rtol=0, atol=1e-15
    )
    assert (result.posture.scalars <= own.upper).all()
    assert (result.posture.scalars >= own.lower).all()


def test_stopping_early_is_said(
    problem: FrameProblem,
    prior: ProcessPrior,
    start: Posture,
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    monkeypatch.setattr(trial_smoother, "MOST_ROUNDS", 1)
    away = start.after(np.random.default_rng(1).normal(0, 0.25, (FRAMES, SIZE)))
    result = minimise_trial(problem, prior, away, problem.bounds())
    assert not result.converged
    assert result.rounds == 1
    assert result.optimality.max() > 1e-6


def test_markers_without_any_error_are_done_at_once(
    problem: FrameProblem, prior: ProcessPrior
) -> None:
    """A cost of nothing has no digits of its own to measure a gain by."""
    still = truth().take(np.zeros(FRAMES, dtype=np.int64))
    still = problem.bounds().inside(still)
    places = problem.functions.marker_positions(still, problem.numbers)
    exact = FrameProblem(
        problem.functions, places, np.full(places.shape[:2], SD**-2), problem.numbers
    )
    near = still.after(np.random.default_rng(2).normal(0, 1e-3, (FRAMES, SIZE)))
    result = minimise_trial(exact, prior, near, exact.bounds())
    assert result.converged
    assert result.rounds <= 6
