"""Small skeletons, recordings and postures that the tests of several layers share."""

from __future__ import annotations

import os
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from condyle.model import load_skeleton
from condyle.model.skeleton import Skeleton
from condyle.recording.recording import Recording
from condyle.solver.frame_problem import FrameProblem, SkeletonFunctions
from condyle.solver.least_squares import Bounds
from condyle.solver.posture import Posture

FloatArray = NDArray[np.float64]
ROOT = Path(__file__).resolve().parents[1]

# Every kind of joint: floating roots, spherical, free and following moves of rotation and
# translation, one coordinate that drives two branches, `turned`, `in_child`, random axes.
TREE = """\
condyle: 1
name: tree
person: {stature: 1.7, mass: 70}
segments:
  trunk: {landmarks: {top: [0.02, 0.5, 0.01]}, length: [[0, 0, 0], top]}
  arm: {}
  forearm: {}
  hand: {}
  leg: {}
  plate: {}
  stick: {}
joints:
  root:
    from: laboratory
    to: trunk
    at: [0.1, -0.2, 0.3]
    in_child: [0.02, 0.05, -0.03]
    floating: {position: [px, py, pz], angles: {sequence: [y, x, -z], names: [turn, side, tilt]}}
  shoulder:
    from: trunk
    to: arm
    at: [0.03, 0.4, 0.2]
    in_child: [0.01, 0.02, -0.01]
    turned: {axis: [1, 2, -1], angle: 35}
    spherical: {angles: {sequence: [y, -x, y], names: [plane, elevation, axial]}}
  elbow:
    from: arm
    to: forearm
    at: [0.02, -0.3, 0.01]
    in_child: [0, 0.03, 0.01]
    turned: {axis: [0.2, -1, 0.4], angle: -20}
    moves:
      - {rotate: [0.3, -0.2, 1], coordinate: bend, range: [-10, 140], rest: 20}
      - {translate: [1, 0.5, 0], follows: bend, spline: [[0, 0], [40, 0.02], [90, 0.01], [130, -0.03]]}
      - {rotate: y, coordinate: twist, follows: bend, polynomial: [2, 0.3, -0.001], between: [0, 120]}
      - {translate: [0, 1, 0.2], coordinate: slide, range: [-0.05, 0.08]}
  wrist:
    from: forearm
    to: hand
    at: [0, -0.25, 0]
    moves:
      - {rotate: x, follows: twist, polynomial: [0, 0.5]}
      - {rotate: [0.1, 0.2, -1], coordinate: shared, range: [-40, 60]}
  hip:
    from: trunk
    to: leg
    at: [0.01, -0.05, 0.1]
    moves:
      - {rotate: -z, coordinate: swing, range: [-30, 120]}
      - {rotate: [1, 0.1, 0], coordinate: shared}
      - {translate: z, follows: shared, polynomial: [0.01, 0.0004]}
      - {rotate: y, coordinate: spin, range: [-40, 40]}
  glued: {from: leg, to: plate, at: [0, -0.4, 0], turned: {axis: y, angle: 90}, fixed: true}
  thrown:
    from: laboratory
    to: stick
    floating: {position: [sx, sy, sz], angles: {sequence: [z, x, y], names: [s1, s2, s3]}}
markers:
  trunk_1: {segment: trunk, at: [0.12, 0.1, 0.05]}
  trunk_2: {segment: trunk, at: [-0.1, 0.3, 0.02]}
  trunk_3: {segment: trunk, at: [0.02, 0.5, -0.12]}
  trunk_4: {segment: trunk, at: [0.05, 0.0, 0.15]}
  arm_1: {segment: arm, at: [0.05, -0.1, 0.02]}
  arm_2: {segment: arm, at: [-0.03, -0.2, 0.06]}
  arm_3: {segment: arm, at: [0.01, -0.3, -0.05], sd: 0.012}
  forearm_1: {segment: forearm, at: [0.04, -0.05, 0.01]}
  forearm_2: {segment: forearm, at: [-0.02, -0.15, 0.05]}
  forearm_3: {segment: forearm, at: [0.01, -0.24, -0.04]}
  hand_1: {segment: hand, at: [0.03, -0.05, 0.01]}
  hand_2: {segment: hand, at: [-0.03, -0.09, 0.03]}
  leg_1: {segment: leg, at: [0.05, -0.1, 0.05]}
  leg_2: {segment: leg, at: [-0.05, -0.25, 0.02], sd: 0.003}
  plate_1: {segment: plate, at: [0.02, -0.1, 0.08]}
  plate_2: {segment: plate, at: [-0.05, 0.02, 0.03]}
  stick_1: {segment: stick, at: [0.2, 0.02, 0.01]}
  stick_2: {segment: stick, at: [-0.2, 0.05, 0]}
  stick_3: {segment: stick, at: [0, -0.05, 0.1]}
  stick_4: {segment: stick, at: [0.05, 0.1, -0.1]}
"""


