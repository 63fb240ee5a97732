"""The numpy replay of a CasADi function against CasADi's own evaluation of it."""

from __future__ import annotations

from collections.abc import Callable
from typing import Any

import casadi as ca
import numpy as np
import pytest

from condyle.model.growth import sized_numbers
from condyle.solver.frame_problem import SkeletonFunctions
from condyle.solver.over_frames import BLOCK_FRAMES, WORTH_A_BLOCK, Replay, ReplayOrMachine
from condyle.solver.posture import Posture

OPERATIONS: dict[str, Callable[[Any, Any], Any]] = {
    "add": lambda a, b: a + b,
    "subtract": lambda a, b: a - b,
    "multiply": lambda a, b: a * b,
    "divide": lambda a, b: a / b,
    "negate": lambda a, b: -a,
    "twice": lambda a, b: 2 * a,
    "square": lambda a, b: a**2,
    "power": lambda a, b: ca.fabs(a) ** b,
    "constant power": lambda a, b: ca.fabs(a) ** 2.7,
    "square root": lambda a, b: ca.sqrt(ca.fabs(a)),
    "inverse": lambda a, b: 1 / a,
    "sine": lambda a, b: ca.sin(a),
    "cosine": lambda a, b: ca.cos(a),
    "tangent": lambda a, b: ca.tan(a),
    "arcsine": lambda a, b: ca.asin(a / 4),
    "arccosine": lambda a, b: ca.acos(a / 4),
    "arctangent": lambda a, b: ca.atan(a),
    "arctangent of two": lambda a, b: ca.atan2(a, b),
    "exponential": lambda a, b: ca.exp(a),
    "logarithm": lambda a, b: ca.log(ca.fabs(a)),
    "absolute": lambda a, b: ca.fabs(a),
    "sign": lambda a, b: ca.sign(a),
    "smaller": lambda a, b: ca.fmin(a, b),
    "larger": lambda a, b: ca.fmax(a, b),
    "less": lambda a, b: a < b,
    "less or equal": lambda a, b: a <= b,
    "equal": lambda a, b: ca.if_else(a == b, 1.0, a),
    "not equal": lambda a, b: ca.if_else(a != b, a, b),
    "and": lambda a, b: ca.logic_and(a > 0, b > 0),
    "or": lambda a, b: ca.logic_or(a > 0, b > 0),
    "not": lambda a, b: ca.logic_not(a > 0),
    "if, else": lambda a, b: ca.if_else(a > 0, ca.sqrt(ca.fabs(a)), b),
    "piecewise constant": lambda a, b: ca.pw_const(a, ca.DM([-1, 0, 1]), ca.DM([5, 6, 7, 8])),
    "constant": lambda a, b: ca.SX(3.25),
    "input": lambda a, b: a,
}


def by_casadi(function: Any, *inputs: np.ndarray) -> list[np.ndarray]:
    """Frame by frame through CasADi's own evaluation."""
    frames = next(len(x) for x in inputs if x.ndim == 2)
    rows = [
        [out.full().ravel() for out in function.call([x[n] if x.ndim == 2 else x for x in inputs])]
        for n in range(frames)
    ]
    return [np.array(out) for out in zip(*rows, strict=True)]


@pytest.mark.parametrize("name", OPERATIONS)
def test_each_operation_is_evaluated_as_casadi_does(name: str) -> None:
    a, b = ca.SX.sym("a"), ca.SX.sym("b")
    function = ca.Function("f", [a, b], [ca.densify(OPERATIONS[name](a, b))])
    rng = np.random.default_rng(1)
    first = np.concatenate([rng.uniform(-3, 3, 40), [1.0, -1.0, 2.0]])[:, None]
    second = np.concatenate([rng.uniform(-3, 3, 40), [1.0, 1.0, -2.0]])[:, None]
    found = Replay(function, block=8)(first, second)[0]
    np.testing.assert_allclose(found, by_casadi(function, first, second)[0], rtol=1e-14, atol=1e-15)


