"""Forward kinematics against chains written out by hand with scipy's rotations."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import casadi as ca
import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray
from scipy.interpolate import CubicSpline
from scipy.spatial.transform import Rotation

from condyle.model.growth import sized_marker_at, sized_numbers
from condyle.model.kinematics import Kinematics
from condyle.model.skeleton import Size, Skeleton
from condyle.solver.frame_problem import SkeletonFunctions
from condyle.solver.posture import Posture, quaternions_of
from condyle.solver.upright import UP_AXES, Upright

FloatArray = NDArray[np.float64]

SIZES = {
    "trunk": Size((1.1, 0.9, 1.05)),
    "arm": Size((0.95, 1.2, 1.02)),
    "forearm": Size((1.3, 0.8, 0.9)),
    "leg": Size((0.9, 1.15, 1.07)),
}


def turn(axis: list[float], degrees: float) -> FloatArray:
    pose = np.eye(4)
    pose[:3, :3] = Rotation.from_rotvec(
        np.radians(degrees) * np.array(axis) / np.linalg.norm(axis)
    ).as_matrix()
    return pose


def shift(vector: FloatArray | list[float], by: float = 1.0) -> FloatArray:
    pose = np.eye(4)
    pose[:3, 3] = np.array(vector) * by
    return pose


def along(axis: list[float], metres: float) -> FloatArray:
    return shift(np.array(axis) / np.linalg.norm(axis), metres)


def rigid(rotation: FloatArray) -> FloatArray:
    pose = np.eye(4)
    pose[:3, :3] = rotation
    return pose


def twist_of(bend: float) -> float:
    """2 + 0.3 F - 0.001 F^2 between 0 and 120 degrees, a straight line outside."""
    f = np.polynomial.Polynomial([2, 0.3, -0.001])
    end = np.clip(bend, 0, 120)
    return float(f(end) + f.deriv()(end) * (bend - end))


def slide_of(bend: float) -> float:
    knots = np.array([0, 40, 90, 130.0])
    spline = CubicSpline(knots, [0, 0.02, 0.01, -0.03], bc_type="natural")
    end = np.clip(bend, 0, 130)
    return float(spline(end) + spline(end, 1) * (bend - end))


def poses_by_hand(
    q: dict[str, float], balls: dict[str, FloatArray], upright: FloatArray
) -> dict[str, FloatArray]:
    """The tree of conftest, joint by joint, angles in degrees; factors as in SIZES.

    A joint is parent . at . turned . moves . -in_child (the language's page on joints); a dependent
    translation grows by |diag(f) a| with a its axis turned into the parent by `turned` alone.
    """
    f = {name: np.array(size.factors) for name, size in SIZES.items()}
    world: dict[str, FloatArray] = {}
    world["trunk"] = (
        shift([0.1, -0.2, 0.3])
        @ shift([q["px"], q["py"], q["pz"]])
        @ rigid(upright)
        @ rigid(balls["root"])
        @ shift(-f["trunk"] * [0.02, 0.05, -0.03])
    )
    world["arm"] = (
        world["trunk"]
        @ shift(f["trunk"] * [0.03, 0.4, 0.2])
        @ turn([1, 2, -1], 35)
        @ rigid(balls["shoulder"])
        @ shift(-f["arm"] * [0.01, 0.02, -0.01])
    )
    axis_in_arm = turn([0.2, -1, 0.4], -20)[:3, :3] @ np.array([1, 0.5, 0]) / np.hypot(1, 0.5)
    gain = np.linalg.norm(f["arm"] * axis_in_arm)
    world["forearm"] = (
        world["arm"]
        @ shift(f["arm"] * [0.02, -0.3, 0.01])
        @ turn([0.2, -1, 0.4], -20)
        @ turn([0.3, -0.2, 1], q["bend"])
        @ along([1, 0.5, 0], gain * slide_of(q["bend"]))
        @ turn([0, 1, 0], twist_of(q["bend"]))
        @ along([0, 1, 0.2], q["slide"])
        @ shift(-f["forearm"] * [0, 0.03, 0.01])
    )
    world["hand"] = (
        world["forearm"]
        @ shift(f["forearm"] * [0, -0.25, 0])
        @ turn([1, 0, 0], 0.5 * twist_of(q["bend"]))
        @ turn([0.1, 0.2, -1], q["shared"])
    )
    world["leg"] = (
        world["trunk"]
        @ shift(f["trunk"] * [0.01, -0.05, 0.1])
        @ turn([0, 0, -1], q["swing"])
        @ turn([1, 0.1, 0], q["shared"])
        @ along([0, 0, 1], f["trunk"][2] * (0.01 + 0.0004 * q["shared"]))
        @ turn([0, 1, 0], q["spin"])
    )
    world["plate"] = world["leg"] @ shift(f["leg"] * [0, -0.4, 0]) @ turn([0, 1, 0], 90)
    world["stick"] = shift([q["sx"], q["sy"], q["sz"]]) @ rigid(upright) @ rigid(balls["thrown"])
    return world


def a_posture(rng: np.random.Generator) -> tuple[dict[str, float], dict[str, FloatArray]]:
    metres = ("px", "py", "pz", "sx", "sy", "sz")
    q = {name: float(rng.normal()) for name in metres}
    q |= {"bend": float(rng.uniform(-10, 140)), "slide": float(rng.uniform(-0.05, 0.08))}
    q |= {name: float(rng.uniform(-30, 40)) for name in ("shared", "swing", "spin")}
    random = Rotation.random(3, rng=rng).as_matrix()
    return q, dict(zip(("root", "shoulder", "thrown"), random, strict=True))


def posture_of(
    functions: SkeletonFunctions, q: dict[str, float], balls: dict[str, FloatArray]
) -> Posture:
    skeleton, freedoms = functions.skeleton, functions.kinematics.freedoms
    scalars = [
        q[name] if skeleton.coordinate(name).unit == "m" else np.radians(q[name])
        for name in freedoms.scalars
    ]
    stack = Rotation.from_matrix(np.array([balls[name] for name in freedoms.balls]))
    return Posture(np.array([scalars]), quaternions_of(stack)[None])


@pytest.mark.parametrize("up", UP_AXES)
def test_a_pose_is_the_product_of_rotations_and_translations_written_out_by_hand(
    tree: Skeleton, tree_functions: SkeletonFunctions, up: str
) -> None:
    rng = np.random.default_rng(3)
    upright = Upright(up, "").laboratory_from_upright
    numbers = sized_numbers(replace(tree, sizes=SIZES), upright)
    for _ in range(5):
        q, balls = a_posture(rng)
        posture = posture_of(tree_functions, q, balls)
        found = tree_functions.poses(posture, numbers)[0]
        for name, expected in poses_by_hand(q, balls, upright).items():
            pose = found[tree.segment_index(name)]
            np.testing.assert_allclose(pose, expected, atol=1e-12, err_msg=name)


def test_a_marker_is_carried_by_its_segments_pose(
    tree: Skeleton, tree_functions: SkeletonFunctions
) -> None:
    sized = replace(tree, sizes=SIZES)
    numbers = sized_numbers(sized, np.eye(3))
    q, balls = a_posture(np.random.default_rng(4))
    posture = posture_of(tree_functions, q, balls)
    points = tree_functions.marker_positions(posture, numbers)[0]
    poses = poses_by_hand(q, balls, np.eye(3))
    for point, marker, at in zip(points, tree.markers, sized_marker_at(sized), strict=True):
        np.testing.assert_allclose(point, (poses[marker.segment] @ [*at, 1])[:3], atol=1e-12)


# The language: upright is the laboratory turned by the smallest rotation so that Y is up.
@pytest.mark.parametrize("up", UP_AXES)
def test_upright_is_the_smallest_turn_that_brings_y_up(up: str) -> None:
    rotation = Upright(up, "").laboratory_from_upright
    axis = np.zeros(3)
    axis["XYZ".index(up[1])] = 1.0 if up[0] == "+" else -1.0
    np.testing.assert_array_equal(rotation @ [0, 1, 0], axis)
    angle = np.degrees(Rotation.from_matrix(rotation).magnitude())
    assert angle == pytest.approx(np.degrees(np.arccos(np.clip(axis[1], -1, 1))))
    assert np.linalg.det(rotation) == pytest.approx(1.0)


def test_upright_turns_about_the_axes_that_the_language_names() -> None:
    # Z up: about x; X up: about z; Y down: about x.
    for up, fixed in (("+Z", 0), ("-Z", 0), ("+X", 2), ("-X", 2), ("-Y", 0)):
        rotation = Upright(up, "").laboratory_from_upright
        np.testing.assert_array_equal(rotation[:, fixed], np.eye(3)[fixed])


PLANAR = """\
condyle: 1
name: planar
segments: {thigh: {}}
joints:
  root:
    from: laboratory
    to: thigh
    turned: upright
    moves:
      - {translate: x, coordinate: forward}
      - {translate: y, coordinate: height}
      - {rotate: z, coordinate: lean}
markers: {a: {segment: thigh, at: [0, -0.4, 0]}}
"""


def test_moves_that_are_turned_upright_start_from_the_upright_frame(
    skeleton_of: Callable[[str], Skeleton],
) -> None:
    functions = SkeletonFunctions(skeleton_of(PLANAR))
    upright = Upright("+Z", "").laboratory_from_upright
    numbers = sized_numbers(functions.skeleton, upright)
    posture = Posture(np.array([[0.7, 0.9, 0.2]]), np.zeros((1, 0, 4)))
    expected = rigid(upright) @ shift([0.7, 0.9, 0]) @ turn([0, 0, 1], np.degrees(0.2))
    np.testing.assert_allclose(functions.poses(posture, numbers)[0, 0], expected, atol=1e-14)
    # Z up: what is high in the file stands high along the laboratory's Z.
    assert functions.poses(posture, numbers)[0, 0][2, 3] == pytest.approx(0.9)


@settings(max_examples=60, deadline=None)
@given(seed=st.integers(0, 2**32 - 1), wild=st.floats(0.1, 8))
def test_every_pose_is_rigid(
    tree_functions: SkeletonFunctions, limbs_functions: SkeletonFunctions, seed: int, wild: float
) -> None:
    rng = np.random.default_rng(seed)
    for functions in (tree_functions, limbs_functions):
        freedoms = functions.kinematics.freedoms
        scalars = rng.uniform(-wild, wild, (3, len(freedoms.scalars)))
        balls = Rotation.random(3 * len(freedoms.balls), rng=rng)
        posture = Posture(scalars, quaternions_of(balls).reshape(3, -1, 4))
        numbers = sized_numbers(functions.skeleton, np.eye(3))
        rotation = functions.poses(posture, numbers)[..., :3, :3]
        square = np.swapaxes(rotation, -1, -2) @ rotation
        np.testing.assert_allclose(square, np.broadcast_to(np.eye(3), square.shape), atol=1e-12)
        np.testing.assert_allclose(np.linalg.det(rotation), 1.0, atol=1e-12)


def marker_jacobian(functions: SkeletonFunctions) -> Callable[[Posture, FloatArray], FloatArray]:
    """(3 markers, freedoms) by CasADi's own differentiation of the perturbed positions."""
    kinematics = functions.kinematics
    positions, step = kinematics.perturbed_marker_positions()
    inputs = [kinematics.scalars, kinematics.quaternions, kinematics.numbers, step]
    function = ca.Function("J", inputs, [ca.densify(ca.jacobian(positions, step))])

    def evaluate(posture: Posture, numbers: FloatArray) -> FloatArray:
        J = function(posture.scalars[0], posture.quaternions[0].ravel(), numbers, 0)
        return np.asarray(J.full())

    return evaluate


@pytest.mark.parametrize("which", ["tree_functions", "limbs_functions"])
def test_the_marker_jacobian_matches_finite_differences(
    which: str, request: pytest.FixtureRequest, random_posture: Callable[..., Posture]
) -> None:
    functions: SkeletonFunctions = request.getfixturevalue(which)
    numbers = sized_numbers(functions.skeleton, Upright("+Z", "").laboratory_from_upright)
    jacobian, size, h = marker_jacobian(functions), functions.kinematics.freedoms.size, 1e-6
    for seed in range(3):
        posture = random_posture(functions, 1, np.random.default_rng(seed))
        many = posture.take(np.zeros(size, dtype=np.int64))
        ahead = functions.marker_positions(many.after(h * np.eye(size)), numbers)
        behind = functions.marker_positions(many.after(-h * np.eye(size)), numbers)
        numeric = ((ahead - behind) / (2 * h)).reshape(size, -1).T
        np.testing.assert_allclose(jacobian(posture, numbers), numeric, atol=2e-9)


@pytest.mark.parametrize("which", ["tree_functions", "limbs_functions"])
def test_screws_move_the_markers_as_the_jacobian_says(
    which: str, request: pytest.FixtureRequest, random_posture: Callable[..., Posture]
) -> None:
    functions: SkeletonFunctions = request.getfixturevalue(which)
    skeleton, kinematics = functions.skeleton, functions.kinematics
    numbers = sized_numbers(skeleton, np.eye(3))
    posture = random_posture(functions, 1, np.random.default_rng(7))
    screws = ca.vertcat(*[ca.vertcat(s.linear, s.angular) for s in kinematics.screws])
    inputs = [kinematics.scalars, kinematics.quaternions, kinematics.numbers]
    values = np.array(
        ca.Function("s", inputs, [screws])(
            posture.scalars[0], posture.quaternions[0].ravel(), numbers
        )
    ).reshape(-1, 6)
    points = functions.marker_positions(posture, numbers)[0]
    J = np.zeros((len(points), 3, kinematics.freedoms.size))
    for screw, (linear, angular) in zip(kinematics.screws, values.reshape(-1, 2, 3), strict=True):
        for m, marker in enumerate(skeleton.markers):
            if screw.joint in path_to(skeleton, marker.segment):
                J[m, :, screw.freedom] += linear + np.cross(angular, points[m])
    np.testing.assert_allclose(
        J.reshape(-1, kinematics.freedoms.size),
        marker_jacobian(functions)(posture, numbers),
        atol=1e-12,
    )


def path_to(skeleton: Skeleton, segment: str) -> set[int]:
    """The joints between the laboratory and a segment."""
    joints = set()
    while segment != "laboratory":
        index = skeleton.segment_index(segment)
        joints.add(index)
        segment = skeleton.joints[index].parent
    return joints


@pytest.mark.parametrize("which", ["tree_functions", "limbs_functions"])
def test_which_freedom_moves_which_marker_is_the_jacobians_pattern(
    which: str, request: pytest.FixtureRequest, random_posture: Callable[..., Posture]
) -> None:
    functions: SkeletonFunctions = request.getfixturevalue(which)
    numbers = sized_numbers(functions.skeleton, np.eye(3))
    jacobian = marker_jacobian(functions)
    moved = np.zeros_like(functions.moves_marker)
    for seed in range(3):
        posture = random_posture(functions, 1, np.random.default_rng(seed))
        J = jacobian(posture, numbers).reshape(len(functions.skeleton.markers), 3, -1)
        moved |= (np.abs(J).max(axis=1) > 1e-9).T
    np.testing.assert_array_equal(functions.moves_marker, moved)


def test_dependent_coordinates_are_told_in_the_skeletons_order(
    tree: Skeleton, tree_functions: SkeletonFunctions
) -> None:
    kinematics = tree_functions.kinematics
    q, balls = a_posture(np.random.default_rng(8))
    posture = posture_of(tree_functions, q, balls)
    function = ca.Function("c", [kinematics.scalars], [kinematics.coordinate_values])
    told = np.array(function(posture.scalars[0])).ravel()
    twist = [c.name for c in tree.coordinates].index("twist")
    assert np.degrees(told[twist]) == pytest.approx(twist_of(q["bend"]), abs=1e-10)
    assert kinematics.freedoms.scalars == tuple(
        c.name for c in tree.coordinates if c.name != "twist"
    )


def test_one_expression_serves_every_subject(tree: Skeleton) -> None:
    sized = Kinematics(replace(tree, sizes=SIZES))
    plain = Kinematics(tree)
    for one, other in zip(sized.rotations, plain.rotations, strict=True):
        assert str(one) == str(other)
    assert sized.layout == plain.layout
