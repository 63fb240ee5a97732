"""The bounded solver against scipy, brute force and laws of least squares."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace
from itertools import product

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray
from scipy.optimize import least_squares, lsq_linear
from scipy.spatial.transform import Rotation

from condyle.model.growth import sized_numbers
from condyle.model.skeleton import Marker, Size, Skeleton
from condyle.solver.cold_start import fit_cold
from condyle.solver.damped_step import bounded_step, solve_masked
from condyle.solver.frame_problem import FrameProblem, SkeletonFunctions
from condyle.solver.least_squares import Bounds, Solution, minimise
from condyle.solver.posture import Posture, inverse_right_jacobian

FloatArray = NDArray[np.float64]


def quadratic(H: FloatArray, g: FloatArray, step: FloatArray) -> float:
    return float(step @ H @ step / 2 - g @ step)


def random_quadratics(
    rng: np.random.Generator, count: int, size: int, *, loose: float
) -> tuple[FloatArray, ...]:
    """Positive definite H, g, and limits about 0; `loose` is the spread of H's own scales."""
    A = rng.normal(size=(count, size + 3, size))
    H = np.swapaxes(A, 1, 2) @ A + 0.05 * np.eye(size)
    scale = np.exp(loose * rng.normal(size=(count, size)))
    H = H * scale[:, :, None] * scale[:, None, :]
    g = rng.normal(size=(count, size)) * scale * 5
    low = -rng.uniform(0, 1, (count, size)) * (rng.random((count, size)) > 0.2) / scale
    high = rng.uniform(0, 1, (count, size)) * (rng.random((count, size)) > 0.2) / scale
    return H, g, low, high


def by_brute_force(H: FloatArray, g: FloatArray, low: FloatArray, high: FloatArray) -> float:
    """The least value over every choice of which variables stand at which limit."""
    best = np.inf
    for sides in product((-1, 0, 1), repeat=len(g)):
        at = np.array(sides)
        step = np.where(at < 0, low, np.where(at > 0, high, 0.0))
        free = np.flatnonzero(at == 0)
        if len(free):
            fixed = np.flatnonzero(at != 0)
            rhs = g[free] - H[np.ix_(free, fixed)] @ step[fixed]
            step[free] = np.linalg.solve(H[np.ix_(free, free)], rhs)
        if (step >= low - 1e-12).all() and (step <= high + 1e-12).all():
            best = min(best, quadratic(H, g, step))
    return best


def test_a_bounded_step_is_the_best_of_all_active_sets() -> None:
    H, g, low, high = random_quadratics(np.random.default_rng(1), 60, 5, loose=0.5)
    step, _ = bounded_step(H, g, low, high, np.zeros(g.shape, dtype=np.int64))
    assert (step >= low).all()
    assert (step <= high).all()
    for n in range(len(g)):
        expected = by_brute_force(H[n], g[n], low[n], high[n])
        assert quadratic(H[n], g[n], step[n]) == pytest.approx(expected, rel=1e-9, abs=1e-12)


# scipy.optimize.lsq_linear, bounded-variable least squares (Stark & Parker 1995).
@pytest.mark.parametrize("guess", ["free", "random"])
def test_a_bounded_step_is_that_of_scipys_linear_solver(guess: str) -> None:
    rng = np.random.default_rng(2)
    H, g, low, high = random_quadratics(rng, 150, 12, loose=1.0)
    low, high = np.minimum(low, -1e-6), np.maximum(high, 1e-6)
    active = np.zeros(g.shape, dtype=np.int64)
    if guess == "random":
        active = rng.integers(-1, 2, g.shape)
    step, _ = bounded_step(H, g, low, high, active)
    for n in range(len(g)):
        root = np.linalg.cholesky(H[n]).T
        target = np.linalg.solve(root.T, g[n])
        peer = lsq_linear(root, target, (low[n], high[n]), method="bvls", tol=1e-14)
        found, expected = quadratic(H[n], g[n], step[n]), quadratic(H[n], g[n], peer.x)
        assert found == pytest.approx(expected, rel=1e-8), f"problem {n}"


def test_solving_over_the_free_entries_is_numpys_solution_of_the_smaller_system() -> None:
    rng = np.random.default_rng(3)
    H, g, _, _ = random_quadratics(rng, 20, 6, loose=2.0)
    free = rng.random(g.shape) > 0.3
    found = solve_masked(H, g, free)
    for n in range(20):
        rows = np.flatnonzero(free[n])
        expected = np.linalg.solve(H[n][np.ix_(rows, rows)], g[n, rows])
        np.testing.assert_allclose(found[n, rows], expected, rtol=1e-9, atol=1e-12)
        assert (found[n, ~free[n]] == 0).all()


