"""A first posture for every frame when nothing is known: no guess, no neighbour, no order.

The root is laid on its own segment's markers by a rigid fit, then the marker weights are switched
on from the trunk outwards; from random poses over whole joint ranges this finds the right minimum
far more often than starting with all of them. Frames that still fit badly are tried again from
their neighbours and from random postures.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation, Slerp

from condyle.model.skeleton import LABORATORY, Floating, Joint
from condyle.solver.frame_problem import FrameProblem
from condyle.solver.least_squares import MOST_ROUNDS, TOLERANCE, Bounds, Solution, minimise
from condyle.solver.posture import Posture, quaternions_of, rotations
from condyle.solver.rigid_alignment import align

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

FRAMES_AT_ONCE = 4096
"""That are fitted together: many enough that Python's own cost is small, few enough for the cache."""
COARSE_STEP = 10
"""Every tenth frame is started cold; between two of them a person moves little."""
STAGE_ROUNDS, STAGE_TOLERANCE, STAGE_DAMPING = 15, 1e-1, 1e-3
COARSE_ROUNDS, COARSE_TOLERANCE = 30, 1e-2
"""The coarse frames only say where others start, themselves included."""
BAD_FACTOR = 3.0
"""A frame fits badly when its cost per marker exceeds this many medians."""
MOST_RESTARTS = 20
TIE_SOFTNESS = (3e-3, 3e-4, 3e-5)
"""m; a stiff tie is a narrow curved valley, so ties are tightened in steps, each from the last fit."""
LEAST_SPREAD = 1e-3
"""Singular value ratio below which a segment's markers count as lying on one line."""


def cost_per_marker(problem: FrameProblem, cost: FloatArray) -> FloatArray:
    """(frames,) Cost over the number of weighing markers."""
    return np.asarray(cost / np.maximum((problem.weights > 0).sum(axis=1), 1))


def badly_fitted(problem: FrameProblem, solution: Solution) -> IntArray:
    """Rows whose cost stands out from the trial's median, or that did not converge."""
    each = cost_per_marker(problem, solution.cost)
    told = problem.weights.any(axis=1)
    usual = np.median(each[told]) if told.any() else 0.0
    # Whitened units: 1e-6 is a thousandth of a marker's sd, the level of noise-free data.
    return np.flatnonzero((each > BAD_FACTOR * usual + 1e-6) | ~solution.converged)


def fit_cold(
    problem: FrameProblem,
    bounds: Bounds,
    *,
    seed: int = 0,
    watch: Callable[[float], None] | None = None,
) -> Solution:
    """Fit every frame without a starting guess.

    Parameters
    ----------
    problem : FrameProblem
    bounds : Bounds
    seed : int
        Of the random restarts.
    watch : callable, optional
        Told the share of the work done.
    """
    frames = len(problem)
    tell = watch or (lambda _share: None)
    rows = np.unique(np.r_[np.arange(0, frames, COARSE_STEP), frames - 1])
    coarse_problem, coarse_bounds = problem.take(rows), bounds.take(rows)
    coarse = staged(
        coarse_problem,
        coarse_bounds,
        coarse_problem.rest(),
        tolerance=COARSE_TOLERANCE,
        most_rounds=COARSE_ROUNDS,
    )
    coarse = _from_neighbours(coarse_problem, coarse_bounds, coarse)
    tell(0.2)
    start = _between(rows, coarse.posture, frames)
    start = _at_rest_where_pinned(problem, bounds, start)

    def finishing(left: int) -> None:
        tell(0.2 + 0.7 * (1 - left / frames))

    solution = tightened(problem, start, bounds, damping=1e-6, watch=finishing)
    solution = _from_neighbours(problem, bounds, solution)
    solution = _restarted(problem, bounds, solution, np.random.default_rng(seed))
    tell(1.0)
    return solution


