"""Sizing a skeleton to one person: from a static trial to a sized skeleton with placed markers.

What is estimated, and from what, stands in `sizing_problem`; here the static is checked, the estimate
made and put into words.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from condyle.model.errors import FitError
from condyle.model.skeleton import Marker, Person, Skeleton
from condyle.recording.recording import Recording, is_seen, mean_positions
from condyle.recording.still import StillPart, still_part
from condyle.solver.blas_threads import one_thread
from condyle.solver.cold_start import fit_cold
from condyle.solver.frame_problem import FrameProblem, SkeletonFunctions
from condyle.solver.least_squares import Bounds, Solution, minimise
from condyle.solver.matching import (
    MatchedMarkers,
    check_scale,
    choose_up,
    match_markers,
    root_alignment,
)
from condyle.solver.observability import covariance, undetermined
from condyle.solver.posture import Posture
from condyle.solver.reported import reported_values
from condyle.solver.results import Calibration, PlacedMarker
from condyle.solver.static_faults import check_sides
from condyle.solver.subject_covariance import SubjectCovariance, entry_names, entry_values
from condyle.solver.upright import Upright

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]
from condyle.solver.marker_placing import MarkerPlacing, place_markers
from condyle.solver.sizing_functions import SizingFunctions
from condyle.solver.sizing_problem import (
    MEASUREMENT_SD,
    SCALE_SD,
    SCALE_SD_WITH_STATURE,
    SizingProblem,
)


@one_thread
def calibrate(
    skeleton: Skeleton,
    static: Recording,
    *,
    stature: float | None = None,
    mass: float | None = None,
    labels: Mapping[str, str] | None = None,
    up: str | None = None,
    start: float | None = None,
    end: float | None = None,
) -> Calibration:
    """Size a skeleton and place its markers on the person of a static trial.

    Parameters
    ----------
    skeleton : Skeleton
        With its nominal places; what an earlier calibration placed is not used.
    static : Recording
    stature, mass : float, optional
        m and kg of this person.
    labels : model marker -> label in the recording, optional
    up : str, optional
        The laboratory axis that points up.
    start, end : float, optional
        s; the still part, where the person stood otherwise than quietly.

    Raises
    ------
    FitError
        If the static cannot serve; the message says why and what would.
    """
    skeleton = unsized(skeleton)
    _check_person(skeleton, stature, mass)
    matched = match_markers(skeleton, static, labels)
    functions = SkeletonFunctions(skeleton)
    # Before asking whether anything stands still: in a wrong unit nothing does.
    check_scale(root_alignment(functions, matched.positions), static, skeleton)
    still = still_part(static, start=start, end=end)
    mean = mean_positions(matched.positions[still.frames])[None]
    alignment = root_alignment(functions, mean)
    upright = choose_up(functions, static, mean, asked=up)
    check_sides(functions, static, mean, alignment)
    problem = _problem(functions, mean[0], upright, stature)
    solution, free = _minimised(problem, mean, float(np.log(max(alignment.scale[0], 0.1))))
    return _assembled(problem, solution, free, still, matched, (stature, mass), static)


def unsized(skeleton: Skeleton) -> Skeleton:
    """The reference person again: no sizes, no placed markers."""
    markers = tuple(replace(m, placed=None, placed_sd=None) for m in skeleton.markers)
    return replace(skeleton, markers=markers, sizes={})


def _check_person(skeleton: Skeleton, stature: float | None, mass: float | None) -> None:
    for word, value, low, high in (
        ("--stature", stature, 0.1, 2.8),
        ("--mass", mass, 0.2, 400.0),
    ):
        if value is None:
            continue
        if skeleton.person is None:
            raise FitError(
                f"{word} cannot be used: {skeleton.name} does not say whom its numbers describe.\n"
                "  Add person: {stature: ..., mass: ...} to the model."
            )
        if not low <= value <= high:
            raise FitError(
                f"{word} {value:g} is nobody's.\n  Give metres for a stature, kilograms for a "
                f"mass, between {low:g} and {high:g}."
            )


def _problem(
    functions: SkeletonFunctions, mean: FloatArray, upright: Upright, stature: float | None
) -> SizingProblem:
    skeleton = functions.skeleton
    present = is_seen(mean)
    known = np.array([m.at is not None for m in skeleton.markers])
    within = np.array([m.placed_within for m in skeleton.markers])
    if (present & known).sum() < 3:
        raise FitError(
            f"the static shows {int((present & known).sum())} of the markers that {skeleton.name} "
            "has a nominal place for; sizing needs at least 3.\n"
            "  Check the labels, or give --labels MAP.yaml (model marker: label in the recording)."
        )
    scale = (0.0, SCALE_SD)
    if stature is not None and skeleton.person is not None:
        scale = (float(np.log(stature / skeleton.person.stature)), SCALE_SD_WITH_STATURE)
    return SizingProblem(
        functions,
        np.nan_to_num(mean),
        np.where(present & known, 1 / (within**2 + MEASUREMENT_SD**2), 0.0),
        upright,
        scale,
        SizingFunctions(functions),
    )


def _minimised(
    problem: SizingProblem, mean: FloatArray, log_scale: float
) -> tuple[Solution, BoolArray]:
    """The estimate, and which freedoms it determines."""
    groups = problem.evaluator.groups
    sizes = np.full(groups, log_scale)
    frame = FrameProblem(
        problem.functions,
        np.nan_to_num(mean),
        problem.weights[None],
        problem.evaluator.numbers(sizes, problem.upright),
    )
    first = fit_cold(frame, frame.bounds()).posture
    bounds = problem.bounds()
    n = problem.coordinates
    unseen = ~frame.seen()[0, :n]
    scalars = np.where(unseen, problem.start_scalars()[:n], first.scalars[0])
    start = Posture(np.r_[scalars, sizes, log_scale][None], first.quaternions)
    solution = minimise(problem, start, bounds, damping=1e-4)
    H, _, _ = problem(solution.posture, np.arange(1))
    pins, _ = undetermined(H, ~bounds.pinned)
    if pins.any():
        bounds = Bounds(bounds.lower, bounds.upper, bounds.pinned | pins)
        solution = minimise(problem, solution.posture, bounds, damping=1e-4)
    return solution, ~bounds.pinned


def _assembled(
    problem: SizingProblem,
    solution: Solution,
    free: BoolArray,
    still: StillPart,
    matched: MatchedMarkers,
    person: tuple[float | None, float | None],
    static: Recording,
) -> Calibration:
    skeleton = problem.functions.skeleton
    n, groups = problem.coordinates, problem.evaluator.groups
    H, _, _ = problem(solution.posture, np.arange(1))
    cov = covariance(H, free)[0]
    sizes = solution.posture.scalars[0, n : n + groups]
    sizes_sd = np.sqrt(np.diag(cov)[n : n + groups])
    placing = place_markers(problem, solution.posture, cov, matched, still)
    placed = placing.markers
    by_name = {marker.name: marker for marker in placed}
    stature, mass = person
    nan = float("nan")
    sized = replace(
        skeleton,
        sizes=problem.evaluator.factors(sizes, sizes_sd),
        markers=tuple(_with_place(m, by_name.get(m.name)) for m in skeleton.markers),
        subject=Person(nan if stature is None else stature, nan if mass is None else mass),
        labels={name: label for name, label in matched.labels.items() if name != label},
        up=problem.upright.axis,
    )
    own = Posture(solution.posture.scalars[:, :n], solution.posture.quaternions)
    told = reported_values(problem.functions.kinematics, own)
    undetermined_names = tuple(
        name
        for name, (_, rate) in told.items()
        if (np.abs(rate[0]) > 0)[~free[0][problem.step_columns()]].any()
        and not _is_held(skeleton, name)
    )
    return Calibration(
        skeleton=sized,
        static=static.name,
        still=(still.start, still.end),
        up=problem.upright.axis,
        up_how=problem.upright.how,
        log_scale=float(solution.posture.scalars[0, n + groups]),
        posture={name: float(value[0]) for name, (value, _) in told.items()},
        undetermined=undetermined_names,
        markers=placed,
        without_label=matched.without_label,
        other_labels=matched.other_labels,
        cost=float(solution.cost[0]),
        converged=bool(solution.converged[0]),
        own_posture=own,
        covariance=_joint_covariance(problem, sized, cov, placing),
    )


def _joint_covariance(
    problem: SizingProblem, sized: Skeleton, cov: FloatArray, placing: MarkerPlacing
) -> SubjectCovariance:
    """Of ln of the size factors and the marker places together; the static's posture summed out."""
    n, groups = problem.coordinates, problem.evaluator.groups
    of_sizes = np.zeros((groups, problem.freedoms))
    of_sizes[:, n : n + groups] = np.eye(groups)
    rates = np.concatenate([of_sizes, placing.rates.reshape(-1, problem.freedoms)])
    own = np.concatenate([np.zeros(groups), np.repeat(placing.variance, 3)])
    return SubjectCovariance(
        entry_names(sized),
        entry_values(sized),
        rates @ cov @ rates.T + np.diag(own),
        "the calibration's covariance",
    )


def _is_held(skeleton: Skeleton, name: str) -> bool:
    return any(c.name == name and c.held is not None for c in skeleton.coordinates)


def _with_place(marker: Marker, place: PlacedMarker | None) -> Marker:
    if place is None:
        return marker
    return replace(marker, placed=place.placed, placed_sd=place.placed_sd)
