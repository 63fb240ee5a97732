"""From frames fitted one by one to the trial as one estimate, with two kinds of error kept apart.

A marker's sd is its whole expected error. White noise is the share kappa of it, read from the trial
(`process_evidence`), and only that is smoothed away. What remains moves with the skin and
persists in time: it is carried to the freedoms as (1 - kappa^2) C, C being a frame's own covariance,
and no number of neighbouring frames makes it smaller.

A long trial goes through in windows. What lies further from a frame than the process remembers
does not move it, so windows that overlap by that much agree where they meet.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from condyle.solver.blas_threads import one_thread
from condyle.solver.cone_limits import at_limit as ball_at_limit
from condyle.solver.covariances import Covariances, joined
from condyle.solver.frame_fit import FrameFits
from condyle.solver.frame_problem import FrameProblem
from condyle.solver.least_squares import Solution
from condyle.solver.posture import Posture
from condyle.solver.process_evidence import Evidence
from condyle.solver.trial_covariance import lasting_covariance, quickness, white_covariances
from condyle.solver.trial_plan import TrialPlan, plan_trial, rest_sds
from condyle.solver.trial_smoother import SmoothSolution, minimise_trial

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

SETTLED = 1e-7
"""A projected gradient below which a frame is at its minimum, wherever the rest of the trial is."""
WINDOW = 8000
"""Frames of a window without its overlaps: bounds the memory of a long trial."""
FORGOTTEN = 1e-7
"""Share of a disturbance that is left where windows meet."""


@dataclass(frozen=True, slots=True)
class TrialEstimate:
    """A trial's postures as one estimate.

    Attributes
    ----------
    fits : FrameFits
        Postures, what limits they are at, what is undetermined, and the covariance of the whole error.
    evidence : Evidence
    rounds : int
        Newton steps, of the window that took most.
    white : Covariances
        The part of the covariance that smoothing makes smaller.
    rate_covariance, acceleration_covariance : Covariances
    quickness : (1/s, 1/s^2)
        How fast the trial goes beside how far: what an error that moves with it has as a rate.
    """

    fits: FrameFits
    evidence: Evidence
    rounds: int
    white: Covariances
    rate_covariance: Covariances
    acceleration_covariance: Covariances
    quickness: tuple[float, float]

    def with_doubt(self, covariance: Covariances, varying: Covariances) -> TrialEstimate:
        """The estimate with more covariance, a part of it moving along."""
        speed, bend = self.quickness
        return replace(
            self,
            fits=replace(self.fits, covariance=self.fits.covariance + covariance),
            rate_covariance=self.rate_covariance + varying.times(speed**2),
            acceleration_covariance=self.acceleration_covariance + varying.times(bend**2),
        )


@one_thread
def smooth_trial(
    problem: FrameProblem,
    fits: FrameFits,
    rate: float,
    *,
    window: int = WINDOW,
    watch: Callable[[float], None] | None = None,
) -> TrialEstimate | None:
    """Estimate a trial as a whole from its frames' own fits.

    Parameters
    ----------
    rate : Hz
    window : int
        Frames estimated at once, beside what they overlap.
    watch : callable, optional
        Told the share of the work done.

    Returns
    -------
    TrialEstimate, or None where the trial is too short or shows nothing that could be smoothed
    """
    plan = plan_trial(problem, fits)
    if plan is None:
        return None
    speed, bend = quickness(plan, rate)
    parts = []
    for inner, outer in windows(len(plan), memory(plan), window):
        part = plan.window(outer)
        found = minimise_trial(part.problem, part.prior, part.start, part.bounds)
        kept = slice(inner.start - outer.start, inner.stop - outer.start)
        white, rates, accelerations = (
            covariance.take(kept) for covariance in white_covariances(part, found.posture, rate)
        )
        lasting = lasting_covariance(plan, inner)
        parts.append(
            _Part(
                _told(part, found, white + lasting, kept),
                found.rounds,
                white,
                rates + lasting.times(speed**2),
                accelerations + lasting.times(bend**2),
            )
        )
        if watch is not None:
            watch(inner.stop / len(plan))
    return _joined(plan, parts, (speed, bend))


@dataclass(frozen=True, slots=True)
class _Part:
    """What a window adds: the frames that are its own."""

    fits: FrameFits
    rounds: int
    white: Covariances
    rates: Covariances
    accelerations: Covariances


def memory(plan: TrialPlan) -> int:
    """How many frames away a disturbance is forgotten.

    Notes
    -----
    Solutions of (1 - z)^p (1 - 1/z)^p r + w = 0 decay by exp(-(w / r)^(1/2p) sin(pi/2p)) a frame, w being
    the precision of a frame; within a gap nothing is forgotten, unless by a pull.
    """
    order, ratio = plan.prior.order, plan.evidence.ratio
    variance = plan.own_covariance.variances()
    smoothed = np.flatnonzero(ratio > 0)
    typical = [np.median(v[v > 0]) for v in variance.T[smoothed]]
    across = 0.0
    pull = _pull_precisions(plan)
    gaps = plan.estimated & ~plan.own_known
    for d in np.flatnonzero(gaps.any(axis=0) & (ratio > 0)):
        pulled = _forgetting(ratio[d] / pull[d], order) if pull[d] > 0 else np.inf
        across = max(across, min(_longest_run(gaps[:, d]), pulled))
    return int(np.ceil(_forgetting(float((ratio[smoothed] * typical).max()), order) + across))


def _forgetting(ratio: float, order: int) -> float:
    """Frames, for r / w."""
    rate = ratio ** (-1 / (2 * order)) * np.sin(np.pi / (2 * order))
    return float(-np.log(FORGOTTEN) / rate)


def _pull_precisions(plan: TrialPlan) -> FloatArray:
    """(freedoms,) What a frame's pull to rest weighs; 0 where there is none."""
    share = plan.problem.pull_share
    return np.nan_to_num(rest_sds(plan.problem) ** -2 * (1.0 if share is None else share))


