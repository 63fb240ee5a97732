"""Fits from a cold start: recovery of noise-free postures, and laws of what may not matter."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation, Slerp

from condyle.model.errors import FitError
from condyle.model.growth import sized_numbers
from condyle.model.skeleton import Skeleton
from condyle.recording.recording import Recording
from condyle.solver.cold_start import badly_fitted, fit_cold
from condyle.solver.frame_fit import fit_frames
from condyle.solver.frame_problem import FrameProblem, SkeletonFunctions
from condyle.solver.least_squares import minimise
from condyle.solver.matching import check_scale, root_alignment
from condyle.solver.posture import Posture, rotations
from condyle.solver.results import TrialFit
from condyle.solver.trial_fit import clipped, fit_trial
from condyle.solver.upright import Upright

FloatArray = NDArray[np.float64]

# A root that neither floats nor is upright, and no prior anywhere.
PLANAR = """\
condyle: 1
name: planar
segments: {thigh: {}, shank: {}}
joints:
  root:
    from: laboratory
    to: thigh
    moves:
      - {translate: x, coordinate: forward}
      - {translate: y, coordinate: height}
      - {rotate: z, coordinate: lean}
  knee: {from: thigh, to: shank, at: [0, -0.4, 0], moves: [{rotate: -z, coordinate: bend}]}
markers:
  hip: {segment: thigh, at: [0, 0, 0]}
  front: {segment: thigh, at: [0.06, -0.2, 0]}
  knee: {segment: thigh, at: [0, -0.4, 0]}
  ankle: {segment: shank, at: [0, -0.42, 0]}
