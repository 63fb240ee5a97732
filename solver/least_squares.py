"""Bounded Levenberg-Marquardt over many independent problems at once.

Each round takes one damped Gauss-Newton step within bounds (`damped_step`) in every unfinished
problem. A :class:`Solution` can prove itself.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Protocol, runtime_checkable

import numpy as np
from numpy.typing import NDArray

from condyle.solver.damped_step import (
    LEAST_DAMPING,
    QuadraticModel,
    Stepper,
    dense_step,
    diagonal,
)
from condyle.solver.posture import Posture

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

TOLERANCE = 1e-9
"""Finished when the step's predicted gain, sqrt(2 gain), is below this share of sqrt(2 cost) or of 1."""
MOST_ROUNDS = 200
NEWTON_AFTER = 5
"""Rounds of Gauss-Newton, enough where residuals are small; what is left fits badly and gets the exact
second derivative, without which convergence there is slow."""
ROUNDING = 1e-13
"""Relative rounding of a cost; a smaller gain cannot be told from none, and must not refuse a step."""
MOST_DAMPING = 1e12


class Problem(Protocol):
    """Sums of squares, one for each frame."""

    def __call__(
        self, posture: Posture, rows: IntArray
    ) -> tuple[FloatArray, FloatArray, FloatArray]:
        """H (n, k, k), g = -gradient (n, k) and cost (n,) of the frames `rows` at `posture`."""

    def curvature(self, posture: Posture, rows: IntArray) -> FloatArray:
        """(n, k, k) What to subtract from H for the cost's exact second derivative; 0 if unknown."""


@runtime_checkable
class Structured(Protocol):
    """A problem with a step finder of its own, which takes matrices in a form of its own."""

    @property
    def stepper(self) -> Stepper:
        """What finds its steps."""

    def for_stepper(
        self, posture: Posture, rows: IntArray
    ) -> tuple[FloatArray, FloatArray, FloatArray]:
        """H, g and cost as `Problem` gives them, H in the form that `stepper` takes."""

    def bend_for_stepper(self, posture: Posture, rows: IntArray) -> FloatArray:
        """The curvature in the same form."""

    def diagonal(self, H: FloatArray) -> FloatArray:
        """(n, k) The diagonals of matrices in that form."""


@dataclass(frozen=True, slots=True)
class Bounds:
    """Limits of the scalars; a freedom whose limits meet, or that is pinned, does not move.

    Attributes
    ----------
    lower, upper : (frames, scalars)
    pinned : (frames, freedoms) bool
        Freedoms that stay where they start.
    """

    lower: FloatArray
    upper: FloatArray
    pinned: BoolArray

    def take(self, rows: IntArray) -> Bounds:
        """The bounds of some frames."""
        return Bounds(self.lower[rows], self.upper[rows], self.pinned[rows])

    def steps(self, posture: Posture) -> tuple[FloatArray, FloatArray]:
        """Lowest and highest step from a posture, (frames, freedoms)."""
        low = np.full(self.pinned.shape, -np.inf)
        high = np.full(self.pinned.shape, np.inf)
        count = self.lower.shape[1]
        low[:, :count] = self.lower - posture.scalars
        high[:, :count] = self.upper - posture.scalars
        low[self.pinned] = 0.0
        high[self.pinned] = 0.0
        return np.minimum(low, 0.0), np.maximum(high, 0.0)

    def inside(self, posture: Posture) -> Posture:
        """The posture with its scalars clipped to the limits."""
        return Posture(np.clip(posture.scalars, self.lower, self.upper), posture.quaternions)