# --- whole problems against scipy.optimize.least_squares ------------------------------------------


def residuals_about(
    problem: FrameProblem, frame: int, origin: Posture
) -> tuple[Callable[[FloatArray], FloatArray], Callable[[FloatArray], FloatArray]]:
    """Whitened residuals of one frame as a plain function of scalars and rotation vectors.

    Rotation vectors are relative to the orientations of `origin`; the Jacobian is by central
    differences, all columns in one batch.
    """
    functions = problem.functions
    count = origin.scalars.shape[1]
    root_weight = np.sqrt(np.repeat(problem.weights[frame], 3))

    def many(x: FloatArray) -> FloatArray:
        start = Posture(np.zeros((len(x), count)), np.repeat(origin.quaternions, len(x), axis=0))
        points = functions.marker_positions(start.after(x), problem.numbers)
        return np.asarray(root_weight * (points - problem.measured[frame]).reshape(len(x), -1))

    def one(x: FloatArray) -> FloatArray:
        return np.asarray(many(x[None])[0])

    def jacobian(x: FloatArray) -> FloatArray:
        h = 1e-6
        steps = h * np.eye(len(x))
        return np.asarray((many(x + steps) - many(x - steps)).T / (2 * h))

    return one, jacobian


def by_scipy(problem: FrameProblem, frame: int, start: Posture, bounds: Bounds) -> float:
    """Half the sum of squares at the lower of the minima that scipy's two bounded methods reach."""
    fun, jac = residuals_about(problem, frame, start)
    balls = 3 * start.quaternions.shape[1]
    low = np.r_[bounds.lower[frame], np.full(balls, -np.inf)]
    high = np.r_[bounds.upper[frame], np.full(balls, np.inf)]
    whole = np.r_[start.scalars[0], np.zeros(balls)]
    free = np.flatnonzero(~bounds.pinned[frame])

    def filled(y: FloatArray) -> FloatArray:
        x = whole.copy()
        x[free] = y
        return x

    inside = np.clip(whole, low + 1e-6, high - 1e-6)[free]
    costs = []
    for method in ("dogbox", "trf"):
        found = least_squares(
            lambda y: fun(filled(y)),
            inside,
            lambda y: jac(filled(y))[:, free],
            bounds=(low[free], high[free]),
            method=method,
            x_scale="jac",
            ftol=1e-15,
            xtol=1e-15,
            gtol=1e-15,
            max_nfev=300,
        )
        costs.append(float(found.cost))
    return min(costs)


def sized_randomly(skeleton: Skeleton, rng: np.random.Generator) -> Skeleton:
    sizes = {}
    for segment in skeleton.segments:
        x, y, z = (float(v) for v in rng.uniform(0.8, 1.25, 3))
        sizes[segment.name] = Size((x, y, z))
    return replace(skeleton, sizes=sizes)


@pytest.mark.slow
@pytest.mark.parametrize("which", ["tree_functions", "limbs_functions"])
def test_scipy_reaches_the_same_minimum_with_active_bounds(
    which: str, request: pytest.FixtureRequest, random_posture: Callable[..., Posture]
) -> None:
    functions: SkeletonFunctions = request.getfixturevalue(which)
    pressed = 0
    for seed in range(6):
        rng = np.random.default_rng(seed)
        numbers = sized_numbers(sized_randomly(functions.skeleton, rng), np.eye(3))
        truth = random_posture(functions, 1, rng)
        measured = functions.marker_positions(truth, numbers)
        measured = measured + rng.normal(0, 0.02, measured.shape)
        weights = np.array([[1 / m.sd**2 for m in functions.skeleton.markers]])
        problem = FrameProblem(functions, measured, weights, numbers)
        own = problem.bounds()
        # Limits drawn inwards past a third of the true values.
        lower, upper = own.lower.copy(), own.upper.copy()
        tight = rng.random(lower.shape) < 0.35
        free = [c for c in functions.skeleton.coordinates if c.follows is None]
        tight &= np.array([c.unit == "rad" for c in free])
        upper = np.where(tight, truth.scalars - 0.05, upper)
        lower = np.minimum(lower, upper - 0.2)
        bounds = Bounds(lower, upper, own.pinned)
        step = 0.02 * rng.normal(size=own.pinned.shape) * ~own.pinned
        start = bounds.inside(truth.after(step))
        solution = minimise(problem, start, bounds, damping=1e-3)
        assert solution.converged.all()
        assert solution.optimality(problem)[0] < 1e-6
        pressed += int(((solution.active != 0) & ~own.pinned).any())
        assert solution.cost[0] == pytest.approx(by_scipy(problem, 0, start, bounds), rel=1e-9)
    assert pressed >= 4


