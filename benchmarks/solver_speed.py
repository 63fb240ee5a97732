"""Speed of the batched fit as a ratio to general-purpose optimisers on the same problem.

Usage: python benchmarks/solver_speed.py [FRAMES]

One run, interleaved rounds, medians and per-round ratios: lower limbs, made-up movement, 2 mm noise,
5 % missing, each frame fitted within its limits. The peer is scipy least_squares (trf, bounds,
analytic Jacobian from CasADi), warm-started from the previous frame's solution; it is timed on a
sample of frames and told per frame. Both must reach the same costs.
"""

from __future__ import annotations

import sys
from statistics import median
from time import perf_counter

import casadi as ca
import numpy as np
from numpy.typing import NDArray
from scipy.optimize import least_squares

from condyle.model import load_skeleton
from condyle.model.growth import sized_numbers
from condyle.solver.frame_fit import fit_frames
from condyle.solver.frame_problem import FrameProblem, SkeletonFunctions
from condyle.solver.posture import Posture

FloatArray = NDArray[np.float64]
ROUNDS, SAMPLE, NOISE, MISSING = 5, 25, 0.002, 0.05


def made_up(functions: SkeletonFunctions, frames: int) -> tuple[FrameProblem, Posture]:
    """A movement that uses half of each range, seen by noisy markers with gaps."""
    rng = np.random.default_rng(7)
    skeleton = functions.skeleton
    time = np.arange(frames) / 100.0
    free = [c for c in skeleton.coordinates if c.follows is None]
    columns = []
    for coordinate in free:
        limited = np.isfinite(coordinate.lower) and np.isfinite(coordinate.upper)
        middle = (coordinate.lower + coordinate.upper) / 2 if limited else 0.0
        half = (coordinate.upper - coordinate.lower) / 2 if limited else 0.3
        columns.append(middle + 0.5 * half * np.sin(2 * np.pi * (0.7 * time + rng.random())))
    scalars = np.column_stack(columns)
    balls = len(functions.kinematics.freedoms.balls)
    still = Posture(scalars, np.tile([1.0, 0, 0, 0], (frames, balls, 1)))
    sway = 0.3 * np.sin(2 * np.pi * (0.4 * time[:, None] + rng.random(3 * balls)))
    truth = still.after(np.concatenate([np.zeros_like(scalars), sway], axis=1))
    numbers = sized_numbers(skeleton, np.eye(3))
    seen = rng.random((frames, len(skeleton.markers))) >= MISSING
    noisy = functions.marker_positions(truth, numbers) + rng.normal(
        0, NOISE, (frames, len(skeleton.markers), 3)
    )
    sd = np.array([marker.sd for marker in skeleton.markers])
    measured = np.where(seen[..., None], noisy, 0.0)
    return FrameProblem(functions, measured, seen / sd**2, numbers), truth


def scipy_seconds(
    problem: FrameProblem, fitted: Posture, rows: NDArray[np.int64]
) -> tuple[float, FloatArray]:
    """Seconds per frame of the peer, and its costs."""
    kinematics = problem.functions.kinematics
    points, step = kinematics.perturbed_marker_positions()
    function = ca.Function(
        "points",
        [kinematics.scalars, kinematics.quaternions, kinematics.numbers, step],
        [points, ca.densify(ca.jacobian(points, step))],
    )
    bounds = problem.bounds()
    costs, seconds = [], 0.0
    for row in rows:
        base = fitted.take(np.array([max(row - 1, 0)]))
        root = np.sqrt(np.repeat(problem.weights[row], 3))
        measured = problem.measured[row].ravel()
        moving = ~bounds.pinned[row]
        count = base.scalars.shape[1]

        def evaluate(x: FloatArray, base=base, moving=moving) -> tuple[FloatArray, FloatArray]:
            full = np.zeros(len(moving))
            full[moving] = x
            here = base.after(full[None])
            p, J = function(here.scalars[0], here.quaternions[0].ravel(), problem.numbers, 0)
            return np.asarray(p).ravel(), np.asarray(J)[:, moving]

        low = np.full(len(moving), -np.inf)
        high = np.full(len(moving), np.inf)
        low[:count] = bounds.lower[row] - base.scalars[0]
        high[:count] = bounds.upper[row] - base.scalars[0]
        low, high = low[moving], np.maximum(high[moving], low[moving] + 1e-12)
        start = np.clip(0.0, low + 1e-9, high - 1e-9) * np.ones(moving.sum())
        began = perf_counter()
        found = least_squares(
            lambda x, m=measured, r=root, e=evaluate: r * (m - e(x)[0]),
            start,
            jac=lambda x, r=root, e=evaluate: -r[:, None] * e(x)[1],
            bounds=(low, high),
            method="trf",
            xtol=1e-10,
            ftol=1e-12,
            gtol=1e-10,
        )
        seconds += perf_counter() - began
        costs.append(found.cost)
    return seconds / len(rows), np.array(costs)


def main() -> None:
    frames = int(sys.argv[1]) if len(sys.argv) > 1 else 4500
    functions = SkeletonFunctions(load_skeleton("lower_limbs"))
    problem, _ = made_up(functions, frames)
    rows = np.linspace(1, frames - 1, SAMPLE).astype(np.int64)
    ours, peers, ratios, worst = [], [], [], 0.0
    for _ in range(ROUNDS):
        began = perf_counter()
        fits = fit_frames(problem)
        own = (perf_counter() - began) / frames
        peer, costs = scipy_seconds(problem, fits.posture, rows)
        ours.append(own)
        peers.append(peer)
        ratios.append(peer / own)
        worst = max(worst, float(np.max(fits.solution.cost[rows] / costs - 1)))
    print(f"lower_limbs, {frames} frames, cold start, no compiler; medians of {ROUNDS} rounds")
    print(f"  batched fit             {1e6 * median(ours):10.0f} us a frame")
    print(f"  scipy trf, warm         {1e6 * median(peers):10.0f} us a frame ({SAMPLE} frames)")
    print(
        f"  ratio                   {median(ratios):10.1f} (from {min(ratios):.1f} to {max(ratios):.1f})"
    )
    print(f"  our cost above scipy's  {worst:10.1e} relative, at most")
    print(f"  whole solve             {median(ours) * frames:10.2f} s for {frames} frames")


if __name__ == "__main__":
    main()
