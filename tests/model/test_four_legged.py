"""The shipped four-legged animal: it stands on its paws, and plus is what its page says."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from condyle.model import load_skeleton
from condyle.model.growth import sized_landmarks, sized_numbers
from condyle.model.skeleton import Size
from condyle.recording.recording import Recording
from condyle.solver.calibration import calibrate
from condyle.solver.frame_problem import SkeletonFunctions
from condyle.solver.posture import Posture, quaternions_of
from condyle.solver.reported import reported_values

FloatArray = NDArray[np.float64]
MODEL = load_skeleton("four_legged")
SIDES = ("right", "left")


@pytest.fixture(scope="module")
def functions() -> SkeletonFunctions:
    return SkeletonFunctions(MODEL)


def standing(functions: SkeletonFunctions) -> Posture:
    rests = [MODEL.coordinate(name).rest for name in functions.kinematics.freedoms.scalars]
    return Posture(np.array([rests]), np.array([[[1.0, 0, 0, 0]]]))


def landmark(
    functions: SkeletonFunctions, segment: str, name: str | None = None, **degrees: float
) -> FloatArray:
    """A landmark (or a segment's origin) of the standing animal in the laboratory, m."""
    names = functions.kinematics.freedoms.scalars
    posture = standing(functions)
    for coordinate, value in degrees.items():
        posture.scalars[0, names.index(coordinate)] += np.radians(value)
    poses = functions.poses(posture, sized_numbers(MODEL, np.eye(3)))[0]
    place = sized_landmarks(MODEL)[segment][name] if name else np.zeros(3)
    return np.asarray((poses[MODEL.segment_index(segment)] @ [*place, 1.0])[:3])


def test_it_stands_on_four_paws_with_its_trunk_level(functions: SkeletonFunctions) -> None:
    paws = [landmark(functions, f"forepaw_{side}", f"fore_toes_{side}") for side in SIDES]
    paws += [landmark(functions, f"hind_toes_{side}", f"hind_toes_{side}") for side in SIDES]
    heights = np.array([paw[1] for paw in paws])
    assert np.ptp(heights) < 0.002
    withers = landmark(functions, "chest", "withers")[1]
    assert MODEL.person is not None
    # Its stature is the height at the withers.
    assert withers - heights.mean() == pytest.approx(MODEL.person.stature, rel=0.02)
    fore, hind = paws[0], paws[2]
    assert fore[0] > landmark(functions, "pelvis")[0] > hind[0]


def test_its_trunk_is_high_above_its_paws_and_over_them(functions: SkeletonFunctions) -> None:
    ground = landmark(functions, "forepaw_right", "fore_toes_right")
    trunk = [
        landmark(functions, segment.name, name)
        for segment in MODEL.segments
        if segment.name in ("chest", "pelvis")
        for name in segment.landmarks
    ]
    # The chest of such a dog hangs to about half the height of the withers (from memory, loose).
    assert min(point[1] for point in trunk) - ground[1] > 0.4 * 0.57
    # The body's centre of mass is over its feet, nearer to the fore ones (from memory: 60 % of the
    # weight is there, so loosely 50 to 75).
    poses = functions.poses(standing(functions), sized_numbers(MODEL, np.eye(3)))[0]
    centre = sum(
        (s.mass_share or 0.0) * (poses[i] @ [*(s.centre_of_mass or (0, 0, 0)), 1.0])[:3]
        for i, s in enumerate(MODEL.segments)
    )
    hind = landmark(functions, "hind_toes_right", "hind_toes_right")
    share = (np.asarray(centre)[0] - hind[0]) / (ground[0] - hind[0])
    assert 0.50 < share < 0.75


def test_it_is_about_as_long_as_it_is_high(functions: SkeletonFunctions) -> None:
    # From the point of the shoulder to the seat bone; a dog of this build, from memory, loosely.
    shoulder = landmark(functions, "upper_arm_right")
    seat = landmark(functions, "pelvis", "seat_bone_right")
    assert MODEL.person is not None
    assert shoulder[0] - seat[0] == pytest.approx(MODEL.person.stature, rel=0.15)


def test_there_are_42_coordinates(functions: SkeletonFunctions) -> None:
    assert functions.kinematics.freedoms.size == 42
    assert "42 coordinates" in MODEL.about


# Jaegger, Marcellin-Little & Levine 2002, Am J Vet Res 63:979, Labrador retrievers, angles between
# the bones: flexed and extended. From memory; a range must be no narrower, which is loose.
JAEGGER = {
    "shoulder_flexion": (57, 165),
    "elbow_flexion": (36, 165),
    "carpus_flexion": (32, 196),
    "stifle_flexion": (42, 162),
    "hock_flexion": (39, 164),
}


@pytest.mark.parametrize("name", JAEGGER)
def test_a_range_contains_the_published_one(name: str) -> None:
    flexed, extended = JAEGGER[name]
    coordinate = MODEL.coordinate(f"{name}_right")
    assert np.degrees(coordinate.lower) <= 180 - extended
    assert np.degrees(coordinate.upper) >= 180 - flexed


@pytest.mark.parametrize("share", [0.75, 1.3])
def test_an_animal_grown_evenly_is_found_so_from_a_still_recording(
    functions: SkeletonFunctions, share: float
) -> None:
    assert MODEL.person is not None
    even = {segment.name: Size((share,) * 3) for segment in MODEL.segments}
    numbers = sized_numbers(replace(MODEL, sizes=even), np.eye(3))
    positions = np.repeat(functions.marker_positions(standing(functions), numbers), 5, axis=0)
    count = len(MODEL.markers)
    still = Recording(
        name="made up",
        source="made-up.c3d",
        rate=100.0,
        first_frame=1,
        labels=MODEL.marker_names,
        positions=positions,
        residuals=np.zeros((5, count)),
        cameras=np.zeros((5, count), dtype=np.uint8),
        units="m",
        up="+Y",
    )
    found = calibrate(MODEL, still, stature=share * MODEL.person.stature, up="+Y").skeleton
    for name, size in found.sizes.items():
        np.testing.assert_allclose(size.factors, share, rtol=0.02, err_msg=name)


def test_all_of_it_weighs_the_whole_animal() -> None:
    shares = sum(s.mass_share or 0.0 for s in MODEL.segments)
    assert shares == pytest.approx(1.0, abs=1e-9)


SENSES = [
    ("scapula_forward", ("upper_arm", None), 0, 1),
    ("shoulder_flexion", ("forearm", None), 0, -1),
    ("elbow_flexion", ("forepaw", None), 0, 1),
    ("carpus_flexion", ("forepaw", "fore_toes"), 0, -1),
    ("hip_flexion", ("shank", None), 0, 1),
    ("stifle_flexion", ("hind_foot", None), 0, -1),
    ("hock_flexion", ("hind_toes", None), 0, 1),
    ("hind_toes_extension", ("hind_toes", "hind_toes"), 1, 1),
]


@pytest.mark.parametrize("side", SIDES)
@pytest.mark.parametrize(("name", "point", "axis", "sign"), SENSES)
def test_plus_moves_a_limb_the_way_the_page_says(
    functions: SkeletonFunctions,
    name: str,
    point: tuple[str, str | None],
    axis: int,
    sign: int,
    side: str,
) -> None:
    segment, mark = f"{point[0]}_{side}", f"{point[1]}_{side}" if point[1] else None
    rest = landmark(functions, segment, mark)
    moved = landmark(functions, segment, mark, **{f"{name}_{side}": 10.0})
    assert sign * (moved - rest)[axis] > 0.002


@pytest.mark.parametrize("side", SIDES)
def test_plus_adduction_takes_a_leg_under_the_body(functions: SkeletonFunctions, side: str) -> None:
    out = 1 if side == "right" else -1
    for name, segment in (("hip_adduction", "shank"), ("shoulder_adduction", "forearm")):
        rest = landmark(functions, f"{segment}_{side}")
        moved = landmark(functions, f"{segment}_{side}", **{f"{name}_{side}": 10.0})
        assert out * (moved - rest)[2] < -0.01


def test_a_raised_nose_and_tail_are_plus(functions: SkeletonFunctions) -> None:
    for name, segment, mark in (
        ("neck_rise", "skull", "nose"),
        ("head_rise", "skull", "nose"),
        ("tail_rise", "tail", "tail_tip"),
    ):
        rest = landmark(functions, segment, mark)
        assert landmark(functions, segment, mark, **{name: 10.0})[1] > rest[1] + 0.01


MIDDLE = [
    ("back_flexion", ("pelvis", "seat_bone_right"), 1, -1),
    ("back_side_bend", ("tail", None), 2, 1),
    ("back_twist", ("pelvis", "hip_bone_right"), 1, -1),
    ("neck_side_bend", ("skull", "nose"), 2, -1),
    ("head_side_bend", ("skull", "nose"), 2, -1),
    ("head_roll", ("skull", "cheek_right"), 1, -1),
    ("tail_side_bend", ("tail", "tail_tip"), 2, -1),
]
"""Coordinate, point, axis and the sense in which plus moves it along the axis."""


@pytest.mark.parametrize(("name", "point", "axis", "sign"), MIDDLE)
def test_plus_moves_the_middle_the_way_the_page_says(
    functions: SkeletonFunctions,
    name: str,
    point: tuple[str, str | None],
    axis: int,
    sign: int,
) -> None:
    rest = landmark(functions, *point)
    assert sign * (landmark(functions, *point, **{name: 10.0}) - rest)[axis] > 0.005


INWARDS = [
    ("shoulder_rotation", "forepaw", "fore_toes"),
    ("forearm_pronation", "forepaw", "fore_toes"),
    ("hip_rotation", "hind_toes", "hind_toes"),
]


@pytest.mark.parametrize("side", SIDES)
@pytest.mark.parametrize(("name", "segment", "mark"), INWARDS)
def test_plus_turns_the_toes_inwards(
    functions: SkeletonFunctions, name: str, segment: str, mark: str, side: str
) -> None:
    def heading(**degrees: float) -> float:
        at = landmark(functions, f"{segment}_{side}", f"{mark}_{side}", **degrees)
        back = landmark(functions, f"{segment}_{side}", **degrees)
        return float((at - back)[2] / (at - back)[0])

    out = 1 if side == "right" else -1
    assert out * (heading(**{f"{name}_{side}": 10.0}) - heading()) < -0.05


@pytest.mark.parametrize(
    ("name", "axis", "sense"),
    [("chest_heading", "y", (2, -1)), ("chest_rise", "z", (1, 1))],
)
def test_plus_takes_the_head_to_the_left_and_up(
    functions: SkeletonFunctions, name: str, axis: str, sense: tuple[int, int]
) -> None:
    turn = quaternions_of(Rotation.from_euler(axis, 10, degrees=True)).reshape(1, 1, 4)
    posture = Posture(standing(functions).scalars, turn)
    told = reported_values(functions.kinematics, posture)
    assert np.degrees(told[name][0]) == pytest.approx(10)
    neck = functions.poses(posture, sized_numbers(MODEL, np.eye(3)))[
        0, MODEL.segment_index("neck"), :3, 3
    ]
    along, sign = sense
    assert sign * (neck - landmark(functions, "neck"))[along] > 0.01