def noisy_problem(
    functions: SkeletonFunctions,
    truth: Posture,
    rng: np.random.Generator,
    noise: float = 0.01,
) -> FrameProblem:
    numbers = sized_numbers(functions.skeleton, np.eye(3))
    measured = functions.marker_positions(truth, numbers)
    measured = measured + rng.normal(0, noise, measured.shape)
    weights = np.tile([1 / m.sd**2 for m in functions.skeleton.markers], (len(truth), 1))
    return FrameProblem(functions, measured, weights, numbers)


@pytest.fixture
def solved(
    tree_functions: SkeletonFunctions, random_posture: Callable[..., Posture]
) -> tuple[FrameProblem, Posture, Solution]:
    rng = np.random.default_rng(5)
    truth = random_posture(tree_functions, 30, rng)
    problem = noisy_problem(tree_functions, truth, rng)
    return problem, truth, minimise(problem, truth, problem.bounds())


def test_a_solution_proves_itself(solved: tuple[FrameProblem, Posture, Solution]) -> None:
    problem, _, solution = solved
    assert solution.converged.all()
    assert (solution.active != 0).any()
    assert solution.optimality(problem).max() < 1e-6


def test_optimality_is_large_beside_the_minimum(
    solved: tuple[FrameProblem, Posture, Solution],
) -> None:
    problem, _, solution = solved
    freedom = solution.posture.scalars.shape[1] + 1
    step = np.zeros(solution.active.shape)
    step[:, freedom] = 0.01  # a turn of the root by half a degree, against sds of 6 mm
    beside = replace(solution, posture=solution.posture.after(step))
    H, _, _ = problem(solution.posture, np.arange(len(problem)))
    sds = 0.01 * np.sqrt(H[:, freedom, freedom])
    scale = np.maximum(np.sqrt(2 * solution.cost), 1)
    assert (beside.optimality(problem) > 0.5 * sds / scale).all()
    assert beside.optimality(problem).min() > 1e-2


def test_every_frame_of_a_batch_is_solved_as_alone(
    solved: tuple[FrameProblem, Posture, Solution],
) -> None:
    problem, truth, solution = solved
    for n in (0, 13, 29):
        row = np.array([n])
        alone = minimise(problem.take(row), truth.take(row), problem.bounds().take(row))
        assert alone.cost[0] == pytest.approx(solution.cost[n], rel=1e-12)
        np.testing.assert_allclose(alone.posture.scalars[0], solution.posture.scalars[n], atol=1e-8)


def test_scaling_all_weights_leaves_the_answer(
    solved: tuple[FrameProblem, Posture, Solution],
) -> None:
    problem, truth, solution = solved
    heavier = problem.with_weights(7.3 * problem.weights)
    again = minimise(heavier, truth, problem.bounds())
    np.testing.assert_allclose(again.posture.scalars, solution.posture.scalars, atol=1e-7)
    np.testing.assert_allclose(again.cost, 7.3 * solution.cost, rtol=1e-9)


# An identity of weighted least squares: weight 2 is the same as being listed twice with weight 1.
def test_a_doubled_weight_is_a_marker_listed_twice(
    tree: Skeleton, random_posture: Callable[..., Posture]
) -> None:
    def twin(marker: Marker) -> Marker:
        return replace(marker, name=f"{marker.name}_again")

    doubled = ("arm_1", "leg_2", "stick_3")
    more = tree.markers + tuple(twin(m) for m in tree.markers if m.name in doubled)
    single, listed = SkeletonFunctions(tree), SkeletonFunctions(replace(tree, markers=more))
    truth = random_posture(single, 5, np.random.default_rng(6))
    problem = noisy_problem(single, truth, np.random.default_rng(7))
    factor = np.array([2.0 if m.name in doubled else 1.0 for m in tree.markers])
    heavy = problem.with_weights(problem.weights * factor)
    columns = [*range(len(tree.markers)), *(tree.marker_names.index(n) for n in doubled)]
    twice = FrameProblem(
        listed,
        problem.measured[:, columns],
        problem.weights[:, columns],
        sized_numbers(listed.skeleton, np.eye(3)),
    )
    one = minimise(heavy, truth, heavy.bounds())
    other = minimise(twice, truth, twice.bounds())
    np.testing.assert_allclose(one.cost, other.cost, rtol=1e-11)
    np.testing.assert_allclose(one.posture.scalars, other.posture.scalars, atol=1e-7)