"""


def orientation_error(found: Posture, truth: Posture) -> FloatArray:
    """(frames, balls) rad between orientations."""
    shape = found.quaternions.shape[:2]
    one = rotations(found.quaternions.reshape(-1, 4))
    other = rotations(truth.quaternions.reshape(-1, 4))
    return np.asarray((one.inv() * other).magnitude()).reshape(shape)


def movement(
    functions: SkeletonFunctions,
    frames: int,
    rng: np.random.Generator,
    draw: Callable[..., Posture],
) -> Posture:
    """A smooth movement between a few random postures."""
    knots = np.linspace(0, frames - 1, 4)
    some = draw(functions, 4, rng, share=0.8)
    every = np.arange(frames)
    scalars = np.column_stack([np.interp(every, knots, column) for column in some.scalars.T])
    quaternions = np.stack(
        [
            Slerp(knots, rotations(some.quaternions[:, ball]))(every).as_quat(scalar_first=True)
            for ball in range(some.quaternions.shape[1])
        ],
        axis=1,
    )
    return Posture(scalars, quaternions)


# Noise-free markers, no `rest_sd`: coordinates come back to 1e-6 rad (and m) from random postures
# over whole joint ranges, the root turned any way.
@pytest.mark.parametrize("which", ["tree_functions", "limbs_functions"])
def test_noise_free_markers_give_their_posture_back_from_a_cold_start(
    which: str,
    request: pytest.FixtureRequest,
    random_posture: Callable[..., Posture],
    problem_of: Callable[..., FrameProblem],
) -> None:
    functions: SkeletonFunctions = request.getfixturevalue(which)
    assert all(c.rest_sd is None for c in functions.skeleton.coordinates)
    numbers = sized_numbers(functions.skeleton, Upright("+Z", "").laboratory_from_upright)
    truth = random_posture(functions, 25, np.random.default_rng(1))
    problem = problem_of(functions, functions.marker_positions(truth, numbers), numbers)
    fits = fit_frames(problem)
    determined = ~fits.involved[:, : truth.scalars.shape[1]]
    assert determined.mean() > 0.8
    wrong = np.where(determined, np.abs(fits.posture.scalars - truth.scalars), 0).max(axis=1)
    wrong = np.maximum(wrong, orientation_error(fits.posture, truth).max(axis=1))
    assert np.flatnonzero(wrong > 1e-6).tolist() == []
    assert fits.solution.converged.all()


# One frame has no neighbours and no median beside it, and must be solved all the same.
@pytest.mark.slow
@pytest.mark.parametrize("which", ["tree_functions", "limbs_functions"])
def test_a_single_frame_gives_its_posture_back_too(
    which: str,
    request: pytest.FixtureRequest,
    random_posture: Callable[..., Posture],
    problem_of: Callable[..., FrameProblem],
) -> None:
    functions: SkeletonFunctions = request.getfixturevalue(which)
    numbers = sized_numbers(functions.skeleton, np.eye(3))
    truth = random_posture(functions, 15, np.random.default_rng(2))
    measured = functions.marker_positions(truth, numbers)
    misfit = []
    for n in range(15):
        problem = problem_of(functions, measured[n : n + 1], numbers)
        found = fit_cold(problem, problem.bounds())
        points = functions.marker_positions(found.posture, numbers)
        misfit.append(np.abs(points - measured[n]).max())
    assert np.flatnonzero(np.array(misfit) > 1e-6).tolist() == []


def test_a_planar_root_needs_no_floating_joint(
    skeleton_of: Callable[[str], Skeleton], problem_of: Callable[..., FrameProblem]
) -> None:
    functions = SkeletonFunctions(skeleton_of(PLANAR))
    rng = np.random.default_rng(3)
    truth = Posture(rng.uniform(-1.2, 1.2, (40, 4)), np.zeros((40, 0, 4)))
    numbers = sized_numbers(functions.skeleton, np.eye(3))
    problem = problem_of(functions, functions.marker_positions(truth, numbers), numbers)
    fits = fit_frames(problem)
    turns = (fits.posture.scalars - truth.scalars + np.pi) % (2 * np.pi) - np.pi
    assert np.abs(turns).max() < 1e-6
    assert not fits.involved.any()


@pytest.fixture(scope="module")
def trial(
    limbs: Skeleton,
    limbs_functions: SkeletonFunctions,
    random_posture: Callable[..., Posture],
    recording_of: Callable[..., Recording],
) -> Recording:
    """Twenty-five noisy frames of a movement, Y up, with some markers missing."""
    rng = np.random.default_rng(4)
    truth = movement(limbs_functions, 25, rng, random_posture)
    positions = limbs_functions.marker_positions(truth, sized_numbers(limbs, np.eye(3)))
    positions = positions + rng.normal(0, 0.003, positions.shape)
    positions[rng.random(positions.shape[:2]) < 0.05] = np.nan
    return recording_of(limbs.marker_names, positions, first_frame=11)


@pytest.fixture(scope="module")
def whole(limbs: Skeleton, limbs_functions: SkeletonFunctions, trial: Recording) -> TrialFit:
    """That trial, fitted."""
    return fit_trial(limbs, trial, up="+Y", functions=limbs_functions)


ANSWER = 1e-6
"""rad and m; two ways to the same minimum."""


def test_moving_the_laboratory_axes_moves_the_result_and_nothing_else(
    limbs: Skeleton, limbs_functions: SkeletonFunctions, trial: Recording, whole: TrialFit
) -> None:
    # The same room, its axes named as a laboratory with Z up does, the origin elsewhere.
    turn = Upright("+Z", "").laboratory_from_upright
    shift = np.array([1.5, -2.0, 0.7])
    moved = replace(trial, positions=trial.positions @ turn.T + shift)
    after = fit_trial(limbs, moved, up="+Z", functions=limbs_functions)
    pose = whole.motion.laboratory_from_segment
    expected = pose.copy()
    expected[..., :3, :3] = turn @ pose[..., :3, :3]
    expected[..., :3, 3] = pose[..., :3, 3] @ turn.T + shift
    np.testing.assert_allclose(after.motion.laboratory_from_segment, expected, atol=ANSWER)
    positions = [whole.column(f"pelvis_{axis}") for axis in "xyz"]
    others = np.setdiff1d(np.arange(len(whole.columns)), positions)
    np.testing.assert_allclose(after.values[:, others], whole.values[:, others], atol=ANSWER)
    np.testing.assert_allclose(after.sd[:, others], whole.sd[:, others], rtol=1e-4)
    np.testing.assert_allclose(
        after.values[:, positions], whole.values[:, positions] @ turn.T + shift, atol=ANSWER
    )
    np.testing.assert_allclose(after.cost, whole.cost, rtol=1e-9)


def test_turning_the_room_about_the_vertical_turns_the_root_alone(
    limbs: Skeleton, limbs_functions: SkeletonFunctions, trial: Recording, whole: TrialFit
) -> None:
    turn = Rotation.from_rotvec([0, 0.8, 0])
    moved = replace(
        trial, positions=turn.apply(trial.positions.reshape(-1, 3)).reshape(trial.positions.shape)
    )
    after = fit_trial(limbs, moved, up="+Y", functions=limbs_functions)
    rooted = {"pelvis_x", "pelvis_y", "pelvis_z", "pelvic_rotation", "pelvic_rotation_sum"}
    others = [i for i, c in enumerate(whole.columns) if c.name not in rooted]
    np.testing.assert_allclose(after.values[:, others], whole.values[:, others], atol=ANSWER)
    yaw = after.values - whole.values
    change = yaw[:, whole.column("pelvic_rotation")] % (2 * np.pi)
    np.testing.assert_allclose(change, 0.8, atol=ANSWER)


def test_the_order_of_labels_and_other_names_change_nothing(
    limbs: Skeleton, limbs_functions: SkeletonFunctions, trial: Recording, whole: TrialFit
) -> None:
    order = np.random.default_rng(5).permutation(len(trial.labels))
    shuffled = replace(
        trial,
        labels=tuple(f"point {k}" for k in order),
        positions=trial.positions[:, order],
    )
    names = {marker: f"point {k}" for k, marker in enumerate(trial.labels)}
    after = fit_trial(limbs, shuffled, labels=names, up="+Y", functions=limbs_functions)
    np.testing.assert_array_equal(after.values, whole.values)
    np.testing.assert_array_equal(after.motion.measured, whole.motion.measured)


def test_a_trial_in_two_parts_gives_the_same_answers(
    limbs: Skeleton, limbs_functions: SkeletonFunctions, trial: Recording, whole: TrialFit
) -> None:
    time = trial.time
    parts = [
        fit_trial(limbs, trial, end=time[11], up="+Y", functions=limbs_functions),
        fit_trial(limbs, trial, start=time[12], up="+Y", functions=limbs_functions),
    ]
    assert [len(part.values) for part in parts] == [12, 13]
    poses = np.concatenate([part.motion.laboratory_from_segment for part in parts])
    np.testing.assert_allclose(poses, whole.motion.laboratory_from_segment, atol=ANSWER)
    np.testing.assert_array_equal(
        np.concatenate([part.motion.frame for part in parts]), whole.motion.frame
    )


def test_frames_in_another_order_give_the_same_answers(
    limbs: Skeleton, limbs_functions: SkeletonFunctions, trial: Recording, whole: TrialFit
) -> None:
    order = np.random.default_rng(6).permutation(len(trial))
    mixed = fit_trial(
        limbs, replace(trial, positions=trial.positions[order]), up="+Y", functions=limbs_functions
    )
    poses = whole.motion.laboratory_from_segment[order]
    np.testing.assert_allclose(mixed.motion.laboratory_from_segment, poses, atol=ANSWER)
    np.testing.assert_allclose(mixed.cost, whole.cost[order], rtol=1e-9)


def test_a_warm_start_ends_where_the_cold_one_does(
    limbs_functions: SkeletonFunctions,
    random_posture: Callable[..., Posture],
    problem_of: Callable[..., FrameProblem],
) -> None:
    rng = np.random.default_rng(7)
    numbers = sized_numbers(limbs_functions.skeleton, np.eye(3))
    truth = movement(limbs_functions, 20, rng, random_posture)
    measured = limbs_functions.marker_positions(truth, numbers)
    problem = problem_of(limbs_functions, measured + rng.normal(0, 0.004, measured.shape), numbers)
    cold = fit_cold(problem, problem.bounds())
    warm = minimise(problem, truth, problem.bounds())
    np.testing.assert_allclose(cold.cost, warm.cost, rtol=1e-9)


def test_an_unseen_segment_stays_at_rest_and_is_listed(
    limbs: Skeleton, limbs_functions: SkeletonFunctions, trial: Recording, whole: TrialFit
) -> None:
    positions = trial.positions.copy()
    left = [i for i, m in enumerate(limbs.markers) if m.segment in ("foot_left", "shank_left")]
    positions[:10, left] = np.nan
    fitted = fit_trial(
        limbs, replace(trial, positions=positions), up="+Y", functions=limbs_functions
    )
    for name in ("knee_flexion_left", "ankle_dorsiflexion_left", "subtalar_inversion_left"):
        column = fitted.column(name)
        rest = limbs.coordinate(name).rest
        np.testing.assert_array_equal(fitted.values[:10, column], rest)
        assert np.isnan(fitted.sd[:10, column]).all()
        assert np.isfinite(fitted.sd[10:, column]).all()
        assert fitted.not_observed[name] == 10
    assert fitted.not_observed["toes_extension_right"] == len(trial)
    assert "hip_flexion_left" not in fitted.not_observed
    # The other leg is as it was: the pelvis has lost evidence, but the knee not its own.
    column = fitted.column("knee_flexion_right")
    change = fitted.values[:, column] - whole.values[:, column]
    assert (np.abs(change) < fitted.sd[:, column]).all()


BALL = """\
condyle: 1
name: thrown
segments: {body: {}}
joints:
  root:
    from: laboratory
    to: body
    floating: {position: [x, y, z], angles: {sequence: [y, x, z], names: [a, b, c]}}
