"""The shipped full body against the tables it cites, the ISB's definitions and made-up motion.

A tolerance is the rounding of the printed table unless a comment says otherwise. Values marked
"from memory" in the model are held to loose bounds only.
"""

from __future__ import annotations

import os
from collections.abc import Mapping, Sequence
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from condyle.model.growth import grown_gyration, sized_numbers
from condyle.model.loading import load_skeleton
from condyle.model.skeleton import Joint, Segment, Size, Skeleton, Spherical
from condyle.recording import read_recording
from condyle.recording.recording import Recording
from condyle.solver.calibration import calibrate
from condyle.solver.frame_fit import fit_frames
from condyle.solver.frame_problem import FrameProblem, SkeletonFunctions
from condyle.solver.posture import Posture, quaternions_of
from condyle.solver.reported import reported_values
from condyle.solver.trial_fit import fit_trial, frame_problem
from condyle.solver.upright import Upright

FloatArray = NDArray[np.float64]

ROOT = Path(__file__).resolve().parents[2]
DATA = Path(os.environ.get("CONDYLE_DATA", ROOT.parent / "shared" / "data"))
MODEL = load_skeleton("full_body")
MIRROR = np.array([1.0, 1.0, -1.0])
SIDES = ("right", "left")

# de Leva 1996, Table 4, male: share of mass, centre (fraction of the length from the cranial or
# proximal end), radii as fractions of the length for turning about x, y, z in ISB axes; and the
# mean length in m, from memory.
DE_LEVA_MALE = {
    "head": (0.0694, 0.5976, (0.362, 0.312, 0.376), 0.2033),
    "thorax": (0.1596, 0.2999, (0.716, 0.659, 0.454), 0.1707),
    "abdomen": (0.1633, 0.4502, (0.482, 0.468, 0.383), 0.2155),
    "upper_arm_right": (0.0271, 0.5772, (0.285, 0.158, 0.269), 0.2817),
    "forearm_right": (0.0162, 0.4574, (0.276, 0.121, 0.265), 0.2689),
    "hand_right": (0.0061, 0.7900, (0.628, 0.401, 0.513), 0.0862),
}
DE_LEVA_HAND_TO_FINGERTIP = 0.3624
"""Centre of the same hand as a fraction of wrist to tip of the third finger (alternative endpoints)."""

# Degrees: the widest of Soucie et al. 2011 (20-44 years, from memory) with two standard deviations
# (about 10 degrees), and of handbook lists. Lumbar flexion counts from a pelvis that leans forward
# by 10. Pronation counts from the palm forward, 90 degrees before the middle position. The
# clavicle from memory.
PUBLISHED_RANGES = [
    ("lumbar_flexion", -30 - 10, 75, "handbooks"),
    ("lumbar_side_bend", -35, 35, "handbooks"),
    ("neck_flexion", -55, 90, "handbooks"),
    ("neck_side_bend", -45, 45, "handbooks"),
    ("neck_twist", -80, 80, "handbooks"),
    ("clavicle_protraction_right", -30, 30, "handbooks"),
    ("clavicle_elevation_right", -10, 45, "handbooks"),
    ("elbow_flexion_right", -4.7 - 10, 150 + 10, "Soucie 2011"),
    ("elbow_flexion_right", 0, 160, "handbooks"),
    ("forearm_pronation_right", 90 - 90.6 - 10, 90 + 82 + 10, "Soucie 2011"),
    ("forearm_pronation_right", 0, 180, "handbooks"),
    ("wrist_flexion_right", -70, 90, "handbooks"),
    ("wrist_deviation_right", -25, 65, "handbooks"),
]


def segment_of(name: str, skeleton: Skeleton = MODEL) -> Segment:
    return skeleton.segments[skeleton.segment_index(name)]


def joint_of(name: str) -> Joint:
    return next(joint for joint in MODEL.joints if joint.name == name)


@pytest.fixture(scope="module")
def functions() -> SkeletonFunctions:
    return SkeletonFunctions(MODEL)


