"""The shipped upper limb: the shoulder blade's contact, how the girdle moves, what it shares with the body."""

from __future__ import annotations

from itertools import pairwise

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from condyle.model import load_skeleton
from condyle.model.growth import sized_numbers
from condyle.model.skeleton import OnEllipsoid
from condyle.solver.frame_fit import FrameFits, fit_frames
from condyle.solver.frame_problem import SkeletonFunctions
from condyle.solver.posture import Posture, quaternions_of
from condyle.solver.trial_fit import frame_problem
from condyle.solver.upright import Upright

FloatArray = NDArray[np.float64]
MODEL = load_skeleton("upper_limb")
BODY = load_skeleton("full_body")
SIDES = ("right", "left")


@pytest.fixture(scope="module")
def functions() -> SkeletonFunctions:
    return SkeletonFunctions(MODEL)


def raised(functions: SkeletonFunctions, elevation: FloatArray, plane: float) -> Posture:
    """Both arms raised to some elevations (deg) in a plane (deg), the girdle going along roughly.

    Per degree of elevation: clavicle 0.08 up and 0.12 back, blade 0.3 upwards, of the order of Ludewig
    et al. 2009, J Bone Joint Surg Am 91:378 (from memory).
    """
    freedoms = functions.kinematics.freedoms
    frames = len(elevation)
    scalars = np.zeros((frames, len(freedoms.scalars)))
    girdle = {
        "clavicle_elevation": 0.08,
        "clavicle_protraction": -0.12,
        "scapula_upward_rotation": 0.30,
    }
    for name, share in girdle.items():
        for side in SIDES:
            k = freedoms.scalars.index(f"{name}_{side}")
            scalars[:, k] = np.radians(share * elevation)
    for side in SIDES:
        scalars[:, freedoms.scalars.index(f"elbow_flexion_{side}")] = np.radians(20)
    balls = np.tile([1.0, 0, 0, 0], (frames, len(freedoms.balls), 1))
    for side, mirror in (("right", 1), ("left", -1)):
        # ISB Y-X-Y with elevation positive: plane 0 is to the side, 90 forward.
        angles = np.column_stack(
            [np.full(frames, mirror * plane), -mirror * elevation, np.full(frames, -mirror * plane)]
        )
        turn = Rotation.from_euler("YXY", angles, degrees=True)
        balls[:, freedoms.balls.index(f"shoulder_{side}")] = quaternions_of(turn)
    return Posture(scalars, balls)


def fitted(functions: SkeletonFunctions, wanted: Posture, noise: float) -> tuple[FrameFits, float]:
    """A fit of noisy markers of a posture in which the contacts need not hold, and its RMS error (m)."""
    numbers = sized_numbers(MODEL, np.eye(3))
    positions = functions.marker_positions(wanted, numbers)
    positions = positions + np.random.default_rng(2).normal(0, noise, positions.shape)
    fits = fit_frames(frame_problem(MODEL, functions, positions, Upright("+Y", "made up")))
    away = functions.marker_positions(fits.posture, numbers) - positions
    return fits, float(np.sqrt((away**2).sum(axis=2).mean()))


def gaps(functions: SkeletonFunctions, posture: Posture) -> dict[str, FloatArray]:
    """Tie -> distance (m) of its point from its ellipsoid, told again in plain numpy.

    (f - 1) / |grad f| with f = sum ((p - c) / r)^2: the language's own measure.
    """
    poses = functions.poses(posture, sized_numbers(MODEL, np.eye(3)))
    found = {}
    for tie in MODEL.ties:
        assert isinstance(tie.kind, OnEllipsoid)
        blade = poses[:, MODEL.segment_index(tie.segment)]
        thorax = poses[:, MODEL.segment_index(tie.kind.of)]
        point = np.einsum("nij,j->ni", blade[:, :3, :3], np.array(tie.point)) + blade[:, :3, 3]
        in_thorax = np.einsum("nji,nj->ni", thorax[:, :3, :3], point - thorax[:, :3, 3])
        from_centre = in_thorax - np.array(tie.kind.centre)
        radii = np.array(tie.kind.radii)
        f = ((from_centre / radii) ** 2).sum(axis=1)
        found[tie.name] = np.abs(f - 1) / np.linalg.norm(2 * from_centre / radii**2, axis=1)
    return found


@pytest.mark.parametrize(("plane", "words"), [(0, "frontal"), (35, "scapular"), (90, "sagittal")])
def test_the_contact_stays_within_half_a_millimetre_over_a_rising_arm(
    functions: SkeletonFunctions, plane: float, words: str
) -> None:
    wanted = raised(functions, np.linspace(0, 150, 31), plane)
    fits, rms = fitted(functions, wanted, noise=0.003)
    assert fits.solution.converged.all()
    assert rms < 0.012, words
    for name, gap in gaps(functions, fits.posture).items():
        assert gap.max() < 0.0005, name
    assert functions.ties.freedom_taken(fits.posture, sized_numbers(MODEL, np.eye(3))) == 4


def test_a_shrug_and_a_reach_forward_keep_the_contact(functions: SkeletonFunctions) -> None:
    wanted = raised(functions, np.full(9, 60.0), 90)
    scalars = wanted.scalars.copy()
    names = functions.kinematics.freedoms.scalars
    scalars[:, names.index("clavicle_elevation_right")] = np.radians(np.linspace(0, 30, 9))
    scalars[:, names.index("clavicle_protraction_left")] = np.radians(np.linspace(0, 25, 9))
    fits, _ = fitted(functions, Posture(scalars, wanted.quaternions), noise=0.0)
    assert max(gap.max() for gap in gaps(functions, fits.posture).values()) < 0.0005


def test_the_blade_turns_upwards_with_the_arm_and_tips_back(functions: SkeletonFunctions) -> None:
    """Loose: Ludewig et al. 2009 from memory, 40 to 60 degrees up and 15 to 30 back at 150 degrees."""
    wanted = raised(functions, np.linspace(0, 150, 16), 35)
    fits, _ = fitted(functions, wanted, noise=0.0)
    names = functions.kinematics.freedoms.scalars
    told = {
        word: np.degrees(fits.posture.scalars[:, names.index(f"scapula_{word}_right")])
        for word in ("upward_rotation", "tilt")
    }
    assert all(later > earlier for earlier, later in pairwise(told["upward_rotation"]))
    assert 25 < np.ptp(told["upward_rotation"]) < 70
    assert 5 < told["tilt"][-1] - told["tilt"][0] < 45


def test_shared_parts_are_the_full_bodys() -> None:
    shared = {s.name for s in MODEL.segments} & {s.name for s in BODY.segments}
    assert shared >= {"thorax", "clavicle_right", "upper_arm_left", "forearm_right", "hand_left"}
    for name in shared - {"scapula_right", "scapula_left"}:
        own = MODEL.segments[MODEL.segment_index(name)]
        assert own == BODY.segments[BODY.segment_index(name)], name


def test_in_the_reference_posture_both_points_lie_on_the_ellipsoid(
    functions: SkeletonFunctions,
) -> None:
    rest = raised(functions, np.zeros(1), 0)
    assert max(gap.max() for gap in gaps(functions, rest).values()) < 0.0005


def test_there_are_30_free_coordinates() -> None:
    free = [c for c in MODEL.coordinates if c.follows is None]
    balls = [j for j in MODEL.joints if hasattr(j.motion, "angles")]
    assert len(free) + 3 * len(balls) == 30
