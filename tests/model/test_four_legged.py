"""The shipped four-legged animal: it stands on its paws, and plus is what its page says."""

from __future__ import annotations

import numpy as np
import pytest
from numpy.typing import NDArray

from condyle.model import load_skeleton
from condyle.model.growth import sized_landmarks, sized_numbers
from condyle.solver.frame_problem import SkeletonFunctions
from condyle.solver.posture import Posture

FloatArray = NDArray[np.float64]
MODEL = load_skeleton("four_legged")
SIDES = ("right", "left")


@pytest.fixture(scope="module")
def functions() -> SkeletonFunctions:
    return SkeletonFunctions(MODEL)


def landmark(
    functions: SkeletonFunctions, segment: str, name: str | None = None, **degrees: float
) -> FloatArray:
    """A landmark (or a segment's origin) of the standing animal in the laboratory, m."""
    names = functions.kinematics.freedoms.scalars
    scalars = np.array([[MODEL.coordinate(n).rest for n in names]])
    for coordinate, value in degrees.items():
        scalars[0, names.index(coordinate)] += np.radians(value)
    poses = functions.poses(
        Posture(scalars, np.array([[[1.0, 0, 0, 0]]])), sized_numbers(MODEL, np.eye(3))
    )[0]
    place = sized_landmarks(MODEL)[segment][name] if name else np.zeros(3)
    return np.asarray((poses[MODEL.segment_index(segment)] @ [*place, 1.0])[:3])


def test_it_stands_on_four_paws_with_its_trunk_level(functions: SkeletonFunctions) -> None:
    paws = [landmark(functions, f"forepaw_{side}", f"fore_toes_{side}") for side in SIDES]
    paws += [landmark(functions, f"hind_toes_{side}", f"hind_toes_{side}") for side in SIDES]
    heights = np.array([paw[1] for paw in paws])
    assert np.ptp(heights) < 0.03
    withers = landmark(functions, "chest", "withers")[1]
    assert MODEL.person is not None
    # Its stature is the height at the withers.
    assert withers - heights.mean() == pytest.approx(MODEL.person.stature, rel=0.08)
    fore, hind = paws[0], paws[2]
    assert fore[0] > landmark(functions, "pelvis")[0] > hind[0]


def test_all_of_it_weighs_the_whole_animal() -> None:
    shares = sum(s.mass_share or 0.0 for s in MODEL.segments)
    assert shares == pytest.approx(1.0, abs=0.02)


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