def posture_of(
    functions: SkeletonFunctions,
    degrees: Mapping[str, float],
    turned: Mapping[str, Rotation] | None = None,
) -> Posture:
    """Everything at zero but the scalars (degrees) and balls that are given."""
    freedoms = functions.kinematics.freedoms
    scalars = np.zeros((1, len(freedoms.scalars)))
    quaternions = np.tile([1.0, 0.0, 0.0, 0.0], (1, len(freedoms.balls), 1))
    for name, value in degrees.items():
        scalars[0, freedoms.scalars.index(name)] = np.radians(value)
    for joint, rotation in (turned or {}).items():
        quaternions[0, freedoms.balls.index(joint)] = quaternions_of(rotation)
    return Posture(scalars, quaternions)


def pose(functions: SkeletonFunctions, posture: Posture, segment: str) -> FloatArray:
    """(4, 4) Laboratory-from-segment of the reference person."""
    numbers = sized_numbers(MODEL, np.eye(3))
    return np.asarray(functions.poses(posture, numbers)[0, MODEL.segment_index(segment)])


def place(
    functions: SkeletonFunctions,
    posture: Posture,
    segment: str,
    point: Sequence[float] | FloatArray,
) -> FloatArray:
    return np.asarray((pose(functions, posture, segment) @ [*point, 1.0])[:3])


def landmark(functions: SkeletonFunctions, segment: str, name: str) -> FloatArray:
    """Where a landmark is in the zero posture, m."""
    at = segment_of(segment).landmarks[name]
    return place(functions, posture_of(functions, {}), segment, at)


# ---------------------------------------------------------------- masses and lengths


def test_all_segments_together_weigh_the_whole_person() -> None:
    # de Leva 1996, male: 100.00 %, of which the trunk 43.46 and each arm 4.94.
    shares = {segment.name: segment.mass_share or 0.0 for segment in MODEL.segments}
    assert sum(shares.values()) == pytest.approx(1.0, abs=1e-12)
    assert shares["pelvis"] + shares["abdomen"] + shares["thorax"] == pytest.approx(0.4346)
    arm = [v for k, v in shares.items() if k.split("_right")[0] in ("upper_arm", "forearm", "hand")]
    assert sum(arm) == pytest.approx(0.0494)


@pytest.mark.parametrize("name", DE_LEVA_MALE)
def test_shares_and_radii_are_de_levas(name: str) -> None:
    share, _, fractions, length = DE_LEVA_MALE[name]
    segment = segment_of(name)
    assert segment.mass_share == share
    assert segment.gyration is not None
    np.testing.assert_allclose(segment.gyration, np.array(fractions) * length, atol=6e-5)


def test_centres_of_mass_are_de_levas() -> None:
    # Measured from the vertex, the notch, the xiphoid, and the proximal joint centres.
    def centre(name: str) -> FloatArray:
        found = segment_of(name).centre_of_mass
        assert found is not None
        return np.array(found)

    def expected(name: str) -> float:
        _, fraction, _, length = DE_LEVA_MALE[name]
        return fraction * length

    vertex = segment_of("head").landmarks["vertex"][1]
    assert vertex - centre("head")[1] == pytest.approx(expected("head"), abs=6e-5)
    assert -centre("thorax")[1] == pytest.approx(expected("thorax"), abs=6e-5)
    assert -centre("upper_arm_right")[1] == pytest.approx(expected("upper_arm_right"), abs=6e-5)
    assert -centre("hand_right")[1] == pytest.approx(expected("hand_right"), abs=6e-5)
    elbow_in_forearm = -np.array(joint_of("radioulnar_right").at)
    wrist_in_forearm = np.array(joint_of("wrist_right").at)
    on_line = elbow_in_forearm + DE_LEVA_MALE["forearm_right"][1] * (
        wrist_in_forearm - elbow_in_forearm
    )
    np.testing.assert_allclose(centre("forearm_right"), on_line, atol=2e-4)
    # The middle trunk is shorter than de Leva's: see the model. Its centre is held to a centimetre.
    xiphoid, navel = 0.500 - 0.1707, 0.1457
    height = xiphoid - DE_LEVA_MALE["abdomen"][1] * (xiphoid - navel)
    disc = np.array(joint_of("lumbosacral").at)
    standing = Rotation.from_euler("z", -10, degrees=True).apply(disc)
    leaning = Rotation.from_euler("z", -5, degrees=True).apply(centre("abdomen"))
    assert standing[1] + leaning[1] == pytest.approx(height, abs=0.01)


