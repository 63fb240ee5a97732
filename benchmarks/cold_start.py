"""Does the fit find the right minimum when nothing is known? Random poses over the whole joint range.

Usage: OPENBLAS_NUM_THREADS=1 python benchmarks/cold_start.py [FRAMES] [MODEL ...]

Every coordinate is drawn evenly over its range, every orientation over all turns (within its cone and
twist where it has them), so that no frame resembles the next and neighbours are of no help. The markers
are exact, or have 2 mm noise and 10 % of them missing. A frame counts as found when its cost is at most

    (1 + 1e-8) times the lowest that any start has led to, + `FLOOR`,

the starts being the truth, the fit's own answer, and `STARTS` random postures, from each of which a fit
goes with the markers switched on from the trunk outwards, and another with all of them at once. The
floor is for exact markers, whose lowest cost is rounding.
"""

from __future__ import annotations

import sys
from dataclasses import dataclass
from time import perf_counter

import numpy as np
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from condyle.model import load_skeleton
from condyle.model.growth import sized_numbers
from condyle.solver.cold_start import (
    fit_cold,
    laid_on_root_markers,
    random_posture,
    staged,
    tightened,
)
from condyle.solver.cone_limits import at_limit
from condyle.solver.frame_problem import FrameProblem, SkeletonFunctions
from condyle.solver.posture import Posture, quaternions_of

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

NOISE, MISSING = 0.002, 0.10
SHARE = 1e-8
FLOOR = 1e-12
"""In squared standard deviations: all the markers' errors together 1.4 millionths of one sd."""
STARTS = 6
WIDE = 1.0
"""rad and m; how far a coordinate without a range is drawn to either side of its rest."""


def poses_over_the_whole_range(
    functions: SkeletonFunctions, frames: int, rng: np.random.Generator
) -> Posture:
    """Postures anywhere that the joints allow."""
    free = [c for c in functions.skeleton.coordinates if c.follows is None]
    low = np.array([c.lower if np.isfinite(c.lower) else c.rest - WIDE for c in free])
    high = np.array([c.upper if np.isfinite(c.upper) else c.rest + WIDE for c in free])
    scalars = rng.uniform(low, high, (frames, len(free)))
    balls = len(functions.kinematics.freedoms.balls)
    posture = Posture(scalars, np.tile([1.0, 0.0, 0.0, 0.0], (frames, balls, 1)))
    for ball in range(balls):
        posture.quaternions[:, ball] = quaternions_of(Rotation.random(frames, rng=rng))
    for limits in functions.limited_balls:
        while (rows := np.flatnonzero(at_limit(limits, posture))).size:
            again = quaternions_of(Rotation.random(rows.size, rng=rng))
            posture.quaternions[rows, limits.ball] = again
    return posture


def seen_by_markers(
    functions: SkeletonFunctions, truth: Posture, rng: np.random.Generator, *, noisy: bool
) -> FrameProblem:
    """What the markers of these postures show, exactly or as cameras would."""
    numbers = sized_numbers(functions.skeleton, np.eye(3))
    measured = functions.marker_positions(truth, numbers)
    shape = measured.shape[:2]
    present = np.ones(shape, dtype=bool)
    if noisy:
        measured = measured + rng.normal(0, NOISE, measured.shape)
        present = rng.random(shape) >= MISSING
    sd = np.array([marker.sd for marker in functions.skeleton.markers])
    return FrameProblem(
        functions, np.where(present[..., None], measured, 0.0), present / sd**2, numbers
    )


def lowest_found(problem: FrameProblem, truth: Posture, rng: np.random.Generator) -> FloatArray:
    """(frames,) The least cost that any start but our own leads to."""
    bounds = problem.bounds()
    lowest = tightened(problem, truth, bounds, damping=1e-4).cost
    for _ in range(STARTS):
        start = random_posture(problem, bounds, rng)
        for solution in (
            staged(problem, bounds, start),
            tightened(problem, laid_on_root_markers(problem, start), bounds, damping=1e-3),
        ):
            lowest = np.minimum(lowest, solution.cost)
    return lowest


@dataclass(frozen=True, slots=True)
class Tried:
    """One row of the table: which frames were not found, by how much, and how long it took."""

    missed: IntArray
    above: FloatArray
    converged: float
    optimality: float
    seconds: float


def tried(problem: FrameProblem, truth: Posture, rng: np.random.Generator) -> Tried:
    """Fit every frame from a cold start and compare."""
    began = perf_counter()
    found = fit_cold(problem, problem.bounds())
    seconds = (perf_counter() - began) / len(problem)
    lowest = np.minimum(lowest_found(problem, truth, rng), found.cost)
    above = found.cost - lowest
    missed = np.flatnonzero(above > SHARE * lowest + FLOOR)
    worst = float(found.optimality(problem).max())
    return Tried(missed, above[missed], float(found.converged.mean()), worst, seconds)


def alone(problem: FrameProblem, truth: Posture, rng: np.random.Generator) -> Tried:
    """The same, each frame a trial of its own: no median, no neighbour, nothing to compare with."""
    bounds = problem.bounds()
    began = perf_counter()
    cost, converged, worst = np.empty(len(problem)), 0, 0.0
    for row in range(len(problem)):
        rows = np.array([row])
        one = problem.take(rows)
        found = fit_cold(one, bounds.take(rows))
        cost[row], converged = found.cost[0], converged + int(found.converged[0])
        worst = max(worst, float(found.optimality(one)[0]))
    seconds = (perf_counter() - began) / len(problem)
    lowest = np.minimum(lowest_found(problem, truth, rng), cost)
    missed = np.flatnonzero(cost - lowest > SHARE * lowest + FLOOR)
    return Tried(missed, (cost - lowest)[missed], converged / len(problem), worst, seconds)


def main() -> None:
    frames = int(sys.argv[1]) if len(sys.argv) > 1 else 1000
    models = sys.argv[2:] or ["full_body", "lower_limbs"]
    print(
        f"{'model':14s} {'markers':36s} {'frames':>7s} {'found':>8s} {'worst above':>12s} "
        f"{'converged':>10s} {'gradient':>9s} {'us a frame':>11s}"
    )
    for model in models:
        functions = SkeletonFunctions(load_skeleton(model))
        for noisy in (False, True):
            rng = np.random.default_rng(11)
            truth = poses_over_the_whole_range(functions, frames, rng)
            problem = seen_by_markers(functions, truth, rng, noisy=noisy)
            kind = "2 mm noise, 10 % missing" if noisy else "exact"
            few = np.arange(max(frames // 10, 1))
            told(model, kind, frames, tried(problem, truth, rng))
            one = alone(problem.take(few), truth.take(few), rng)
            told(model, f"{kind}, one by one", len(few), one)


def told(model: str, kind: str, frames: int, row: Tried) -> None:
    """One line of the table."""
    print(
        f"{model:14s} {kind:36s} {frames:7d} {100 * (1 - len(row.missed) / frames):7.1f}% "
        f"{row.above.max(initial=0.0):12.1e} {100 * row.converged:8.1f} % {row.optimality:9.1e} "
        f"{1e6 * row.seconds:11.0f}",
        flush=True,
    )


if __name__ == "__main__":
    main()
