"""Sizing a skeleton to one person: from a static trial, and movement, to a sized skeleton.

What is estimated, and from what, stands in `person_problem`; here recordings are checked, the estimate
is started (from the static alone, then with frames of movement) and put into words.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from condyle.model.errors import FitError
from condyle.model.skeleton import Skeleton
from condyle.recording.recording import Recording, is_seen, mean_positions
from condyle.recording.still import still_part
from condyle.solver.blas_threads import one_thread
from condyle.solver.calibrated import Sources, calibrated
from condyle.solver.calibration_faults import (
    exchanged_markers,
    little_told,
    odd_sizes,
    odd_standing,
    one_frame,
    stray_markers,
    unsure_lengths,
    wrong_stature,
)
from condyle.solver.cold_start import fit_cold
from condyle.solver.frame_problem import FrameProblem, SkeletonFunctions
from condyle.solver.least_squares import Bounds
from condyle.solver.matching import check_scale, choose_up, match_markers, root_alignment
from condyle.solver.moving_trials import MovingFrames, moving_frames
from condyle.solver.observability import undetermined
from condyle.solver.person_estimate import PersonEstimate, estimate_person
from condyle.solver.person_functions import PersonFunctions
from condyle.solver.person_priors import Given, PersonPriors
from condyle.solver.person_problem import PersonProblem, PersonState
from condyle.solver.posture import Posture
from condyle.solver.results import Calibration, Fault
from condyle.solver.skin_motion import REST_SHARE, SkinMotion, skin_motion
from condyle.solver.static_faults import check_sides
from condyle.solver.upright import Upright

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

MEASUREMENT_SD = 0.001
"""m per axis, of the mean over the still part; skin is counted from there (the language's rule)."""


@one_thread
def calibrate(
    skeleton: Skeleton,
    static: Recording,
    *,
    moving: Sequence[Recording] = (),
    stature: float | None = None,
    mass: float | None = None,
    lengths: Mapping[str, float] | None = None,
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
    moving : Recordings, optional
        Trials in which the same person moves; they tell joint centres and axes.
    stature, mass : float, optional
        m and kg of this person.
    lengths : segment -> m, optional
        Measured with a tape.
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
    person = PersonFunctions(functions)
    priors = PersonPriors(skeleton, person.layout, Given(stature, lengths))
    estimate = _from_static(person, priors, mean, upright, float(alignment.scale[0]))
    sources = Sources(static, tuple(moving), still, matched, upright, stature, mass)

    def again(places: FloatArray, priors: PersonPriors = priors) -> PersonEstimate:
        return _from_static(person, priors, places[None], upright, float(alignment.scale[0]))

    faults = _faults(estimate, again, Given(stature, lengths), mean[0], bool(moving))
    faults += one_frame(still.frames.stop - still.frames.start)
    found = replace(calibrated(estimate, sources), faults=tuple(faults))
    if not moving:
        return found
    frames = moving_frames(
        found.skeleton, functions, moving, estimate.state.posture, upright, labels
    )
    estimate = estimate_person(*_with_movement(estimate, frames))
    return replace(calibrated(estimate, sources, frames), faults=tuple(faults))


def _faults(
    estimate: PersonEstimate,
    again: Callable[..., PersonEstimate],
    given: Given,
    mean: FloatArray,
    moving: bool,
) -> list[Fault]:
    """What looks wrong in the static, the gravest first; see `calibration_faults`."""
    problem = estimate.problem
    skeleton = problem.functions.functions.skeleton
    found = exchanged_markers(estimate, again)
    if not found:
        found += stray_markers(estimate)
    if given.stature is not None and skeleton.person is not None:
        loose = PersonPriors(skeleton, problem.functions.layout, Given(None, given.lengths))
        without = again(mean, loose)
        found += wrong_stature(estimate, without, given.stature, skeleton.person.stature)
    found += odd_standing(estimate) + odd_sizes(estimate)
    return found + unsure_lengths(estimate) + little_told(estimate, moving=moving)


def unsized(skeleton: Skeleton) -> Skeleton:
    """The reference person again: no sizes, nothing that a calibration found."""
    markers = tuple(replace(m, placed=None, placed_sd=None) for m in skeleton.markers)
    joints = tuple(
        replace(j, placed=None, placed_sd=None, axis_turn=None, axis_turn_sd=None)
        for j in skeleton.joints
    )
    return replace(skeleton, markers=markers, joints=joints, sizes={})


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


def _from_static(
    person: PersonFunctions,
    priors: PersonPriors,
    mean: FloatArray,
    upright: Upright,
    scale: float,
) -> PersonEstimate:
    """The estimate from the mean pose of the static alone."""
    functions = person.functions
    skeleton = functions.skeleton
    present = is_seen(mean)
    known = np.array([m.at is not None for m in skeleton.markers])
    if (present & known).sum() < 3:
        raise FitError(
            f"the static shows {int((present & known).sum())} of the markers that {skeleton.name} "
            "has a nominal place for; sizing needs at least 3.\n"
            "  Check the labels, or give --labels MAP.yaml (model marker: label in the recording)."
        )
    size = functions.kinematics.freedoms.size
    problem = PersonProblem(
        functions=person,
        measured=np.nan_to_num(mean),
        weights=np.where(present, MEASUREMENT_SD**-2, 0.0),
        standing=np.ones(1, dtype=bool),
        upright=upright,
        skin=skin_motion(functions, present, np.zeros(1, dtype=bool), np.zeros((1, size))),
        priors=priors,
        bounds=_bounds(functions, np.zeros((1, size), dtype=bool)),
    )
    vector = np.zeros(person.layout.size)
    vector[: person.layout.groups + 1] = np.log(max(scale, 0.1))
    state = _started(problem, vector, present & known)
    pins, _ = undetermined(problem.information_of_postures(state), ~problem.bounds.pinned)
    pinned = problem.bounds.pinned | pins
    problem = replace(problem, bounds=replace(problem.bounds, pinned=pinned))
    return estimate_person(problem, state)


def _started(problem: PersonProblem, vector: FloatArray, used: BoolArray) -> PersonState:
    """A cold start of the posture, everything of one size, markers free to depart."""
    functions, skeleton = problem.functions.functions, problem.functions.functions.skeleton
    within = np.array([m.placed_within for m in skeleton.markers])
    nominal, _ = problem.functions.nominal_places(vector)
    frame = FrameProblem(
        functions,
        problem.measured,
        np.where(used, 1 / (within**2 + MEASUREMENT_SD**2), 0.0),
        problem.functions.numbers(vector, nominal, problem.upright),
    )
    first = fit_cold(frame, frame.bounds()).posture
    unseen = ~frame.seen()[:, : first.scalars.shape[1]]
    scalars = np.where(unseen, _expected(skeleton), first.scalars)
    return PersonState(
        problem.bounds.inside(Posture(scalars, first.quaternions)),
        vector,
        np.zeros((len(problem.skin), 3)),
    )


def _expected(skeleton: Skeleton) -> FloatArray:
    """(scalars,) Every coordinate as expected in the static, else at rest or as held."""
    standing = skeleton.sizing.standing
    values = []
    for c in skeleton.coordinates:
        if c.follows is None:
            value = standing[c.name].value if c.name in standing else c.rest
            values.append(c.held if c.held is not None else value)
    return np.array(values)


def _bounds(functions: SkeletonFunctions, pinned: BoolArray) -> Bounds:
    """Ranges in every frame; held coordinates are pinned, and what is named."""
    free = [c for c in functions.skeleton.coordinates if c.follows is None]
    lower = np.array([c.lower if c.held is None else c.held for c in free])
    upper = np.array([c.upper if c.held is None else c.held for c in free])
    frames = len(pinned)
    return Bounds(np.tile(lower, (frames, 1)), np.tile(upper, (frames, 1)), pinned | functions.held)


def _with_movement(
    estimate: PersonEstimate, frames: MovingFrames
) -> tuple[PersonProblem, PersonState]:
    """The static's problem with frames of movement beside it, and where to start."""
    problem, state = estimate.problem, estimate.state
    functions = problem.functions.functions
    seen = is_seen(frames.positions)
    sd = np.array([marker.sd for marker in functions.skeleton.markers])
    noise = (REST_SHARE * sd) ** 2 + MEASUREMENT_SD**2
    count, size = len(seen), functions.kinematics.freedoms.size
    bounds = _bounds(functions, np.concatenate([problem.bounds.pinned, frames.pinned]))
    skin = skin_motion(
        functions,
        np.concatenate([problem.weights > 0, seen]),
        np.r_[False, np.ones(count, dtype=bool)],
        np.concatenate([np.zeros((1, size)), frames.turns]),
    )
    posture = Posture(
        np.concatenate([state.posture.scalars, frames.posture.scalars]),
        np.concatenate([state.posture.quaternions, frames.posture.quaternions]),
    )
    return replace(
        problem,
        measured=np.concatenate([problem.measured, np.nan_to_num(frames.positions)]),
        weights=np.concatenate([problem.weights, np.where(seen, 1 / noise, 0.0)]),
        standing=np.r_[True, np.zeros(count, dtype=bool)],
        skin=skin,
        bounds=bounds,
    ), PersonState(
        bounds.inside(posture), state.person, _same_places(problem.skin, skin, state.skin)
    )


def _same_places(old: SkinMotion, new: SkinMotion, found: FloatArray) -> FloatArray:
    """(rows, 3) The places found from the static, in the rows of more unknowns; the rest 0."""
    first = {int(m): row for row, m in reversed(list(enumerate(new.marker)))}
    unknowns = np.zeros((len(new), 3))
    for row, m in enumerate(old.marker):
        unknowns[first[int(m)]] = found[row]
    return unknowns