@pytest.mark.parametrize(
    "segment", [s for s in MODEL.segments if s.mass], ids=lambda segment: segment.name
)
def test_a_body_could_have_every_segments_inertia(segment: Segment) -> None:
    squares = np.square(segment.gyration or ())
    assert (np.sum(squares) - 2 * squares > 0).all()


STANDING = {"pelvic_tilt": 10.0, "lumbar_flexion": -10.0}
"""The reference person standing: the ISB pelvis leans forward, the thorax is upright."""


def standing_posture(functions: SkeletonFunctions) -> Posture:
    tilt = Rotation.from_euler("z", -STANDING["pelvic_tilt"], degrees=True)
    hips = {f"hip_flexion_{side}": STANDING["pelvic_tilt"] for side in SIDES}
    degrees = {"lumbar_flexion": STANDING["lumbar_flexion"], **hips}
    return posture_of(functions, degrees, {"root": tilt})


def proportions(functions: SkeletonFunctions, skeleton: Skeleton) -> dict[str, tuple[float, float]]:
    """Lengths in the standing posture (m), each with the published share of stature.

    Drillis & Contini 1966 give heights of a standing person and what lies between them, so lengths
    are vertical; their shoulder is the acromion. Hand from memory; the de Leva hand is told to the
    fingertip by his own alternative endpoints.
    """
    numbers = sized_numbers(skeleton, np.eye(3))
    poses = functions.poses(standing_posture(functions), numbers)[0]
    factors = skeleton.sizes

    def height(segment: str, point: Sequence[float]) -> float:
        grown = np.array(point) * (factors[segment].factors if segment in factors else 1.0)
        return float((poses[skeleton.segment_index(segment)] @ [*grown, 1.0])[1])

    origin = (0.0, 0.0, 0.0)
    acromion = height("clavicle_right", segment_of("clavicle_right").landmarks["AC_right"])
    elbow, wrist = height("ulna_right", origin), height("hand_right", origin)
    hip, knee = height("thigh_right", origin), height("shank_right", origin)
    hand_factor = factors["hand_right"].factors[1] if factors else 1.0
    fingertip = DE_LEVA_MALE["hand_right"][1] / DE_LEVA_HAND_TO_FINGERTIP
    return {
        "shoulder to hip": (acromion - hip, 0.288),
        "shoulder to elbow": (acromion - elbow, 0.188),
        "elbow to wrist": (elbow - wrist, 0.146),
        "hand": (0.0862 * hand_factor * fingertip, 0.108),
        "thigh": (hip - knee, 0.245),
        "shank": (knee - height("talus_right", origin), 0.246),
        "vertex to shoulder": (
            height("head", segment_of("head").landmarks["vertex"]) - acromion,
            0.182,
        ),
    }


def test_proportions_are_within_5_percent_of_drillis_and_contini(
    functions: SkeletonFunctions,
) -> None:
    assert MODEL.person is not None
    for name, (length, share) in proportions(functions, MODEL).items():
        assert length == pytest.approx(share * MODEL.person.stature, rel=0.05), name


