"""Normal equations from composite moments against the Jacobian that they avoid."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import casadi as ca
import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from condyle.model.growth import sized_numbers
from condyle.model.skeleton import Size
from condyle.solver.frame_problem import FrameProblem, SkeletonFunctions
from condyle.solver.posture import Posture

FloatArray = NDArray[np.float64]


def jacobian_of(
    functions: SkeletonFunctions, posture: Posture, numbers: FloatArray
) -> list[FloatArray]:
    """(3 markers, freedoms) of each frame, by CasADi's differentiation of perturbed positions."""
    kinematics = functions.kinematics
    positions, step = kinematics.perturbed_marker_positions()
    inputs = [kinematics.scalars, kinematics.quaternions, kinematics.numbers, step]
    J = ca.Function("J", inputs, [ca.densify(ca.jacobian(positions, step))])
    return [
        J(posture.scalars[n], posture.quaternions[n].ravel(), numbers, 0).full()
        for n in range(len(posture))
    ]


def random_numbers(functions: SkeletonFunctions, rng: np.random.Generator) -> FloatArray:
    skeleton = functions.skeleton
    sizes = {
        s.name: Size(tuple(rng.uniform(0.8, 1.25, 3)))  # type: ignore[arg-type]
        for s in skeleton.segments
    }
    upright = Rotation.random(rng=rng).as_matrix()
    return sized_numbers(replace(skeleton, sizes=sizes), upright)


# Featherstone 2008, Rigid Body Dynamics Algorithms, ch. 6: the joint-space inertia of point masses.
@pytest.mark.parametrize("which", ["tree_functions", "limbs_functions"])
def test_moments_give_the_same_equations_as_the_jacobian(
    which: str, request: pytest.FixtureRequest, random_posture: Callable[..., Posture]
) -> None:
    functions: SkeletonFunctions = request.getfixturevalue(which)
    rng = np.random.default_rng(1)
    numbers = random_numbers(functions, rng)
    posture = random_posture(functions, 4, rng)
    points = functions.marker_positions(posture, numbers)
    measured = points + rng.normal(0, 0.02, points.shape)
    weights = rng.uniform(0, 3e4, points.shape[:2]) * (rng.random(points.shape[:2]) > 0.2)
    H, g, cost = functions.normal_equations(
        posture.scalars, posture.quaternions, measured, weights, numbers
    )
    for n, J in enumerate(jacobian_of(functions, posture, numbers)):
        W = np.repeat(weights[n], 3)
        residual = (measured - points)[n].ravel()
        scale = np.abs(H[n]).max()
        np.testing.assert_allclose(H[n], (J.T * W) @ J, atol=1e-11 * scale)
        np.testing.assert_allclose(g[n], J.T @ (W * residual), atol=1e-9 * np.abs(g[n]).max())
        assert cost[n] == pytest.approx(0.5 * residual @ (W * residual), rel=1e-12)


def test_the_gradient_matches_finite_differences_with_all_pulls(
    tree_functions: SkeletonFunctions, random_posture: Callable[..., Posture]
) -> None:
    """Balls pulled to the zero posture, scalars to their rest; language page, `rest_sd`."""
    functions = pulled(tree_functions)
    rng = np.random.default_rng(2)
    numbers = sized_numbers(functions.skeleton, np.eye(3))
    posture = random_posture(functions, 1, rng)
    measured = functions.marker_positions(posture, numbers)
    measured = measured + rng.normal(0, 0.05, measured.shape)
    problem = FrameProblem(functions, measured, np.ones(measured.shape[:2]), numbers)
    _, g, _ = problem(posture, np.arange(1))
    size, h = functions.kinematics.freedoms.size, 1e-6
    rows = np.zeros(size, dtype=np.int64)
    many, stretched = posture.take(rows), problem.take(rows)
    ahead = stretched(many.after(h * np.eye(size)), rows)[2]
    behind = stretched(many.after(-h * np.eye(size)), rows)[2]
    np.testing.assert_allclose(-g[0], (ahead - behind) / (2 * h), atol=1e-6 * np.abs(g).max())


