"""How much of a posture's doubt comes from calibration: sizes and marker places that are not exact.

At a frame's minimum g(q, theta) = J'W (y - p(q, theta)) = 0. By the implicit-function theorem, with H
the second derivative of the cost in Gauss-Newton's form,

    dq / dtheta = -H^-1 J'W P,   P = dp / dtheta,   covariance of q = (dq/dtheta) Gamma (dq/dtheta)'

for sizes, marker places and freed joints theta with covariance Gamma; ties are rows of p with weight 1 / sd^2.
A marker's own sd says how it departs from its placed place in a frame, so nothing is counted twice.

An influence changes slowly with posture: it is worked out at some frames spread over the trial, and
covariances are interpolated between them (a mean of covariances is one again).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from functools import partial

import numpy as np
from numpy.typing import NDArray

from condyle.model.growth import sized_numbers
from condyle.model.skeleton import Size, Skeleton, Vector
from condyle.solver.covariances import Covariances
from condyle.solver.frame_problem import FrameProblem
from condyle.solver.packed_matrices import Pattern
from condyle.solver.posture import Posture
from condyle.solver.subject_covariance import (
    SubjectCovariance,
    placed_joints,
    turned_joints,
)

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

MOST_FRAMES = 60
"""At which the influence is worked out."""
STEP = 1e-5
"""rad, m, or of ln of a factor: central differences of marker places err by some 1e-10."""


@dataclass(frozen=True, slots=True)
class CalibrationDoubt:
    """Covariances that follow from calibration.

    Attributes
    ----------
    covariance : Covariances
    varying : Covariances
        Of what departs from the trial's mean: a constant offset has no rate.
    how : str
    """

    covariance: Covariances
    varying: Covariances
    how: str


def calibration_doubt(
    problem: FrameProblem,
    posture: Posture,
    own_covariance: Callable[[IntArray], FloatArray],
    subject: SubjectCovariance,
    kept: Pattern,
) -> CalibrationDoubt:
    """What calibration's covariance amounts to in each frame.

    Parameters
    ----------
    problem, posture : of the trial
    own_covariance : callable
        Of some frames, (rows, freedoms, freedoms): H^-1 of what each determines, 0 elsewhere.
    kept : Pattern
        Which entries are asked for.
    """
    frames = len(problem)
    rows = np.unique(np.linspace(0, frames - 1, min(frames, MOST_FRAMES)).astype(np.int64))
    influence = influences(problem.take(rows), posture.take(rows), own_covariance(rows))
    values, vectors = np.linalg.eigh(subject.matrix)
    root = vectors * np.sqrt(np.maximum(values, 0.0))
    carried = influence @ root
    told = (np.abs(influence).max(axis=2, keepdims=True) > 0).sum(axis=0)
    mean = carried.sum(axis=0) / np.maximum(told, 1)
    away = np.where(np.abs(carried).max(axis=2, keepdims=True) > 0, carried - mean, 0.0)
    return CalibrationDoubt(
        _between(rows, kept, carried @ np.swapaxes(carried, 1, 2), frames),
        _between(rows, kept, away @ np.swapaxes(away, 1, 2), frames),
        subject.how,
    )


def influences(problem: FrameProblem, posture: Posture, own_covariance: FloatArray) -> FloatArray:
    """(frames, freedoms, entries) dq / dtheta, entries as in `subject_covariance.entry_names`."""
    functions, skeleton = problem.functions, problem.functions.skeleton
    frames, n = own_covariance.shape[:2]
    weights = problem.weights
    J = _differences(
        lambda step: functions.marker_positions(posture.after(step), problem.numbers), frames, n
    )
    JW = J * weights[:, None, :, None]
    numbers = _by_numbers(problem, posture)
    by_number = -np.einsum("nima,ngma->nig", JW, numbers.markers)
    if len(functions.ties):
        _, tie_J = functions.ties.residuals(posture, problem.numbers)
        by_number -= np.einsum("nri,ngr,r->nig", tie_J, numbers.ties, functions.ties.sd**-2.0)
    segments = [skeleton.segment_index(marker.segment) for marker in skeleton.markers]
    turns = functions.poses(posture, problem.numbers)[:, segments, :3, :3]
    by_place = -np.einsum("niml,nmla->nima", JW, turns).reshape(frames, n, -1)
    groups = len(skeleton.sizing.groups)
    parts = [by_number[:, :, :groups], by_place, by_number[:, :, groups:]]
    return np.asarray(own_covariance @ np.concatenate(parts, axis=2))


@dataclass(frozen=True, slots=True)
class _ByNumbers:
    """Derivatives for sizes, joint centres and turns: markers (frames, n, markers, 3), ties (.., rows)."""

    markers: FloatArray
    ties: FloatArray


def _by_numbers(problem: FrameProblem, posture: Posture) -> _ByNumbers:
    functions, skeleton = problem.functions, problem.functions.skeleton
    layout = functions.kinematics.layout
    upright = problem.numbers[layout.laboratory_from_upright].reshape(3, 3)
    markers, ties = [], []
    for after in _changes(skeleton):
        ends = []
        for step in (STEP, -STEP):
            numbers = sized_numbers(after(step), upright)
            places = functions.marker_positions(posture, numbers)
            ends.append((places, functions.ties.residuals(posture, numbers)[0]))
        markers.append((ends[0][0] - ends[1][0]) / (2 * STEP))
        ties.append((ends[0][1] - ends[1][1]) / (2 * STEP))
    frames, count = len(posture), len(skeleton.markers)
    return _ByNumbers(
        np.stack(markers, axis=1) if markers else np.zeros((frames, 0, count, 3)),
        np.stack(ties, axis=1) if ties else np.zeros((frames, 0, len(functions.ties))),
    )


def _changes(skeleton: Skeleton) -> list[Callable[[float], Skeleton]]:
    """How each entry but the marker places changes the skeleton, in the order of the entries."""
    found: list[Callable[[float], Skeleton]] = [
        partial(_resized, skeleton, group.members) for group in skeleton.sizing.groups
    ]
    for joints, moved in ((placed_joints(skeleton), _moved), (turned_joints(skeleton), _turned)):
        found += [partial(moved, skeleton, j.name, axis) for j in joints for axis in range(3)]
    return found


def _moved(skeleton: Skeleton, name: str, axis: int, step: float) -> Skeleton:
    """The skeleton with one component of a joint's placed centre changed."""
    joints = [
        replace(j, placed=_stepped(j.placed, axis, step)) if j.name == name else j
        for j in skeleton.joints
    ]
    return replace(skeleton, joints=tuple(joints))


