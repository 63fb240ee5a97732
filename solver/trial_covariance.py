"""How sure a trial's estimate is: white noise made smaller by neighbours, and error that persists.

A persisting error moves as fast as the person does, so it counts in a rate by the trial's own ratio
of rates to excursions.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from condyle.solver.block_banded import FRAMES_A_BLOCK, factored, selected_inverse, without
from condyle.solver.posture import Posture
from condyle.solver.time_derivatives import POINTS, derivatives, first_frames, formulas
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
    for result in (white, rates, accelerations):
        result *= free[:, :, None] & free[:, None, :]
    return white, rates, accelerations


def lasting_covariance(plan: TrialPlan) -> FloatArray:
    """(frames, freedoms, freedoms) The persisting part; across a gap, that of its edges."""
    # One share for all: the scatter of each freedom's own kappa would pass for persisting error.
    kappa = float(np.median(plan.evidence.kappa[plan.evidence.ratio > 0]))
    lasting = plan.own_covariance * max(1 - kappa**2, 0.0)
    frames = np.arange(len(lasting))
    variance = np.einsum("nii->ni", lasting).copy()
    known, estimated = plan.own_known, plan.estimated
    for d in np.flatnonzero((estimated & ~known).any(axis=0)):
        gap = estimated[:, d] & ~known[:, d]
        lasting[gap, d, :] = 0.0
        lasting[gap, :, d] = 0.0
        at = np.flatnonzero(known[:, d])
        lasting[gap, d, d] = np.interp(frames[gap], at, variance[at, d])
    return lasting


def quickness(plan: TrialPlan, rate: float) -> tuple[float, float]:
    """1/s and 1/s^2: how fast, beside how far, the trial's turns go (root of variance ratios)."""
    series = freedom_series(plan.problem, plan.start)
    first, second = derivatives(series, rate)
    scalars = plan.problem.functions.kinematics.freedoms.scalars
    units = {c.name: c.unit for c in plan.problem.functions.skeleton.coordinates}
    turning = np.array(
        [units[name] == "rad" for name in scalars] + [True] * (series.shape[1] - len(scalars))
    )
    spread = float(series[:, turning].var(axis=0).sum())
    if spread <= 0:
        return 0.0, 0.0
    return (
        float(np.sqrt(first[:, turning].var(axis=0).sum() / spread)),
        float(np.sqrt(second[:, turning].var(axis=0).sum() / spread)),
    )
