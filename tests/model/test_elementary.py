"""Elementary moves and couplings against scipy, numpy and a published table."""

from __future__ import annotations

from collections.abc import Callable

import casadi as ca
import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from numpy.typing import NDArray
from scipy.interpolate import CubicSpline
from scipy.spatial.transform import Rotation

from condyle.model.elementary import (
    coupled,
    cross_matrix,
    rotation_about,
    rotation_of_quaternion,
    rotation_of_turn,
)
from condyle.model.skeleton import Moves, Polynomial, Skeleton, Spline, Turn

FloatArray = NDArray[np.float64]

KNOTS = ((-0.4, 0.1), (0.0, 0.0), (0.7, 0.3), (1.0, 0.25), (2.1, -0.4))
POLYNOMIAL = Polynomial((0.1, -0.3, 0.7, 0.2), (-0.5, 1.5))


def function_of(coupling: Polynomial | Spline) -> Callable[[FloatArray], tuple[FloatArray, ...]]:
    """Value and first derivative of a coupling at many points."""
    x = ca.SX.sym("x")
    value = coupled(coupling, x)
    both = ca.Function("both", [x], [value, ca.jacobian(value, x)])

    def evaluate(points: FloatArray) -> tuple[FloatArray, ...]:
        found = np.array([[float(v) for v in both(float(p))] for p in points])
        return found[:, 0], found[:, 1]

    return evaluate


def unit(vector: list[float]) -> tuple[float, float, float]:
    x, y, z = np.array(vector) / np.linalg.norm(vector)
    return (float(x), float(y), float(z))


axes = st.lists(st.floats(-1, 1), min_size=3, max_size=3).filter(lambda v: np.linalg.norm(v) > 0.1)


# Rodrigues' rotation formula, against scipy.spatial.transform.Rotation.from_rotvec.
@given(axis=axes, angle=st.floats(-10, 10))
def test_a_rotation_about_an_axis_is_that_of_scipy(axis: list[float], angle: float) -> None:
    found = ca.DM(rotation_about(unit(axis), ca.SX(angle))).full()
    expected = Rotation.from_rotvec(angle * np.array(unit(axis))).as_matrix()
    np.testing.assert_allclose(found, expected, atol=1e-13)


def test_a_positive_angle_turns_right_handedly() -> None:
    # Right-hand rule: about z, x goes to y; about x, y to z; about y, z to x.
    quarter = ca.SX(np.pi / 2)
    for axis, before, after in ((2, 0, 1), (0, 1, 2), (1, 2, 0)):
        direction = np.eye(3)[axis]
        turned = ca.DM(rotation_about(tuple(direction), quarter)).full() @ np.eye(3)[before]
        np.testing.assert_allclose(turned, np.eye(3)[after], atol=1e-15)


def test_zeros_of_an_axis_stay_structural() -> None:
    assert rotation_about((0.0, 0.0, 1.0), ca.SX.sym("q")).nnz() == 5


def test_a_fixed_turn_is_the_same_rotation() -> None:
    turn = Turn(unit([1, 2, -1]), 0.61)
    expected = Rotation.from_rotvec(0.61 * np.array(turn.axis)).as_matrix()
    np.testing.assert_allclose(rotation_of_turn(turn), expected, atol=1e-14)
    np.testing.assert_array_equal(rotation_of_turn(None), np.eye(3))


def test_a_unit_quaternion_gives_the_rotation_of_scipy() -> None:
    for rotation in Rotation.random(20, rng=np.random.default_rng(1)):
        q = ca.SX(ca.DM(rotation.as_quat(scalar_first=True)))
        found = ca.DM(rotation_of_quaternion(q)).full()
        np.testing.assert_allclose(found, rotation.as_matrix(), atol=1e-14)


def test_the_cross_matrix_is_numpys_cross_product() -> None:
    rng = np.random.default_rng(2)
    a, b = rng.normal(size=(2, 3))
    found = ca.DM(cross_matrix(ca.SX(ca.DM(a)))).full() @ b
    np.testing.assert_allclose(found, np.cross(a, b), atol=1e-14)


def test_a_polynomial_without_between_is_numpys_everywhere() -> None:
    x = np.linspace(-3, 3, 41)
    value, slope = function_of(Polynomial((0.1, -0.3, 0.7, 0.2)))(x)
    expected = np.polynomial.Polynomial([0.1, -0.3, 0.7, 0.2])
    np.testing.assert_allclose(value, expected(x), atol=1e-13)
    np.testing.assert_allclose(slope, expected.deriv()(x), atol=1e-13)