@pytest.mark.parametrize("stature", [1.0, 1.4, 1.75, 2.1])
def test_a_person_of_any_stature_is_sized_to_published_proportions(
    functions: SkeletonFunctions, stature: float
) -> None:
    # A still recording of a person grown evenly, markers where they are expected on that person.
    assert MODEL.person is not None
    factor = stature / MODEL.person.stature
    even = {segment.name: Size((factor, factor, factor)) for segment in MODEL.segments}
    grown = replace(MODEL, sizes=even)
    numbers = sized_numbers(grown, np.eye(3))
    markers = functions.marker_positions(standing_posture(functions), numbers)
    recording = recorded(np.repeat(markers, 5, axis=0))
    found = calibrate(MODEL, recording, stature=stature, up="+Y").skeleton
    for name, (length, share) in proportions(functions, found).items():
        assert length == pytest.approx(share * stature, rel=0.05), name


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


def test_growth_keeps_a_possible_inertia() -> None:
    for segment in MODEL.segments:
        if segment.gyration is not None:
            squares = np.square(grown_gyration(segment.gyration, (0.8, 1.2, 0.9)))
            assert (np.sum(squares) - 2 * squares > 0).all()


# ---------------------------------------------------------------- ISB frames in the zero posture


def frame(x: FloatArray, y: FloatArray, z: FloatArray) -> FloatArray:
    """(3, 3) Unit columns."""
    return np.column_stack([v / np.linalg.norm(v) for v in (x, y, z)])


def test_thorax_landmarks_give_the_isb_frame(functions: SkeletonFunctions) -> None:
    # Wu et al. 2005: Y from the middle of PX and T8 to the middle of IJ and C7; Z across the plane
    # of IJ, C7 and the lower middle, to the right; origin IJ.
    ij, px, c7, t8 = (landmark(functions, "thorax", name) for name in ("IJ", "PX", "C7", "T8"))
    lower = (px + t8) / 2
    y = (ij + c7) / 2 - lower
    z = np.cross(ij - lower, c7 - lower)
    found = frame(np.cross(y, z), y, z)
    np.testing.assert_allclose(found, np.eye(3), atol=1e-9)
    np.testing.assert_array_equal(segment_of("thorax").landmarks["IJ"], np.zeros(3))


@pytest.mark.parametrize("side", SIDES)
def test_humerus_landmarks_give_the_isb_frame(functions: SkeletonFunctions, side: str) -> None:
    # Wu et al. 2005, first option: Y from the middle of EL and EM to GH, X across their plane.
    segment = f"upper_arm_{side}"
    centre = pose(functions, posture_of(functions, {}), segment)[:3, 3]
    lateral = landmark(functions, segment, f"EL_{side}")
    medial = landmark(functions, segment, f"EM_{side}")
    y = centre - (lateral + medial) / 2
    to_the_right = (lateral - medial) * (1 if side == "right" else -1)
    x = np.cross(y, to_the_right)
    np.testing.assert_allclose(frame(x, y, np.cross(x, y)), np.eye(3), atol=1e-9)


@pytest.mark.parametrize("side", SIDES)
def test_forearm_leans_out_by_the_carrying_angle(functions: SkeletonFunctions, side: str) -> None:
    # Men about 10 degrees, 5 to 15; from memory, so loosely.
    outwards = 1 if side == "right" else -1
    elbow = pose(functions, posture_of(functions, {}), f"ulna_{side}")[:3, 3]
    wrist = pose(functions, posture_of(functions, {}), f"hand_{side}")[:3, 3]
    x, y, z = wrist - elbow
    assert np.degrees(np.arctan2(z * outwards, -y)) == pytest.approx(10, abs=1)
    assert abs(x) < 1e-9
    # de Leva 1996, male, from memory: 268.9 mm
    assert np.linalg.norm(wrist - elbow) == pytest.approx(0.2689, abs=2e-4)
    middle = (
        landmark(functions, f"forearm_{side}", f"RS_{side}")
        + landmark(functions, f"ulna_{side}", f"US_{side}")
    ) / 2
    assert np.linalg.norm(middle - wrist) < 0.002


def test_bent_forearm_lies_on_the_upper_arm(functions: SkeletonFunctions) -> None:
    # What an axis that halves the carrying angle must do at 180 degrees (geometry).
    folded = pose(functions, posture_of(functions, {"elbow_flexion_right": 180}), "ulna_right")
    np.testing.assert_allclose(folded[:3, :3] @ [0, -1, 0], [0, 1, 0], atol=2e-3)