def tightened(
    problem: FrameProblem,
    start: Posture,
    bounds: Bounds,
    *,
    damping: float,
    tolerance: float = TOLERANCE,
    most_rounds: int = MOST_ROUNDS,
    watch: Callable[[int], None] | None = None,
) -> Solution:
    """Minimise with the ties tightened step by step down to their own sd; see `minimise`.

    Parameters
    ----------
    watch : callable, optional
        Told after each round how many frames are unfinished.
    """
    frames, parts = len(problem), []
    for first in range(0, max(frames, 1), FRAMES_AT_ONCE):
        rows = np.arange(first, min(first + FRAMES_AT_ONCE, frames))
        left = frames - first - len(rows)
        parts.append(
            _tightened(
                problem.take(rows),
                start.take(rows),
                bounds.take(rows),
                damping=damping,
                tolerance=tolerance,
                most_rounds=most_rounds,
                watch=_with_more(watch, left),
            )
        )
    return parts[0] if len(parts) == 1 else _joined(parts, bounds)


def _with_more(watch: Callable[[int], None] | None, more: int) -> Callable[[int], None] | None:
    """Who is told of a part's unfinished frames, told of those of later parts as well."""
    return None if watch is None else lambda left: watch(left + more)


def _joined(parts: list[Solution], bounds: Bounds) -> Solution:
    posture = Posture(
        np.concatenate([part.posture.scalars for part in parts]),
        np.concatenate([part.posture.quaternions for part in parts]),
    )
    return Solution(
        posture,
        np.concatenate([part.cost for part in parts]),
        np.concatenate([part.active for part in parts]),
        np.concatenate([part.iterations for part in parts]),
        np.concatenate([part.converged for part in parts]),
        bounds,
    )


def _tightened(
    problem: FrameProblem,
    start: Posture,
    bounds: Bounds,
    *,
    damping: float,
    tolerance: float,
    most_rounds: int,
    watch: Callable[[int], None] | None,
) -> Solution:
    least = problem.functions.ties.sd.min(initial=np.inf)
    for softness in TIE_SOFTNESS:
        if softness > 3 * least:
            softer = problem.with_tie_softness(softness)
            start = minimise(softer, start, bounds, damping=damping, most_rounds=60).posture
            damping = 1e-8
    return minimise(
        problem,
        start,
        bounds,
        damping=damping,
        tolerance=tolerance,
        most_rounds=most_rounds,
        watch=watch,
    )


def laid_on_root_markers(problem: FrameProblem, posture: Posture) -> Posture:
    """The posture with each floating root carried onto its markers by a rigid fit."""
    for joint in problem.functions.skeleton.joints:
        if isinstance(joint.motion, Floating) and joint.parent == LABORATORY:
            posture = _lay_root(problem, posture, joint)
    return posture


def _lay_root(problem: FrameProblem, posture: Posture, joint: Joint) -> Posture:
    functions, motion = problem.functions, joint.motion
    if not isinstance(motion, Floating):
        raise TypeError(f"{joint.name} does not float")
    freedoms = functions.kinematics.freedoms
    ball = freedoms.balls.index(joint.name)
    columns = [freedoms.scalars.index(name) for name in motion.position]
    # Laid out from the same posture everywhere, with this root at the origin.
    scalars, quaternions = posture.scalars.copy(), posture.quaternions.copy()
    scalars[:, columns] = 0.0
    quaternions[:, ball] = [1.0, 0.0, 0.0, 0.0]
    at_origin = Posture(scalars[:1], quaternions[:1])
    reference = functions.marker_positions(at_origin, problem.numbers)[0]
    weights = problem.weights * _nearest_sufficient(problem, joint.child, reference)
    found = align(reference, problem.measured, weights)
    root = functions.skeleton.segment_index(joint.child)
    pose = functions.poses(at_origin, problem.numbers)[0, root]
    laboratory_from_upright = problem.numbers[
        functions.kinematics.layout.laboratory_from_upright
    ].reshape(3, 3)
    turned = laboratory_from_upright.T @ found.rotation @ laboratory_from_upright
    centre = pose[:3, 3] + pose[:3, :3] @ _in_child(problem, joint)
    moved = found.rotation @ centre + found.translation
    scalars[:, columns] = moved - centre
    quaternions[:, ball] = quaternions_of(Rotation.from_matrix(turned))
    seen = weights.sum(axis=1) > 0
    return posture.replaced(np.flatnonzero(seen), Posture(scalars[seen], quaternions[seen]))