def test_a_polynomial_is_a_straight_line_outside_between() -> None:
    inside = np.polynomial.Polynomial(POLYNOMIAL.coefficients)
    value_of = function_of(POLYNOMIAL)
    for end, outside in ((-0.5, np.linspace(-4, -0.5, 15)), (1.5, np.linspace(1.5, 6, 15))):
        value, slope = value_of(outside)
        np.testing.assert_allclose(slope, inside.deriv()(end), atol=1e-13)
        tangent = inside(end) + inside.deriv()(end) * (outside - end)
        np.testing.assert_allclose(value, tangent, atol=1e-12)
    middle = np.linspace(-0.5, 1.5, 21)
    np.testing.assert_allclose(value_of(middle)[0], inside(middle), atol=1e-13)


# scipy.interpolate.CubicSpline with natural ends; outside, the language's straight lines.
def test_a_spline_is_scipys_natural_cubic_inside_and_straight_outside() -> None:
    knots, values = np.array(KNOTS).T
    spline = CubicSpline(knots, values, bc_type="natural")
    value_of = function_of(Spline(KNOTS))
    inside = np.linspace(knots[0], knots[-1], 101)
    value, slope = value_of(inside)
    np.testing.assert_allclose(value, spline(inside), atol=1e-13)
    np.testing.assert_allclose(slope, spline(inside, 1), atol=1e-12)
    for end, outside in (
        (knots[0], np.linspace(-5, knots[0], 15)),
        (knots[-1], np.linspace(knots[-1], 5, 15)),
    ):
        value, slope = value_of(outside)
        np.testing.assert_allclose(slope, spline(end, 1), atol=1e-12)
        np.testing.assert_allclose(
            value, spline(end) + spline(end, 1) * (outside - end), atol=1e-12
        )


def test_a_spline_of_two_points_is_the_line_through_them() -> None:
    x = np.linspace(-2, 3, 11)
    value, slope = function_of(Spline(((0.0, 0.1), (1.0, 0.4))))(x)
    np.testing.assert_allclose(value, 0.1 + 0.3 * x, atol=1e-14)
    np.testing.assert_allclose(slope, 0.3, atol=1e-14)


@pytest.mark.parametrize("coupling", [POLYNOMIAL, Spline(KNOTS)], ids=["polynomial", "spline"])
def test_derivatives_match_finite_differences_everywhere_and_at_the_knots(
    coupling: Polynomial | Spline,
) -> None:
    special = POLYNOMIAL.between if isinstance(coupling, Polynomial) else np.array(KNOTS)[:, 0]
    points = np.concatenate([np.linspace(-3, 4, 50), np.asarray(special)])
    value_of, h = function_of(coupling), 1e-6
    numeric = (value_of(points + h)[0] - value_of(points - h)[0]) / (2 * h)
    # The second derivative may jump at a knot; a central difference is then off by h/2 of the jump.
    np.testing.assert_allclose(value_of(points)[1], numeric, atol=5e-6)


# Walker, Rovick & Robertson 1988, J Biomech 21:965, polynomials as transcribed publicly; the table
# of their values at F degrees: adduction and internal rotation (degrees), A/P and S/I (mm).
WALKER = {
    10: (0.727, 3.407, -0.599, -1.235),
    20: (1.300, 6.268, -1.044, -2.374),
    30: (1.696, 8.630, -1.358, -3.417),
    45: (1.935, 11.336, -1.632, -4.802),
    60: (1.769, 13.177, -1.739, -5.971),
    90: (0.654, 14.884, -1.750, -7.662),
    120: (-0.096, 14.992, -1.998, -8.490),
}


@pytest.mark.parametrize("side", ["right", "left"])
def test_the_shipped_knee_follows_the_table_of_walker_to_its_printed_digits(
    limbs: Skeleton, side: str
) -> None:
    knee = next(joint for joint in limbs.joints if joint.name == f"knee_{side}")
    assert isinstance(knee.motion, Moves)
    following = [move for move in knee.motion.moves if move.function is not None]
    assert [move.kind for move in following] == ["rotate", "rotate", "translate", "translate"]
    for flexion, row in WALKER.items():
        x = np.array([np.radians(flexion)])
        found = [function_of(move.function)(x)[0][0] for move in following if move.function]
        # The table describes the femur on the tibia, the joint moves the tibia on the femur: the
        # translations have the sign reversed (stated in the model file).
        told = np.array([*np.degrees(found[:2]), *(-1000 * np.array(found[2:]))])
        np.testing.assert_allclose(told, row, atol=6e-4)