def test_pronation_axis_joins_radial_head_and_ulnar_head(functions: SkeletonFunctions) -> None:
    # The head of the ulna stays while the palm turns; the radial styloid goes round it.
    ulnar_head = np.array([0, -0.250, -0.018]) - np.array(joint_of("radioulnar_right").at)
    turned = {
        angle: posture_of(functions, {"forearm_pronation_right": angle})
        for angle in (0.0, 90.0, 180.0)
    }
    places = {
        angle: [
            place(functions, turned[angle], "forearm_right", point)
            for point in (ulnar_head, segment_of("forearm_right").landmarks["RS_right"])
        ]
        for angle in turned
    }
    for head, _ in places.values():
        np.testing.assert_allclose(head, places[0.0][0], atol=1e-4)
    assert places[90.0][1][0] - places[0.0][1][0] > 0.03  # thumb side forward
    assert places[180.0][1][2] - places[0.0][1][2] < -0.06  # then inwards


# ---------------------------------------------------------------- what plus means

MIDLINE_SIGNS = [  # coordinate, segment, point of it, axis, sign
    ("lumbar_flexion", "thorax", (0, 0.1, 0), 0, +1),  # the chest goes forward
    ("lumbar_side_bend", "thorax", (0, 0.1, 0), 2, +1),  # to the right
    ("lumbar_twist", "thorax", (0, 0, 0.15), 0, +1),  # the right side forward
    ("neck_flexion", "head", (0, 0.15, 0), 0, +1),
    ("neck_side_bend", "head", (0, 0.15, 0), 2, +1),
    ("neck_twist", "head", (0.1, 0, 0), 2, -1),  # the face to the left
]

SIGNS = [
    ("clavicle_protraction", "scapula", (0, 0, 0), 0, +1),  # the shoulder goes forward
    ("clavicle_elevation", "scapula", (0, 0, 0), 1, +1),  # and up
    ("elbow_flexion", "hand", (0, 0, 0), 0, +1),  # the hand goes forward
    ("forearm_pronation", "hand", (0, -0.05, 0.03), 0, +1),  # the thumb side goes forward
    ("wrist_flexion", "hand", (0, -0.09, 0), 0, +1),  # the fingers towards the palm
    ("wrist_deviation", "hand", (0, -0.09, 0), 2, -1),  # towards the little finger
]


@pytest.mark.parametrize(("coordinate", "segment", "point", "axis", "sign"), MIDLINE_SIGNS)
def test_trunk_and_neck_turn_as_the_page_says(
    functions: SkeletonFunctions,
    coordinate: str,
    segment: str,
    point: tuple[float, ...],
    axis: int,
    sign: int,
) -> None:
    rest, moved = posture_of(functions, {}), posture_of(functions, {coordinate: 10})
    before, after = (place(functions, p, segment, point) for p in (rest, moved))
    assert sign * (after - before)[axis] > 1e-3


@pytest.mark.parametrize(("coordinate", "segment", "point", "axis", "sign"), SIGNS)
def test_plus_means_the_same_on_both_sides(
    functions: SkeletonFunctions,
    coordinate: str,
    segment: str,
    point: tuple[float, ...],
    axis: int,
    sign: int,
) -> None:
    moves = {}
    for side, at in (("right", np.array(point)), ("left", point * MIRROR)):
        rest = posture_of(functions, {})
        moved = posture_of(functions, {f"{coordinate}_{side}": 10})
        before, after = (place(functions, p, f"{segment}_{side}", at) for p in (rest, moved))
        moves[side] = after - before
    assert sign * moves["right"][axis] > 1e-3
    np.testing.assert_allclose(moves["left"], moves["right"] * MIRROR, atol=1e-12)


