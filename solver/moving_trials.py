"""What calibration takes from trials of movement: some of their frames, each with a first posture.

A person sized from the static alone is fitted to every frame; from these postures the frames are chosen
and the turns read that carry the skin. They are only where the one estimate starts.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from condyle.model.errors import FitError
from condyle.model.skeleton import Skeleton
from condyle.recording.recording import Recording, is_seen
from condyle.solver.frame_choice import MOST_FRAMES, chosen_frames
from condyle.solver.frame_fit import fit_frames
from condyle.solver.frame_problem import SkeletonFunctions
from condyle.solver.matching import check_scale, match_markers, root_alignment
from condyle.solver.posture import Posture
from condyle.solver.skin_motion import freedoms_beside, turns_since
from condyle.solver.trial_fit import frame_problem
from condyle.solver.upright import Upright

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

TOO_FAR = 0.1
"""m; a marker further than this from where the first fit expects it has another's name, or is none."""


@dataclass(frozen=True, slots=True)
class MovingFrames:
    """Chosen frames of movement.

    Attributes
    ----------
    positions : (frames, markers, 3) m, NaN where missing
    posture : Posture
    turns : (frames, freedoms)
        Since the static; 0 where nothing determines a freedom.
    pinned : (frames, freedoms) bool
        What nothing determines.
    of_all : int
        How many frames they were chosen from.
    left_out : marker -> frames in which it was further off than `TOO_FAR`
    """

    positions: FloatArray
    posture: Posture
    turns: FloatArray
    pinned: BoolArray
    of_all: int
    left_out: Mapping[str, int]


def moving_frames(
    sized: Skeleton,
    functions: SkeletonFunctions,
    trials: Sequence[Recording],
    start: Posture,
    upright: Upright,
    labels: Mapping[str, str] | None,
    most: int = MOST_FRAMES,
) -> MovingFrames:
    """The frames of some trials that calibration looks at.

    Parameters
    ----------
    sized : Skeleton
        From the static alone.
    functions : SkeletonFunctions
        Of the same model.
    start : Posture
        One frame: of the static.

    Raises
    ------
    FitError
        If a trial does not show this model's markers.
    """
    share = -(-most // len(trials))
    parts = [_of_one(sized, functions, t, start, upright, labels, share) for t in trials]
    left_out: dict[str, int] = {}
    for part in parts:
        for name, count in part.left_out.items():
            left_out[name] = left_out.get(name, 0) + count
    return MovingFrames(
        np.concatenate([part.positions for part in parts]),
        Posture(
            np.concatenate([part.posture.scalars for part in parts]),
            np.concatenate([part.posture.quaternions for part in parts]),
        ),
        np.concatenate([part.turns for part in parts]),
        np.concatenate([part.pinned for part in parts]),
        sum(part.of_all for part in parts),
        left_out,
    )


def _of_one(
    sized: Skeleton,
    functions: SkeletonFunctions,
    trial: Recording,
    start: Posture,
    upright: Upright,
    labels: Mapping[str, str] | None,
    most: int,
) -> MovingFrames:
    positions = match_markers(sized, trial, labels).positions
    check_scale(root_alignment(functions, positions), trial, sized)
    problem = frame_problem(sized, functions, positions, upright)
    if not (problem.weights > 0).any():
        raise FitError(
            f"{trial.source}: none of its frames shows a marker that the static has placed.\n"
            "  Give a trial of the same person with the same markers, or --labels MAP.yaml."
        )
    fits = fit_frames(problem)
    fitted = functions.marker_positions(fits.posture, problem.numbers)
    with np.errstate(invalid="ignore"):
        far = np.linalg.norm(positions - fitted, axis=2) > TOO_FAR
    far &= np.isfinite([m.placed is not None for m in sized.markers]) & (problem.weights > 0)
    names = sized.marker_names
    left_out = {names[m]: int(far[:, m].sum()) for m in np.flatnonzero(far.any(axis=0))}
    positions = np.where(far[..., None], np.nan, positions)
    turns = np.where(fits.involved, 0.0, turns_since(functions, fits.posture, start))
    turning = sorted({f for s in sized.segment_names for f in freedoms_beside(functions, s)})
    shown = (is_seen(positions) & ~far).sum(axis=1) * fits.solution.converged
    rows = chosen_frames(turns[:, turning], shown, most)
    return MovingFrames(
        positions[rows],
        fits.posture.take(rows),
        turns[rows],
        (fits.involved | fits.solution.bounds.pinned)[rows],
        len(trial),
        left_out,
    )