def pulled(functions: SkeletonFunctions) -> SkeletonFunctions:
    """The same skeleton, with a pull on its shoulder and on two coordinates."""
    skeleton = functions.skeleton
    joints = tuple(
        replace(j, motion=replace(j.motion, rest_sd=0.5))  # type: ignore[call-arg]
        if j.name == "shoulder"
        else j
        for j in skeleton.joints
    )
    coordinates = tuple(
        replace(c, rest_sd=0.3) if c.name in ("bend", "slide") else c for c in skeleton.coordinates
    )
    return SkeletonFunctions(replace(skeleton, joints=joints, coordinates=coordinates))


def test_pulls_cost_what_the_language_says(tree_functions: SkeletonFunctions) -> None:
    functions = pulled(tree_functions)
    numbers = sized_numbers(functions.skeleton, np.eye(3))
    markers = len(functions.skeleton.markers)
    problem = FrameProblem(functions, np.zeros((1, markers, 3)), np.zeros((1, markers)), numbers)
    freedoms = functions.kinematics.freedoms
    posture = problem.rest()
    vector = np.array([0.3, -0.7, 0.4])
    step = np.zeros((1, freedoms.size))
    step[0, freedoms.ball_slice(freedoms.balls.index("shoulder"))] = vector
    step[0, freedoms.scalars.index("bend")] = 0.2
    step[0, freedoms.scalars.index("slide")] = -0.03
    _, _, cost = problem(posture.after(step), np.arange(1))
    expected = 0.5 * (vector @ vector / 0.5**2 + (0.2 / 0.3) ** 2 + (0.03 / 0.3) ** 2)
    assert cost[0] == pytest.approx(expected, rel=1e-12)


def test_a_missing_marker_leaves_no_trace(
    tree_functions: SkeletonFunctions,
    random_posture: Callable[..., Posture],
    problem_of: Callable[..., FrameProblem],
) -> None:
    numbers = sized_numbers(tree_functions.skeleton, np.eye(3))
    posture = random_posture(tree_functions, 1, np.random.default_rng(3))
    measured = tree_functions.marker_positions(posture, numbers) + 0.01
    measured[0, 4] = np.nan
    elsewhere = problem_of(tree_functions, measured, numbers)
    moved = elsewhere.measured.copy()
    moved[0, 4] = 1e3
    for one, other in zip(
        elsewhere(posture, np.arange(1)),
        replace(elsewhere, measured=moved)(posture, np.arange(1)),
        strict=True,
    ):
        np.testing.assert_array_equal(one, other)


@pytest.mark.parametrize("which", ["tree_functions", "limbs_functions"])
def test_with_its_curvature_the_equations_are_the_second_derivative_of_the_cost(
    which: str, request: pytest.FixtureRequest, random_posture: Callable[..., Posture]
) -> None:
    """Second differences of the cost along R Exp(d): symmetric in any two freedoms."""
    functions: SkeletonFunctions = request.getfixturevalue(which)
    rng = np.random.default_rng(5)
    numbers = random_numbers(functions, rng)
    posture = random_posture(functions, 1, rng)
    measured = functions.marker_positions(posture, numbers)
    measured = measured + rng.normal(0, 0.2, measured.shape)
    problem = FrameProblem(functions, measured, np.ones(measured.shape[:2]), numbers)
    H, _, _ = problem(posture, np.arange(1))
    exact = (H - problem.curvature(posture, np.arange(1)))[0]
    size, h = functions.kinematics.freedoms.size, 1e-4
    row, column = np.triu_indices(size)
    basis = h * np.eye(size)
    total = np.zeros(len(row))
    for one, other in ((1, 1), (1, -1), (-1, 1), (-1, -1)):
        rows = np.zeros(len(row), dtype=np.int64)
        there = posture.take(rows).after(one * basis[row] + other * basis[column])
        total += one * other * problem.take(rows)(there, rows)[2]
    numeric = np.zeros((size, size))
    numeric[row, column] = numeric[column, row] = total / (4 * h**2)
    assert np.abs(problem.curvature(posture, np.arange(1))).max() > 0.05
    np.testing.assert_allclose(exact, numeric, atol=2e-6 * np.abs(exact).max() + 1e-6)
