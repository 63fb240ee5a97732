"""The one estimate of a person: its derivatives, its minimum, and what movement tells of joints."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.optimize import least_squares
from scipy.spatial.transform import Rotation

from condyle.model import load_skeleton
from condyle.model.growth import sized_lengths, sized_marker_at, sized_numbers
from condyle.model.skeleton import FreedJoint, Skeleton
from condyle.recording.recording import Recording
from condyle.solver.calibration import calibrate
from condyle.solver.frame_choice import chosen_frames
from condyle.solver.frame_problem import SkeletonFunctions
from condyle.solver.least_squares import Bounds
from condyle.solver.person_estimate import estimate_person, minimise_person
from condyle.solver.person_functions import PersonFunctions
from condyle.solver.person_priors import TAPE_SD, Given, PersonPriors
from condyle.solver.person_problem import PersonProblem, PersonState
from condyle.solver.posture import Posture
from condyle.solver.skin_motion import SkinMotion, skin_motion, turns_since
from condyle.solver.trial_fit import fit_trial
from condyle.solver.upright import Upright

FloatArray = NDArray[np.float64]
Maker = Callable[..., Recording]

HINGE = """\
condyle: 1
name: two bars
person: {stature: 1.75, mass: 70}
segments:
  upper: {length: [[0, 0, 0], [0, -0.4, 0]]}
  lower: {length: [[0, 0, 0], [0, -0.4, 0]]}
joints:
  root:
    from: laboratory
    to: upper
    floating: {position: [px, py, pz], angles: {sequence: [y, x, -z], names: [turn, side, tilt]}}
  knee:
    from: upper
    to: lower
    at: [0, -0.4, 0]
    moves:
      - {rotate: -z, coordinate: flexion, range: [-40, 150]}
      - {rotate: x, coordinate: adduction, range: [-60, 60], rest_sd: 2}
      - {rotate: y, coordinate: rotation, range: [-60, 60], rest_sd: 2}
markers:
  u1: {segment: upper, at: [0.05, 0.0, 0.05], placed_within: 0.005, sd: 0.002}
  u2: {segment: upper, at: [-0.05, -0.1, 0.06], placed_within: 0.005, sd: 0.002}
  u3: {segment: upper, at: [0.04, -0.3, -0.06], placed_within: 0.005, sd: 0.002}
  u4: {segment: upper, at: [-0.04, -0.38, 0.05], placed_within: 0.005, sd: 0.002}
  l1: {segment: lower, at: [0.05, -0.05, 0.05], placed_within: 0.005, sd: 0.002}
  l2: {segment: lower, at: [-0.05, -0.15, 0.05], placed_within: 0.005, sd: 0.002}
  l3: {segment: lower, at: [0.04, -0.3, -0.05], placed_within: 0.005, sd: 0.002}
  l4: {segment: lower, at: [-0.03, -0.4, 0.05], placed_within: 0.005, sd: 0.002}
sizing:
  factor_sd: 0.02
  joints: {knee: {place_sd: 0.005, axis_sd: 10}}
  standing: {flexion: [0, 1], adduction: [0, 1], rotation: [0, 1]}