# Wu et al. 2005: plane 0 is abduction, 90 forward flexion; axial plus is internal. Elevation as told
# here is positive. Where the elbow and the front of the upper arm must go, on the right side.
ARMS = [
    ((0, 90, 0), (0, 0, 1), (1, 0, 0)),  # abduction: out to the side
    ((90, 90, -90), (1, 0, 0), (0, 1, 0)),  # flexion: forward, the front up
    ((-90, 45, 90), (-np.sqrt(0.5), -np.sqrt(0.5), 0), (np.sqrt(0.5), -np.sqrt(0.5), 0)),  # back
    ((0, 90, 90), (0, 0, 1), (0, -1, 0)),  # abducted and turned inwards: the front down
]


@pytest.mark.parametrize("side", SIDES)
@pytest.mark.parametrize(("angles", "distal", "front"), ARMS)
def test_shoulder_is_told_as_the_isb_tells_the_arm_in_the_thorax(
    functions: SkeletonFunctions,
    angles: tuple[float, ...],
    distal: tuple[float, ...],
    front: tuple[float, ...],
    side: str,
) -> None:
    flip = MIRROR if side == "left" else np.ones(3)
    y, x = -np.array(distal) * flip, np.array(front) * flip
    arm = Rotation.from_matrix(np.column_stack([x, y, np.cross(x, y)]))
    posture = posture_of(functions, {}, {f"shoulder_{side}": arm})
    told = reported_values(functions.kinematics, posture)
    names = [f"shoulder_{word}_{side}" for word in ("plane", "elevation", "axial")]
    found = np.degrees([told[name][0][0] for name in names])
    np.testing.assert_allclose(found, angles, atol=1e-6)


def test_girdle_moves_the_arm_and_leaves_its_attitude_to_the_thorax(
    functions: SkeletonFunctions,
) -> None:
    girdle = {"clavicle_protraction_right": 20.0, "clavicle_elevation_right": 15.0}
    rest, moved = posture_of(functions, {}), posture_of(functions, girdle)
    before, after = (pose(functions, p, "upper_arm_right") for p in (rest, moved))
    np.testing.assert_allclose(after[:3, :3], before[:3, :3], atol=1e-12)
    assert np.linalg.norm(after[:3, 3] - before[:3, 3]) > 0.04
    clavicle = pose(functions, moved, "clavicle_right")[:3, :3]
    np.testing.assert_allclose(pose(functions, moved, "scapula_right")[:3, :3], clavicle, atol=1e-9)


@pytest.mark.parametrize(
    ("joint", "child", "sequence"),
    [("lumbar", "thorax", "z"), ("lumbar", "thorax", "x"), ("lumbar", "thorax", "y")]
    + [("neck", "head", axis) for axis in "zxy"],
)
def test_shared_coordinates_are_the_whole_turn(
    functions: SkeletonFunctions, joint: str, child: str, sequence: str
) -> None:
    word, sign = {"z": ("flexion", -1), "x": ("side_bend", 1), "y": ("twist", 1)}[sequence]
    moved = pose(functions, posture_of(functions, {f"{joint}_{word}": 30}), child)[:3, :3]
    expected = Rotation.from_euler(sequence, sign * 30, degrees=True).as_matrix()
    np.testing.assert_allclose(moved, expected, atol=1e-12)


# ---------------------------------------------------------------- ranges


@pytest.mark.parametrize(("name", "lower", "upper", "source"), PUBLISHED_RANGES)
def test_ranges_contain_the_published_ones(
    name: str, lower: float, upper: float, source: str
) -> None:
    for twin in {name, name.replace("_right", "_left")}:
        coordinate = MODEL.coordinate(twin)
        assert np.degrees(coordinate.lower) <= lower, source
        assert np.degrees(coordinate.upper) >= upper, source


def test_no_coordinate_is_pulled_but_the_shoulders() -> None:
    assert [c.name for c in MODEL.coordinates if c.rest_sd is not None] == []
    pulls = {j.name: j.motion.rest_sd for j in MODEL.joints if isinstance(j.motion, Spherical)}
    assert {name: round(np.degrees(sd or 0.0)) for name, sd in pulls.items()} == {
        "shoulder_right": 60,
        "shoulder_left": 60,
    }