def _in_child(problem: FrameProblem, joint: Joint) -> FloatArray:
    skeleton = problem.functions.skeleton
    index = skeleton.joints.index(joint)
    layout = problem.functions.kinematics.layout
    return problem.numbers[layout.in_child][3 * index : 3 * index + 3]


def marker_depths(problem: FrameProblem, root: str) -> IntArray:
    """(markers,) How many joints from `root`'s segment; -1 for markers of other trees."""
    skeleton = problem.functions.skeleton
    depth = {root: 0}
    for joint in skeleton.joints:
        if joint.parent in depth and joint.child not in depth:
            depth[joint.child] = depth[joint.parent] + 1
    return np.array([depth.get(m.segment, -1) for m in skeleton.markers], dtype=np.int64)


def _nearest_sufficient(problem: FrameProblem, root: str, reference: FloatArray) -> FloatArray:
    """(frames, markers) 1 for the markers nearest the root that suffice for a rigid fit."""
    depth = marker_depths(problem, root)
    chosen = np.zeros(problem.weights.shape)
    waiting = np.ones(len(problem), dtype=bool)
    for limit in range(int(depth.max(initial=0)) + 1):
        near = (depth >= 0) & (depth <= limit)
        weights = problem.weights * near
        enough = (weights > 0).sum(axis=1) >= 3
        enough &= align(reference, problem.measured, weights).spread > LEAST_SPREAD
        last = limit == depth.max(initial=0)
        now = waiting & (enough | last)
        chosen[now] = near
        waiting &= ~now
    return chosen


def staged(
    problem: FrameProblem,
    bounds: Bounds,
    start: Posture,
    *,
    tolerance: float = TOLERANCE,
    most_rounds: int = MOST_ROUNDS,
) -> Solution:
    """Fit with the marker weights switched on from the roots outwards; then as `minimise` has it."""
    posture = laid_on_root_markers(problem, start)
    depth = np.full(len(problem.functions.skeleton.markers), -1)
    for joint in problem.functions.skeleton.joints:
        if joint.parent == LABORATORY:
            depth = np.maximum(depth, marker_depths(problem, joint.child))
    for limit in range(1, int(depth.max(initial=0))):
        stage = problem.with_weights(problem.weights * (depth <= limit))
        stage = stage.with_tie_softness(TIE_SOFTNESS[0])
        posture = minimise(
            stage,
            posture,
            bounds,
            damping=STAGE_DAMPING,
            tolerance=STAGE_TOLERANCE,
            most_rounds=STAGE_ROUNDS,
        ).posture
    return tightened(
        problem,
        posture,
        bounds,
        damping=STAGE_DAMPING,
        tolerance=tolerance,
        most_rounds=most_rounds,
    )


def _better(old: Solution, rows: IntArray, new: Solution) -> Solution:
    """`old` with those of its `rows` replaced where `new` has the lower cost."""
    gained = (new.cost < old.cost[rows] * (1 - 1e-9)) | (
        new.converged & ~old.converged[rows] & (new.cost <= old.cost[rows] * (1 + 1e-9))
    )
    at, of = rows[gained], np.flatnonzero(gained)
    cost, active = old.cost.copy(), old.active.copy()
    iterations, converged = old.iterations.copy(), old.converged.copy()
    cost[at], active[at] = new.cost[of], new.active[of]
    iterations[rows] += new.iterations
    converged[at] = new.converged[of]
    posture = old.posture.replaced(at, new.posture.take(of))
    return Solution(posture, cost, active, iterations, converged, old.bounds)


