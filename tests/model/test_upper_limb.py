"""The shipped upper limb: what its comments say of its geometry, its senses, and what it shares with the body.

How it moves with its contacts closed is in the solver's tests. Values from memory are held to loose bounds only.
"""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from condyle.model import load_skeleton
from condyle.model.growth import sized_numbers
from condyle.model.skeleton import OnEllipsoid, Segment, Skeleton
from condyle.solver.frame_problem import SkeletonFunctions
from condyle.solver.posture import Posture, quaternions_of
from condyle.solver.reported import reported_values

FloatArray = NDArray[np.float64]

MODEL = load_skeleton("upper_limb")
BODY = load_skeleton("full_body")
SIDES = ("right", "left")
GIRDLE = (
    "clavicle_protraction",
    "clavicle_elevation",
    "scapula_protraction",
    "scapula_upward_rotation",
    "scapula_tilt",
)

# Degrees, from memory, so only that the ranges hold them: the clavicle of handbooks; the blade against the
# clavicle over an arm raised to the top, Ludewig et al. 2009, J Bone Joint Surg Am 91:378.
PUBLISHED_RANGES = [
    ("clavicle_protraction", -30, 30),
    ("clavicle_elevation", -10, 45),
    ("scapula_protraction", -5, 10),
    ("scapula_upward_rotation", 0, 60),
    ("scapula_tilt", -10, 30),
]


@pytest.fixture(scope="module")
def functions() -> SkeletonFunctions:
    return SkeletonFunctions(MODEL)


def segment_of(name: str, skeleton: Skeleton = MODEL) -> Segment:
    return skeleton.segments[skeleton.segment_index(name)]


def posture_of(
    functions: SkeletonFunctions,
    radians: Mapping[str, float],
    turned: Mapping[str, Rotation] | None = None,
) -> Posture:
    """Everything at zero but the scalars and balls that are given."""
    freedoms = functions.kinematics.freedoms
    scalars = np.zeros((1, len(freedoms.scalars)))
    balls = np.tile([1.0, 0.0, 0.0, 0.0], (1, len(freedoms.balls), 1))
    for name, value in radians.items():
        scalars[0, freedoms.scalars.index(name)] = value
    for joint, rotation in (turned or {}).items():
        balls[0, freedoms.balls.index(joint)] = quaternions_of(rotation)
    return Posture(scalars, balls)


def poses(functions: SkeletonFunctions, posture: Posture) -> dict[str, FloatArray]:
    """Segment -> (4, 4) laboratory from segment; the thorax stands in the laboratory's axes at zero."""
    found = functions.poses(posture, sized_numbers(MODEL, np.eye(3)))[0]
    return {s.name: found[i] for i, s in enumerate(MODEL.segments)}


def at(posed: Mapping[str, FloatArray], segment: str, landmark: str) -> FloatArray:
    place = segment_of(segment).landmarks[landmark]
    return np.asarray((posed[segment] @ [*place, 1.0])[:3])


def ellipsoid(side: str) -> tuple[FloatArray, FloatArray]:
    """Centre and radii, m; both ties of a side have the same."""
    kinds = [t.kind for t in MODEL.ties if t.name.endswith(side)]
    assert len(kinds) == 2
    first, second = kinds
    assert isinstance(first, OnEllipsoid)
    assert first == second
    return np.array(first.centre), np.array(first.radii)


def signed_gap(point: FloatArray, side: str) -> float:
    """(f - 1) / |grad f| (m) with f = sum ((p - c) / r)^2: above 0 outside."""
    centre, radii = ellipsoid(side)
    away = point - centre
    return float((((away / radii) ** 2).sum() - 1) / np.linalg.norm(2 * away / radii**2))


def signed_gaps(functions: SkeletonFunctions, posture: Posture, side: str) -> FloatArray:
    """Of TS and AI, m."""
    posed = poses(functions, posture)
    blade = f"scapula_{side}"
    return np.array([signed_gap(at(posed, blade, f"{n}_{side}"), side) for n in ("TS", "AI")])


# ---------------------------------------------------------------- the contact