def test_there_are_44_free_coordinates() -> None:
    free = [c for c in MODEL.coordinates if c.follows is None]
    balls = [j for j in MODEL.joints if hasattr(j.motion, "angles")]
    assert len(free) + 3 * len(balls) == 44


# ---------------------------------------------------------------- markers


def test_markers_are_the_promised_ones() -> None:
    middle = {"C7", "T8", "T10", "IJ", "PX", "back_right"}
    sides = {"AC", "EL", "EM", "RS", "US", "MC2", "MC5", "upper_arm", "head_front", "head_back"}
    new = middle | {f"{n}_{s}" for n in sides for s in SIDES}
    assert set(MODEL.marker_names) == new | set(load_skeleton("lower_limbs").marker_names)


def test_every_marker_of_a_landmark_stands_in_front_of_it() -> None:
    landmarks = {(s.name, n): at for s in MODEL.segments for n, at in s.landmarks.items()}
    checked = 0
    for marker in MODEL.markers:
        bone = landmarks.get((marker.segment, marker.name))
        if bone is not None and marker.at is not None:
            distance = float(np.linalg.norm(np.subtract(marker.at, bone)))
            # Mantovani 2016: 19.6 + 10.9 mm of skin over the PSIS is the most; and half a marker.
            assert 0.005 < distance < 0.0196 + 0.0109 + 0.0125, marker.name
            checked += 1
    assert checked == 28 + 4 + 14


def test_the_legs_are_the_lower_limbs() -> None:
    limbs = load_skeleton("lower_limbs")
    for segment in limbs.segments:
        assert segment_of(segment.name) == segment
    for joint in limbs.joints:
        assert joint_of(joint.name) == joint
    assert set(limbs.markers) <= set(MODEL.markers)


# ---------------------------------------------------------------- fits


def made_up_posture(functions: SkeletonFunctions, frames: int, rng: np.random.Generator) -> Posture:
    """Random postures over the inner half of every range; the toes, which no marker shows, at rest."""
    freedoms = functions.kinematics.freedoms
    low, high = [], []
    for name in freedoms.scalars:
        c = MODEL.coordinate(name)
        a, b = (c.lower, c.upper) if c.has_range else (-0.3, 0.3)
        middle, half = (a + b) / 2, (b - a) / 4
        still = name.startswith("toes_")
        low.append(0.0 if still else middle - half)
        high.append(0.0 if still else middle + half)
    scalars = rng.uniform(low, high, (frames, len(low)))
    turns = rng.normal(0, 0.4, (frames * len(freedoms.balls), 3))
    quaternions = quaternions_of(Rotation.from_rotvec(turns))
    return Posture(scalars, quaternions.reshape(frames, -1, 4))


def without_pull(skeleton: Skeleton) -> Skeleton:
    joints = tuple(
        replace(j, motion=replace(j.motion, rest_sd=None)) if isinstance(j.motion, Spherical) else j
        for j in skeleton.joints
    )
    return replace(skeleton, joints=joints)


def told_angles(functions: SkeletonFunctions, posture: Posture) -> dict[str, FloatArray]:
    told = reported_values(functions.kinematics, posture)
    return {name: values for name, (values, _) in told.items() if not name.endswith("_sum")}


def wrapped(angle: FloatArray) -> FloatArray:
    return np.asarray((angle + np.pi) % (2 * np.pi) - np.pi)


def fitted(skeleton: Skeleton, positions: FloatArray) -> tuple[FrameProblem, Posture]:
    functions = SkeletonFunctions(skeleton)
    problem = frame_problem(skeleton, functions, positions, Upright("+Y", "made up"))
    return problem, fit_frames(problem).posture


