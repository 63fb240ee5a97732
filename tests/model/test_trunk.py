"""The shipped trunk: the full body's own parts, and markers along a spine of two joints."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from condyle.model import load_skeleton
from condyle.model.growth import sized_landmarks, sized_numbers
from condyle.model.skeleton import Size, Skeleton
from condyle.recording.recording import Recording
from condyle.solver.calibration import calibrate
from condyle.solver.frame_problem import SkeletonFunctions
from condyle.solver.posture import Posture, quaternions_of

FloatArray = NDArray[np.float64]

MODEL, BODY = load_skeleton("trunk"), load_skeleton("full_body")
PARTS = ("pelvis", "abdomen", "thorax", "neck", "head")

DRILLIS_AND_CONTINI = {
    "hips to vertex": 1 - 0.530,
    "hips to notch": 0.288,
    "notch to vertex": 0.182,
}
"""Shares of stature (1966, in an independent transcription). Their shoulder, which they take at the
acromion, lies at the height of this model's notch."""


def standing(functions: SkeletonFunctions) -> Posture:
    """Upright: the ISB pelvis leans forward by 10 degrees, the spine takes it back."""
    freedoms = functions.kinematics.freedoms
    scalars = np.zeros((1, len(freedoms.scalars)))
    scalars[0, freedoms.scalars.index("lumbar_flexion")] = np.radians(-10)
    tilt = Rotation.from_euler("z", -10, degrees=True)
    return Posture(scalars, quaternions_of(tilt).reshape(1, 1, 4))


def heights(functions: SkeletonFunctions, skeleton: Skeleton) -> dict[str, float]:
    """m, between heights of the standing person."""
    poses = functions.poses(standing(functions), sized_numbers(skeleton, np.eye(3)))[0]
    landmarks = sized_landmarks(skeleton)

    def height(segment: str, name: str) -> float:
        at = [*landmarks[segment][name], 1.0]
        return float((poses[skeleton.segment_index(segment)] @ at)[1])

    hips = float(poses[skeleton.segment_index("pelvis"), 1, 3])
    notch, vertex = height("thorax", "IJ"), height("head", "vertex")
    return {
        "hips to vertex": vertex - hips,
        "hips to notch": notch - hips,
        "notch to vertex": vertex - notch,
    }


@pytest.mark.parametrize("stature", [1.0, 1.4, 1.75, 2.1])
def test_a_person_of_any_stature_is_sized_to_published_proportions(stature: float) -> None:
    # A still recording of a person grown evenly, markers where they are expected on that person.
    assert MODEL.person is not None
    functions = SkeletonFunctions(MODEL)
    even = {s.name: Size((stature / MODEL.person.stature,) * 3) for s in MODEL.segments}
    numbers = sized_numbers(replace(MODEL, sizes=even), np.eye(3))
    markers = functions.marker_positions(standing(functions), numbers)
    still = recorded(np.repeat(markers, 5, axis=0))
    found = calibrate(MODEL, still, stature=stature, up="+Y").skeleton
    for name, length in heights(functions, found).items():
        assert length == pytest.approx(DRILLIS_AND_CONTINI[name] * stature, rel=0.05), name


def recorded(positions: FloatArray) -> Recording:
    """A made-up recording of the model's markers (frames, markers, 3)."""
    frames, count = positions.shape[:2]
    return Recording(
        name="made up",
        source="made-up.c3d",
        rate=100.0,
        first_frame=1,
        labels=MODEL.marker_names,
        positions=positions,
        residuals=np.zeros((frames, count)),
        cameras=np.zeros((frames, count), dtype=np.uint8),
        units="m",
        up="+Y",
    )


@pytest.mark.parametrize(
    ("coordinate", "axis", "sign"),
    [
        ("lumbar_flexion", 0, 1),
        ("lumbar_side_bend", 2, 1),
        ("neck_flexion", 0, 1),
        ("neck_side_bend", 2, 1),
    ],
)
def test_plus_takes_the_vertex_the_way_the_page_says(coordinate: str, axis: int, sign: int) -> None:
    moved = vertex_and_front(coordinate, 10.0)[0] - vertex_and_front(coordinate, 0.0)[0]
    assert sign * moved[axis] > 0.01


