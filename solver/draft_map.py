"""Which label might be which marker, guessed from geometry: a draft for the user to correct.

The resting model is laid on the static's points from every heading, nearest points are paired one
to one, and the rigid fit is repeated with the pairs found (iterative closest points, Besl & McKay
1992). Names that match already stay. It is a draft: symmetric marker sets can come out turned
about, so it is written for reading, never used unread.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
from numpy.typing import NDArray
from scipy.optimize import linear_sum_assignment
from scipy.spatial.transform import Rotation

from condyle.model.growth import sized_marker_at, sized_numbers
from condyle.model.skeleton import Skeleton
from condyle.recording.recording import Recording, is_seen
from condyle.solver.frame_problem import FrameProblem, SkeletonFunctions
from condyle.solver.rigid_alignment import align
from condyle.solver.upright import Upright, up_axis

FloatArray = NDArray[np.float64]

HEADINGS = 24
MOST_ROUNDS = 30
REACH = 0.15
"""m; a label further than this from a marker's place on the laid model is no guess for it."""


def draft_labels(
    skeleton: Skeleton, static: Recording, known: Mapping[str, str], up: str | None
) -> dict[str, str]:
    """Guess a label for each marker of a skeleton from its static trial.

    Parameters
    ----------
    known : marker -> label
        Matches by name, which are kept.
    up : str or None
        The up axis as asked; else as declared; else the axis along which the points spread most.
    """
    functions = SkeletonFunctions(skeleton)
    count = len(skeleton.markers)
    numbers = sized_numbers(skeleton, np.eye(3))
    resting = FrameProblem(functions, np.zeros((1, count, 3)), np.ones((1, count)), numbers).rest()
    reference = functions.marker_positions(resting, numbers)[0]
    reference[~is_seen(sized_marker_at(skeleton))] = np.nan
    seen = static.present
    total = np.where(seen[..., None], static.positions, 0.0).sum(axis=0)
    often = seen.sum(axis=0)
    points = total / np.where(often, often, np.nan)[:, None]
    axis = up_axis(up) if up is not None else static.up or _longest_axis(points)
    turn = Upright(axis, "for a draft").laboratory_from_upright
    return draft_label_map(skeleton.marker_names, reference, static.labels, points, known, turn)


def _longest_axis(points: FloatArray) -> str:
    known = points[is_seen(points)]
    return "+" + "XYZ"[int(np.ptp(known, axis=0).argmax())] if len(known) else "+Y"


def draft_label_map(
    marker_names: tuple[str, ...],
    reference: FloatArray,
    labels: tuple[str, ...],
    points: FloatArray,
    known: Mapping[str, str],
    laboratory_from_upright: FloatArray,
) -> dict[str, str]:
    """Guess a label for each marker.

    Parameters
    ----------
    marker_names : (markers,) str
    reference : (markers, 3) m
        On the resting model, Y up; NaN where a marker has no nominal place.
    labels : (points,) str
    points : (points, 3) m
        The static's mean positions; NaN where never seen.
    known : marker -> label
        Matches by name, which are kept.
    laboratory_from_upright : (3, 3)

    Returns
    -------
    marker -> label
        With the known ones; markers without a near label are left out.
    """
    upright = points @ laboratory_from_upright
    rows = np.flatnonzero(is_seen(reference))
    columns = np.flatnonzero(is_seen(upright))
    if len(rows) < 3 or len(columns) < 3:
        return dict(known)
    model, seen = reference[rows], upright[columns]
    fixed = {
        int(np.flatnonzero(rows == marker_names.index(name))[0]): int(
            np.flatnonzero(columns == labels.index(label))[0]
        )
        for name, label in known.items()
        if marker_names.index(name) in rows and labels.index(label) in columns
    }
    best: tuple[float, NDArray[np.int64], FloatArray] | None = None
    for heading in np.arange(HEADINGS) * 360 / HEADINGS:
        turned = model @ Rotation.from_euler("y", heading, degrees=True).as_matrix().T
        for start in (_filling(turned, seen), _standing_among(turned, seen)):
            found = _laid(model, start, seen, fixed)
            if best is None or found[0] < best[0]:
                best = found
    if best is None:
        return dict(known)
    _, pairs, distance = best
    guesses = dict(known)
    for i, (column, far) in enumerate(zip(pairs, distance, strict=True)):
        if column >= 0 and far < REACH:
            guesses.setdefault(marker_names[rows[i]], labels[columns[column]])
    return guesses


def _filling(model: FloatArray, seen: FloatArray) -> FloatArray:
    """The model as tall as all points together: they are a person's whole set."""
    scale = _human(float(np.ptp(seen[:, 1])) / max(float(np.ptp(model[:, 1])), 1e-6))
    middle_of_model = (model.max(axis=0) + model.min(axis=0)) / 2
    return np.asarray(scale * (model - middle_of_model) + (seen.max(axis=0) + seen.min(axis=0)) / 2)


def _standing_among(model: FloatArray, seen: FloatArray) -> FloatArray:
    """The model in its own size on the lowest point: a part of the person, others above it."""
    height = float(np.ptp(model[:, 1]))
    low = seen[seen[:, 1] <= seen[:, 1].min() + height]
    centre, middle = low.mean(axis=0), model.mean(axis=0)
    up = seen[:, 1].min() - model[:, 1].min()
    return np.add(model, [centre[0] - middle[0], up, centre[2] - middle[2]])


def _laid(
    model: FloatArray, laid: FloatArray, seen: FloatArray, fixed: Mapping[int, int]
) -> tuple[float, NDArray[np.int64], FloatArray]:
    """Mean distance, the paired point of each marker (-1 none), and their distances."""
    pairs = np.full(len(model), -1)
    for _ in range(MOST_ROUNDS):
        new = _paired(laid, seen, fixed)
        if (new == pairs).all():
            break
        pairs = new
        has = pairs >= 0
        target = np.zeros((1, len(model), 3))
        target[0, has] = seen[pairs[has]]
        fit = align(model, target, has[None].astype(np.float64))
        scale = _human(float(fit.scale[0]))
        centre = model[has].mean(axis=0)
        laid = scale * (model - centre) @ fit.rotation[0].T + seen[pairs[has]].mean(axis=0)
    distance = np.full(len(model), np.inf)
    has = pairs >= 0
    distance[has] = np.linalg.norm(laid[has] - seen[pairs[has]], axis=1)
    return float(np.minimum(distance, REACH).mean()), pairs, distance


def _human(scale: float) -> float:
    """A scale kept between a child and a giant."""
    return min(max(scale, 0.4), 2.0)


def _paired(laid: FloatArray, seen: FloatArray, fixed: Mapping[int, int]) -> NDArray[np.int64]:
    cost = np.linalg.norm(laid[:, None] - seen[None], axis=2)
    cost = np.minimum(cost, 2 * REACH)
    for row, column in fixed.items():
        cost[row, :] = cost[:, column] = 10.0
        cost[row, column] = 0.0
    pairs = np.full(len(laid), -1)
    of, to = linear_sum_assignment(cost)
    pairs[of] = to
    return pairs
