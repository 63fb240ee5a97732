"""Reported angles against scipy's Euler angles, worked matrices and clinical signs."""

from __future__ import annotations

from itertools import permutations, product

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from condyle.model.growth import sized_landmarks, sized_numbers
from condyle.model.skeleton import AngleReport, Skeleton
from condyle.solver.frame_problem import FrameProblem, SkeletonFunctions
from condyle.solver.joint_angles import report_angles
from condyle.solver.posture import Posture, quaternions_of

FloatArray = NDArray[np.float64]

NAMES = ("one", "two", "three")
CARDAN = list(permutations(range(3)))
PROPER = [(i, j, i) for i, j in permutations(range(3), 2)]
SIGNS = list(product((1, -1), repeat=3))


def letters(axes: tuple[int, int, int]) -> str:
    """Upper case: scipy's intrinsic turns."""
    return "".join("XYZ"[axis] for axis in axes)


def reports(axes: list[tuple[int, int, int]]) -> list[AngleReport]:
    return [
        AngleReport(one, (signs[0], signs[1], signs[2]), NAMES)
        for one, signs in product(axes, SIGNS)
    ]


def label(report: AngleReport) -> str:
    return "".join(
        ("-" if sign < 0 else "") + "xyz"[axis]
        for axis, sign in zip(report.axes, report.signs, strict=True)
    )


def rotation_of(report: AngleReport, told: FloatArray) -> Rotation:
    """The language: three intrinsic turns, a minus reversing that angle's sign."""
    return Rotation.from_euler(letters(report.axes), told * np.array(report.signs))


def turned(angle: FloatArray) -> FloatArray:
    """An angle without whole turns."""
    return np.asarray((angle + np.pi) % (2 * np.pi) - np.pi)


ALL = reports(CARDAN) + reports(PROPER)


@pytest.mark.parametrize("report", ALL, ids=label)
def test_every_sequence_and_sign_is_that_of_scipy_on_the_languages_branch(
    report: AngleReport,
) -> None:
    rng = np.random.default_rng(1)
    low, high = (0.02, np.pi - 0.02) if report.axes[0] == report.axes[2] else (-1.55, 1.55)
    told = rng.uniform([-np.pi, low, -np.pi], [np.pi, high, np.pi], (200, 3))
    found = report_angles(rotation_of(report, told).as_matrix(), report).values
    np.testing.assert_allclose(found[:, 1], told[:, 1], atol=1e-9)
    np.testing.assert_allclose(turned(found[:, [0, 2]] - told[:, [0, 2]]), 0, atol=1e-9)


@pytest.mark.parametrize("report", ALL, ids=label)
def test_any_rotation_comes_back_from_its_angles_within_the_branch(report: AngleReport) -> None:
    stack = Rotation.random(300, rng=np.random.default_rng(2))
    found = report_angles(stack.as_matrix(), report).values
    back = rotation_of(report, found[:, :3]) * stack.inv()
    np.testing.assert_allclose(back.magnitude(), 0, atol=1e-9)
    middle = found[:, 1]
    if report.axes[0] == report.axes[2]:
        assert ((middle >= 0) & (middle <= np.pi)).all()
    else:
        assert (np.abs(middle) <= np.pi / 2).all()


# R = Rz(a) Rx(b) Ry(c), closed form; (30, 10, -5) degrees. Derived from the definition of
# intrinsic turns; sequence of Grood & Suntay 1983 and Wu et al. 2002.
ZXY = [
    [0.870297, -0.492404, 0.011015],
    [0.484991, 0.852869, -0.193389],
    [0.085832, 0.173648, 0.981060],
]
# R = Ry(p) Rx(e) Ry(r); (60, -80, 20) degrees, the shoulder of Wu et al. 2005, where elevation is
# negative; the language tells it as positive under [y, -x, y].
YXY = [
    [0.418412, -0.852869, 0.312325],
    [-0.336824, 0.173648, 0.925417],
    [-0.843493, -0.492404, -0.214610],
]


def test_the_worked_matrix_of_z_x_y_gives_its_angles() -> None:
    found = report_angles(np.array([ZXY]), AngleReport((2, 0, 1), (1, 1, 1), NAMES)).values[0]
    np.testing.assert_allclose(np.degrees(found[:3]), [30, 10, -5], atol=1e-4)