@pytest.mark.parametrize("coordinate", ["lumbar_twist", "neck_twist"])
def test_plus_turns_the_face_to_the_left(coordinate: str) -> None:
    moved = vertex_and_front(coordinate, 10.0)[1] - vertex_and_front(coordinate, 0.0)[1]
    assert moved[2] < -0.01


def vertex_and_front(coordinate: str, degrees: float) -> tuple[FloatArray, FloatArray]:
    """The top of the head and the middle of its two front markers, at zero but for one coordinate."""
    functions = SkeletonFunctions(MODEL)
    freedoms = functions.kinematics.freedoms
    scalars = np.zeros((1, len(freedoms.scalars)))
    scalars[0, freedoms.scalars.index(coordinate)] = np.radians(degrees)
    posture = Posture(scalars, np.array([[[1.0, 0, 0, 0]]]))
    numbers = sized_numbers(MODEL, np.eye(3))
    pose = functions.poses(posture, numbers)[0, MODEL.segment_index("head")]
    vertex = (pose @ [*sized_landmarks(MODEL)["head"]["vertex"], 1.0])[:3]
    rows = [MODEL.marker_names.index(f"head_front_{side}") for side in ("right", "left")]
    return vertex, functions.marker_positions(posture, numbers)[0, rows].mean(axis=0)


def test_its_parts_and_joints_are_the_full_bodys() -> None:
    assert {s.name for s in MODEL.segments} == set(PARTS)
    for name in PARTS:
        assert MODEL.segments[MODEL.segment_index(name)] == BODY.segments[BODY.segment_index(name)]
    joints = {j.name: j for j in BODY.joints}
    for joint in MODEL.joints:
        assert joint == joints[joint.name]


def test_there_are_12_free_coordinates() -> None:
    free = [c for c in MODEL.coordinates if c.follows is None]
    balls = [j for j in MODEL.joints if hasattr(j.motion, "angles")]
    assert len(free) + 3 * len(balls) == 12


def test_spine_markers_follow_one_another_up_the_back() -> None:
    functions = SkeletonFunctions(MODEL)
    freedoms = functions.kinematics.freedoms
    rest = Posture(np.zeros((1, len(freedoms.scalars))), np.array([[[1.0, 0, 0, 0]]]))
    places = functions.marker_positions(rest, sized_numbers(MODEL, np.eye(3)))[0]
    at = dict(zip(MODEL.marker_names, places, strict=True))
    order = ["sacrum", "L5", "L3", "L1", "T10", "T8", "C7"]
    heights = [at[name][1] for name in order]
    assert heights == sorted(heights)
    # The hollow of the loins: deeper than the line from sacrum to T8, by 20 to 50 mm (common
    # practice). Standing: the pelvis leans forward by 10 degrees, the thorax does not.
    places = functions.marker_positions(standing(functions), sized_numbers(MODEL, np.eye(3)))[0]
    at = dict(zip(MODEL.marker_names, places, strict=True))
    for name in ("L5", "L3", "L1"):
        share = (at[name][1] - at["sacrum"][1]) / (at["T8"][1] - at["sacrum"][1])
        line = (1 - share) * at["sacrum"][0] + share * at["T8"][0]
        assert 0.01 < at[name][0] - line < 0.05, name
        if name == "L3":
            assert at[name][0] - line > 0.02


@pytest.mark.parametrize("word", ["flexion", "side_bend", "twist"])
def test_the_abdomen_takes_half_of_what_the_trunk_bends(word: str) -> None:
    functions = SkeletonFunctions(MODEL)
    freedoms = functions.kinematics.freedoms
    scalars = np.zeros((1, len(freedoms.scalars)))
    scalars[0, freedoms.scalars.index(f"lumbar_{word}")] = np.radians(40)
    posture = Posture(scalars, np.array([[[1.0, 0, 0, 0]]]))
    poses = functions.poses(posture, sized_numbers(MODEL, np.eye(3)))[0]
    turn = Rotation.from_matrix(poses[MODEL.segment_index("abdomen"), :3, :3])
    # Rotation sits higher up: a quarter below, three quarters above.
    share = 0.25 if word == "twist" else 0.5
    assert np.degrees(turn.magnitude()) == pytest.approx(40 * share, abs=1e-9)