def test_made_up_motion_is_found_again(functions: SkeletonFunctions) -> None:
    rng = np.random.default_rng(3)
    truth = made_up_posture(functions, 12, rng)
    positions = functions.marker_positions(truth, sized_numbers(MODEL, np.eye(3)))
    _, found = fitted(without_pull(MODEL), positions)
    expected, told = told_angles(functions, truth), told_angles(functions, found)
    for name, values in expected.items():
        np.testing.assert_allclose(wrapped(told[name] - values), 0, atol=1e-6, err_msg=name)


def test_the_shoulders_pull_moves_no_angle_by_much(functions: SkeletonFunctions) -> None:
    # With EL and EM on and no noise: 60 degrees of pull against a centimetre of skin.
    truth = made_up_posture(functions, 12, np.random.default_rng(4))
    positions = functions.marker_positions(truth, sized_numbers(MODEL, np.eye(3)))
    _, found = fitted(MODEL, positions)
    right = functions.kinematics.freedoms.balls.index("shoulder_right")
    true, had = (
        Rotation.from_quat(p.quaternions[:, right], scalar_first=True) for p in (truth, found)
    )
    off = np.degrees((true.inv() * had).magnitude())
    assert off.max() < 0.5
    assert off.max() > 1e-4  # the pull is there


def test_only_the_toes_cannot_be_seen(functions: SkeletonFunctions) -> None:
    positions = functions.marker_positions(
        standing_posture(functions), sized_numbers(MODEL, np.eye(3))
    )
    fit = fit_trial(MODEL, recorded(positions), up="+Y")
    assert set(fit.not_observed) == {"toes_extension_right", "toes_extension_left"}


def test_mirrored_markers_give_the_same_clinical_angles(functions: SkeletonFunctions) -> None:
    truth = made_up_posture(functions, 6, np.random.default_rng(5))
    numbers = sized_numbers(MODEL, np.eye(3))
    positions = functions.marker_positions(truth, numbers)
    names = MODEL.marker_names
    swapped = np.full_like(positions, np.nan)
    for i, name in enumerate(names):
        if other_side(name) in names:  # back_right has no twin
            swapped[:, names.index(other_side(name))] = positions[:, i] * MIRROR
    as_recorded = np.where(np.isfinite(swapped[:, :, :1]), positions, np.nan)
    plain = without_pull(MODEL)
    told = told_angles(functions, fitted(plain, as_recorded)[1])
    mirrored = told_angles(functions, fitted(plain, swapped)[1])
    reverse = {"pelvis_z", "pelvic_rotation", "pelvic_obliquity", "lumbar_side_bend"}
    reverse |= {"lumbar_twist", "neck_side_bend", "neck_twist"}
    for name, values in told.items():
        sign = -1 if name in reverse else 1
        off = wrapped(mirrored[other_side(name)] - sign * values)
        np.testing.assert_allclose(off, 0, atol=1e-6, err_msg=name)


def other_side(name: str) -> str:
    if name.endswith("_right"):
        return name.removesuffix("_right") + "_left"
    return name.removesuffix("_left") + "_right" if name.endswith("_left") else name


@pytest.mark.real
def test_a_lift_is_explained_from_a_still_recording_alone() -> None:
    folder = DATA / "box-lift"
    if not folder.is_dir():
        pytest.skip(f"REAL DATA ABSENT: {folder}")
    sized = calibrate(MODEL, read_recording(folder / "stand.c3d"))
    fit = fit_trial(sized.skeleton, read_recording(folder / "lift.c3d"))
    motion = fit.motion
    present = np.isfinite(motion.measured).all(axis=2)
    assert fit.rms() <= 0.013
    assert motion.used.sum() >= 0.98 * present.sum()
    assert fit.converged.all()
    for side in SIDES:
        row = motion.marker_names.index(f"AC_{side}")
        error = np.linalg.norm(motion.measured[:, row] - motion.fitted[:, row], axis=1)
        assert np.sqrt(np.mean(error**2)) < 0.032  # what arms without clavicles left there
    unseen = {name for name in fit.not_observed if not name.startswith("toes_")}
    assert unseen == set()