@dataclass(frozen=True, slots=True)
class Solution:
    """The minima found, with what proves them.

    Attributes
    ----------
    posture : Posture
    cost : (frames,) half the weighted sum of squares
    active : (frames, freedoms) int
        -1 at a lower limit, +1 at an upper one, 0 free; pinned freedoms count as -1.
    iterations : (frames,) int
    converged : (frames,) bool
    bounds : Bounds
    """

    posture: Posture
    cost: FloatArray
    active: IntArray
    iterations: IntArray
    converged: BoolArray
    bounds: Bounds

    def optimality(self, problem: Problem) -> FloatArray:
        """(frames,) The projected gradient in standard deviations, evaluated afresh.

        max over freedoms of |g_k| / sqrt(H_kk), relative to sqrt(2 cost) where that exceeds 1;
        components that push against a limit do not count.
        """
        rows = np.arange(len(self.posture))
        if isinstance(problem, Structured):
            H, g, cost = problem.for_stepper(self.posture, rows)
            own = problem.diagonal(H)
        else:
            H, g, cost = problem(self.posture, rows)
            own = diagonal(H)
        low, high = self.bounds.steps(self.posture)
        blocked = ((low >= 0) & (g < 0)) | ((high <= 0) & (g > 0))
        curvature = np.maximum(own, np.finfo(float).tiny)
        scaled = np.where(blocked, 0.0, np.abs(g) / np.sqrt(curvature))
        return np.asarray(scaled.max(axis=1, initial=0.0) / np.maximum(np.sqrt(2 * cost), 1.0))


def minimise(
    problem: Problem,
    start: Posture,
    bounds: Bounds,
    *,
    damping: float = 1e-8,
    tolerance: float = TOLERANCE,
    most_rounds: int = MOST_ROUNDS,
    watch: Callable[[int], None] | None = None,
) -> Solution:
    """Minimise every frame's cost from `start`, within `bounds`.

    Parameters
    ----------
    damping : float
        The first factor on the diagonal of H; large where the start is far.
    watch : callable, optional
        Told after each round how many frames are unfinished.

    Returns
    -------
    Solution
        Not converging is a value in it, never an error.
    """
    find_step, evaluate, curvature = dense_step, problem.__call__, problem.curvature
    if isinstance(problem, Structured):
        find_step, evaluate = problem.stepper, problem.for_stepper
        curvature = problem.bend_for_stepper
    here = bounds.inside(start)
    rows = np.arange(len(here))
    H, g, cost = evaluate(here, rows)
    low, high = bounds.steps(here)
    active = np.where(low >= high, -1, np.where((low >= 0) & (g < 0), -1, 0))
    active = np.where((high <= 0) & (g > 0) & (active == 0), 1, active)
    factor = np.full(len(rows), damping)
    final, final_cost = here, cost.copy()
    final_active, rounds = active.copy(), np.zeros(len(rows), dtype=np.int64)
    converged = np.zeros(len(rows), dtype=bool)
    for _ in range(most_rounds):
        if not len(rows):
            break
        late = np.flatnonzero(rounds[rows] >= NEWTON_AFTER)
        bend = curvature(here.take(late), rows[late]) if len(late) else H[:0]
        model = QuadraticModel(H, g, factor, late, bend)
        low, high = bounds.take(rows).steps(here)
        found = find_step(model, low, high, active)
        step, active, gain = found.step, found.active, found.gain
        there = bounds.take(rows).inside(here.after(step))
        new_H, new_g, new_cost = evaluate(there, rows)
        rounds[rows] += 1
        better = new_cost <= cost * (1 + ROUNDING)
        unclear = gain <= ROUNDING * cost
        with np.errstate(over="ignore"):  # next to no gain: any change is as good as infinite
            ratio = (cost - new_cost) / np.maximum(gain, np.finfo(float).tiny)
        small = np.sqrt(2 * np.maximum(gain, 0.0)) <= tolerance * np.maximum(np.sqrt(2 * cost), 1.0)
        done = small & (factor < 1e-2)
        eased = np.where((ratio > 0.75) | unclear, factor / 10, factor)
        eased = np.where((ratio < 0.25) & ~unclear, np.maximum(factor * 4, 1e-4), eased)
        factor = np.where(better, eased, np.maximum(factor * 10, 1e-4))
        factor = np.maximum(factor, LEAST_DAMPING)
        worse = np.flatnonzero(~better)
        here = there.replaced(worse, here.take(worse))
        new_H[worse], new_g[worse], new_cost[worse] = H[worse], g[worse], cost[worse]
        H, g, cost = new_H, new_g, new_cost
        final = final.replaced(rows, here)
        final_cost[rows], final_active[rows] = cost, active
        converged[rows[done]] = True
        left = np.flatnonzero(~done & (factor < MOST_DAMPING))
        if len(left) < len(rows):
            rows, here, factor, active = rows[left], here.take(left), factor[left], active[left]
            H, g, cost = H[left], g[left], cost[left]
        if watch is not None:
            watch(len(rows))
    return Solution(final, final_cost, final_active, rounds, converged, bounds)
