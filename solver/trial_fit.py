"""A sized skeleton and a trial in, joint coordinates for every frame out: the main job.

What comes in is checked here once; the fitting itself knows only arrays.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from condyle.model.errors import FitError
from condyle.model.growth import (
    sized_joint_centres,
    sized_landmarks,
    sized_marker_at,
    sized_numbers,
)
from condyle.model.meshes import grown_shapes
from condyle.model.skeleton import Skeleton
from condyle.recording.recording import Recording, is_seen
from condyle.solver.blas_threads import one_thread
from condyle.solver.calibration_influence import CalibrationDoubt, calibration_doubt
from condyle.solver.covariances import Covariances, all_pairs
from condyle.solver.frame_fit import FrameFits, fit_frames, whole_covariances
from condyle.solver.frame_problem import FrameProblem, SkeletonFunctions
from condyle.solver.matching import (
    MatchedMarkers,
    check_scale,
    choose_up,
    match_markers,
    root_alignment,
)
from condyle.solver.reported import (
    Reported,
    doubt_shares,
    involvement,
    joint_covariance,
    report,
    report_derivatives,
)
from condyle.solver.results import FittedMotion, Smoothing, TimeDerivatives, TrialFit
from condyle.solver.robust_loss import Loss
from condyle.solver.subject_covariance import SubjectCovariance
from condyle.solver.time_derivatives import segment_velocities, whole_windows
from condyle.solver.trial_estimate import TrialEstimate, smooth_trial
from condyle.solver.upright import Upright

FloatArray = NDArray[np.float64]

LEAST_WEIGHT = 0.05
"""Of a sound marker's: below it, a robust loss has left a marker out, and it is said to be an outlier."""


def clipped(recording: Recording, *, start: float | None, end: float | None) -> Recording:
    """The part of a recording between two times (s, on its own clock, ends included).

    Raises
    ------
    FitError
        If no frame lies between them.
    """
    time = recording.time
    low = -np.inf if start is None else start
    high = np.inf if end is None else end
    rows = np.flatnonzero((time >= low - 1e-9) & (time <= high + 1e-9))
    if not len(rows):
        raise FitError(
            f"{recording.source}: no frame lies between {low:g} s and {high:g} s.\n"
            f"  The recording runs from {time[0]:.3f} s to {time[-1]:.3f} s."
        )
    part = slice(int(rows[0]), int(rows[-1]) + 1)
    return replace(
        recording,
        first_frame=recording.first_frame + part.start,
        positions=recording.positions[part],
        residuals=recording.residuals[part],
        cameras=recording.cameras[part],
    )


@one_thread
def fit_trial(
    skeleton: Skeleton,
    recording: Recording,
    *,
    up: str | None = None,
    labels: Mapping[str, str] | None = None,
    start: float | None = None,
    end: float | None = None,
    smooth: bool = False,
    covariance: bool = False,
    loss: Loss | None = None,
    subject: SubjectCovariance | None = None,
    functions: SkeletonFunctions | None = None,
    watch: Callable[[float], None] | None = None,
) -> TrialFit:
    """Fit every frame of a recording.

    Parameters
    ----------
    skeleton : Skeleton
        Sized, or as it stands.
    up : str, optional
        The laboratory axis that points up; else chosen, and the choice is said in the result.
    labels : model marker -> label in the recording, optional
    start, end : float, optional
        s, on the recording's own clock.
    smooth : bool
        Whether the trial is one estimate, with rates and accelerations; else each frame is by itself.
    covariance : bool
        Whether the covariance of all numbers of each frame is kept; it takes much memory.
    loss : Loss, optional
        In place of the sum of squares: see `robust_loss`.
    subject : SubjectCovariance, optional
        What calibration does not know; it goes into every sd.
    functions : SkeletonFunctions, optional
        Of the same model, so that several trials share them.
    watch : callable, optional
        Told the share of the work done.

    Raises
    ------
    FitError
        If model and recording cannot be brought together.
    """
    recording = clipped(recording, start=start, end=end)
    matched = match_markers(skeleton, recording, labels)
    functions = functions or SkeletonFunctions(skeleton)
    check_scale(root_alignment(functions, matched.positions), recording, skeleton)
    upright = choose_up(functions, recording, matched.positions, asked=up)
    problem = frame_problem(
        skeleton, functions, matched.positions, upright, variance=matched.variance
    ).with_loss(loss)
    _check_enough(problem, recording, skeleton)
    kept = all_pairs(functions.kinematics.freedoms.size) if covariance else None
    fits = fit_frames(problem, kept=kept, watch=watch)
    estimate = smooth_trial(problem, fits, recording.rate) if smooth else None
    final = fits if estimate is None else estimate.fits
    doubt = None
    if subject is not None:
        doubt = calibration_doubt(
            problem,
            final.posture,
            lambda rows: whole_covariances(problem, fits.solution, rows),
            subject,
            fits.covariance.pattern,
        )
        if estimate is not None:
            estimate = estimate.with_doubt(doubt.covariance, doubt.varying)
        final = replace(final, covariance=final.covariance + doubt.covariance)
    told = report(functions.kinematics, final)
    fit = _assembled(skeleton, recording, matched, upright, problem, final, told)
    if covariance:
        fit = replace(fit, covariance=joint_covariance(told, final.covariance))
    white = None if estimate is None else estimate.white
    fit = _with_doubts(fit, told, final.covariance, white, doubt)
    return fit if estimate is None else _with_motion(fit, told, problem, estimate, fits)


