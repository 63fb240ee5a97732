"""The shipped upper limb moved as a person moves: contact, motion found again, mirror, sizing.

The movement is posed by the fit, so that the contacts hold in it. Whether they do is told here by
numpy alone, from the poses and from the numbers written in the model.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from condyle.model import load_skeleton
from condyle.model.growth import sized_joint_centres, sized_lengths, sized_numbers
from condyle.model.skeleton import OnEllipsoid, Size, Skeleton, Spherical
from condyle.recording.recording import Recording
from condyle.solver.calibration import calibrate
from condyle.solver.cold_start import tightened
from condyle.solver.frame_fit import fit_frames
from condyle.solver.frame_problem import FrameProblem, SkeletonFunctions
from condyle.solver.posture import Posture, quaternions_of
from condyle.solver.reported import reported_values
from condyle.solver.telling import tell
from condyle.solver.trial_fit import fit_trial, frame_problem
from condyle.solver.upright import Upright

FloatArray = NDArray[np.float64]

MODEL = load_skeleton("upper_limb")
SIDES = {"right": 1, "left": -1}
CONTACT = 0.0005
"""m; how far from its ellipsoid a contact may be in any frame."""
PART = 51
"""Frames of each of the five movements."""
PLANES = {"frontal": 0.0, "scapular": 35.0, "sagittal": 90.0}
"""Degrees before the frontal plane; the scapular one common practice, 30 to 40."""
LOWERED = {"right": 1.0, "left": 0.7}
"""The left arm rises less, so that no test can mix the sides up."""


def up_and_down(height: float) -> FloatArray:
    """(PART,) From 0 to `height` and back, without a jerk."""
    return np.asarray(height * (1 - np.cos(np.linspace(0, 2 * np.pi, PART))) / 2)


def arm_movement(functions: SkeletonFunctions) -> Posture:
    """Arms raised to 150 degrees in three planes, a shrug, and a reach; the contacts do not hold yet.

    For each degree of the arm the clavicle goes 0.08 up and 0.12 back and the blade turns 0.30 up: the
    order of Ludewig et al. 2009, J Bone Joint Surg Am 91:378, from memory. Tilt and inward turn of the
    blade are left at zero, for the contact to decide.
    """
    still = np.zeros(PART)
    rise, reach = up_and_down(150), up_and_down(85)
    elevation = np.r_[rise, rise, rise, still, reach]
    plane = np.repeat([*PLANES.values(), 0.0, 80.0], PART)
    shrug, forward = (
        np.r_[np.zeros(3 * PART), up_and_down(25), still],
        np.r_[np.zeros(4 * PART), reach],
    )
    freedoms = functions.kinematics.freedoms
    frames = len(elevation)
    scalars = np.zeros((frames, len(freedoms.scalars)))
    balls = np.tile([1.0, 0, 0, 0], (frames, len(freedoms.balls), 1))
    for side, sign in SIDES.items():
        arm = LOWERED[side] * elevation
        turns = {
            "clavicle_elevation": 0.08 * arm + shrug,
            "clavicle_protraction": -0.12 * arm + 0.35 * forward,
            "scapula_upward_rotation": 0.30 * arm,
            "elbow_flexion": 20 + up_and_down(30)[np.arange(frames) % PART],
            "forearm_pronation": 80 + 0.1 * arm,
            "wrist_flexion": 0.1 * arm,
        }
        for name, values in turns.items():
            scalars[:, freedoms.scalars.index(f"{name}_{side}")] = np.radians(values)
        # Y-X-Y with elevation positive; a mirror turns round what turns about X and Y. The arm hangs
        # 5 degrees out, as arms do: there planes that follow each other meet without a jump.
        raised = Rotation.from_euler(
            "YXY", sign * np.column_stack([plane, -arm, -plane]), degrees=True
        )
        turn = raised * Rotation.from_euler("X", -5 * sign, degrees=True)
        balls[:, freedoms.balls.index(f"shoulder_{side}")] = quaternions_of(turn)
    return Posture(scalars, balls)


def without_pulls(skeleton: Skeleton) -> Skeleton:
    """A fit without noise should find its motion, not a compromise with what a joint would like."""
    joints = tuple(
        replace(j, motion=replace(j.motion, rest_sd=None)) if isinstance(j.motion, Spherical) else j
        for j in skeleton.joints
    )
    return replace(skeleton, joints=joints)


class Moved:
    """A sized upper limb and the arm movement nearest to the wanted one in which the contacts hold."""

    def __init__(self, skeleton: Skeleton) -> None:
        self.skeleton = without_pulls(skeleton)
        self.functions = SkeletonFunctions(self.skeleton)
        self.numbers = sized_numbers(self.skeleton, np.eye(3))
        posture = arm_movement(self.functions)
        # A fit gives way to its markers a little; to markers that it made itself, less every time.
        for _ in range(6):
            problem = self.problem(self.functions.marker_positions(posture, self.numbers))
            posture = tightened(problem, posture, problem.bounds(), damping=1e-3).posture
        self.truth = posture
        self.positions = self.functions.marker_positions(posture, self.numbers)
        self.poses = self.functions.poses(posture, self.numbers)

    def problem(self, positions: FloatArray) -> FrameProblem:
        upright = Upright("+Y", "made up")
        return frame_problem(self.skeleton, self.functions, positions, upright)

    def found(self, positions: FloatArray) -> Posture:
        fits = fit_frames(self.problem(positions))
        assert fits.solution.converged.all()
        return fits.posture

    def told(self, posture: Posture) -> dict[str, FloatArray]:
        told = reported_values(self.functions.kinematics, posture)
        return {name: values for name, (values, _) in told.items()}


@pytest.fixture(scope="module")
def moved() -> Moved:
    return Moved(MODEL)


def of_part(number: int) -> slice:
    return slice(number * PART, (number + 1) * PART)


def points(skeleton: Skeleton, poses: FloatArray, segment: str, at: FloatArray) -> FloatArray:
    """(frames, 3) Points of a segment, in the thorax."""
    body, thorax = (poses[:, skeleton.segment_index(name)] for name in (segment, "thorax"))
    in_laboratory = np.einsum("nij,j->ni", body[:, :3, :3], at) + body[:, :3, 3]
    return np.einsum("nji,nj->ni", thorax[:, :3, :3], in_laboratory - thorax[:, :3, 3])


def gaps(skeleton: Skeleton, poses: FloatArray) -> dict[str, FloatArray]:
    """Tie -> |f - 1| / |grad f| (m) in every frame, f = sum ((p - c) / r)^2, by numpy alone."""
    factors = {s.name: np.ones(3) for s in skeleton.segments}
    factors |= {name: np.array(size.factors) for name, size in skeleton.sizes.items()}
    found = {}
    for tie in skeleton.ties:
        assert isinstance(tie.kind, OnEllipsoid)
        p = points(skeleton, poses, tie.segment, factors[tie.segment] * np.array(tie.point))
        centre, radii = (factors[tie.kind.of] * v for v in (tie.kind.centre, tie.kind.radii))
        f = (((p - centre) / radii) ** 2).sum(axis=1)
        slope = np.linalg.norm(2 * (p - centre) / radii**2, axis=1)
        found[tie.name] = np.abs(f - 1) / slope
    return found


def blade_in_thorax(moved: Moved) -> FloatArray:
    """(frames, 3) Inward turn, upward rotation and backward tilt of the right blade's ISB frame, deg.

    Wu et al. 2005: Z from TS to AA, X across AA, TS and AI, told Y-X-Z; there upward rotation is negative.
    """
    blade = moved.skeleton.segments[moved.skeleton.segment_index("scapula_right")]
    AA, TS, AI = (
        points(moved.skeleton, moved.poses, blade.name, np.array(blade.landmarks[f"{n}_right"]))
        for n in ("AA", "TS", "AI")
    )
    z = (AA - TS) / np.linalg.norm(AA - TS, axis=1)[:, None]
    x = np.cross(AI - AA, TS - AA)
    x /= np.linalg.norm(x, axis=1)[:, None]
    x *= np.sign(x[:, :1])
    axes = np.stack([x, np.cross(z, x), z], axis=2)
    return np.asarray(Rotation.from_matrix(axes).as_euler("YXZ", degrees=True) * [1, -1, 1])


# ---------------------------------------------------------------- the contact


def test_both_points_stay_on_their_ellipsoid_in_every_frame_of_an_arm_movement(
    moved: Moved,
) -> None:
    elevation = np.degrees(moved.told(moved.truth)["shoulder_elevation_right"])
    for part in range(3):
        assert elevation[of_part(part)].min() < 6
        assert elevation[of_part(part)].max() > 145
    told = gaps(moved.skeleton, moved.poses)
    assert len(told) == 4
    for name, gap in told.items():
        assert len(gap) == 5 * PART
        assert gap.max() < 1e-6, name  # closed motion: hardly any gap at all


@pytest.mark.parametrize("smooth", [False, True], ids=["by frames", "as one trial"])
def test_noise_moves_no_contact_by_half_a_millimetre(
    moved: Moved, recording_of: Callable[..., Recording], smooth: bool
) -> None:
    noise = np.random.default_rng(2).normal(0, 0.005, moved.positions.shape)
    trial = recording_of(MODEL.marker_names, moved.positions + noise, rate=50.0, up="+Y")
    fit = fit_trial(MODEL, trial, smooth=smooth)
    assert fit.converged.all()
    assert (fit.freedoms, fit.freedoms_tied) == (30, 4)
    told = gaps(MODEL, fit.motion.laboratory_from_segment)
    for name, gap in told.items():
        assert gap.max() < CONTACT, name
        # What the results say of a tie is what is so, to first order.
        assert fit.tie_errors[name] == pytest.approx(gap.max(), abs=1e-9)


def test_markers_that_contradict_the_contact_do_not_open_it(moved: Moved) -> None:
    """Blades pulled 30 mm off the ribs by their markers, as a wing or loose skin would."""
    away = moved.positions.copy()
    rows = [i for i, m in enumerate(MODEL.markers) if m.name.startswith(("TS_", "AI_"))]
    away[:, rows] += [-0.030, 0, 0]
    poses = moved.functions.poses(moved.found(away), moved.numbers)
    assert max(gap.max() for gap in gaps(moved.skeleton, poses).values()) < CONTACT


def test_the_contact_holds_in_a_person_of_other_proportions() -> None:
    sizes = {s.name: Size((1.0, 1.0, 1.0)) for s in MODEL.segments}
    sizes["thorax"] = Size((1.10, 0.95, 1.08))
    for side in SIDES:
        sizes[f"clavicle_{side}"] = sizes[f"scapula_{side}"] = Size((0.97, 0.97, 1.03))
    other = Moved(replace(MODEL, sizes=sizes))
    assert max(gap.max() for gap in gaps(other.skeleton, other.poses).values()) < CONTACT


def test_check_says_that_the_contacts_take_four_freedoms_and_that_all_can_be_seen() -> None:
    told = tell(MODEL)
    assert (told.freedoms, told.taken_by_ties) == (30, 4)
    assert told.unseen == ()


# ---------------------------------------------------------------- how the girdle goes along


@pytest.mark.parametrize("part", range(3), ids=list(PLANES))
def test_the_blade_turns_upwards_with_the_arm_and_the_contact_tips_it_back(
    moved: Moved, part: int
) -> None:
    """Loose bounds, from memory: Ludewig et al. 2009 saw 40 to 60 degrees up and 15 to 30 back.

    The movement asks for the upward turn, so that only shows that the contact lets it be. That the blade
    tips back is the contact's doing, for the movement does not ask for it.
    """
    inwards, upwards, backwards = blade_in_thorax(moved)[of_part(part)][: PART // 2 + 1].T
    assert (np.diff(upwards) > 0).all()
    assert 30 < upwards[-1] - upwards[0] < 75
    assert 1 / 4 < (upwards[-1] - upwards[0]) / 150 < 1 / 2  # Inman 1944, from memory: a third
    assert 5 < backwards[-1] - backwards[0] < 45
    assert np.ptp(inwards) < 15  # the retracting clavicle alone would take 18 degrees away


def test_a_shrug_lifts_the_blade_and_a_reach_turns_it_inwards(moved: Moved) -> None:
    # Which way, not how far: common knowledge of the trade.
    blade = moved.skeleton.segments[moved.skeleton.segment_index("scapula_right")]
    AI = points(moved.skeleton, moved.poses, blade.name, np.array(blade.landmarks["AI_right"]))
    half = PART // 2
    shrug, reach = of_part(3), of_part(4)
    assert AI[shrug][half, 1] - AI[shrug][0, 1] > 0.03
    inwards = blade_in_thorax(moved)[reach, 0]
    assert inwards[half] - inwards[0] > 10


# ---------------------------------------------------------------- motion found again


def wrapped(angle: FloatArray) -> FloatArray:
    return np.asarray((angle + np.pi) % (2 * np.pi) - np.pi)


def test_the_arm_movement_is_found_again(moved: Moved) -> None:
    """All 30 coordinates are determined. Only in an arm that hangs straight down would its plane and axial
    turn not be, but their sum would; here the arms hang 5 degrees out.
    """
    expected, told = moved.told(moved.truth), moved.told(moved.found(moved.positions))
    assert set(expected) >= {c.name for c in MODEL.coordinates}
    for name, values in expected.items():
        np.testing.assert_allclose(wrapped(told[name] - values), 0, atol=1e-6, err_msg=name)


def other_side(name: str) -> str:
    swapped = name.replace("_right", "_LEFT").replace("_left", "_right")
    return swapped.replace("_LEFT", "_left")


def test_mirrored_markers_give_the_same_clinical_angles(moved: Moved) -> None:
    names = MODEL.marker_names
    twins = [names.index(other_side(n)) if other_side(n) in names else None for n in names]
    kept = [i for i, twin in enumerate(twins) if twin is not None]  # back_right has none
    mirrored, recorded = (np.full_like(moved.positions, np.nan) for _ in range(2))
    recorded[:, kept] = moved.positions[:, kept]
    mirrored[:, kept] = moved.positions[:, [twins[i] for i in kept]] * [1.0, 1.0, -1.0]
    told = moved.told(moved.found(recorded))
    other = moved.told(moved.found(mirrored))
    turned_round = {"thorax_z", "thorax_side_bend", "thorax_twist"}
    assert np.ptp(told["shoulder_elevation_right"] - told["shoulder_elevation_left"]) > 0.5
    for name, values in told.items():
        if name == "thorax_flexion_sum":
            continue  # flexion + twist: one of them turns round
        sign = -1 if name in turned_round else 1
        off = wrapped(other[other_side(name)] - sign * values)
        np.testing.assert_allclose(off, 0, atol=1e-6, err_msg=name)


# ---------------------------------------------------------------- sizing


def standing(functions: SkeletonFunctions) -> Posture:
    freedoms, expected = functions.kinematics.freedoms, MODEL.sizing.standing
    values = [
        expected[n].value if n in expected else MODEL.coordinate(n).rest for n in freedoms.scalars
    ]
    balls = np.tile([1.0, 0, 0, 0], (1, len(freedoms.balls), 1))
    return Posture(np.array([values]), balls)


def shoulder_to_elbow(skeleton: Skeleton, side: str) -> float:
    """From the acromioclavicular joint down to the elbow's centre, the arm hanging, m."""
    centres = sized_joint_centres(skeleton)
    head = centres[f"scapula_{side}"][f"shoulder_centre_{side}"]
    elbow = centres[f"upper_arm_{side}"][f"ulna_{side}"]
    return -float(head[1] + elbow[1])


