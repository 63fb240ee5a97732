"""One damped step within bounds, for many problems at once: what a round of the fit asks for.

The bounds are met by a primal-dual active set inside the step (Hintermueller, Ito & Kunisch 2002,
SIAM J Optim 13:865), because clipping a finished step stops short of the minimum. Here it is in
numpy, with dense matrices; `compiled_step` does the same in C.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np
from numpy.typing import NDArray

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

MOST_SET_CHANGES = 12
"""Active-set sweeps in one step; an unfinished one is clipped, and damping repairs it later."""
LEAST_CURVATURE = 1e-8
"""Least eigenvalue of a second derivative, scaled by H's diagonal, that counts as positive."""
LEAST_DAMPING = 1e-10
LEAST_DIAGONAL = 1e-12
"""Share of the largest diagonal entry that damping acts on where a freedom has less of its own."""


@dataclass(frozen=True, slots=True)
class QuadraticModel:
    """Costs near a posture: c - g's + s'(H - bend)s / 2.

    Attributes
    ----------
    H : (n, k, k) positive semidefinite; packed for a stepper that takes it so
    g : (n, k)
    damping : (n,)
        Share of H's diagonal that is added to it.
    late : (l,) int
        Problems that get the exact second derivative wherever that is positive definite.
    bend : (l, k, k), or packed
        What H exceeds the exact second derivative by, in those.
    """

    H: FloatArray
    g: FloatArray
    damping: FloatArray
    late: IntArray
    bend: FloatArray


@dataclass(frozen=True, slots=True)
class Step:
    """Steps (n, k), active sets (n, k) int (-1 lower, +1 upper, 0 free) and predicted gains (n,)."""

    step: FloatArray
    active: IntArray
    gain: FloatArray


class Stepper(Protocol):
    """Finds the damped step, whatever computes it."""

    def __call__(
        self, model: QuadraticModel, low: FloatArray, high: FloatArray, active: IntArray
    ) -> Step:
        """Minimise each damped model with low <= s <= high (n, k), low <= 0 <= high.

        `active` is a guess of the active set; the gain is that of the model without damping.
        """


def dense_step(model: QuadraticModel, low: FloatArray, high: FloatArray, active: IntArray) -> Step:
    """The step of any problem, with dense linear algebra; see `Stepper`."""
    undamped = _second_order(model)
    damped = undamped.copy()
    own = diagonal(model.H)
    floor = np.maximum(own, LEAST_DIAGONAL * own.max(axis=1, initial=1e-300)[:, None])
    index = np.arange(own.shape[1])
    damped[:, index, index] += (model.damping[:, None] + LEAST_DAMPING) * floor
    step, active = bounded_step(damped, model.g, low, high, active)
    curved = np.einsum("ni,nij,nj->n", step, undamped, step)
    return Step(step, active, np.einsum("ni,ni->n", step, model.g) - curved / 2)


def diagonal(H: FloatArray) -> FloatArray:
    """(n, k) The diagonal of each matrix."""
    return np.asarray(np.einsum("nii->ni", H))


def _second_order(model: QuadraticModel) -> FloatArray:
    """H, in late problems made the exact second derivative wherever that is positive definite."""
    H, late = model.H, model.late
    if not len(late):
        return H
    exact = H[late] - model.bend
    own = diagonal(H[late])
    scale = np.where(own > 0, 1 / np.sqrt(np.maximum(own, np.finfo(float).tiny)), 0.0)
    unit = exact * scale[:, :, None] * scale[:, None, :]
    index = np.arange(H.shape[1])
    unit[:, index, index] += own <= 0
    definite = np.linalg.eigvalsh(unit)[:, 0] > LEAST_CURVATURE
    second = H.copy()
    second[late[definite]] = exact[definite]
    return second


def solve_masked(H: FloatArray, rhs: FloatArray, free: BoolArray) -> FloatArray:
    """Solve H x = rhs over the free entries of each problem; the others are 0."""
    scale = np.where(free, 1 / np.sqrt(np.maximum(diagonal(H), np.finfo(float).tiny)), 0.0)
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