@pytest.mark.parametrize("side", SIDES)
def test_in_the_reference_posture_both_points_lie_on_the_ellipsoid(
    functions: SkeletonFunctions, side: str
) -> None:
    assert np.abs(signed_gaps(functions, posture_of(functions, {}), side)).max() < 1e-4


@pytest.mark.parametrize("side", SIDES)
def test_the_ellipsoid_lies_about_the_ribs_as_the_file_says(side: str) -> None:
    centre, radii = ellipsoid(side)
    thorax = {name: np.array(place) for name, place in segment_of("thorax").landmarks.items()}
    assert abs(signed_gap(thorax["PX"], side)) < 0.001
    assert thorax["T8"][0] - (centre[0] - radii[0]) == pytest.approx(0.021, abs=0.001)
    assert abs(centre[2]) + radii[2] == pytest.approx(0.170)
    assert np.sign(centre[2]) == (1 if side == "right" else -1)


@pytest.mark.parametrize("side", SIDES)
def test_the_contact_takes_two_of_a_girdles_five_freedoms(
    functions: SkeletonFunctions, side: str
) -> None:
    h = 1e-6  # rad
    slopes = np.column_stack(
        [
            signed_gaps(functions, posture_of(functions, {f"{name}_{side}": h}), side)
            - signed_gaps(functions, posture_of(functions, {f"{name}_{side}": -h}), side)
            for name in GIRDLE
        ]
    ) / (2 * h)
    # m/rad: a point of the blade moves by its distance from a joint, some 0.1 m.
    assert np.linalg.svd(slopes, compute_uv=False).min() > 0.01


# ---------------------------------------------------------------- the blade


def test_the_blade_lies_in_the_thorax_as_the_file_says(functions: SkeletonFunctions) -> None:
    """Wu et al. 2005: Z from TS to AA, X across AA, TS and AI, told Y-X-Z; upwards and forwards are negative."""
    posed = poses(functions, posture_of(functions, {}))
    AA, TS, AI = (at(posed, "scapula_right", f"{n}_right") for n in ("AA", "TS", "AI"))
    z = (AA - TS) / np.linalg.norm(AA - TS)
    x = np.cross(AA - AI, AA - TS)
    x /= np.linalg.norm(x)
    assert x[0] > 0
    axes = np.column_stack([x, np.cross(z, x), z])
    angles = Rotation.from_matrix(axes).as_euler("YXZ", degrees=True)
    np.testing.assert_allclose(angles, [27, -11, -6], atol=0.5)
    assert np.linalg.norm(TS - AI) == pytest.approx(0.119, abs=5e-4)
    assert np.linalg.norm(TS - AA) == pytest.approx(0.112, abs=5e-4)
    assert TS[1] == pytest.approx(0, abs=0.015)  # the notch's height
    assert AI[1] == pytest.approx(segment_of("thorax").landmarks["T8"][1], abs=0.005)


@pytest.mark.parametrize("side", SIDES)
@pytest.mark.parametrize(
    ("name", "landmark", "axis", "sign"),
    [
        ("clavicle_protraction", "AA", "forward", 1),
        ("clavicle_elevation", "AA", "up", 1),
        ("scapula_protraction", "TS", "forward", -1),
        ("scapula_upward_rotation", "AI", "out", 1),
        ("scapula_tilt", "AI", "forward", 1),
    ],
)
def test_plus_means_what_the_page_says(
    functions: SkeletonFunctions, side: str, name: str, landmark: str, axis: str, sign: int
) -> None:
    def place(angle: float) -> FloatArray:
        posed = poses(functions, posture_of(functions, {f"{name}_{side}": angle}))
        return at(posed, f"scapula_{side}", f"{landmark}_{side}")

    outwards = np.array([0, 0, 1.0 if side == "right" else -1.0])
    towards = {"forward": np.array([1.0, 0, 0]), "up": np.array([0, 1.0, 0]), "out": outwards}
    moved = place(0.1) - place(0.0)
    assert sign * moved @ towards[axis] > 0.005
    assert sign * moved @ towards[axis] == pytest.approx(np.linalg.norm(moved), rel=0.35)


