"""What a misplaced marker does to every coordinate, before anything is recorded.

A marker that sits d (m) beside its place in the model is measured at y + R d, with R the pose of its
segment, and the fit follows it. To first order, at a frame that fits otherwise,

    change of the freedoms = A R d,  A = (J'WJ + prior)^-1 J'W

the gain of linear weighted least squares with a prior (Aitken 1935, Proc R Soc Edinburgh 55:42;
the gain matrix of Rodgers 2000, Inverse Methods for Atmospheric Sounding). J'W R d is the fit's own
gradient for a residual R d, so no Jacobian is formed here. Limits are taken as out of reach.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from condyle.model.skeleton import Skeleton
from condyle.solver.frame_problem import FrameProblem, SkeletonFunctions
from condyle.solver.observability import covariance, undetermined
from condyle.solver.posture import Posture
from condyle.solver.reported import reported_values
from condyle.solver.telling import judged_postures

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]


@dataclass(frozen=True, slots=True)
class MarkerInfluence:
    """How far each reported number follows each marker.

    Attributes
    ----------
    markers, names : tuples of str
        All markers of the model; all coordinates and reported angles.
    rate : (markers, names) rad/m or m/m
        Per metre of misplacement in the worst direction, median over the postures. NaN for a number
        that is not determined in any, and for a marker that takes no part.
    axis : (markers, names) int
        0, 1, 2: the axis of the marker's segment along which a misplacement does most (median).
    """

    markers: tuple[str, ...]
    names: tuple[str, ...]
    rate: FloatArray
    axis: NDArray[np.int64]


def marker_influence(skeleton: Skeleton, *, present: BoolArray | None = None) -> MarkerInfluence:
    """Judge what misplaced markers do, at the postures of :mod:`condyle.solver.telling`.

    Parameters
    ----------
    present : (markers,) bool, optional
        Which markers there really are; by default all that have a place.
    """
    present = np.ones(len(skeleton.markers), dtype=bool) if present is None else present
    functions = SkeletonFunctions(skeleton)
    problem, postures = judged_postures(functions, present)
    rates, lost = influence_at(functions, problem, postures)
    names = tuple(reported_values(functions.kinematics, postures))
    determined = ~lost.all(axis=0)
    known = np.where(lost[:, None, :, None], np.nan, rates)[:, :, determined]
    rate = np.full((len(skeleton.markers), len(names)), np.nan)
    rate[:, determined] = np.nanmedian(np.linalg.norm(known, axis=3), axis=0)
    axis = np.zeros(rate.shape, dtype=np.int64)
    axis[:, determined] = np.nanmedian(np.abs(known), axis=0).argmax(axis=2)
    rate[~(problem.weights > 0).any(axis=0)] = np.nan
    return MarkerInfluence(skeleton.marker_names, names, rate, axis)


def influence_at(
    functions: SkeletonFunctions, problem: FrameProblem, posture: Posture
) -> tuple[FloatArray, BoolArray]:
    """The change of every reported number for a misplacement, posture by posture.

    Parameters
    ----------
    problem : FrameProblem
        As many frames as postures; only its weights, numbers and priors are used.

    Returns
    -------
    rates : (postures, markers, names, 3) rad/m or m/m
        For a misplacement along x, y, z of the marker's segment.
    lost : (postures, names) bool
        Whether an undetermined freedom enters the number; its rate is then without meaning.
    """
    rows = np.arange(len(posture))
    H = problem.information(posture, rows)
    pinned = problem.bounds().pinned
    pins, involved = undetermined(H, ~pinned)
    involved |= ~problem.seen() & ~functions.held
    steps = np.einsum(
        "nij,nmkj->nmki",
        covariance(H, ~pinned & ~pins),
        _gradients(functions, problem, posture),
        optimize=True,
    )
    told = reported_values(functions.kinematics, posture)
    size = functions.kinematics.freedoms.size
    derivatives = np.stack(
        [rate for _, rate in told.values()] or [np.zeros((len(rows), size))], axis=1
    )[:, : len(told)]
    rates = np.einsum("nci,nmki->nmck", derivatives, steps, optimize=True)
    lost = ((derivatives != 0) & involved[:, None, :]).any(axis=2)
    return rates, lost


def _gradients(functions: SkeletonFunctions, problem: FrameProblem, posture: Posture) -> FloatArray:
    """(postures, markers, 3, freedoms) J'W R e for each axis e of each marker's segment."""
    skeleton = functions.skeleton
    count, markers = len(posture), len(skeleton.markers)
    fitted = functions.marker_positions(posture, problem.numbers)
    segments = [skeleton.segment_index(marker.segment) for marker in skeleton.markers]
    turns = functions.poses(posture, problem.numbers)[:, segments, :3, :3]
    measured = np.tile(fitted[:, None, None], (1, markers, 3, 1, 1))
    index = np.arange(markers)
    measured[:, index, :, index] += np.moveaxis(turns, 3, 2).swapaxes(0, 1)
    repeated = np.repeat(np.arange(count), 3 * markers)
    many = posture.take(repeated)
    _, gradient, _ = functions.normal_equations(
        many.scalars,
        many.quaternions,
        measured.reshape(-1, markers, 3),
        problem.weights[repeated],
        problem.numbers,
    )
    return gradient.reshape(count, markers, 3, -1)
