"""What a trial's estimate starts from: the evidence, the gaps it may bridge, the pulls, a first posture.

Everything that looks at the whole trial is decided here, so that the estimate itself may go through
it in windows.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np
from numpy.typing import NDArray

from condyle.model.skeleton import Moves, Spherical
from condyle.solver.covariances import Covariances
from condyle.solver.frame_fit import FrameFits
from condyle.solver.frame_problem import FrameProblem
from condyle.solver.gap_bridging import (
    MOST_SD_SHIFT,
    MOST_SD_TURN,
    MarkerShare,
    bridged,
    bridged_together,
)
from condyle.solver.least_squares import Bounds
from condyle.solver.posture import Posture, continuous, held_over
from condyle.solver.process_evidence import Evidence, smoothed, weigh
from condyle.solver.process_prior import ProcessPrior, mean_reversion
from condyle.solver.time_derivatives import POINTS, ball_series

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

LEAST_WHITE = 1e-4
"""m; white noise of a marker is never taken to be smaller, however smooth an exported file is."""
FEWEST_FRAMES = 4 * POINTS
"""A shorter trial is left as its frames are."""


@dataclass(frozen=True, slots=True)
class TrialPlan:
    """What the estimate of some frames is made from.

    Attributes
    ----------
    problem : FrameProblem
        With the pulls that stationary sds amount to.
    prior : ProcessPrior
    evidence : Evidence
    estimated : (frames, freedoms) bool
        Where a freedom is told by its frame or by its neighbours.
    bounds : Bounds
    start : Posture
    own_covariance : Covariances
        Of the frames' own fits, the markers' whole sd counted.
    own_known : (frames, freedoms) bool
        Where markers or ties, and not a pull alone, say something in it.
    involved : (frames, freedoms) bool
        What nothing tells.
    """

    problem: FrameProblem
    prior: ProcessPrior
    evidence: Evidence
    estimated: BoolArray
    bounds: Bounds
    start: Posture
    own_covariance: Covariances
    own_known: BoolArray
    involved: BoolArray

    def __len__(self) -> int:
        return len(self.problem)

    def window(self, part: slice) -> TrialPlan:
        """The plan of some frames in a row."""
        rows = np.arange(len(self))[part]
        linked = self.prior.linked[part.start : part.stop - self.prior.order]
        return TrialPlan(
            self.problem.take(rows),
            replace(self.prior, linked=linked),
            self.evidence,
            self.estimated[part],
            self.bounds.take(rows),
            self.start.take(rows),
            self.own_covariance.take(part),
            self.own_known[part],
            self.involved[part],
        )


def plan_trial(problem: FrameProblem, fits: FrameFits) -> TrialPlan | None:
    """Decide what the estimate of a trial starts from; None where there is nothing to smooth."""
    if len(problem) < FEWEST_FRAMES:
        return None
    # What only a pull holds is no observation: with markers elsewhere in the trial it is bridged,
    # without any it keeps the pull as each frame's prior.
    determined = problem.shown() & ~(fits.involved | problem.functions.held)
    fits = _unwound(problem, fits, determined)
    evidence = _evidence(problem, fits, determined)
    if not (evidence.ratio > 0).any():
        return None
    bridges = _bridges(problem, evidence, determined, fits.involved)
    estimated = determined | bridges
    own = fits.solution.bounds
    return TrialPlan(
        problem.with_pull_share(_pull_share(problem, evidence)),
        ProcessPrior(evidence.order, evidence.ratio, _linked(estimated, evidence.order)),
        evidence,
        estimated,
        Bounds(own.lower, own.upper, own.pinned & ~bridges),
        _smooth_start(problem, fits, evidence, determined, bridges),
        fits.covariance,
        determined & ~own.pinned,
        fits.involved & ~estimated,
    )


def _unwound(problem: FrameProblem, fits: FrameFits, determined: BoolArray) -> FrameFits:
    """The fits, with coordinates that may go round without end freed of jumps by whole turns.

    A frame's markers do not tell whole turns, unless the coordinate drives something else.
    """
    skeleton = problem.functions.skeleton
    motions = [joint.motion for joint in skeleton.joints if isinstance(joint.motion, Moves)]
    driving = {move.follows for motion in motions for move in motion.moves}
    scalars = fits.posture.scalars.copy()
    for k, c in enumerate(c for c in skeleton.coordinates if c.follows is None):
        endless = c.unit == "rad" and not c.has_range and c.rest_sd is None
        if endless and c.name not in driving:
            told = determined[:, k]
            scalars[told, k] = np.unwrap(scalars[told, k])
    posture = replace(fits.posture, scalars=scalars)
    return replace(fits, solution=replace(fits.solution, posture=posture))


def freedom_series(problem: FrameProblem, posture: Posture, known: BoolArray) -> FloatArray:
    """(frames, freedoms) Series without jumps whose differences are those of the freedoms.

    Orientations that are not known keep the last that is: turns to rest and back do not cancel.
    """
    balls = []
    for b in range(posture.quaternions.shape[1]):
        here = problem.functions.kinematics.freedoms.ball_slice(b)
        told = np.asarray(known[:, here].all(axis=1))
        balls.append(ball_series(held_over(posture.quaternions[:, b], told)))
    return np.concatenate([posture.scalars, *balls], axis=1)


def rest_sds(problem: FrameProblem) -> FloatArray:
    """(freedoms,) rad or m; NaN where there is no pull."""
    functions = problem.functions
    freedoms = functions.kinematics.freedoms
    rest_sd = np.full(freedoms.size, np.nan)
    for k, c in enumerate(c for c in functions.skeleton.coordinates if c.follows is None):
        rest_sd[k] = np.nan if c.rest_sd is None else c.rest_sd
    for joint in functions.skeleton.joints:
        if isinstance(joint.motion, Spherical) and joint.motion.rest_sd is not None:
            here = freedoms.ball_slice(freedoms.balls.index(joint.name))
            rest_sd[here] = joint.motion.rest_sd
    return rest_sd


def _evidence(
    problem: FrameProblem,
    fits: FrameFits,
    determined: BoolArray,
) -> Evidence:
    """Weighed on freedoms where a frame determines them and no limit clips them."""
    variance = fits.covariance.variances()
    free = determined & ~fits.at_limit & (variance > 0)
    placed = problem.weights.max(axis=0)
    sd = 1 / np.sqrt(placed[placed > 0])
    series = freedom_series(problem, fits.posture, determined)
    return weigh(series, variance, free, least_kappa=LEAST_WHITE / float(np.median(sd)))


def _bridges(
    problem: FrameProblem, evidence: Evidence, determined: BoolArray, involved: BoolArray
) -> BoolArray:
    """(frames, freedoms) Where a freedom is told from its neighbours; a ball's three go together."""
    precision, pulled = evidence.ratio / evidence.kappa**2, problem.pulled()
    scalars = problem.functions.kinematics.freedoms.scalars
    units = {c.name: c.unit for c in problem.functions.skeleton.coordinates}
    result = np.zeros(determined.shape, dtype=bool)
    for d in np.flatnonzero((precision > 0) & ~determined.all(axis=0)):
        shift = d < len(scalars) and units[scalars[d]] == "m"
        most = MOST_SD_SHIFT if shift else MOST_SD_TURN
        result[:, d] = (
            ~determined[:, d]
            if pulled[d]
            else bridged(determined[:, d], precision[d], evidence.order, most)
        )
    ties = problem.functions.ties.moved_by
    balls = np.zeros((len(ties), len(problem.functions.kinematics.freedoms.balls)), dtype=bool)
    for b in range(balls.shape[1]):
        balls[problem.functions.kinematics.freedoms.ball_slice(b), b] = True
    told_in_part = involved & problem.shown() | ~determined & balls.any(axis=1)
    moves = np.column_stack([problem.functions.moves_marker, ties, balls])
    always = np.ones((len(problem), 1 + balls.shape[1]), dtype=bool)
    share = MarkerShare(moves, np.column_stack([problem.weights > 0, always]))
    return bridged_together(result, determined, told_in_part, share)