"""


@pytest.fixture(scope="module")
def hinge(skeleton_of: Callable[[str], Skeleton]) -> Skeleton:
    return skeleton_of(HINGE)


def some_problem(skeleton: Skeleton, frames: int = 6) -> tuple[PersonProblem, PersonState]:
    """A static frame and frames of movement, with everything away from its minimum."""
    rng = np.random.default_rng(5)
    functions = SkeletonFunctions(skeleton)
    person = PersonFunctions(functions)
    freedoms = functions.kinematics.freedoms
    quaternions = rng.standard_normal((frames, len(freedoms.balls), 4))
    quaternions /= np.linalg.norm(quaternions, axis=2, keepdims=True)
    posture = Posture(0.3 * rng.standard_normal((frames, len(freedoms.scalars))), quaternions)
    moving = np.arange(frames) > 0
    turns = turns_since(functions, posture, posture.take(np.array([0]))) * moving[:, None]
    seen = rng.random((frames, len(skeleton.markers))) > 0.1
    bounds = Bounds(
        np.full(posture.scalars.shape, -9.0),
        np.full(posture.scalars.shape, 9.0),
        np.zeros((frames, freedoms.size), dtype=bool),
    )
    skin = skin_motion(functions, seen, moving, turns)
    problem = PersonProblem(
        functions=person,
        measured=rng.standard_normal((frames, len(skeleton.markers), 3)),
        weights=np.where(seen, rng.uniform(1e3, 1e5, seen.shape), 0.0),
        standing=~moving,
        upright=Upright("+Z", "for the test"),
        skin=skin,
        priors=PersonPriors(skeleton, person.layout, Given(1.8, {"lower": 0.41})),
        bounds=bounds,
    )
    vector = 0.05 * rng.standard_normal(person.layout.size)
    return problem, PersonState(posture, vector, 0.01 * rng.standard_normal((len(skin), 3)))


def test_downhill_is_the_derivative_of_the_cost(hinge: Skeleton) -> None:
    problem, state = some_problem(hinge)
    equations = problem.eliminated(state)
    still = np.zeros((len(problem), problem.bounds.pinned.shape[1]))
    step = 1e-6
    for k in range(problem.common):
        common = np.zeros(problem.common)
        common[k] = step
        slope = (
            problem.cost(state.after(common, still)) - problem.cost(state.after(-common, still))
        ) / (2 * step)
        assert -slope == pytest.approx(equations.downhill[k], rel=2e-5, abs=1e-3)


def test_a_step_solves_the_whole_system_written_out(hinge: Skeleton) -> None:
    """The arrowhead eliminated, against one dense Gauss-Newton system built by differences."""
    problem, state = some_problem(hinge, frames=3)
    frames, size = problem.bounds.pinned.shape
    total = problem.common + frames * size

    def residuals(x: FloatArray) -> FloatArray:
        at = state.after(x[: problem.common], x[problem.common :].reshape(frames, size))
        away = problem.residuals(at) * np.sqrt(problem.weights)[:, :, None]
        prior, _ = problem.priors(at.person)
        skin = np.linalg.cholesky(problem.skin.precision).T @ at.skin.ravel()
        names = problem.functions.functions.kinematics.freedoms.scalars
        own = []
        for name, sd in (("adduction", 2.0), ("rotation", 2.0)):
            moving = at.posture.scalars[1:, names.index(name)]
            own.append(moving / np.radians(sd))
        for name in ("flexion", "adduction", "rotation"):
            own.append(at.posture.scalars[:1, names.index(name)] / np.radians(1.0))
        return np.concatenate([away.ravel(), prior, skin, *own])

    h = 1e-6
    J = np.column_stack([(residuals(h * e) - residuals(-h * e)) / (2 * h) for e in np.eye(total)])
    r = residuals(np.zeros(total))
    assert 0.5 * r @ r == pytest.approx(problem.cost(state), rel=1e-10)
    whole = np.linalg.lstsq(J, -r, rcond=None)[0]
    equations = problem.eliminated(state)
    common = np.linalg.solve(equations.information, equations.gradient)
    steps = equations.steps(common, problem.skin, problem.functions.layout.size)
    np.testing.assert_allclose(common, whole[: problem.common], rtol=1e-4, atol=1e-6)
    np.testing.assert_allclose(steps.ravel(), whole[problem.common :], rtol=1e-4, atol=1e-6)
    gain = 0.5 * (r @ r - ((r + J @ whole) ** 2).sum())
    assert equations.gain(common, steps) == pytest.approx(gain, rel=1e-5)


def test_scipy_reaches_the_same_minimum_with_movement(hinge: Skeleton) -> None:
    problem, state = some_problem(hinge, frames=4)
    # Something that a person could do, so that there is one minimum.
    rng = np.random.default_rng(2)
    measured = problem.measured + problem.residuals(state) * 0
    points = problem.functions.markers(
        state.posture, state.person, problem.places(state), problem.upright
    ).values.reshape(measured.shape)
    problem = replace(problem, measured=points + 0.002 * rng.standard_normal(points.shape))
    frames, size = problem.bounds.pinned.shape
    root = np.sqrt(problem.weights)[:, :, None]
    skin_root = np.linalg.cholesky(problem.skin.precision).T
    names = problem.functions.functions.kinematics.freedoms.scalars

    def residuals(x: FloatArray) -> FloatArray:
        at = state.after(x[: problem.common], x[problem.common :].reshape(frames, size))
        prior, _ = problem.priors(at.person)
        scalars = at.posture.scalars
        own = [scalars[1:, names.index(n)] / np.radians(2.0) for n in ("adduction", "rotation")]
        still = [scalars[:1, names.index(n)] for n in ("flexion", "adduction", "rotation")]
        return np.concatenate(
            [
                (problem.residuals(at) * root).ravel(),
                prior,
                skin_root @ at.skin.ravel(),
                *own,
                *[s / np.radians(1.0) for s in still],
            ]
        )

    peer = least_squares(
        residuals,
        np.zeros(problem.common + frames * size),
        x_scale="jac",
        xtol=1e-14,
        ftol=1e-14,
        gtol=1e-12,
    )
    ours, _, converged = minimise_person(problem, state, tolerance=1e-7)
    assert converged
    assert problem.cost(ours) == pytest.approx(peer.cost, rel=1e-8)


def test_priors_are_what_was_told(hinge: Skeleton) -> None:
    layout = PersonFunctions(SkeletonFunctions(hinge)).layout
    priors = PersonPriors(hinge, layout, Given(1.75, {"lower": 0.42}))
    residual, J = priors(np.zeros(layout.size))
    told = dict(zip(priors.labels, residual, strict=True))
    assert told["tape on lower"] == pytest.approx((0.40 - 0.42) / TAPE_SD)
    assert told["overall scale"] == 0.0
    for k in range(layout.size):
        step = np.zeros(layout.size)
        step[k] = 1e-6
        slope = (priors(step)[0] - priors(-step)[0]) / 2e-6
        np.testing.assert_allclose(J[:, k], slope, atol=1e-5)


def moved(skeleton: Skeleton, angles: FloatArray, recording_of: Maker) -> Recording:
    """Markers of a skeleton whose knee goes through (frames, 3) angles."""
    functions = SkeletonFunctions(skeleton)
    names = functions.kinematics.freedoms.scalars
    scalars = np.zeros((len(angles), len(names)))
    for k, name in enumerate(("flexion", "adduction", "rotation")):
        scalars[:, names.index(name)] = angles[:, k]
    about_y = np.linspace(0, 0.5, len(angles)) * (np.ptp(angles) > 0)
    turn = Rotation.from_rotvec(about_y[:, None] * [0, 1, 0]).as_quat(scalar_first=True)
    positions = functions.marker_positions(
        Posture(scalars, turn[:, None]), sized_numbers(skeleton, np.eye(3))
    )
    return recording_of(skeleton.marker_names, positions, up="+Y")


def test_a_knee_set_askew_on_purpose_is_set_right_by_movement(
    hinge: Skeleton, recording_of: Maker
) -> None:
    """Cross-talk: a hinge seen askew by delta shows an adduction of asin(sin delta sin theta).

    Closed form, exact (derived; the reference page's section 1.8). The truth turns about its own axis
    alone; the model that is fitted has its joint turned by 10 degrees about the long axis.
    """
    delta = np.radians(10.0)
    joints = tuple(
        replace(j, axis_turn=(0.0, delta, 0.0)) if j.name == "knee" else j for j in hinge.joints
    )
    truth = replace(hinge, joints=joints)
    truth = replace(
        truth,
        markers=tuple(
            replace(m, placed=tuple(p))
            for m, p in zip(truth.markers, sized_marker_at(truth), strict=True)
        ),
    )
    theta = np.radians(45 - 45 * np.cos(np.linspace(0, 4 * np.pi, 120)))
    still = moved(truth, np.zeros((40, 3)), recording_of)
    bending = moved(truth, np.column_stack([theta, 0 * theta, 0 * theta]), recording_of)

    def adduction(found: Skeleton) -> FloatArray:
        fit = fit_trial(found, bending)
        return np.asarray(fit.values[:, fit.column("adduction")])

    free = {"knee": FreedJoint(0.005, None)}
    askew = replace(
        hinge,
        sizing=replace(hinge.sizing, joints=free),
        coordinates=tuple(replace(c, rest_sd=None) for c in hinge.coordinates),
    )
    before = adduction(calibrate(askew, still).skeleton)
    np.testing.assert_allclose(np.abs(before), np.arcsin(np.sin(delta) * np.sin(theta)), atol=2e-3)
    found = calibrate(hinge, still, moving=[bending])
    knee = next(j for j in found.skeleton.joints if j.name == "knee")
    assert knee.axis_turn is not None
    assert knee.axis_turn_sd is not None
    assert np.degrees(knee.axis_turn[1]) == pytest.approx(10.0, abs=1.0)
    assert abs(knee.axis_turn[1] - delta) < 3 * knee.axis_turn_sd[1]
    assert np.degrees(np.abs(adduction(found.skeleton)).max()) < 1.0


def test_a_tape_measure_counts(hinge: Skeleton, recording_of: Maker) -> None:
    still = moved(hinge, np.zeros((40, 3)), recording_of)
    alone = sized_lengths(calibrate(hinge, still).skeleton)["lower"]
    taped = sized_lengths(calibrate(hinge, still, lengths={"lower": alone + 0.03}).skeleton)[
        "lower"
    ]
    assert alone < taped < alone + 0.03


def test_nothing_that_an_earlier_calibration_found_is_used_again(
    hinge: Skeleton, recording_of: Maker
) -> None:
    still = moved(hinge, np.zeros((40, 3)), recording_of)
    once = calibrate(hinge, still)
    again = calibrate(once.skeleton, still)
    assert again.skeleton.joints == once.skeleton.joints
    assert again.skeleton.sizes == once.skeleton.sizes


def test_frames_are_chosen_one_for_each_cell_of_the_postures() -> None:
    phase = np.linspace(0, 40 * np.pi, 4000)
    turns = np.column_stack([np.sin(phase), np.cos(phase)])
    rows = chosen_frames(turns, np.full(4000, 10))
    assert len(rows) < 60
    angles = np.sort(np.arctan2(turns[rows, 0], turns[rows, 1]))
    assert np.diff(angles).max() < 0.5
    assert len(chosen_frames(turns, np.full(4000, 10), most=9)) <= 9
    hidden = np.where(np.arange(4000) % 2, 0, 10)
    assert not (chosen_frames(turns, hidden) % 2).any()


def test_markers_of_a_segment_are_carried_together() -> None:
    skeleton = load_skeleton("lower_limbs")
    functions = SkeletonFunctions(skeleton)
    seen = np.ones((3, len(skeleton.markers)), dtype=bool)
    turns = np.ones((3, functions.kinematics.freedoms.size))
    skin = skin_motion(functions, seen, np.array([False, True, True]), turns)
    names = [skeleton.markers[m].name for m in skin.marker]
    covariance = np.linalg.inv(skin.precision)
    two = [[r for r, n in enumerate(names) if n == name][1] for name in ("GT_right", "thigh_right")]
    apart = [r for r, n in enumerate(names) if n == "FH_right"][1]
    assert covariance[3 * two[0], 3 * two[1]] > 0.1 * covariance[3 * two[0], 3 * two[0]]
    assert covariance[3 * two[0], 3 * apart] == 0.0
    # Carried by about its `sd` for a radian; c is the smaller part named in the constants.
    assert isinstance(skin, SkinMotion)


def test_the_covariance_is_that_of_many_repeats(hinge: Skeleton) -> None:
    """Monte Carlo of the posterior: data and truth drawn from the priors, errors over their sd."""
    problem, state = some_problem(hinge, frames=5)
    problem = replace(problem, weights=np.where(problem.weights > 0, 0.002**-2, 0.0))
    rng = np.random.default_rng(8)
    _, J = problem.priors(np.zeros(problem.functions.layout.size))
    spread = np.linalg.cholesky(np.linalg.inv(J.T @ J))
    centre = -np.linalg.solve(J.T @ J, J.T @ problem.priors(np.zeros(len(J.T)))[0])
    skin_spread = np.linalg.cholesky(np.linalg.inv(problem.skin.precision))
    scores = []
    names = problem.functions.functions.kinematics.freedoms.scalars
    for _ in range(60):
        scalars = state.posture.scalars.copy()
        for name in ("adduction", "rotation"):
            scalars[1:, names.index(name)] = np.radians(2.0) * rng.standard_normal(4)
        for name in ("flexion", "adduction", "rotation"):
            scalars[0, names.index(name)] = np.radians(1.0) * rng.standard_normal()
        truth = PersonState(
            replace(state.posture, scalars=scalars),
            centre + spread @ rng.standard_normal(len(spread)),
            (skin_spread @ rng.standard_normal(len(skin_spread))).reshape(-1, 3),
        )
        points = problem.functions.markers(
            truth.posture, truth.person, problem.places(truth), problem.upright
        ).values.reshape(problem.measured.shape)
        seen = replace(problem, measured=points + 0.002 * rng.standard_normal(points.shape))
        found = estimate_person(seen, truth)
        sd = np.sqrt(np.diag(found.covariance))[: len(truth.person)]
        scores.append((found.state.person - truth.person) / sd)
    inside = np.abs(np.array(scores)) < 1.96
    assert 0.90 < inside.mean() < 0.99
