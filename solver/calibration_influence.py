"""How much of a posture's doubt comes from calibration: sizes and marker places that are not exact.

At a frame's minimum g(q, theta) = J'W (y - p(q, theta)) = 0. By the implicit-function theorem, with H
the second derivative of the cost in Gauss-Newton's form,

    dq / dtheta = -H^-1 J'W P,   P = dp / dtheta,   covariance of q = (dq/dtheta) Gamma (dq/dtheta)'

for sizes and marker places theta with covariance Gamma; ties are rows of p with weight 1 / sd^2.
A marker's own sd says how it departs from its placed place in a frame, so nothing is counted twice.

An influence changes slowly with posture: it is worked out at some frames spread over the trial, and
covariances are interpolated between them (a mean of covariances is one again).
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from condyle.model.growth import sized_numbers
from condyle.model.skeleton import Size, Skeleton
from condyle.solver.frame_problem import FrameProblem
from condyle.solver.posture import Posture
from condyle.solver.subject_covariance import SubjectCovariance

FloatArray = NDArray[np.float64]

MOST_FRAMES = 60
"""At which the influence is worked out."""
STEP = 1e-5
"""rad, m, or of ln of a factor: central differences of marker places err by some 1e-10."""


@dataclass(frozen=True, slots=True)
class CalibrationDoubt:
    """Covariances that follow from calibration.

    Attributes
    ----------
    covariance : (frames, freedoms, freedoms)
    varying : (frames, freedoms, freedoms)
        Of what departs from the trial's mean: a constant offset has no rate.
    how : str
    """

    covariance: FloatArray
    varying: FloatArray
    how: str


def calibration_doubt(
    problem: FrameProblem,
    posture: Posture,
    own_covariance: FloatArray,
    subject: SubjectCovariance,
) -> CalibrationDoubt:
    """What calibration's covariance amounts to in each frame.

    Parameters
    ----------
    problem, posture : of the trial
    own_covariance : (frames, freedoms, freedoms)
        H^-1 of what each frame determines, 0 elsewhere.
    """
    frames = len(problem)
    rows = np.unique(np.linspace(0, frames - 1, min(frames, MOST_FRAMES)).astype(np.int64))
    influence = influences(problem.take(rows), posture.take(rows), own_covariance[rows])
    values, vectors = np.linalg.eigh(subject.matrix)
    root = vectors * np.sqrt(np.maximum(values, 0.0))
    carried = influence @ root
    told = (np.abs(influence).max(axis=2, keepdims=True) > 0).sum(axis=0)
    mean = carried.sum(axis=0) / np.maximum(told, 1)
    away = np.where(np.abs(carried).max(axis=2, keepdims=True) > 0, carried - mean, 0.0)
    return CalibrationDoubt(
        _between(rows, carried @ np.swapaxes(carried, 1, 2), frames),
        _between(rows, away @ np.swapaxes(away, 1, 2), frames),
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
    sizes = _by_size(problem, posture)
    by_size = -np.einsum("nima,ngma->nig", JW, sizes.markers)
    if len(functions.ties):
        _, tie_J = functions.ties.residuals(posture, problem.numbers)
        by_size -= np.einsum("nri,ngr,r->nig", tie_J, sizes.ties, functions.ties.sd**-2.0)
    segments = [skeleton.segment_index(marker.segment) for marker in skeleton.markers]
    turns = functions.poses(posture, problem.numbers)[:, segments, :3, :3]
    by_place = -np.einsum("niml,nmla->nima", JW, turns).reshape(frames, n, -1)
    return np.asarray(own_covariance @ np.concatenate([by_size, by_place], axis=2))


@dataclass(frozen=True, slots=True)
class _BySize:
    """Derivatives for ln of each group's factor: markers (frames, groups, markers, 3), ties (.., rows)."""

    markers: FloatArray
    ties: FloatArray


def _by_size(problem: FrameProblem, posture: Posture) -> _BySize:
    functions, skeleton = problem.functions, problem.functions.skeleton
    layout = functions.kinematics.layout
    upright = problem.numbers[layout.laboratory_from_upright].reshape(3, 3)
    markers, ties = [], []
    for group in skeleton.sizing.groups:
        ends = []
        for sign in (1.0, -1.0):
            numbers = sized_numbers(_resized(skeleton, group.members, np.exp(sign * STEP)), upright)
            places = functions.marker_positions(posture, numbers)
            ends.append((places, functions.ties.residuals(posture, numbers)[0]))
        markers.append((ends[0][0] - ends[1][0]) / (2 * STEP))
        ties.append((ends[0][1] - ends[1][1]) / (2 * STEP))
    frames, count = len(posture), len(skeleton.markers)
    return _BySize(
        np.stack(markers, axis=1) if markers else np.zeros((frames, 0, count, 3)),
        np.stack(ties, axis=1) if ties else np.zeros((frames, 0, len(functions.ties))),
    )


def _resized(skeleton: Skeleton, members: tuple[tuple[str, int], ...], times: float) -> Skeleton:
    """The skeleton with one group's factor multiplied; placed markers stay where they were placed."""
    sizes = dict(skeleton.sizes)
    for segment, axis in members:
        factors = list(sizes[segment].factors if segment in sizes else (1.0, 1.0, 1.0))
        factors[axis] *= times
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


def _between(rows: NDArray[np.int64], values: FloatArray, frames: int) -> FloatArray:
    """Values of all frames, linear between those of some rows."""
    at = np.interp(np.arange(frames), rows, np.arange(len(rows)))
    low = np.minimum(at.astype(np.int64), len(rows) - 1)
    high = np.minimum(low + 1, len(rows) - 1)
    share = (at - low)[:, None, None]
    return np.asarray((1 - share) * values[low] + share * values[high])