markers:
  one: {segment: body, at: [0.1, 0.02, 0.03]}
  two: {segment: body, at: [-0.1, 0.05, 0.01]}
  three: {segment: body, at: [0, -0.1, 0.1]}
"""


# Soederkvist & Wedin 1993: two points leave the turn about their line free.
def test_two_markers_leave_a_turn_undetermined_and_it_is_told(
    skeleton_of: Callable[[str], Skeleton], recording_of: Callable[..., Recording]
) -> None:
    skeleton = skeleton_of(BALL)
    functions = SkeletonFunctions(skeleton)
    rng = np.random.default_rng(8)
    random = Rotation.random(6, rng=rng).as_quat(scalar_first=True)
    truth = Posture(rng.normal(size=(6, 3)), random[:, None])
    numbers = sized_numbers(skeleton, np.eye(3))
    positions = functions.marker_positions(truth, numbers)
    positions[:3, 2] = np.nan
    fitted = fit_trial(skeleton, recording_of(skeleton.marker_names, positions), up="+Y")
    for name in ("a", "b", "c"):
        assert np.isnan(fitted.sd[:3, fitted.column(name)]).all()
        assert np.isfinite(fitted.sd[3:, fitted.column(name)]).all()
        assert fitted.not_observed[name] == 3
    np.testing.assert_allclose(fitted.motion.fitted[:3, :2], positions[:3, :2], atol=1e-7)
    assert fitted.converged.all()


def test_a_frame_without_markers_harms_no_other(
    limbs: Skeleton, limbs_functions: SkeletonFunctions, trial: Recording, whole: TrialFit
) -> None:
    positions = trial.positions.copy()
    positions[[0, 7, 24]] = np.nan
    fitted = fit_trial(
        limbs, replace(trial, positions=positions), up="+Y", functions=limbs_functions
    )
    others = np.setdiff1d(np.arange(25), [0, 7, 24])
    np.testing.assert_allclose(
        fitted.motion.laboratory_from_segment[others],
        whole.motion.laboratory_from_segment[others],
        atol=ANSWER,
    )
    assert np.isnan(fitted.sd[7]).all()
    assert np.isfinite(fitted.values).all()


def test_a_held_coordinate_has_an_sd_of_zero_and_is_not_called_unobserved(
    limbs: Skeleton, trial: Recording, recording_of: Callable[..., Recording]
) -> None:
    names = ("toes_extension_right", "ankle_dorsiflexion_left")  # unseen, and seen
    coordinates = tuple(replace(c, held=0.1) if c.name in names else c for c in limbs.coordinates)
    held = replace(limbs, coordinates=coordinates)
    foot = [i for i, m in enumerate(limbs.markers) if m.segment == "foot_left"]
    positions = trial.positions[:4].copy()
    positions[:, foot[1:]] = np.nan
    few = recording_of(trial.labels, positions)
    fitted = fit_trial(held, few)
    for name in names:
        column = fitted.column(name)
        np.testing.assert_array_equal(fitted.values[:, column], 0.1)
        np.testing.assert_array_equal(fitted.sd[:, column], 0.0)
        assert name not in fitted.not_observed


def test_why_a_marker_took_no_part_is_told(
    limbs: Skeleton, limbs_functions: SkeletonFunctions, trial: Recording, whole: TrialFit
) -> None:
    keep = [i for i, label in enumerate(trial.labels) if label != "thigh_right"]
    fewer = replace(
        trial,
        labels=tuple(trial.labels[i] for i in keep),
        positions=trial.positions[:, keep],
        residuals=trial.residuals[:, keep],
        cameras=trial.cameras[:, keep],
    )
    fitted = fit_trial(limbs, fewer, functions=limbs_functions)
    used = np.isfinite(fitted.motion.measured).all(axis=2)
    np.testing.assert_array_equal(fitted.motion.used, used)
    np.testing.assert_array_equal(fitted.why_not == "", used)
    np.testing.assert_array_equal(fitted.why_not[~used], "missing")


def test_a_part_outside_the_recording_is_refused_with_its_times(trial: Recording) -> None:
    with pytest.raises(FitError, match=r"runs from 0\.100 s to 0\.340 s"):
        clipped(trial, start=3.0, end=4.0)


def test_a_recording_of_strangers_is_refused(
    limbs: Skeleton, recording_of: Callable[..., Recording]
) -> None:
    stranger = recording_of(("a", "b"), np.zeros((3, 2, 3)))
    with pytest.raises(FitError, match="no label of this recording is a marker of lower limbs"):
        fit_trial(limbs, stranger)


def test_a_single_marker_determines_nothing_and_is_refused(
    limbs: Skeleton, trial: Recording
) -> None:
    positions = trial.positions.copy()
    positions[:, 1:] = np.nan
    with pytest.raises(FitError, match="nothing can be determined"):
        fit_trial(limbs, replace(trial, positions=positions))


@pytest.mark.parametrize("empty", [0, 3])
def test_a_trial_in_the_wrong_unit_is_refused_however_many_frames_are_empty(
    limbs: Skeleton,
    limbs_functions: SkeletonFunctions,
    trial: Recording,
    recording_of: Callable[..., Recording],
    empty: int,
) -> None:
    positions = 1000 * trial.positions[:4]
    positions[:empty] = np.nan
    alignment = root_alignment(limbs_functions, positions)
    with pytest.raises(FitError, match="times the size of lower limbs"):
        check_scale(alignment, recording_of(trial.labels, positions), limbs)


def test_empty_frames_do_not_make_the_others_look_badly_fitted(
    limbs_functions: SkeletonFunctions,
    problem_of: Callable[..., FrameProblem],
    trial: Recording,
) -> None:
    numbers = sized_numbers(limbs_functions.skeleton, np.eye(3))
    problem = problem_of(limbs_functions, trial.positions, numbers)
    positions = trial.positions.copy()
    positions[:15] = np.nan
    holed = problem_of(limbs_functions, positions, numbers)
    solution = fit_cold(problem, problem.bounds())
    assert badly_fitted(problem, solution).tolist() == []
    assert (
        badly_fitted(
            holed, replace(solution, cost=holed(solution.posture, np.arange(25))[2])
        ).tolist()
        == []
    )
