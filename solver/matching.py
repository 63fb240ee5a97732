"""A model and a recording brought together: which label is which marker, and which way is up."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from condyle.model.errors import FitError
from condyle.model.growth import sized_numbers
from condyle.model.skeleton import LABORATORY, Floating, Skeleton
from condyle.recording.labels import match_labels
from condyle.recording.precision import measurement_variance
from condyle.recording.recording import Recording, is_seen
from condyle.solver.cold_start import marker_depths
from condyle.solver.frame_problem import FrameProblem, SkeletonFunctions
from condyle.solver.rigid_alignment import Alignment, align
from condyle.solver.upright import Upright, nearest_axis, up_axis

FloatArray = NDArray[np.float64]

SCALE_LIMITS = (0.25, 4.0)
"""A person is neither a quarter nor four times the size of a model's reference person."""


@dataclass(frozen=True, slots=True)
class MatchedMarkers:
    """The recording's positions in the order of the model's markers.

    Attributes
    ----------
    positions : (frames, markers, 3) m
        NaN where missing, or where the recording has no such label.
    labels : model marker -> the label it was read from
    without_label : model markers that the recording does not have
    other_labels : labels that the model does not know
    other_positions : (frames, other labels, 3) m
    variance : (frames, markers) m^2
        Of the cameras' measurement per axis, 0 where the file says nothing of it.
    """

    positions: FloatArray
    labels: Mapping[str, str]
    without_label: tuple[str, ...]
    other_labels: tuple[str, ...]
    other_positions: FloatArray
    variance: FloatArray


def match_markers(
    skeleton: Skeleton, recording: Recording, labels: Mapping[str, str] | None = None
) -> MatchedMarkers:
    """Bring a recording into the order of a model's markers.

    Parameters
    ----------
    labels : model marker -> label in the recording, optional
        Wins over the map that a sized skeleton keeps.

    Raises
    ------
    FitError
        If no label belongs to any marker of the model.
    """
    chosen = {**skeleton.labels, **(labels or {})}
    names = skeleton.marker_names
    match = match_labels(names, recording.labels, chosen)
    positions = np.full((len(recording), len(names), 3), np.nan)
    variance = np.zeros(positions.shape[:2])
    measured = measurement_variance(recording.residuals, recording.cameras)
    found = {}
    for i, name in enumerate(names):
        column = match.columns[name]
        if column is not None:
            positions[:, i] = recording.positions[:, column]
            variance[:, i] = measured[:, column]
            found[name] = recording.labels[column]
    if not found:
        raise FitError(
            f"{recording.source}: no label of this recording is a marker of {skeleton.name}.\n"
            f"  The recording has {_some(recording.labels)}; the model has {_some(names)}. "
            "Give a map of names with --labels MAP.yaml (model marker: label in the recording)."
        )
    others = [i for i, label in enumerate(recording.labels) if label in set(match.unknown)]
    return MatchedMarkers(
        positions,
        found,
        match.missing,
        tuple(recording.labels[i] for i in others),
        recording.positions[:, others],
        variance,
    )


def _some(names: tuple[str, ...]) -> str:
    return ", ".join(names[:8]) + (f" and {len(names) - 8} more" if len(names) > 8 else "")


def needs_up(skeleton: Skeleton) -> bool:
    """Whether a model's words depend on which way is up."""
    return any(
        joint.turned == "upright"
        or (isinstance(joint.motion, Floating) and joint.parent == LABORATORY)
        for joint in skeleton.joints
    )


def choose_up(
    functions: SkeletonFunctions,
    recording: Recording,
    positions: FloatArray,
    *,
    asked: str | None,
) -> Upright:
    """The up axis: as asked, else as the subject keeps it, else as declared, else from the posture.

    Parameters
    ----------
    positions : (frames, markers, 3) m
        In the model's order; what the posture is judged from.
    asked : str or None
        What the user gave.
    """
    skeleton = functions.skeleton
    if asked is not None:
        return Upright(up_axis(asked), "as asked")
    if skeleton.up is not None:
        return Upright(up_axis(skeleton.up), "as the sized skeleton keeps it")
    if recording.up is not None:
        return Upright(up_axis(recording.up), f"as {recording.name} declares")
    if not needs_up(skeleton):
        return Upright("+Y", "not needed by this model")
    found = root_alignment(functions, positions)
    seen = is_seen(positions).sum(axis=1) >= 3
    if not seen.any():
        return Upright("+Y", "assumed: no frame shows three markers")
    axis = nearest_axis(found.rotation[seen][:, :, 1])
    return Upright(axis, f"nearest to the Y axis of {_root(skeleton)} in {recording.name}")


def _root(skeleton: Skeleton) -> str:
    roots = [j for j in skeleton.joints if j.parent == LABORATORY]
    floating = [j for j in roots if isinstance(j.motion, Floating)]
    return (floating or roots)[0].child


def root_alignment(functions: SkeletonFunctions, positions: FloatArray) -> Alignment:
    """The rigid fit of the resting model to each frame, by the root's own tree of markers."""
    skeleton = functions.skeleton
    present = is_seen(positions)
    numbers = sized_numbers(skeleton, np.eye(3))
    known = np.array([m.at is not None or m.placed is not None for m in skeleton.markers])
    problem = FrameProblem(functions, np.nan_to_num(positions), present.astype(np.float64), numbers)
    rest = problem.rest().take(np.array([0]))
    reference = functions.marker_positions(rest, numbers)[0]
    tree = marker_depths(problem, _root(skeleton)) >= 0
    return align(reference, problem.measured, (present & known & tree).astype(np.float64))


def check_scale(alignment: Alignment, recording: Recording, skeleton: Skeleton) -> None:
    """Refuse a recording whose person is not of human size beside the model.

    Raises
    ------
    FitError
        Naming the factor, and the unit that would explain it.
    """
    told = alignment.scale[alignment.points >= 3]
    scale = float(np.median(told)) if len(told) else 0.0
    if scale <= 0 or SCALE_LIMITS[0] <= scale <= SCALE_LIMITS[1]:
        return
    wrong = {"mm": "m", "m": "mm"}.get(recording.units, "another unit")
    raise FitError(
        f"{recording.source}: this person would be {scale:.3g} times the size of {skeleton.name}.\n"
        f"  The file's lengths were read as {recording.units}; they look like {wrong}. "
        "Correct POINT:UNITS in the file."
    )