def _from_neighbours(problem: FrameProblem, bounds: Bounds, solution: Solution) -> Solution:
    """Try bad frames again from the nearest frame that fits well."""
    bad = badly_fitted(problem, solution)
    good = np.setdiff1d(np.arange(len(problem)), bad)
    if not len(bad) or not len(good):
        return solution
    after = np.searchsorted(good, bad).clip(1, len(good) - 1) if len(good) > 1 else 0
    before, behind = good[after - 1], good[after]
    nearest = np.where(bad - before <= behind - bad, before, behind)
    part, limits = problem.take(bad), bounds.take(bad)
    start = _at_rest_where_pinned(part, limits, solution.posture.take(nearest))
    return _better(solution, bad, tightened(part, start, limits, damping=STAGE_DAMPING))


def _restarted(
    problem: FrameProblem, bounds: Bounds, solution: Solution, rng: np.random.Generator
) -> Solution:
    """Try bad frames again cold, then from random postures, keeping the best.

    A frame whose best cost came back twice is believed; real data has frames that fit badly
    because they are bad.
    """
    bad = badly_fitted(problem, solution)
    believed = np.zeros(len(problem), dtype=np.int64)
    for attempt in range(MOST_RESTARTS + 1):
        bad = np.intersect1d(badly_fitted(problem, solution), bad[believed[bad] < 2])
        if not len(bad):
            break
        part, limits = problem.take(bad), bounds.take(bad)
        start = part.rest() if attempt == 0 else random_posture(part, limits, rng)
        tried = staged(part, limits, start)
        again = np.abs(tried.cost - solution.cost[bad]) <= 1e-6 * solution.cost[bad]
        lower = tried.cost < solution.cost[bad] * (1 - 1e-6)
        believed[bad] = np.where(lower, 0, believed[bad] + again)
        solution = _better(solution, bad, tried)
    return solution


def random_posture(problem: FrameProblem, bounds: Bounds, rng: np.random.Generator) -> Posture:
    """A posture anywhere within the ranges, orientations anyhow; where there is no range, at rest."""
    rest = problem.rest()
    limited = np.isfinite(bounds.lower) & np.isfinite(bounds.upper)
    low = np.where(limited, bounds.lower, rest.scalars)
    high = np.where(limited, bounds.upper, rest.scalars)
    scalars = rng.uniform(low, high)
    count = rest.quaternions.shape[1]
    if not count:
        return _at_rest_where_pinned(problem, bounds, Posture(scalars, rest.quaternions))
    random = Rotation.random(len(problem) * count, rng=rng)
    quaternions = quaternions_of(random).reshape(len(problem), count, 4)
    return _at_rest_where_pinned(problem, bounds, Posture(scalars, quaternions))


def _at_rest_where_pinned(problem: FrameProblem, bounds: Bounds, posture: Posture) -> Posture:
    rest = problem.rest()
    count = rest.scalars.shape[1]
    scalars = np.where(bounds.pinned[:, :count], rest.scalars, posture.scalars)
    balls = np.asarray(bounds.pinned[:, count:].reshape(len(problem), -1, 3).all(axis=2))
    quaternions = np.where(balls[..., None], rest.quaternions, posture.quaternions)
    return Posture(scalars, quaternions)


def _between(rows: IntArray, posture: Posture, frames: int) -> Posture:
    """Postures of all frames between those of some rows, orientations along great arcs."""
    every = np.arange(frames)
    scalars = np.column_stack(
        [np.interp(every, rows, column) for column in posture.scalars.T]
    ).reshape(frames, -1)
    quaternions = np.empty((frames, posture.quaternions.shape[1], 4))
    for ball in range(quaternions.shape[1]):
        some = rotations(posture.quaternions[:, ball])
        full = some if len(rows) == 1 else Slerp(rows, some)(every)
        quaternions[:, ball] = quaternions_of(full)
    return Posture(scalars, quaternions)