def _longest_run(flags: BoolArray) -> int:
    edges = np.flatnonzero(np.diff(np.r_[False, flags, False].astype(np.int8)))
    return int((edges[1::2] - edges[::2]).max(initial=0))


def windows(frames: int, overlap: int, window: int) -> list[tuple[slice, slice]]:
    """Frames that a window keeps and frames that it looks at, in order.

    A trial that is hardly longer than a window with its overlaps goes through at once.
    """
    if frames <= window + 2 * overlap:
        return [(slice(0, frames), slice(0, frames))]
    found = []
    for start in range(0, frames, window):
        stop = min(start + window, frames)
        found.append(
            (slice(start, stop), slice(max(start - overlap, 0), min(stop + overlap, frames)))
        )
    return found


def _told(
    plan: TrialPlan, found: SmoothSolution, covariance: Covariances, kept: slice
) -> FrameFits:
    """A window's own frames, with their covariances, in the words of a frame-by-frame fit."""
    bounds, frames = plan.bounds, len(plan)
    at_limit = (found.active != 0) & ~bounds.pinned
    count = bounds.lower.shape[1]
    at_limit[:, :count] &= bounds.lower < bounds.upper
    for ball in plan.problem.functions.limited_balls:
        here = plan.problem.functions.kinematics.freedoms.ball_slice(ball.ball)
        at_limit[:, here] |= ball_at_limit(ball, found.posture)[:, None]
    rows = np.arange(frames)[kept]
    solution = Solution(
        found.posture.take(rows),
        found.cost[kept],
        found.active[kept],
        np.full(len(rows), found.rounds),
        (found.converged | (found.optimality <= SETTLED))[kept],
        bounds.take(rows),
    )
    return FrameFits(
        solution, found.optimality[kept], covariance, plan.involved[kept], at_limit[kept]
    )


def _joined(plan: TrialPlan, parts: list[_Part], quick: tuple[float, float]) -> TrialEstimate:
    fits = [part.fits for part in parts]
    solutions = [fit.solution for fit in fits]
    posture = Posture(
        np.concatenate([s.posture.scalars for s in solutions]),
        np.concatenate([s.posture.quaternions for s in solutions]),
    )
    whole = FrameFits(
        Solution(
            posture,
            np.concatenate([s.cost for s in solutions]),
            np.concatenate([s.active for s in solutions]),
            np.concatenate([s.iterations for s in solutions]),
            np.concatenate([s.converged for s in solutions]),
            plan.bounds,
        ),
        np.concatenate([fit.optimality for fit in fits]),
        joined([fit.covariance for fit in fits]),
        np.concatenate([fit.involved for fit in fits]),
        np.concatenate([fit.at_limit for fit in fits]),
    )
    return TrialEstimate(
        whole,
        plan.evidence,
        max(part.rounds for part in parts),
        joined([part.white for part in parts]),
        joined([part.rates for part in parts]),
        joined([part.accelerations for part in parts]),
        quick,
    )
