"""Bounded Levenberg-Marquardt over many independent problems at once.

Each round takes one damped Gauss-Newton step in every unfinished problem; the bounds are met by a
primal-dual active set inside the step (Hintermueller, Ito & Kunisch 2002, SIAM J Optim 13:865),
because clipping a finished step stops short of the minimum. A :class:`Solution` can prove itself.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

from condyle.solver.posture import Posture

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

TOLERANCE = 1e-9
"""Finished when the step's predicted gain, sqrt(2 gain), is below this share of sqrt(2 cost) or of 1."""
MOST_ROUNDS = 200
MOST_SET_CHANGES = 12
"""Active-set sweeps in one step; an unfinished one is clipped, and damping repairs it later."""
NEWTON_AFTER = 5
"""Rounds of Gauss-Newton, enough where residuals are small; what is left fits badly and gets the exact
second derivative, without which convergence there is slow."""
ROUNDING = 1e-13
"""Relative rounding of a cost; a smaller gain cannot be told from none, and must not refuse a step."""
LEAST_CURVATURE = 1e-8
"""Least eigenvalue of a second derivative, scaled by H's diagonal, that counts as positive."""
LEAST_DAMPING, MOST_DAMPING = 1e-10, 1e12


class Problem(Protocol):
    """Sums of squares, one for each frame."""

    def __call__(
        self, posture: Posture, rows: IntArray
    ) -> tuple[FloatArray, FloatArray, FloatArray]:
        """H (n, k, k), g = -gradient (n, k) and cost (n,) of the frames `rows` at `posture`."""

    def curvature(self, posture: Posture, rows: IntArray) -> FloatArray:
        """(n, k, k) What to subtract from H for the cost's exact second derivative; 0 if unknown."""


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
        H, g, cost = problem(self.posture, rows)
        low, high = self.bounds.steps(self.posture)
        blocked = ((low >= 0) & (g < 0)) | ((high <= 0) & (g > 0))
        diagonal = np.maximum(_diagonal(H), np.finfo(float).tiny)
        scaled = np.where(blocked, 0.0, np.abs(g) / np.sqrt(diagonal))
        return np.asarray(scaled.max(axis=1, initial=0.0) / np.maximum(np.sqrt(2 * cost), 1.0))


def _diagonal(H: FloatArray) -> FloatArray:
    return np.asarray(np.einsum("nii->ni", H))


def _second_order(
    problem: Problem, posture: Posture, rows: IntArray, H: FloatArray, late: IntArray
) -> FloatArray:
    """H, in late rows made the exact second derivative wherever that is positive definite."""
    if not len(late):
        return H
    exact = H[late] - problem.curvature(posture.take(late), rows[late])
    scale = 1 / np.sqrt(np.maximum(_diagonal(H[late]), np.finfo(float).tiny))
    moving = _diagonal(H[late]) > 0
    scale = np.where(moving, scale, 0.0)
    unit = exact * scale[:, :, None] * scale[:, None, :]
    index = np.arange(H.shape[1])
    unit[:, index, index] += ~moving
    definite = np.linalg.eigvalsh(unit)[:, 0] > LEAST_CURVATURE
    model = H.copy()
    model[late[definite]] = exact[definite]
    return model


def solve_masked(H: FloatArray, rhs: FloatArray, free: BoolArray) -> FloatArray:
    """Solve H x = rhs over the free entries of each problem; the others are 0."""
    scale = np.where(free, 1 / np.sqrt(np.maximum(_diagonal(H), np.finfo(float).tiny)), 0.0)
    system = H * scale[:, :, None] * scale[:, None, :]
    index = np.arange(H.shape[1])
    system[:, index, index] = np.where(free, system[:, index, index], 1.0)
    return np.asarray(np.linalg.solve(system, (rhs * scale)[..., None])[..., 0] * scale)


def bounded_step(
    H: FloatArray, g: FloatArray, low: FloatArray, high: FloatArray, active: IntArray
) -> tuple[FloatArray, IntArray]:
    """Minimise s'Hs/2 - g's with low <= s <= high, for many problems at once.

    Parameters
    ----------
    H : (n, k, k) positive definite
    g, low, high : (n, k), low <= 0 <= high
    active : (n, k) int
        A guess of the active set, -1 lower, +1 upper, 0 free.

    Returns
    -------
    step (n, k), active (n, k)
    """
    step, active = np.zeros_like(g), active.copy()
    fixed = low >= high
    todo = np.arange(len(g))
    for _ in range(MOST_SET_CHANGES):
        a, lo, hi, h = active[todo], low[todo], high[todo], H[todo]
        at = np.where(a < 0, lo, np.where(a > 0, hi, 0.0))
        free = a == 0
        moved = solve_masked(h, g[todo] - np.einsum("nij,nj->ni", h, at), free) + at
        step[todo] = moved
        push = g[todo] - np.einsum("nij,nj->ni", h, moved)
        outside = np.where(moved < lo, -1, np.where(moved > hi, 1, 0))
        kept = np.where((push * a > 0) | fixed[todo], a, 0)
        new = np.where(free, outside, kept)
        active[todo] = new
        todo = todo[(new != a).any(axis=1)]
        if not len(todo):
            break
    return np.clip(step, low, high), active


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
    here = bounds.inside(start)
    rows = np.arange(len(here))
    H, g, cost = problem(here, rows)
    low, high = bounds.steps(here)
    active = np.where(low >= high, -1, np.where((low >= 0) & (g < 0), -1, 0))
    active = np.where((high <= 0) & (g > 0) & (active == 0), 1, active)
    factor = np.full(len(rows), damping)
    final, final_cost = here, cost.copy()
    final_active, rounds = active.copy(), np.zeros(len(rows), dtype=np.int64)
    converged = np.zeros(len(rows), dtype=bool)
    index = np.arange(H.shape[1])
    for _ in range(most_rounds):
        if not len(rows):
            break
        model = _second_order(problem, here, rows, H, np.flatnonzero(rounds[rows] >= NEWTON_AFTER))
        damped = model.copy()
        diagonal = _diagonal(H)
        floor = np.maximum(diagonal, 1e-12 * diagonal.max(axis=1, initial=1e-300)[:, None])
        damped[:, index, index] += (factor[:, None] + LEAST_DAMPING) * floor
        low, high = bounds.take(rows).steps(here)
        step, active = bounded_step(damped, g, low, high, active)
        gain = np.einsum("ni,ni->n", step, g) - np.einsum("ni,nij,nj->n", step, model, step) / 2
        there = bounds.take(rows).inside(here.after(step))
        new_H, new_g, new_cost = problem(there, rows)
        rounds[rows] += 1
        better = new_cost <= cost * (1 + ROUNDING)
        unclear = gain <= ROUNDING * cost
        ratio = (cost - new_cost) / np.maximum(gain, np.finfo(float).tiny)
        small = np.sqrt(2 * np.maximum(gain, 0.0)) <= tolerance * np.maximum(np.sqrt(2 * cost), 1.0)
        done = small & (factor < 1e-2)
        eased = np.where((ratio > 0.75) | unclear, factor / 10, factor)
        eased = np.where((ratio < 0.25) & ~unclear, np.maximum(factor * 4, 1e-4), eased)
        factor = np.where(better, eased, np.maximum(factor * 10, 1e-4))
        factor = np.maximum(factor, LEAST_DAMPING)
        take = better
        here = here.replaced(np.flatnonzero(take), there.take(np.flatnonzero(take)))
        H[take], g[take], cost[take] = new_H[take], new_g[take], new_cost[take]
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
