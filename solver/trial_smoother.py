"""The whole trial as one estimate: frames' costs and the process between them, minimised together.

    F(q) = sum over k of c_k(q_k) + prior(q),

c_k being what a frame's own fit minimises (markers, ties, limits) and the prior that of
`process_prior`. Newton's method on the block-banded system, with the limits met by a primal-dual
active set, as in `least_squares`; one trial is one problem, so damping is one number.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from condyle.solver.covariances import all_pairs
from condyle.solver.frame_problem import FrameProblem
from condyle.solver.least_squares import Bounds
from condyle.solver.posture import Posture
from condyle.solver.process_prior import ProcessPrior
from condyle.solver.trial_system import TrialSystem

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

TOLERANCE, NEWTON_TOLERANCE = 1e-8, 1e-6
"""Finished when the predicted gain, sqrt(2 gain), is below this share of sqrt(2 cost) or of 1. A step with the
exact second derivative squares it, so such a step need not be confirmed by another; nor need one be, when the
next would be below the first share if it were only as much shorter than this as this is than the last."""
MOST_ROUNDS = 60
MOST_SET_CHANGES = 12
ROUNDING = 1e-12
LEAST_SHARE = 1e-8
"""Eigenvalue of a frame's second derivative, scaled by its information, that counts as nothing."""
LEAST_DAMPING, MOST_DAMPING = 1e-6, 1e8


@dataclass(frozen=True, slots=True)
class SmoothSolution:
    """The minimum of F, with what proves it.

    Attributes
    ----------
    posture : Posture
    cost : (frames,)
        Of each frame by itself, without the prior.
    active : (frames, freedoms) int
        -1 at a lower limit, +1 at an upper one, 0 free; pinned freedoms count as -1.
    optimality : (frames,)
        The projected gradient of F in standard deviations.
    rounds : int
    converged : bool
    """

    posture: Posture
    cost: FloatArray
    active: IntArray
    optimality: FloatArray
    rounds: int
    converged: bool


def minimise_trial(
    problem: FrameProblem,
    prior: ProcessPrior,
    start: Posture,
    bounds: Bounds,
    *,
    watch: Callable[[int], None] | None = None,
) -> SmoothSolution:
    """Minimise F from `start`, within `bounds`.

    Parameters
    ----------
    watch : callable, optional
        Told after each round how many were done.

    Returns
    -------
    SmoothSolution
        Not converging is a value in it, never an error.
    """
    here = bounds.inside(start)
    point = _Point.at(problem, prior, here)
    low, high = bounds.steps(here)
    active = np.where(low >= high, -1, np.where((low >= 0) & (point.force < 0), -1, 0))
    active = np.where((high <= 0) & (point.force > 0) & (active == 0), 1, active)
    damping, exact, converged, rounds = 0.0, True, False, 0
    gain_before = 0.0
    system = point.system(problem, prior, exact=exact)
    while rounds < MOST_ROUNDS and damping < MOST_DAMPING and not converged:
        rounds += 1
        low, high = bounds.steps(here)
        found = _bounded_step(system, damping, point.force, low, high, active)
        if found is None:
            # Not near a minimum: where a frame's own second derivative bends down, turn it up.
            if exact:
                exact = False
                system = point.system(problem, prior, exact=False)
            else:
                damping = max(10 * damping, LEAST_DAMPING)
            continue
        step, active_before, (active, gain) = found[0], active, found[1:]
        there = bounds.inside(here.after(step))
        new = _Point.at(problem, prior, there)
        small = _is_small(gain, point.cost, NEWTON_TOLERANCE if exact else TOLERANCE)
        ratio = (point.cost - new.cost) / gain if gain > 0 else -1.0
        whole = exact and damping == 0 and bool((active == active_before).all())
        if whole and gain_before > 0:
            small |= _is_small(gain * gain / gain_before, point.cost, TOLERANCE)
        gain_before = gain if whole else 0.0
        if new.cost <= point.cost * (1 + ROUNDING):
            here, point, exact = there, new, True
            converged = small and damping <= LEAST_DAMPING
            if ratio > 0.5 or small:
                damping = damping / 10 if damping > LEAST_DAMPING else 0.0
            if not converged:
                system = point.system(problem, prior, exact=True)
        elif small:
            converged = damping <= LEAST_DAMPING
            damping /= 10
        else:
            damping = max(10 * damping, LEAST_DAMPING)
        if watch is not None:
            watch(rounds)
    optimality = _optimality(problem, point, prior, bounds)
    return SmoothSolution(here, point.frame_costs, active, optimality, rounds, converged)