@pytest.fixture(scope="session")
def skeleton_of(tmp_path_factory: pytest.TempPathFactory) -> Callable[[str], Skeleton]:
    """A skeleton from the text of its model."""

    def read(text: str) -> Skeleton:
        path = tmp_path_factory.mktemp("models") / "model.yaml"
        path.write_text(text)
        return load_skeleton(path)

    return read


@pytest.fixture(scope="session")
def tree(skeleton_of: Callable[[str], Skeleton]) -> Skeleton:
    """The skeleton with every kind of joint."""
    return skeleton_of(TREE)


@pytest.fixture(scope="session")
def tree_functions(tree: Skeleton) -> SkeletonFunctions:
    return SkeletonFunctions(tree)


@pytest.fixture(scope="session")
def limbs() -> Skeleton:
    return load_skeleton("lower_limbs")


@pytest.fixture(scope="session")
def limbs_functions(limbs: Skeleton) -> SkeletonFunctions:
    return SkeletonFunctions(limbs)


@pytest.fixture(scope="session")
def random_posture() -> Callable[..., Posture]:
    """Postures anywhere within the ranges (1 rad or 1 m about rest where there is none)."""

    def draw(
        functions: SkeletonFunctions, frames: int, rng: np.random.Generator, *, share: float = 1.0
    ) -> Posture:
        free = [c for c in functions.skeleton.coordinates if c.follows is None]
        low = np.array([c.lower if np.isfinite(c.lower) else c.rest - 1 for c in free])
        high = np.array([c.upper if np.isfinite(c.upper) else c.rest + 1 for c in free])
        middle, half = (low + high) / 2, share * (high - low) / 2
        scalars = rng.uniform(middle - half, middle + half, (frames, len(free)))
        balls = len(functions.kinematics.freedoms.balls)
        random = Rotation.random(max(frames * balls, 1), rng=rng).as_quat(scalar_first=True)
        return Posture(scalars, random[: frames * balls].reshape(frames, balls, 4))

    return draw


@pytest.fixture(scope="session")
def problem_of() -> Callable[..., FrameProblem]:
    """The least-squares problem of measured positions (NaN where missing), sd as the model has."""

    def make(
        functions: SkeletonFunctions, measured: FloatArray, numbers: FloatArray
    ) -> FrameProblem:
        sd = np.array([m.sd for m in functions.skeleton.markers])
        present = np.isfinite(measured).all(axis=2)
        return FrameProblem(functions, np.nan_to_num(measured), present / sd**2, numbers)

    return make


@pytest.fixture(scope="session")
def recording_of() -> Callable[..., Recording]:
    """A recording of positions (frames, markers, 3)."""

    def make(
        labels: tuple[str, ...],
        positions: FloatArray,
        *,
        rate: float = 100.0,
        first_frame: int = 1,
        up: str | None = None,
        units: str = "m",
    ) -> Recording:
        shape = positions.shape[:2]
        return Recording(
            name="trial",
            source="trial.c3d",
            rate=rate,
            first_frame=first_frame,
            labels=labels,
            positions=positions,
            residuals=np.full(shape, np.nan),
            cameras=np.zeros(shape, dtype=np.int64),
            up=up,
            units=units,
        )

    return make


@pytest.fixture(scope="session")
def free_bounds() -> Callable[[FrameProblem], Bounds]:
    """The bounds of a problem without any limit."""

    def make(problem: FrameProblem) -> Bounds:
        own = problem.bounds()
        return Bounds(np.full_like(own.lower, -np.inf), np.full_like(own.upper, np.inf), own.pinned)

    return make


@pytest.fixture(scope="session")
def real_data() -> Path:
    """The folder of published tables and real recordings; skipped, loudly, where it is absent."""
    folder = Path(os.environ.get("CONDYLE_DATA", ROOT.parent / "shared" / "data"))
    if not folder.is_dir():
        pytest.skip(f"no real recordings at {folder}: set CONDYLE_DATA to their folder")
    return folder
