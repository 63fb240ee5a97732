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
from collections.abc import Callable
from time import perf_counter

import numpy as np
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from condyle.model import load_skeleton
from condyle.model.growth import sized_numbers
from condyle.solver.cold_start import fit_cold, random_posture, staged, tightened
from condyle.solver.cone_limits import outside
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
    identity = np.tile([1.0, 0, 0, 0], (frames, balls, 1))
    for ball in range(balls):
        identity[:, ball] = quaternions_of(Rotation.random(frames, rng=rng))
    return Posture(scalars, identity)