@dataclass(frozen=True, slots=True)
class _Point:
    """F at one posture: its value, minus its gradient, and what its second derivative is made of.

    `information` is (frames, n, n), or packed as the problem's stepper takes it.
    """

    posture: Posture
    information: FloatArray
    frame_costs: FloatArray
    cost: float
    force: FloatArray
    turns: FloatArray

    @classmethod
    def at(cls, problem: FrameProblem, prior: ProcessPrior, posture: Posture) -> _Point:
        H, g, costs = problem.for_stepper(posture, np.arange(len(posture)))
        differences, turns = prior.residuals(posture)
        cost = costs.sum() + (prior.weights() * differences**2).sum() / 2
        return cls(posture, H, costs, float(cost), g + prior.force(differences, turns), turns)

    def system(self, problem: FrameProblem, prior: ProcessPrior, *, exact: bool) -> TrialSystem:
        """The second derivative of F, or what makes it positive definite."""
        pattern = problem.functions.normal_equations.pattern
        H = self.information - problem.bend_for_stepper(self.posture, np.arange(len(self.posture)))
        if exact:
            return TrialSystem(pattern, H if H.ndim == 2 else pattern.packed(H), prior, self.turns)
        dense = [m if m.ndim == 3 else pattern.dense(m) for m in (H, self.information)]
        pattern = all_pairs(pattern.size)
        return TrialSystem(pattern, pattern.packed(_turned_up(*dense)), prior, self.turns)


def _turned_up(H: FloatArray, information: FloatArray) -> FloatArray:
    """(frames, n, n) Blocks whose negative eigenvalues, scaled by the information, are made positive."""
    diagonal = np.einsum("nii->ni", information)
    root = np.sqrt(np.maximum(diagonal, LEAST_SHARE * diagonal.max(axis=1, keepdims=True)))
    root = np.where(root > 0, root, 1.0)
    values, vectors = np.linalg.eigh(H / root[:, :, None] / root[:, None, :])
    positive = np.maximum(np.abs(values), LEAST_SHARE)
    blocks = np.einsum("nik,nk,njk->nij", vectors, positive, vectors, optimize=True)
    return np.asarray(blocks * root[:, :, None] * root[:, None, :])


def _is_small(gain: float, cost: float, tolerance: float) -> bool:
    """Whether a predicted gain is next to nothing beside the cost, or beside one sd in all."""
    return bool(np.sqrt(2 * abs(gain)) <= tolerance * max(np.sqrt(2 * cost), 1.0))


def _bounded_step(
    system: TrialSystem,
    damping: float,
    force: FloatArray,
    low: FloatArray,
    high: FloatArray,
    active: IntArray,
) -> tuple[FloatArray, IntArray, float] | None:
    """Minimise s'As/2 - f's with low <= s <= high; None where A is not positive definite.

    With the step come its active set and what it gains by the model without damping.
    """
    extra, fixed_for_good = None, low >= high
    if damping:
        diagonal = system.diagonal()
        extra = damping * np.maximum(diagonal, 1e-12 * diagonal.max())
    step = product = np.zeros_like(force)
    for _ in range(MOST_SET_CHANGES):
        held = active != 0
        at = np.where(active < 0, low, np.where(active > 0, high, 0.0))
        rhs = np.where(held, at, force - _damped(system, extra, at) if at.any() else force)
        found = system.solve(rhs, held, extra)
        if found is None:
            return None
        step, product = found, system.times(found)
        push = force - product - (0.0 if extra is None else extra * step)
        outside = np.where(step < low, -1, np.where(step > high, 1, 0))
        kept = np.where((push * active > 0) | fixed_for_good, active, 0)
        new = np.where(held, kept, outside)
        changed = bool((new != active).any())
        active = new
        if not changed:
            break
    inside = np.clip(step, low, high)
    if (inside != step).any():
        step, product = inside, system.times(inside)
    return step, active, float((step * (force - product / 2)).sum())


def _damped(system: TrialSystem, extra: FloatArray | None, x: FloatArray) -> FloatArray:
    product = system.times(x)
    return product if extra is None else product + extra * x


def _optimality(
    problem: FrameProblem, point: _Point, prior: ProcessPrior, bounds: Bounds
) -> FloatArray:
    """(frames,) |force| over the root of the second derivative's diagonal, relative to sqrt(2 cost).

    Components that push against a limit do not count; the cost is the trial's mean per frame.
    """
    low, high = bounds.steps(point.posture)
    blocked = ((low >= 0) & (point.force < 0)) | ((high <= 0) & (point.force > 0))
    ratio = np.maximum(problem.diagonal(point.information), prior.ratio[None, :])
    scaled = np.where(blocked, 0.0, np.abs(point.force))
    scaled = scaled / np.sqrt(np.maximum(ratio, np.finfo(float).tiny))
    share = max(np.sqrt(2 * point.cost / max(len(scaled), 1)), 1.0)
    return np.asarray(scaled.max(axis=1, initial=0.0) / share)
