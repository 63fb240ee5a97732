"""How time and memory grow with frames and with the model, and what the trial's estimate adds.

Usage: python benchmarks/solver_growth.py [MOST_FRAMES]

Each row is a process of its own: a made-up movement with 2 mm noise and 5 % missing is fitted frame by
frame from a cold start, then estimated as one. Told: microseconds a frame of each, the ratio of both
together to the first, and the memory that the process gained at most, in KB a frame.
"""

from __future__ import annotations

import resource
import subprocess
import sys
from pathlib import Path
from time import perf_counter

MODELS = ("trunk", "lower_limbs", "hand", "full_body")
FRAMES = (100, 1000, 10_000, 100_000)
MOST_FREEDOM_FRAMES = 2_500_000
"""Freedoms times frames of a row: above it a row takes minutes and says nothing new."""


def row(model: str, frames: int) -> str:
    """One measurement, in this process."""
    import numpy as np
    from solver_speed import made_up

    from condyle.model import load_skeleton
    from condyle.solver.frame_fit import fit_frames
    from condyle.solver.frame_problem import SkeletonFunctions
    from condyle.solver.trial_estimate import smooth_trial

    functions = SkeletonFunctions(load_skeleton(model))
    warm, _ = made_up(functions, 60)
    smooth_trial(warm, fit_frames(warm), 100.0)
    problem, _ = made_up(functions, frames)
    before = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    began = perf_counter()
    fits = fit_frames(problem)
    between = perf_counter()
    alone = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    estimate = smooth_trial(problem, fits, 100.0)
    ended = perf_counter()
    after = resource.getrusage(resource.RUSAGE_SELF).ru_maxrss
    first, second = (between - began) / frames, (ended - between) / frames
    converged = fits.solution.converged if estimate is None else estimate.fits.solution.converged
    return (
        f"{model:14s} {functions.kinematics.freedoms.size:8d} {frames:8d} {1e6 * first:12.0f} "
        f"{1e6 * second:12.0f} {(first + second) / first:8.1f} {(alone - before) / frames:10.1f} "
        f"{(after - before) / frames:12.1f} {100 * np.mean(converged):9.1f} %"
    )


def main() -> None:
    if len(sys.argv) == 3:
        print(row(sys.argv[1], int(sys.argv[2])))
        return
    most = int(sys.argv[1]) if len(sys.argv) > 1 else FRAMES[-1]
    print(
        f"{'model':14s} {'freedoms':>8s} {'frames':>8s} {'frames, us':>12s} {'as one, us':>12s} "
        f"{'ratio':>8s} {'KB alone':>10s} {'KB in all':>12s} {'converged':>11s}"
    )
    size = {"trunk": 12, "lower_limbs": 20, "hand": 28, "full_body": 44}
    for model in MODELS:
        for frames in FRAMES:
            if frames <= most and frames * size[model] <= MOST_FREEDOM_FRAMES:
                script = Path(__file__).resolve()
                subprocess.run(
                    [sys.executable, str(script), model, str(frames)], check=True, cwd=script.parent
                )


if __name__ == "__main__":
    main()