def _with_doubts(
    fit: TrialFit,
    told: Reported,
    whole: Covariances,
    white: Covariances | None,
    doubt: CalibrationDoubt | None,
) -> TrialFit:
    """The fit with which part of each variance comes from where."""
    calibration = None if doubt is None else doubt.covariance
    persisting = whole
    for part in (white, calibration):
        persisting = persisting if part is None else persisting - part
    shares = doubt_shares(told, (white, persisting, calibration))
    how = "not known: no sizes or places of a calibration" if doubt is None else doubt.how
    return replace(fit, doubts=shares, calibration_how=how)


def frame_problem(
    skeleton: Skeleton,
    functions: SkeletonFunctions,
    positions: FloatArray,
    upright: Upright,
    *,
    variance: FloatArray | None = None,
) -> FrameProblem:
    """The least-squares problem of marker positions.

    Parameters
    ----------
    positions : (frames, markers, 3) m
        NaN where missing.
    variance : (frames, markers) m^2, optional
        What the cameras' error adds to the square of a marker's sd.
    """
    placed = is_seen(sized_marker_at(skeleton))
    present = is_seen(positions)
    sd = np.array([marker.sd for marker in skeleton.markers])
    return FrameProblem(
        functions,
        np.where(present[..., None], positions, 0.0),
        (present & placed) / (sd**2 + (0.0 if variance is None else variance)),
        sized_numbers(skeleton, upright.laboratory_from_upright),
    )


def _check_enough(problem: FrameProblem, recording: Recording, skeleton: Skeleton) -> None:
    """Refuse a trial in which no frame determines anything beyond a point."""
    most = int((problem.weights > 0).sum(axis=1).max(initial=0))
    if most < 2:
        raise FitError(
            f"{recording.source}: no frame shows more than {most} of the markers that "
            f"{skeleton.name} has a place for; nothing can be determined from that.\n"
            "  Check the labels (condyle recording lists them), or give --labels MAP.yaml."
        )