def test_the_worked_matrix_of_y_x_y_gives_its_angles() -> None:
    found = report_angles(np.array([YXY]), AngleReport((1, 0, 1), (1, -1, 1), NAMES)).values[0]
    np.testing.assert_allclose(np.degrees(found[:3]), [60, 80, 20], atol=1e-4)


# Wu et al. 2005 by geometry: elevation 90, plane 0 points the arm to the right (abduction), plane 90
# forwards (flexion).
@pytest.mark.parametrize(("plane", "points"), [(0, [0, 0, 1]), (90, [1, 0, 0])])
def test_the_shoulders_plane_of_elevation_is_where_the_arm_points(
    plane: float, points: list[float]
) -> None:
    report = AngleReport((1, 0, 1), (1, -1, 1), NAMES)
    rotation = rotation_of(report, np.radians([plane, 90, 0]))
    np.testing.assert_allclose(rotation.apply([0, -1, 0]), points, atol=1e-12)
    found = report_angles(rotation.as_matrix()[None], report).values[0]
    np.testing.assert_allclose(np.degrees(found[:3]), [plane, 90, 0], atol=1e-9)


@pytest.mark.parametrize("report", ALL, ids=label)
def test_rates_match_finite_differences(report: AngleReport) -> None:
    rng = np.random.default_rng(3)
    stack = Rotation.random(100, rng=rng)
    found = report_angles(stack.as_matrix(), report)
    middle = found.values[:, 1]
    clear = np.abs(np.sin(middle)) if report.axes[0] == report.axes[2] else np.abs(np.cos(middle))
    # At its middle the sum changes its sense.
    other = np.abs(np.cos(middle)) if report.axes[0] == report.axes[2] else np.abs(np.sin(middle))
    keep = np.flatnonzero((clear > 0.1) & (other > 0.01))
    h = 1e-6
    for axis in range(3):
        small = Rotation.from_rotvec(h * np.eye(3)[axis])
        ahead = report_angles((stack * small).as_matrix(), report).values
        behind = report_angles((stack * small.inv()).as_matrix(), report).values
        numeric = turned(ahead - behind) / (2 * h)
        np.testing.assert_allclose(found.rates[keep, :, axis], numeric[keep], atol=1e-6)


def singular_middles(report: AngleReport) -> tuple[float, float]:
    return (0.0, np.pi) if report.axes[0] == report.axes[2] else (-np.pi / 2, np.pi / 2)


@pytest.mark.parametrize("report", ALL, ids=label)
@pytest.mark.parametrize("which", [0, 1])
def test_near_a_singularity_the_sum_is_one_of_the_two_and_stays_determined(
    report: AngleReport, which: int
) -> None:
    rng = np.random.default_rng(4)
    middle = singular_middles(report)[which]
    inward = middle + (1 - 2 * which) * np.radians(0.5)
    told = np.array([[0.4, inward, 0.3]])
    stack = rotation_of(report, told)
    shaken = stack * Rotation.from_rotvec(1e-3 * rng.normal(size=(50, 3)))
    found = np.array([report_angles(R[None], report).values[0] for R in shaken.as_matrix()])
    plus, minus = turned(found[:, 0] + found[:, 2]), turned(found[:, 0] - found[:, 2])
    total = turned(found[:, 3])
    is_plus = np.allclose(turned(total - plus), 0, atol=1e-9)
    is_minus = np.allclose(turned(total - minus), 0, atol=1e-9)
    assert is_plus != is_minus
    steady, shaky = (plus, minus) if is_plus else (minus, plus)
    assert np.ptp(steady) < 0.01
    assert np.ptp(shaky) > 0.1
    if report.axes[0] == report.axes[2] and report.signs[0] == report.signs[2]:
        assert is_plus == (which == 0)  # the language: first + third near 0, first - third near 180


