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

from condyle.solver.block_banded import Factor, band_of_frames, factored, times, without
from condyle.solver.frame_problem import FrameProblem
from condyle.solver.least_squares import Bounds
from condyle.solver.posture import Posture
from condyle.solver.process_prior import ProcessPrior

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

TOLERANCE, NEWTON_TOLERANCE = 1e-8, 1e-6
"""Finished when the predicted gain, sqrt(2 gain), is below this share of sqrt(2 cost) or of 1. A step with the
exact second derivative squares it, so such a step need not be confirmed by another."""
MOST_ROUNDS = 60
MOST_SET_CHANGES = 12
MOST_CHORDS, SHORTER = 8, 0.1
"""Steps with one factor, and by how much each must gain less than the one before."""
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
    band = point.band(problem, prior, exact=exact)
    room = np.empty_like(band)
    while rounds < MOST_ROUNDS and damping < MOST_DAMPING and not converged:
        rounds += 1
        low, high = bounds.steps(here)
        found = _bounded_step(band, damping, point.force, low, high, active, room)
        if found is None:
            # Not near a minimum: where a frame's own second derivative bends down, turn it up.
            if exact:
                exact = False
                band = point.band(problem, prior, exact=False, room=band)
            else:
                damping = max(10 * damping, LEAST_DAMPING)
            continue
        step, active, factor = found
        gain = float(step @ point.force.ravel() - step @ times(band, step) / 2)
        there = bounds.inside(here.after(step.reshape(point.force.shape)))
        new = _Point.at(problem, prior, there)
        tolerance = NEWTON_TOLERANCE if exact else TOLERANCE
        small = _is_small(gain, point.cost, tolerance)
        ratio = (point.cost - new.cost) / gain if gain > 0 else -1.0
        if new.cost <= point.cost * (1 + ROUNDING):
            here, point, exact = there, new, True
            converged = small and damping <= LEAST_DAMPING
            if ratio > 0.5 or small:
                damping = damping / 10 if damping > LEAST_DAMPING else 0.0
            if not converged and damping == 0 and factor is not None:
                here, point, converged = _polished(
                    problem, prior, bounds, here, point, factor, active
                )
            if not converged:
                band = point.band(problem, prior, exact=True, room=band)
        elif small:
            converged = damping <= LEAST_DAMPING
            damping /= 10
        else:
            damping = max(10 * damping, LEAST_DAMPING)
        if watch is not None:
            watch(rounds)
    return SmoothSolution(
        here, point.frame_costs, active, _optimality(point, prior, bounds), rounds, converged
    )


@dataclass(frozen=True, slots=True)
class _Point:
    """F at one posture: its value, minus its gradient, and what its second derivative is made of."""

    posture: Posture
    information: FloatArray
    frame_costs: FloatArray
    cost: float
    force: FloatArray
    turns: FloatArray

    @classmethod
    def at(cls, problem: FrameProblem, prior: ProcessPrior, posture: Posture) -> _Point:
        H, g, costs = problem(posture, np.arange(len(posture)))
        differences, turns = prior.residuals(posture)
        cost = costs.sum() + (prior.weights() * differences**2).sum() / 2
        return cls(posture, H, costs, float(cost), g + prior.force(differences, turns), turns)

    def band(
        self,
        problem: FrameProblem,
        prior: ProcessPrior,
        *,
        exact: bool,
        room: FloatArray | None = None,
    ) -> FloatArray:
        """The second derivative of F, or what makes it positive definite."""
        H = self.information - problem.curvature(self.posture, np.arange(len(self.posture)))
        if not exact:
            H = _turned_up(H, self.information)
        return system_band(H, prior, self.turns, room)


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


def _polished(
    problem: FrameProblem,
    prior: ProcessPrior,
    bounds: Bounds,
    here: Posture,
    point: _Point,
    factor: Factor,
    active: IntArray,
) -> tuple[Posture, _Point, bool]:
    """Steps with the factor of the last one, as long as each is much shorter than the one before.

    Evaluating is cheap beside factoring (the chord method); what it cannot finish it leaves.
    """
    before = np.inf
    for _ in range(MOST_CHORDS):
        step = factor.solve(np.where(active != 0, 0.0, point.force).ravel())
        step = step.reshape(point.force.shape)
        low, high = bounds.steps(here)
        gain = float((step * point.force).sum() / 2)
        if gain > SHORTER * before or (step < low).any() or (step > high).any():
            break
        there = bounds.inside(here.after(step))
        new = _Point.at(problem, prior, there)
        if new.cost > point.cost * (1 + ROUNDING):
            break
        here, point, before = there, new, gain
        if _is_small(gain, point.cost, TOLERANCE):
            pushed = (active * point.force >= 0) | bounds.pinned
            return here, point, bool(pushed.all())
    return here, point, False


def system_band(
    H: FloatArray, prior: ProcessPrior, turns: FloatArray, room: FloatArray | None = None
) -> FloatArray:
    """The band of frames' blocks H (frames, n, n) with the prior's J'J."""
    reach = prior.order * H.shape[1] + (2 if turns.shape[2] else 0)
    band = band_of_frames(H, reach, room)
    prior.add_to_band(band, turns)
    return band


def _bounded_step(
    band: FloatArray,
    damping: float,
    force: FloatArray,
    low: FloatArray,
    high: FloatArray,
    active: IntArray,
    room: FloatArray,
) -> tuple[FloatArray, IntArray, Factor | None] | None:
    """Minimise s'As/2 - f's with low <= s <= high; None where A is not positive definite.

    With the step and its active set comes the factor that belongs to them, if they are settled; it
    stands in `room`, an array of the band's size.
    """
    f, lo, hi = force.ravel(), low.ravel(), high.ravel()
    a = active.ravel().copy()
    if damping:
        band = band.copy(order="F")
        band[0] += damping * np.maximum(band[0], 1e-12 * band[0].max())
    fixed_for_good = lo >= hi
    step, factor, changed = np.zeros_like(f), None, True
    for _ in range(MOST_SET_CHANGES):
        held = a != 0
        at = np.where(a < 0, lo, np.where(a > 0, hi, 0.0))
        factor = factored(without(band, held, room), in_place=True)
        if factor is None:
            return None
        rhs = np.where(held, at, f - times(band, at) if at.any() else f)
        step = factor.solve(rhs)
        push = f - times(band, step)
        outside = np.where(step < lo, -1, np.where(step > hi, 1, 0))
        kept = np.where((push * a > 0) | fixed_for_good, a, 0)
        new = np.where(held, kept, outside)
        changed = bool((new != a).any())
        a = new
        if not changed:
            break
    return np.clip(step, lo, hi), a.reshape(force.shape), None if changed else factor


def _optimality(point: _Point, prior: ProcessPrior, bounds: Bounds) -> FloatArray:
    """(frames,) |force| over the root of the second derivative's diagonal, relative to sqrt(2 cost).

    Components that push against a limit do not count; the cost is the trial's mean per frame.
    """
    low, high = bounds.steps(point.posture)
    blocked = ((low >= 0) & (point.force < 0)) | ((high <= 0) & (point.force > 0))
    diagonal = np.einsum("nii->ni", point.information)
    ratio = np.maximum(diagonal, prior.ratio[None, :])
    scaled = np.where(blocked, 0.0, np.abs(point.force))
    scaled = scaled / np.sqrt(np.maximum(ratio, np.finfo(float).tiny))
    share = max(np.sqrt(2 * point.cost / max(len(scaled), 1)), 1.0)
    return np.asarray(scaled.max(axis=1, initial=0.0) / share)