def _assembled(
    skeleton: Skeleton,
    recording: Recording,
    matched: MatchedMarkers,
    upright: Upright,
    problem: FrameProblem,
    fits: FrameFits,
    told: Reported,
) -> TrialFit:
    functions = problem.functions
    fitted = functions.marker_positions(fits.posture, problem.numbers)
    placed = is_seen(sized_marker_at(skeleton))
    outlier = _outliers(problem, fits)
    motion = FittedMotion(
        name=recording.name,
        frame=recording.frame,
        time=recording.time,
        up=upright.axis,
        up_how=upright.how,
        segment_names=skeleton.segment_names,
        laboratory_from_segment=functions.poses(fits.posture, problem.numbers),
        marker_names=skeleton.marker_names,
        measured=matched.positions,
        fitted=np.where(placed[:, None], fitted, np.nan),
        used=(problem.weights > 0) & ~outlier,
        joint_centres=sized_joint_centres(skeleton),
        landmarks=sized_landmarks(skeleton),
        shapes=grown_shapes(skeleton),
    )
    return TrialFit(
        motion=motion,
        rate=recording.rate,
        columns=told.columns,
        values=told.values,
        sd=told.sd,
        at_limit=told.at_limit,
        why_not=np.where(outlier, "outlier", _why_not(skeleton, matched, placed)),
        other_labels=matched.other_labels,
        other_positions=matched.other_positions,
        cost=fits.solution.cost,
        optimality=fits.optimality,
        iterations=fits.solution.iterations,
        converged=fits.solution.converged,
        not_observed=_not_observed(told),
        freedoms=int((~problem.functions.held).sum()),
        freedoms_tied=functions.ties.freedom_taken(fits.posture, problem.numbers),
        tie_errors=functions.ties.largest(fits.posture, problem.numbers),
    )


def _with_motion(
    fit: TrialFit,
    told: Reported,
    problem: FrameProblem,
    estimate: TrialEstimate,
    frames: FrameFits,
) -> TrialFit:
    """The fit with what only a whole trial can tell: rates, accelerations, velocities, noise."""
    linear, angular = segment_velocities(fit.motion.laboratory_from_segment, fit.rate)
    jumps = _at_jumps(problem, estimate.fits.involved)
    linear[jumps], angular[jumps] = np.nan, np.nan
    derived = report_derivatives(estimate, told, fit.rate)
    names = [column.name for column in told.columns]
    rows = np.flatnonzero(frames.involved.any(axis=1))
    kinematics, alone = problem.functions.kinematics, frames.posture.take(rows)
    unseen = involvement(kinematics, alone, frames.involved[rows])
    bridged = (unseen & ~told.involved[rows]).sum(axis=0)
    placed = problem.weights.max(axis=0)
    sd = float(np.median(1 / np.sqrt(placed[placed > 0])))
    smoothed = estimate.evidence.ratio > 0
    return replace(
        fit,
        derivatives=TimeDerivatives(*derived, linear, angular),
        smoothing=Smoothing(
            order=estimate.evidence.order,
            white_noise=float(np.median(estimate.evidence.kappa[smoothed])) * sd,
            rounds=estimate.rounds,
            bridged={n: int(c) for n, c in zip(names, bridged, strict=True) if c},
        ),
    )


def _at_jumps(problem: FrameProblem, involved: NDArray[np.bool_]) -> NDArray[np.bool_]:
    """(frames, segments) Where a freedom that moves a segment goes to rest or comes from it."""
    jumps = ~(whole_windows(involved) | whole_windows(~involved))
    return np.asarray(jumps @ problem.functions.moves_segment)


def _outliers(problem: FrameProblem, fits: FrameFits) -> NDArray[np.bool_]:
    """(frames, markers) Measured markers that a robust loss has all but left out."""
    if problem.loss is None:
        return np.zeros(problem.weights.shape, dtype=bool)
    squared = problem.squared_errors(fits.posture, np.arange(len(problem)))
    return np.asarray((problem.weights > 0) & (problem.loss.weight(squared) < LEAST_WEIGHT))


def _why_not(
    skeleton: Skeleton, matched: MatchedMarkers, placed: NDArray[np.bool_]
) -> NDArray[np.str_]:
    """(frames, markers) Why a marker took no part in a frame; empty where it did."""
    present = is_seen(matched.positions)
    why = np.full(present.shape, "", dtype="<U12")
    why[~present] = "missing"
    why[:, ~placed] = "no_place"
    for i, marker in enumerate(skeleton.markers):
        if marker.name in matched.without_label and marker.placed is not None:
            why[:, i] = "static_only"
    return why


def _not_observed(told: Reported) -> dict[str, int]:
    counts = told.involved.sum(axis=0)
    return {
        column.name: int(count) for column, count in zip(told.columns, counts, strict=True) if count
    }
