"""How sure a trial's estimate is: white noise made smaller by neighbours, and error that persists.

A persisting error moves as fast as the person does, so it counts in a rate by the trial's own ratio
of rates to excursions.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from condyle.solver.covariances import Covariances
from condyle.solver.frame_problem import FrameProblem
from condyle.solver.posture import Posture
from condyle.solver.time_derivatives import derivatives, first_frames, formulas, whole_windows
from condyle.solver.trial_plan import TrialPlan, freedom_series
from condyle.solver.trial_system import Sums, TrialSystem

FloatArray = NDArray[np.float64]

FRAMES_AT_ONCE = 512
"""Whose whole matrices are in memory together."""


def white_covariances(
    plan: TrialPlan, posture: Posture, rate: float
) -> tuple[Covariances, Covariances, Covariances]:
    """Covariances from white noise alone, of the entries that are kept of the frames' own.

    Returns
    -------
    Of the freedoms, of their rates, and of their accelerations (per s and per s^2).
    """
    kept, pattern = plan.own_covariance.pattern, plan.problem.functions.normal_equations.pattern
    _, turns = plan.prior.residuals(posture)
    system = TrialSystem(pattern, _information(plan.problem, posture), plan.prior, turns)
    rows, columns = kept.pairs.T
    found = system.covariances(
        plan.bounds.pinned,
        kept.pairs,
        plan.evidence.kappa[rows] * plan.evidence.kappa[columns],
        Sums(first_frames(len(posture)), np.stack(formulas(len(posture), rate))),
    )
    free = ~plan.bounds.pinned
    moving = whole_windows(free)
    white, rates, accelerations = (
        Covariances(kept, values).only(told)
        for values, told in zip(found, (free, moving, moving), strict=True)
    )
    return white, rates, accelerations


def _information(problem: FrameProblem, posture: Posture) -> FloatArray:
    """(frames, entries) J'WJ + prior, packed."""
    pattern = problem.functions.normal_equations.pattern
    parts = []
    for start in range(0, len(problem), FRAMES_AT_ONCE):
        rows = np.arange(start, min(start + FRAMES_AT_ONCE, len(problem)))
        parts.append(pattern.packed(problem.information(posture.take(rows), rows)))
    return np.concatenate(parts)


def lasting_covariance(plan: TrialPlan, part: slice) -> Covariances:
    """The persisting part in some frames; across a gap, that of its edges.

    Parameters
    ----------
    plan : TrialPlan
        Of the whole trial: a gap's edges may lie outside the part.
    """
    # One share for all: the scatter of each freedom's own kappa would pass for persisting error.
    kappa = float(np.median(plan.evidence.kappa[plan.evidence.ratio > 0]))
    share = max(1 - kappa**2, 0.0)
    lasting = plan.own_covariance.take(part).times(share)
    frames, known = np.arange(len(plan))[part], plan.own_known
    gaps = plan.estimated[part] & ~known[part]
    lasting = lasting.only(~gaps)
    diagonal = np.diag(lasting.pattern.position)
    for d in np.flatnonzero(gaps.any(axis=0)):
        gap = gaps[:, d]
        at = np.flatnonzero(known[:, d])
        variance = share * plan.own_covariance.values[at, diagonal[d]]
        lasting.values[gap, diagonal[d]] = np.interp(frames[gap], at, variance)
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