@pytest.mark.parametrize("stature", [1.0, 2.1])
def test_arms_grow_as_stature_does(
    moved: Moved, stature: float, recording_of: Callable[..., Recording]
) -> None:
    """Drillis & Contini 1966, a transcription: 0.186 of stature from acromion to elbow, 0.146 to the wrist.

    Within 5 and 6 per cent: their points are on the surface, the model's are joint centres.
    """
    assert MODEL.person is not None
    factor = stature / MODEL.person.stature
    grown = replace(MODEL, sizes={s.name: Size((factor,) * 3) for s in MODEL.segments})
    numbers = sized_numbers(grown, np.eye(3))
    markers = moved.functions.marker_positions(standing(moved.functions), numbers)
    static = recording_of(MODEL.marker_names, np.repeat(markers, 5, axis=0), up="+Y")
    sized = calibrate(MODEL, static, stature=stature, up="+Y").skeleton
    lengths, own = sized_lengths(sized), sized_lengths(MODEL)
    for side in SIDES:
        assert shoulder_to_elbow(sized, side) == pytest.approx(0.186 * stature, rel=0.05)
        assert lengths[f"forearm_{side}"] == pytest.approx(0.146 * stature, rel=0.06)
    for name, length in own.items():
        assert lengths[name] == pytest.approx(factor * length, rel=0.05, abs=1e-9), name