def test_frames_that_fit_badly_converge_too(
    tree_functions: SkeletonFunctions, random_posture: Callable[..., Posture]
) -> None:
    """Errors of 5 cm where 6 mm are expected, as swapped markers make them."""
    rng = np.random.default_rng(12)
    truth = random_posture(tree_functions, 100, rng)
    problem = noisy_problem(tree_functions, truth, rng, 0.05)
    solution = minimise(problem, truth, problem.bounds(), damping=1e-3)
    assert np.flatnonzero(~solution.converged).tolist() == []
    assert solution.optimality(problem).max() < 1e-6


@settings(max_examples=10, deadline=None)
@given(seed=st.integers(0, 2**32 - 1), noise=st.floats(0, 0.3))
def test_every_fit_respects_the_limits(
    tree_functions: SkeletonFunctions,
    limbs_functions: SkeletonFunctions,
    random_posture: Callable[..., Posture],
    seed: int,
    noise: float,
) -> None:
    rng = np.random.default_rng(seed)
    for functions in (tree_functions, limbs_functions):
        truth = random_posture(functions, 3, rng, share=1.3)
        problem = noisy_problem(functions, truth, rng, noise)
        bounds = problem.bounds()
        found = minimise(problem, bounds.inside(truth), bounds, most_rounds=10).posture
        assert (found.scalars >= bounds.lower).all()
        assert (found.scalars <= bounds.upper).all()
        np.testing.assert_allclose(np.linalg.norm(found.quaternions, axis=2), 1, atol=1e-12)


def test_a_held_coordinate_does_not_move(
    tree: Skeleton, random_posture: Callable[..., Posture]
) -> None:
    coordinates = tuple(replace(c, held=0.3) if c.name == "bend" else c for c in tree.coordinates)
    functions = SkeletonFunctions(replace(tree, coordinates=coordinates))
    truth = random_posture(functions, 4, np.random.default_rng(8))
    problem = noisy_problem(functions, truth, np.random.default_rng(9))
    found = fit_cold(problem, problem.bounds()).posture
    column = functions.kinematics.freedoms.scalars.index("bend")
    np.testing.assert_array_equal(found.scalars[:, column], 0.3)


def test_a_start_outside_the_limits_is_brought_inside(
    solved: tuple[FrameProblem, Posture, Solution],
) -> None:
    problem, truth, _ = solved
    wild = Posture(truth.scalars + 0.0, truth.quaternions)
    column = problem.functions.kinematics.freedoms.scalars.index("bend")
    wild.scalars[:, column] = 9.0
    again = minimise(problem, wild, problem.bounds(), damping=1e-3)
    assert (again.posture.scalars[:, column] <= problem.bounds().upper[:, column]).all()


def test_the_watcher_is_told_that_nothing_is_left(
    solved: tuple[FrameProblem, Posture, Solution],
) -> None:
    problem, truth, _ = solved
    told: list[int] = []
    minimise(problem, truth, problem.bounds(), watch=told.append)
    assert told == sorted(told, reverse=True)
    assert told[-1] == 0


# Rotation.from_rotvec composes on the right: R becomes R Exp(step).
def test_a_step_turns_a_ball_about_its_childs_own_axes() -> None:
    start = Rotation.random(rng=np.random.default_rng(10))
    posture = Posture(np.zeros((1, 1)), start.as_quat(scalar_first=True)[None, None])
    after = posture.after(np.array([[0.5, 0.1, -0.2, 0.3]]))
    found = Rotation.from_quat(after.quaternions[0, 0], scalar_first=True)
    expected = start * Rotation.from_rotvec([0.1, -0.2, 0.3])
    assert (found.inv() * expected).magnitude() == pytest.approx(0, abs=1e-12)
    assert after.scalars[0, 0] == 0.5


def test_the_inverse_right_jacobian_is_the_derivative_of_the_logarithm() -> None:
    rng = np.random.default_rng(11)
    lengths = np.array([1e-9, 1e-4, 0.999e-3, 1.001e-3, 0.1, 1.0, 2.0, 3.0])
    vectors = rng.normal(size=(len(lengths), 3))
    vectors *= (lengths / np.linalg.norm(vectors, axis=1))[:, None]
    found, h = inverse_right_jacobian(vectors), 1e-6
    for axis in range(3):
        small = Rotation.from_rotvec(h * np.eye(3)[axis])
        ahead = (Rotation.from_rotvec(vectors) * small).as_rotvec()
        behind = (Rotation.from_rotvec(vectors) * small.inv()).as_rotvec()
        np.testing.assert_allclose(found[:, :, axis], (ahead - behind) / (2 * h), atol=1e-7)