@pytest.mark.parametrize("side", SIDES)
def test_the_shoulders_angles_are_the_arms_in_the_thorax_whatever_the_girdle_does(
    functions: SkeletonFunctions, side: str
) -> None:
    """Wu et al. 2005: Y-X-Y, told here by scipy from the poses; elevation is counted positive."""
    rng = np.random.default_rng(1)
    mirror = 1 if side == "right" else -1
    for _ in range(5):
        girdle = {f"{name}_{side}": float(rng.uniform(-0.4, 0.4)) for name in GIRDLE}
        plane, elevation, axial = (float(v) for v in rng.uniform([-30, 20, -60], [120, 150, 60]))
        turn = Rotation.from_euler(
            "YXY", [mirror * plane, -mirror * elevation, mirror * axial], degrees=True
        )
        posture = posture_of(functions, girdle, {f"shoulder_{side}": turn})
        told = reported_values(functions.kinematics, posture)
        names = ("plane", "elevation", "axial")
        found = np.degrees([float(told[f"shoulder_{n}_{side}"][0][0]) for n in names])
        np.testing.assert_allclose(found, [plane, elevation, axial], atol=1e-9)
        posed = poses(functions, posture)
        in_thorax = posed["thorax"][:3, :3].T @ posed[f"upper_arm_{side}"][:3, :3]
        np.testing.assert_allclose(in_thorax, turn.as_matrix(), atol=1e-9)


# ---------------------------------------------------------------- what is shared, and what is not


def test_shared_parts_are_the_full_bodys() -> None:
    shared = {s.name for s in MODEL.segments} & {s.name for s in BODY.segments}
    assert shared >= {"thorax", "clavicle_right", "upper_arm_left", "forearm_right", "hand_left"}
    for name in shared - {"scapula_right", "scapula_left"}:
        assert segment_of(name) == segment_of(name, BODY), name


@pytest.mark.parametrize("side", SIDES)
@pytest.mark.parametrize("name", ["sternoclavicular", "shoulder", "elbow", "radioulnar", "wrist"])
def test_shared_joints_are_the_full_bodys(name: str, side: str) -> None:
    own, body = (
        next(j for j in skeleton.joints if j.name == f"{name}_{side}") for skeleton in (MODEL, BODY)
    )
    assert own == body


def test_there_are_30_free_coordinates() -> None:
    free = [c for c in MODEL.coordinates if c.follows is None]
    balls = [j for j in MODEL.joints if hasattr(j.motion, "angles")]
    assert len(free) + 3 * len(balls) == 30


@pytest.mark.parametrize("side", SIDES)
@pytest.mark.parametrize(("name", "lower", "upper"), PUBLISHED_RANGES)
def test_ranges_contain_the_published_ones(
    name: str, lower: float, upper: float, side: str
) -> None:
    coordinate = MODEL.coordinate(f"{name}_{side}")
    assert np.degrees(coordinate.lower) <= lower
    assert np.degrees(coordinate.upper) >= upper


def test_markers_are_the_promised_ones_each_told_in_words() -> None:
    middle = {"C7", "T8", "T10", "IJ", "PX", "back_right"}
    sides = {"AC", "AA", "TS", "AI", "PC", "acromion", "upper_arm", "EL", "EM", "forearm"}
    sides |= {"RS", "US", "MC2", "MC5"}
    assert set(MODEL.marker_names) == middle | {f"{n}_{s}" for n in sides for s in SIDES}
    assert all(marker.about for marker in MODEL.markers)


@pytest.mark.parametrize("name", ["AA", "TS", "AI", "PC"])
def test_every_marker_of_the_blade_stands_in_front_of_its_landmark(name: str) -> None:
    marker = next(m for m in MODEL.markers if m.name == f"{name}_right")
    assert marker.at is not None
    away = np.subtract(marker.at, segment_of("scapula_right").landmarks[f"{name}_right"])
    # Half a marker, 7 mm, and skin of 5 to 13 mm (common practice).
    assert 0.012 <= np.linalg.norm(away) < 0.020
    # On the back of the body behind the bone, but for the coracoid process in front.
    assert np.sign(away[0]) == (1 if name == "PC" else -1)