def _turned(skeleton: Skeleton, name: str, axis: int, step: float) -> Skeleton:
    """The skeleton with one component of the turn of a joint's axes changed."""
    joints = [
        replace(j, axis_turn=_stepped(j.axis_turn, axis, step)) if j.name == name else j
        for j in skeleton.joints
    ]
    return replace(skeleton, joints=tuple(joints))


def _stepped(vector: Vector | None, axis: int, step: float) -> Vector:
    values = list(vector or (0.0, 0.0, 0.0))
    values[axis] += step
    return (values[0], values[1], values[2])


def _resized(skeleton: Skeleton, members: tuple[tuple[str, int], ...], step: float) -> Skeleton:
    """The skeleton with ln of a group's factor changed; what was placed stays where it was placed."""
    sizes = dict(skeleton.sizes)
    for segment, axis in members:
        factors = list(sizes[segment].factors if segment in sizes else (1.0, 1.0, 1.0))
        factors[axis] *= np.exp(step)
        sizes[segment] = Size((factors[0], factors[1], factors[2]))
    return replace(skeleton, sizes=sizes)


def _differences(points: Callable[[FloatArray], FloatArray], frames: int, n: int) -> FloatArray:
    """(frames, n, markers, 3) Central differences of marker places for each freedom."""
    columns = []
    for k in range(n):
        step = np.zeros((frames, n))
        step[:, k] = STEP
        columns.append((points(step) - points(-step)) / (2 * STEP))
    return np.stack(columns, axis=1)


def _between(rows: IntArray, kept: Pattern, matrices: FloatArray, frames: int) -> Covariances:
    """Covariances of all frames, linear between those of some rows."""
    at = np.interp(np.arange(frames), rows, np.arange(len(rows)))
    low = np.minimum(at.astype(np.int64), len(rows) - 1)
    high = np.minimum(low + 1, len(rows) - 1)
    share, values = (at - low)[:, None], kept.packed(matrices)
    return Covariances(kept, (1 - share) * values[low] + share * values[high])