def test_the_branch_that_is_not_taken_does_no_harm() -> None:
    a = ca.SX.sym("a")
    function = ca.Function("f", [a], [ca.if_else(a > 0, ca.log(a), 0)])
    points = np.array([[-1.0], [0.0], [2.0]])
    np.testing.assert_allclose(Replay(function)(points)[0][:, 0], [0, 0, np.log(2)])


# Not a multiple of the block, one frame, exactly one block, several.
@pytest.mark.parametrize("frames", [1, 7, 8, 9, 16, 29])
def test_blocks_do_not_show_in_the_result(
    frames: int,
    tree_functions: SkeletonFunctions,
    random_posture: Callable[..., Posture],
) -> None:
    posture = random_posture(tree_functions, frames, np.random.default_rng(2))
    numbers = sized_numbers(tree_functions.skeleton, np.eye(3))
    function = tree_functions.normal_equations.function
    rng = np.random.default_rng(3)
    markers = len(tree_functions.skeleton.markers)
    inputs = (
        posture.scalars,
        posture.quaternions.reshape(frames, -1),
        rng.normal(size=(frames, 3 * markers)),
        rng.uniform(0, 2, (frames, markers)),
        numbers,
    )
    found = Replay(function, block=8)(*inputs)
    for one, other in zip(found, by_casadi(function, *inputs), strict=True):
        np.testing.assert_allclose(one, other, rtol=1e-10, atol=1e-10)


def test_the_standard_block_is_crossed_without_a_seam(
    limbs_functions: SkeletonFunctions, random_posture: Callable[..., Posture]
) -> None:
    frames = 2 * BLOCK_FRAMES + 3
    posture = random_posture(limbs_functions, frames, np.random.default_rng(4))
    numbers = sized_numbers(limbs_functions.skeleton, np.eye(3))
    whole = limbs_functions.marker_positions(posture, numbers)
    for row in (0, BLOCK_FRAMES - 1, BLOCK_FRAMES, frames - 1):
        alone = limbs_functions.marker_positions(posture.take(np.array([row])), numbers)
        np.testing.assert_array_equal(whole[row], alone[0])


def test_inputs_that_all_frames_share_are_those_of_every_frame() -> None:
    x, p = ca.SX.sym("x", 2), ca.SX.sym("p", 2)
    replay = Replay(ca.Function("f", [x, p], [x * p, ca.dot(x, p)]))
    points, shared = np.arange(12.0).reshape(6, 2), np.array([2.0, -1.0])
    product, dot = replay(points, shared)
    np.testing.assert_array_equal(product, points * shared)
    np.testing.assert_array_equal(dot[:, 0], points @ shared)


def test_a_second_call_does_not_remember_the_first() -> None:
    x = ca.SX.sym("x", 2)
    replay = Replay(ca.Function("f", [x], [ca.sin(x) + 1]), block=4)
    first = replay(np.ones((4, 2)))[0].copy()
    replay(np.full((3, 2), 5.0))
    np.testing.assert_array_equal(replay(np.ones((4, 2)))[0], first)


def test_an_operation_without_counterpart_is_refused() -> None:
    x = ca.SX.sym("x")
    with pytest.raises(NotImplementedError):
        Replay(ca.Function("f", [x], [ca.erf(x)]))


LEFT_OVER = (1, WORTH_A_BLOCK - 1, WORTH_A_BLOCK, BLOCK_FRAMES)


@pytest.mark.parametrize("frames", [*LEFT_OVER, *(BLOCK_FRAMES + left for left in LEFT_OVER)])
def test_what_is_replayed_and_what_casadi_evaluates_join_without_a_seam(frames: int) -> None:
    x, p = ca.SX.sym("x", 2), ca.SX.sym("p")
    function = ReplayOrMachine(ca.Function("f", [x, p], [p * x, ca.sumsqr(x)]))
    points = np.random.default_rng(frames).normal(size=(frames, 2))
    product, squares = function(points, np.array([3.0]))
    np.testing.assert_array_equal(product, 3 * points)
    np.testing.assert_allclose(squares[:, 0], (points**2).sum(axis=1), rtol=1e-15)