def _linked(estimated: BoolArray, order: int) -> BoolArray:
    """(frames - order, freedoms) Whether every frame of a window is estimated."""
    windows = len(estimated) - order
    linked = np.ones((windows, estimated.shape[1]), dtype=bool)
    for i in range(order + 1):
        np.logical_and(linked, estimated[i : i + windows], out=linked)
    return linked


def _pull_share(problem: FrameProblem, evidence: Evidence) -> FloatArray:
    """(freedoms,) r L rest_sd^2: what a pull weighs when `rest_sd` is a stationary sd.

    A freedom that is not smoothed keeps its pull as a frame's prior.
    """
    rest_sd = rest_sds(problem)
    share = np.ones(len(rest_sd))
    pulled = np.isfinite(rest_sd) & (evidence.ratio > 0)
    r = evidence.ratio[pulled]
    pull = mean_reversion(rest_sd[pulled], r / evidence.kappa[pulled] ** 2, evidence.order)
    share[pulled] = np.minimum(r * pull * rest_sd[pulled] ** 2, 1.0)
    return share


def _smooth_start(
    problem: FrameProblem,
    fits: FrameFits,
    evidence: Evidence,
    determined: BoolArray,
    bridges: BoolArray,
) -> Posture:
    """Each freedom smoothed by itself, gaps crossed: near enough for Newton's method.

    The frames' own postures are not: a strong prior, linearised at rotations that jump with their
    noise, asks for turns that add up along the trial.
    """
    posture, order = fits.posture, evidence.order
    scalars, quaternions = posture.scalars.copy(), posture.quaternions.copy()
    variance = fits.covariance.variances()
    weight = np.where(determined & (variance > 0), 1 / np.where(variance > 0, variance, 1.0), 0.0)
    for d in np.flatnonzero(evidence.ratio[: scalars.shape[1]] > 0):
        found = smoothed(scalars[:, d : d + 1], weight[:, d], evidence.ratio[d], order)[:, 0]
        use = determined[:, d] | bridges[:, d]
        scalars[use, d] = found[use]
    for b in range(quaternions.shape[1]):
        here = problem.functions.kinematics.freedoms.ball_slice(b)
        if not (evidence.ratio[here] > 0).all():
            continue
        told = np.asarray(determined[:, here].all(axis=1))
        components = continuous(held_over(quaternions[:, b], told))
        ratio = float(np.exp(np.log(evidence.ratio[here]).mean()))
        found = smoothed(components, weight[:, here].min(axis=1), ratio, order)
        length = np.linalg.norm(found, axis=1)
        rows = np.flatnonzero((determined | bridges)[:, here].all(axis=1) & (length > 0.5))
        quaternions[rows, b] = found[rows] / length[rows, None]
    return Posture(scalars, quaternions)