@pytest.mark.parametrize("report", ALL, ids=label)
@pytest.mark.parametrize("which", [0, 1])
def test_going_through_a_singularity_the_sum_does_not_jump(report: AngleReport, which: int) -> None:
    """101 frames, the middle one exactly there; first and third may jump, the sum may not."""
    middle = singular_middles(report)[which] + np.radians(np.linspace(-4, 4, 101))
    told = np.column_stack([np.full(101, 0.4), middle, np.full(101, 0.3)])
    found = report_angles(rotation_of(report, told).as_matrix(), report).values
    assert np.isfinite(found).all()
    assert np.abs(np.diff(found[:, 3])).max() < 1e-6
    # What is not determined may be told in any way, but together it is still the rotation.
    back = rotation_of(report, found[:, :3]) * rotation_of(report, told).inv()
    np.testing.assert_allclose(back.magnitude(), 0, atol=1e-6)


@pytest.mark.parametrize("report", ALL, ids=label)
@pytest.mark.parametrize("which", [0, 1])
def test_at_a_singularity_the_sums_rate_is_finite_and_right(
    report: AngleReport, which: int
) -> None:
    told = np.array([[0.4, singular_middles(report)[which], 0.3]])
    stack = rotation_of(report, told)
    found = report_angles(stack.as_matrix(), report)
    assert np.isfinite(found.rates).all()
    h = 1e-4
    for axis in range(3):
        small = Rotation.from_rotvec(h * np.eye(3)[axis])
        ahead = report_angles((stack * small).as_matrix(), report).values[0, 3]
        behind = report_angles((stack * small.inv()).as_matrix(), report).values[0, 3]
        assert found.rates[0, 3, axis] == pytest.approx(turned(ahead - behind) / (2 * h), abs=1e-4)


def test_angles_run_on_through_whole_turns() -> None:
    report = AngleReport((1, 0, 2), (1, 1, -1), NAMES)
    spin = np.linspace(0, 6 * np.pi, 200)
    told = np.column_stack([spin, np.full(200, 0.2), np.full(200, -0.1)])
    found = report_angles(rotation_of(report, told).as_matrix(), report).values
    np.testing.assert_allclose(found[:, :3], told, atol=1e-9)
    assert np.abs(np.diff(found[:, 3])).max() < 0.2


# --- clinical signs -------------------------------------------------------------------------------
# ISB axes (Wu & Cavanagh 1995): X forward, Y up, Z right. What a positive angle does to the distal
# end follows from Wu et al. 2002, Grood & Suntay 1983 and plain geometry: flexion swings the thigh
# forward and the shank backward, adduction brings the distal end to the middle, internal rotation turns
# the front to the middle, dorsiflexion lifts the forefoot, inversion turns the sole to the middle.

MEDIAL = "medial"
CLINICAL = [
    ("hip_flexion", "thigh", [0, -0.4, 0], {"x": 1}),
    ("hip_adduction", "thigh", [0, -0.4, 0], {MEDIAL: 1}),
    ("hip_rotation", "thigh", [0.1, 0, 0], {MEDIAL: 1}),
    ("knee_flexion", "shank", [0, -0.4, 0], {"x": -1}),
    ("ankle_dorsiflexion", "foot", [0.15, 0, 0], {"y": 1}),
    ("subtalar_inversion", "foot", [0, -0.1, 0], {MEDIAL: 1}),
    ("toes_extension", "toes", [0.08, 0, 0], {"y": 1}),
]


def moved_by(
    functions: SkeletonFunctions, name: str, segment: str, point: list[float]
) -> FloatArray:
    """Where a point of a segment goes when one coordinate rises by 10 degrees from 0."""
    skeleton, freedoms = functions.skeleton, functions.kinematics.freedoms
    numbers = sized_numbers(skeleton, np.eye(3))
    scalars = np.zeros((2, len(freedoms.scalars)))
    scalars[1, freedoms.scalars.index(name)] = np.radians(10)
    balls = np.tile([1.0, 0, 0, 0], (2, len(freedoms.balls), 1))
    poses = functions.poses(Posture(scalars, balls), numbers)[:, skeleton.segment_index(segment)]
    ends = poses @ [*point, 1.0]
    return np.asarray((ends[1] - ends[0])[:3])


