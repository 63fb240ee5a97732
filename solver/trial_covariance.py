"""How sure a trial's estimate is: white noise made smaller by neighbours, and error that persists.

A persisting error moves as fast as the person does, so it counts in a rate by the trial's own ratio
of rates to excursions.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from condyle.solver.block_banded import FRAMES_A_BLOCK, factored, selected_inverse, without
from condyle.solver.posture import Posture
from condyle.solver.time_derivatives import (
    POINTS,
    derivatives,
    first_frames,
    formulas,
    whole_windows,
)
from condyle.solver.trial_plan import TrialPlan, freedom_series
from condyle.solver.trial_smoother import system_band

FloatArray = NDArray[np.float64]


def white_covariances(
    plan: TrialPlan, posture: Posture, rate: float
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Covariances (frames, freedoms, freedoms) from white noise alone.

    Returns
    -------
    Of the freedoms, of their rates, and of their accelerations (per s and per s^2).
    """
    frames, n = plan.bounds.pinned.shape
    H = plan.problem.information(posture, np.arange(frames))
    _, turns = plan.prior.residuals(posture)
    band = system_band(H, plan.prior, turns)
    factor = factored(without(band, plan.bounds.pinned.ravel(), band), in_place=True)
    if factor is None:
        raise np.linalg.LinAlgError("a trial's information is not positive definite")
    white, rates, accelerations = (np.zeros((frames, n, n)) for _ in range(3))
    begin = first_frames(frames)
    formula = formulas(frames, rate)
    scale = np.outer(plan.evidence.kappa, plan.evidence.kappa)
    for first, joint in selected_inverse(factor, n):
        count = len(joint) // n
        blocks = joint.reshape(count, n, count, n)
        own = range(first, min(first + FRAMES_A_BLOCK, frames))
        for k in own:
            white[k] = blocks[k - first, :, k - first] * scale
        rows = np.flatnonzero((begin >= first) & (begin < first + FRAMES_A_BLOCK))
        for result, weights in zip((rates, accelerations), formula, strict=True):
            window = np.zeros((len(rows), count))
            for w in range(POINTS):
                window[np.arange(len(rows)), begin[rows] + w - first] = weights[rows, w]
            half = np.einsum("ra,aibj->ribj", window, blocks)
            result[rows] = np.einsum("rb,ribj->rij", window, half) * scale
    free = ~plan.bounds.pinned
    moving = whole_windows(free)
    for result, told in ((white, free), (rates, moving), (accelerations, moving)):
        result *= told[:, :, None] & told[:, None, :]
    return white, rates, accelerations


def lasting_covariance(plan: TrialPlan, part: slice) -> FloatArray:
    """(frames, freedoms, freedoms) The persisting part in some frames; across a gap, that of its edges.

    Parameters
    ----------
    plan : TrialPlan
        Of the whole trial: a gap's edges may lie outside the part.
    """
    # One share for all: the scatter of each freedom's own kappa would pass for persisting error.
    kappa = float(np.median(plan.evidence.kappa[plan.evidence.ratio > 0]))
    share = max(1 - kappa**2, 0.0)
    lasting = plan.own_covariance[part] * share
    frames, known = np.arange(len(plan))[part], plan.own_known
    gaps = plan.estimated[part] & ~known[part]
    for d in np.flatnonzero(gaps.any(axis=0)):
        gap = gaps[:, d]
        lasting[gap, d, :] = 0.0
        lasting[gap, :, d] = 0.0
        at = np.flatnonzero(known[:, d])
        variance = share * plan.own_covariance[at, d, d]
        lasting[gap, d, d] = np.interp(frames[gap], at, variance)
    return lasting


def quickness(plan: TrialPlan, rate: float) -> tuple[float, float]:
    """1/s and 1/s^2: how fast, beside how far, the trial's turns go (root of variance ratios).

    Where a freedom is not told it jumps to rest, which is no movement.
    """
    series = freedom_series(plan.problem, plan.start, plan.estimated)
    told = whole_windows(plan.estimated)
    scalars = plan.problem.functions.kinematics.freedoms.scalars
    units = {c.name: c.unit for c in plan.problem.functions.skeleton.coordinates}
    turning = np.array(
        [units[name] == "rad" for name in scalars] + [True] * (series.shape[1] - len(scalars))
    )
    counted = turning & told.any(axis=0)

    def spread(values: FloatArray) -> float:
        return float(values[:, counted].var(axis=0, where=told[:, counted]).sum())

    whole = spread(series)
    if whole <= 0:
        return 0.0, 0.0
    speed, bend = (float(np.sqrt(spread(d) / whole)) for d in derivatives(series, rate))
    return speed, bend
