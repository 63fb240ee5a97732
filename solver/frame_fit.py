"""Every frame of a trial fitted by itself: postures, what they rest on, and their uncertainty.

A frame's posture depends on that frame's markers alone; neighbours only lend starting points.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from condyle.solver.blas_threads import one_thread
from condyle.solver.cold_start import fit_cold
from condyle.solver.cone_limits import at_limit as ball_at_limit
from condyle.solver.covariances import Covariances, joined, reported_pairs
from condyle.solver.frame_problem import FrameProblem
from condyle.solver.least_squares import Bounds, Solution, minimise
from condyle.solver.observability import covariance, undetermined
from condyle.solver.packed_matrices import Pattern
from condyle.solver.posture import Posture
from condyle.solver.robust_loss import Loss

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]


FRAMES_AT_ONCE = 512
"""Whose whole matrices are in memory together."""
STAGE_TOLERANCE, STAGE_ROUNDS = 1e-3, 6
"""For the stages on the way to a robust loss, whose own minima nobody asks for."""


@dataclass(frozen=True, slots=True)
class FrameFits:
    """The frames of a trial, each fitted by itself.

    Attributes
    ----------
    solution : Solution
    optimality : (frames,)
        The projected gradient in standard deviations, evaluated afresh.
    covariance : Covariances
        (J'WJ + prior)^-1 of what is determined, whatever limit is reached; 0 elsewhere.
    involved : (frames, freedoms) bool
        Freedoms that nothing determines, by themselves or in combination.
    at_limit : (frames, freedoms) bool
    """

    solution: Solution
    optimality: FloatArray
    covariance: Covariances
    involved: BoolArray
    at_limit: BoolArray

    @property
    def posture(self) -> Posture:
        """The postures found."""
        return self.solution.posture


@one_thread
def fit_frames(
    problem: FrameProblem,
    *,
    seed: int = 0,
    kept: Pattern | None = None,
    watch: Callable[[float], None] | None = None,
) -> FrameFits:
    """Fit every frame from a cold start.

    Parameters
    ----------
    problem : FrameProblem
        With a loss, the fit by least squares is where the robust one starts.
    seed : int
        Of the random restarts.
    kept : Pattern, optional
        Which entries of the covariances are asked for; those of reported numbers by default.
    watch : callable, optional
        Told the share of the work done.
    """
    bounds = problem.bounds()
    solution = fit_cold(problem.with_loss(None), bounds, seed=seed, watch=watch)
    if problem.loss is not None:
        solution = _made_robust(problem, problem.loss, solution)
    pins, involved = _undetermined(problem, solution)
    if pins.any():
        solution = _settled(problem, solution, pins)
    unseen = ~problem.seen()
    free = ~solution.bounds.pinned
    count = solution.posture.scalars.shape[1]
    at_limit = (solution.active != 0) & free
    at_limit[:, :count] &= bounds.lower < bounds.upper
    for ball in problem.functions.limited_balls:
        here = problem.functions.kinematics.freedoms.ball_slice(ball.ball)
        at_limit[:, here] |= ball_at_limit(ball, solution.posture)[:, None]
    return FrameFits(
        solution,
        solution.optimality(problem),
        _covariances(problem, solution, kept or reported_pairs(problem.functions.kinematics)),
        (involved | unseen) & ~problem.functions.held,
        at_limit,
    )


def whole_covariances(problem: FrameProblem, solution: Solution, rows: IntArray) -> FloatArray:
    """(rows, freedoms, freedoms) What `FrameFits.covariance` keeps a part of, in some frames."""
    H = problem.information(solution.posture.take(rows), rows)
    return covariance(H, ~solution.bounds.pinned[rows])


def _covariances(problem: FrameProblem, solution: Solution, kept: Pattern) -> Covariances:
    return joined(
        [
            Covariances(kept, kept.packed(whole_covariances(problem, solution, rows)))
            for rows in _in_parts(len(problem))
        ]
    )


def _undetermined(problem: FrameProblem, solution: Solution) -> tuple[BoolArray, BoolArray]:
    """(frames, freedoms) What to pin and what takes part in what cannot be told; see `undetermined`."""
    found = [
        undetermined(
            problem.information(solution.posture.take(rows), rows), ~solution.bounds.pinned[rows]
        )
        for rows in _in_parts(len(problem))
    ]
    return np.concatenate([pins for pins, _ in found]), np.concatenate([more for _, more in found])


def _in_parts(frames: int) -> list[IntArray]:
    return np.split(np.arange(frames), range(FRAMES_AT_ONCE, frames, FRAMES_AT_ONCE))


def _made_robust(problem: FrameProblem, loss: Loss, solution: Solution) -> Solution:
    """From the least-squares fit to the loss's own minimum, stage by stage."""
    rows = np.arange(len(problem))
    largest = float(problem.squared_errors(solution.posture, rows).max(initial=0.0))
    rounds = solution.iterations
    *early, last = loss.stages(largest)
    for stage in early:
        staged = problem.with_loss(stage)
        solution = minimise(
            staged,
            solution.posture,
            solution.bounds,
            tolerance=STAGE_TOLERANCE,
            most_rounds=STAGE_ROUNDS,
        )
        rounds = rounds + solution.iterations
    solution = minimise(problem.with_loss(last), solution.posture, solution.bounds)
    rounds = rounds + solution.iterations
    return replace(solution, iterations=rounds)


def _settled(problem: FrameProblem, solution: Solution, pins: BoolArray) -> Solution:
    """Fit again the frames with undetermined combinations, one freedom of each put to rest."""
    rows = np.flatnonzero(pins.any(axis=1))
    bounds = solution.bounds
    pinned = bounds.pinned | pins
    bounds = Bounds(bounds.lower, bounds.upper, pinned)
    part, limits = problem.take(rows), bounds.take(rows)
    start = solution.posture.take(rows)
    count = start.scalars.shape[1]
    scalars = np.where(pins[rows, :count], part.rest().scalars, start.scalars)
    again = minimise(part, replace(start, scalars=scalars), limits, damping=1e-4)
    cost, active = solution.cost.copy(), solution.active.copy()
    iterations, converged = solution.iterations.copy(), solution.converged.copy()
    cost[rows], active[rows], converged[rows] = again.cost, again.active, again.converged
    iterations[rows] += again.iterations
    posture = solution.posture.replaced(rows, again.posture)
    return Solution(posture, cost, active, iterations, converged, bounds)