@pytest.mark.parametrize("side", ["right", "left"])
@pytest.mark.parametrize(
    ("coordinate", "segment", "point", "goes"), CLINICAL, ids=lambda value: str(value)[:20]
)
def test_a_positive_angle_moves_the_distal_end_where_a_clinician_expects(
    limbs_functions: SkeletonFunctions,
    side: str,
    coordinate: str,
    segment: str,
    point: list[float],
    goes: dict[str, int],
) -> None:
    moved = moved_by(limbs_functions, f"{coordinate}_{side}", f"{segment}_{side}", point)
    to_middle = -1.0 if side == "right" else 1.0
    directions = {"x": moved[0], "y": moved[1], MEDIAL: to_middle * moved[2]}
    # 10 degrees move a point by about a sixth of its distance.
    reach = 0.1 * np.linalg.norm(point)
    for direction, sign in goes.items():
        assert sign * directions[direction] > reach


@pytest.mark.parametrize("side", ["right", "left"])
def test_inversion_lifts_the_medial_edge_of_the_foot(
    limbs: Skeleton, limbs_functions: SkeletonFunctions, side: str
) -> None:
    landmarks = sized_landmarks(limbs)[f"foot_{side}"]
    heights = [
        moved_by(limbs_functions, f"subtalar_inversion_{side}", f"foot_{side}", list(place))[1]
        for place in (landmarks[f"MT1_{side}"], landmarks[f"MT5_{side}"])
    ]
    assert heights[0] > heights[1]


@pytest.mark.parametrize(
    ("angle", "point", "axis", "sign"),
    [
        ("pelvic_tilt", [0.1, 0, 0], 1, -1),  # anterior: the front goes down
        ("pelvic_rotation", [0, 0, 0.1], 0, 1),  # to the left: the right side comes forward
        ("pelvic_obliquity", [0, 0, 0.1], 1, -1),  # the right side goes down
    ],
)
def test_the_pelvis_is_told_as_the_model_says(
    limbs: Skeleton,
    limbs_functions: SkeletonFunctions,
    angle: str,
    point: list[float],
    axis: int,
    sign: int,
) -> None:
    report = limbs.joints[0].motion.angles  # type: ignore[union-attr]
    told = np.radians([10.0 if name == angle else 0.0 for name in report.names])
    stack = rotation_of(report, told[None])
    assert sign * (stack.apply(point)[0] - point)[axis] > 0.01
    problem = FrameProblem(
        limbs_functions,
        np.zeros((1, len(limbs.markers), 3)),
        np.zeros((1, len(limbs.markers))),
        sized_numbers(limbs, np.eye(3)),
    )
    posture = Posture(problem.rest().scalars, quaternions_of(stack)[None])
    pose = limbs_functions.poses(posture, problem.numbers)[0, 0]
    np.testing.assert_allclose(pose[:3, :3], stack.as_matrix()[0], atol=1e-12)


@pytest.mark.parametrize("side", ["right", "left"])
def test_the_hip_is_z_x_y_of_scipy_on_the_right_and_its_mirror_image_on_the_left(
    limbs: Skeleton, limbs_functions: SkeletonFunctions, side: str
) -> None:
    # Left limb with the same axes: flexion unchanged, adduction and internal rotation reversed.
    freedoms = limbs_functions.kinematics.freedoms
    angles = np.radians([30.0, 10.0, -5.0])
    scalars = np.zeros((1, len(freedoms.scalars)))
    for name, angle in zip(("flexion", "adduction", "rotation"), angles, strict=True):
        scalars[0, freedoms.scalars.index(f"hip_{name}_{side}")] = angle
    balls = np.tile([1.0, 0, 0, 0], (1, len(freedoms.balls), 1))
    poses = limbs_functions.poses(Posture(scalars, balls), sized_numbers(limbs, np.eye(3)))[0]
    thigh = poses[limbs.segment_index(f"thigh_{side}")][:3, :3]
    signs = [1, 1, 1] if side == "right" else [1, -1, -1]
    expected = Rotation.from_euler("ZXY", angles * signs).as_matrix()
    np.testing.assert_allclose(thigh, expected, atol=1e-12)
    if side == "right":
        np.testing.assert_allclose(thigh, ZXY, atol=1e-6)
