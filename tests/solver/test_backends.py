"""The three backends against each other, and the compiled pieces against numpy and scipy."""

from __future__ import annotations

import ctypes
from collections.abc import Callable
from dataclasses import replace
from functools import cache

import casadi as ca
import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.optimize import lsq_linear

from condyle.model import load_skeleton, shipped_models
from condyle.model.errors import FitError
from condyle.model.growth import sized_numbers
from condyle.model.skeleton import Skeleton
from condyle.solver.backends import NAMES, VARIABLE, backend
from condyle.solver.casadi_machine import CasadiMachine
from condyle.solver.compiled_kernel import Compiled, compiled_kernel
from condyle.solver.compiled_step import CompiledStep
from condyle.solver.damped_step import QuadraticModel, Step, dense_step
from condyle.solver.elimination import elimination_plan
from condyle.solver.frame_fit import fit_frames
from condyle.solver.frame_problem import FrameProblem, SkeletonFunctions
from condyle.solver.kernel_cache import Kernel, load_kernel
from condyle.solver.kernel_source import kernel_source
from condyle.solver.many_matrices import inverses, symmetric_matrices
from condyle.solver.observability import dependent_pivots, undetermined
from condyle.solver.over_frames import Replay, over_frames
from condyle.solver.packed_matrices import Pattern
from condyle.solver.posture import Posture

FloatArray = NDArray[np.float64]

LARGE = ("full_body", "upper_limb", "four_legged")
MODELS = [
    pytest.param(name, marks=pytest.mark.slow if name in LARGE else ()) for name in shipped_models()
]
AGREEMENT = 1e-10
"""Relative to the largest number of an array: what the backends promise each other."""


@cache
def skeleton_named(name: str) -> Skeleton:
    return load_skeleton(name)


@pytest.fixture
def built(monkeypatch: pytest.MonkeyPatch) -> Callable[[Skeleton, str], SkeletonFunctions]:
    """A skeleton's functions in a named backend, which stays chosen."""

    def build(skeleton: Skeleton, name: str) -> SkeletonFunctions:
        monkeypatch.setenv(VARIABLE, name)
        return SkeletonFunctions(skeleton)

    return build


def problem_at(
    functions: SkeletonFunctions,
    posture: Posture,
    problem_of: Callable[..., FrameProblem],
    rng: np.random.Generator,
) -> FrameProblem:
    """A problem whose markers are 2 cm off, a tenth of them missing; one frame sees nothing."""
    numbers = sized_numbers(functions.skeleton, np.eye(3))
    measured = functions.marker_positions(posture, numbers)
    measured = measured + rng.normal(0, 0.02, measured.shape)
    measured[rng.random(measured.shape[:2]) < 0.1] = np.nan
    measured[len(measured) // 2] = np.nan
    problem = problem_of(functions, measured, numbers)
    return problem.with_pull_share(np.full(functions.kinematics.freedoms.size, 0.3))


def everything(problem: FrameProblem, posture: Posture) -> dict[str, FloatArray]:
    """Every number that a fit or a report asks of a skeleton's functions."""
    functions, rows = problem.functions, np.arange(len(problem))
    H, g, cost = problem(posture, rows)
    residuals, J = functions.ties.residuals(posture, problem.numbers)
    return {
        "H": H,
        "g": g,
        "cost": cost,
        "curvature": problem.curvature(posture, rows),
        "information": problem.information(posture, rows),
        "markers": functions.marker_positions(posture, problem.numbers),
        "poses": functions.poses(posture, problem.numbers),
        "ties": residuals,
        "derivatives of ties": J,
    }


def assert_agree(
    one: FloatArray, other: FloatArray, what: str, *, within: float = AGREEMENT
) -> None:
    scale = np.abs(other).max(initial=0.0)
    np.testing.assert_allclose(one, other, rtol=0, atol=within * scale, err_msg=what)


@pytest.mark.parametrize("name", MODELS)
def test_the_backends_agree_on_everything_about_a_shipped_model(
    name: str,
    built: Callable[[Skeleton, str], SkeletonFunctions],
    random_posture: Callable[..., Posture],
    problem_of: Callable[..., FrameProblem],
) -> None:
    skeleton = skeleton_named(name)
    found: dict[str, dict[str, FloatArray]] = {}
    for kind in NAMES:
        functions = built(skeleton, kind)
        rng = np.random.default_rng(11)
        posture = random_posture(functions, 70, rng, share=0.9)
        found[kind] = everything(problem_at(functions, posture, problem_of, rng), posture)
    assert np.isfinite(found["replay"]["H"]).all()
    for kind in ("compiled", "casadi"):
        for what, values in found["replay"].items():
            assert_agree(found[kind][what], values, f"{what} of {name}, {kind} and replay")


@pytest.mark.parametrize("name", ["sagittal_leg", "trunk"])
def test_a_whole_fit_is_the_same_in_each_backend(
    name: str,
    built: Callable[[Skeleton, str], SkeletonFunctions],
    random_posture: Callable[..., Posture],
    problem_of: Callable[..., FrameProblem],
) -> None:
    fits = []
    for kind in NAMES:
        functions = built(skeleton_named(name), kind)
        rng = np.random.default_rng(12)
        posture = random_posture(functions, 12, rng, share=0.5)
        fits.append(fit_frames(problem_at(functions, posture, problem_of, rng)))
    for fit in fits[1:]:
        assert_agree(fit.solution.cost, fits[0].solution.cost, "cost")
        assert_agree(fit.posture.scalars, fits[0].posture.scalars, "scalars")
        # Ties of a hundredth of a millimetre beside markers of several: condition numbers near 1e8.
        assert_agree(fit.covariance, fits[0].covariance, "covariance", within=1e-7)
        for what in ("involved", "at_limit"):
            np.testing.assert_array_equal(getattr(fit, what), getattr(fits[0], what))


@pytest.mark.parametrize("frames", [1, 8, 9, 16, 17, 63, 64, 65, 130])
@pytest.mark.parametrize("kind", NAMES)
def test_no_number_of_frames_leaves_a_seam(
    kind: str, frames: int, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv(VARIABLE, kind)
    x, p = ca.SX.sym("x", 3), ca.SX.sym("p", 2)
    product = ca.vertcat(ca.dot(x, x), p[0] * x[1] + p[1], x[2], 5, ca.cos(x[0]))
    function = over_frames(ca.Function("f", [x, p], [product, p - 1]))
    points = np.random.default_rng(frames).normal(size=(frames, 3))
    first, second = function(points, np.array([2.0, -1.0]))
    expected = [
        (points**2).sum(axis=1),
        2 * points[:, 1] - 1,
        points[:, 2],
        np.full(frames, 5.0),
        np.cos(points[:, 0]),
    ]
    np.testing.assert_allclose(first, np.column_stack(expected), rtol=1e-14, atol=1e-15)
    np.testing.assert_array_equal(second, np.tile([1.0, -2.0], (frames, 1)))


def test_an_unknown_backend_is_refused_with_the_ones_there_are(
    monkeypatch: pytest.MonkeyPatch,
) -> None:
    monkeypatch.setenv(VARIABLE, "abacus")
    with pytest.raises(FitError, match=r"'abacus'.*\n.*compiled, replay, casadi"):
        backend()


def test_an_operation_without_counterpart_is_refused_when_compiled_too() -> None:
    x = ca.SX.sym("x")
    with pytest.raises(NotImplementedError):
        Compiled(ca.Function("f", [x], [ca.erf(x)]), backend().library)  # type: ignore[arg-type]


# From here on the compiled pieces by themselves.


@pytest.mark.parametrize("reach", [1.0, 100.0, 2.6e5, 1e12])
def test_compiled_sine_and_cosine_are_right_to_the_last_bit_but_one(
    reach: float, library: ctypes.CDLL
) -> None:
    x = ca.SX.sym("x")
    points = np.random.default_rng(3).uniform(-reach, reach, (4000, 1))
    points[:3, 0] = [0.0, 1e-300, np.pi / 2]
    sine, cosine = Compiled(ca.Function("f", [x], [ca.sin(x), ca.cos(x)]), library)(points)
    np.testing.assert_allclose(sine, np.sin(points), rtol=0, atol=2.3e-16)
    np.testing.assert_allclose(cosine, np.cos(points), rtol=0, atol=2.3e-16)


def test_what_is_not_a_number_stays_in_its_frame(library: ctypes.CDLL) -> None:
    x = ca.SX.sym("x", 2)
    points = np.ones((20, 2))
    points[7, 0], points[8, 0] = np.nan, np.inf
    function = ca.Function("f", [x], [ca.sin(x[0]) + x[1], x[1] * 2])
    values = Compiled(function, library)(points)[0]
    assert np.isnan(values[[7, 8]]).all()
    np.testing.assert_allclose(np.delete(values, [7, 8], axis=0), np.sin(1) + 1)


def test_an_input_of_the_wrong_size_is_refused_before_c_reads_it(library: ctypes.CDLL) -> None:
    x, y = ca.SX.sym("x", 2), ca.SX.sym("y", 2)
    function = Compiled(ca.Function("f", [x, y], [x + y]), library)
    with pytest.raises(ValueError, match="shape"):
        function(np.zeros((4, 2)), np.zeros((3, 2)))
    with pytest.raises(ValueError, match="shape"):
        function(np.zeros((4, 2)), np.zeros(3))


def test_products_joined_with_sums_keep_what_is_used_twice(library: ctypes.CDLL) -> None:
    a, b, c = (ca.SX.sym(name) for name in "abc")
    twice = a * b
    outputs = [twice + c, c - twice, twice - c, a * c + b, b - a * c, a * a + b, twice, c * c]
    function = ca.Function("f", [a, b, c], [ca.vertcat(*outputs)])
    inputs = [np.random.default_rng(i).normal(size=(30, 1)) for i in range(3)]
    one, other = Compiled(function, library)(*inputs)[0], Replay(function)(*inputs)[0]
    np.testing.assert_allclose(one, other, rtol=1e-15, atol=1e-15)


def random_models(
    pattern: NDArray[np.bool_], count: int, rng: np.random.Generator
) -> tuple[QuadraticModel, FloatArray, FloatArray, NDArray[np.int64]]:
    """Positive definite matrices of a pattern, some with a second derivative that is not, and bounds."""
    n = len(pattern)
    H = np.where(pattern, rng.normal(size=(count, n, n)), 0.0)
    H = H + np.swapaxes(H, 1, 2)
    H[:, np.arange(n), np.arange(n)] = np.abs(H).sum(axis=2) + 0.1
    bend = np.where(pattern, rng.normal(size=(count, n, n)), 0.0)
    bend = (bend + np.swapaxes(bend, 1, 2)) * np.linspace(0, 3, count)[:, None, None]
    late = np.arange(1, count, 2)
    scale = 10.0 ** rng.uniform(-3, 3, n)
    H, bend = H * scale[:, None] * scale, bend * scale[:, None] * scale
    model = QuadraticModel(
        H, rng.normal(size=(count, n)) * scale, 10.0 ** rng.uniform(-9, 0, count), late, bend[late]
    )
    low = -rng.uniform(0, 0.4, (count, n)) / scale
    high = rng.uniform(0, 0.4, (count, n)) / scale
    low[rng.random((count, n)) < 0.4] = -np.inf
    high[rng.random((count, n)) < 0.4] = np.inf
    pinned = rng.random((count, n)) < 0.1
    low[pinned] = high[pinned] = 0.0
    guess = rng.integers(-1, 2, (count, n))
    guess = np.where(((guess < 0) & np.isinf(low)) | ((guess > 0) & np.isinf(high)), 0, guess)
    return model, low, high, np.where(pinned, -1, guess)


@pytest.fixture(params=["vectors", "numbers"])
def library(
    request: pytest.FixtureRequest,
    tmp_path_factory: pytest.TempPathFactory,
    monkeypatch: pytest.MonkeyPatch,
) -> ctypes.CDLL:
    """The compiled kernel, as it is and as a compiler without vector types would make it."""
    if backend().library is None:
        pytest.skip("no C compiler here")
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path_factory.getbasetemp() / "kernels"))
    plain = "#define CONDYLE_SCALAR\n" if request.param == "numbers" else ""
    return load_kernel(plain + kernel_source()).library


def step_of(
    library: ctypes.CDLL,
    pattern: NDArray[np.bool_],
    model: QuadraticModel,
    low: FloatArray,
    high: FloatArray,
    guess: NDArray[np.int64],
) -> Step:
    """The compiled step of a model whose matrices are dense arrays."""
    rows, columns = np.nonzero(np.tril(pattern))
    packing = Pattern(zip(rows.tolist(), columns.tolist(), strict=True), len(pattern))
    packed = replace(model, H=packing.packed(model.H), bend=packing.packed(model.bend))
    return CompiledStep(packing, library)(packed, low, high, guess)


def tree_pattern(n: int, rng: np.random.Generator) -> NDArray[np.bool_]:
    """Every freedom joined with its ancestors in a random tree, freedoms in random order."""
    pattern = np.eye(n, dtype=bool)
    for k in range(1, n):
        parent = rng.integers(k)
        pattern[k, :k] |= pattern[parent, :k]
        pattern[k, parent] = True
    order = rng.permutation(n)
    return np.asarray((pattern | pattern.T)[np.ix_(order, order)])


@pytest.mark.parametrize("kind", ["tree", "joined branches", "dense"])
@pytest.mark.parametrize("seed", range(4))
def test_the_compiled_step_is_that_of_dense_algebra(
    kind: str, seed: int, library: ctypes.CDLL
) -> None:
    rng = np.random.default_rng(seed)
    pattern = tree_pattern(13, rng)
    if kind == "joined branches":
        tie = rng.random(13) < 0.4
        pattern |= np.outer(tie, tie)
    if kind == "dense":
        pattern[:] = True
    model, low, high, guess = random_models(pattern, 43, rng)
    one = step_of(library, pattern, model, low, high, guess)
    other = dense_step(model, low, high, guess)
    # Guesses are random: where the sweeps end without settling, both are cut off on the way.
    scale = np.abs(other.step).max(axis=0)
    np.testing.assert_allclose(one.step / scale, other.step / scale, rtol=0, atol=1e-9)
    np.testing.assert_array_equal(one.active, other.active)
    np.testing.assert_allclose(one.gain, other.gain, rtol=1e-8)


def test_a_second_derivative_that_is_all_but_singular_is_not_trusted(
    library: ctypes.CDLL,
) -> None:
    """The least eigenvalue of a unit diagonal with one correlation c is 1 - c."""
    least = np.array([1e-9, 1e-7])
    bend = np.zeros((2, 2, 2))
    bend[:, 0, 1] = bend[:, 1, 0] = least - 1
    model = QuadraticModel(
        np.tile(np.eye(2), (2, 1, 1)), np.tile([1.0, -1.0], (2, 1)), np.zeros(2), np.arange(2), bend
    )
    free = np.full((2, 2), np.inf)
    guess = np.zeros((2, 2), dtype=np.int64)
    found = step_of(library, np.ones((2, 2), dtype=bool), model, -free, free, guess)
    np.testing.assert_allclose(found.step[0], [1, -1], rtol=1e-9)
    np.testing.assert_allclose(found.step[1], np.array([1, -1]) / 1e-7, rtol=1e-2)
    np.testing.assert_allclose(dense_step(model, -free, free, guess).step, found.step, rtol=1e-6)


def test_the_compiled_step_is_that_of_scipys_bounded_solver(library: ctypes.CDLL) -> None:
    rng = np.random.default_rng(21)
    pattern = tree_pattern(9, rng)
    model, low, high, _ = random_models(pattern, 10, rng)
    model = QuadraticModel(model.H, model.g, np.zeros(10), np.zeros(0, np.int64), model.H[:0])
    guess = np.where(low >= high, -1, 0)
    found = step_of(library, pattern, model, low, high, guess)
    for n in range(10):
        moving = low[n] < high[n]
        root = np.linalg.cholesky(model.H[n][np.ix_(moving, moving)]).T
        target = np.linalg.solve(root.T, model.g[n][moving])
        expected = lsq_linear(
            root, target, (low[n][moving], high[n][moving]), tol=1e-14, method="bvls"
        ).x
        scale = np.sqrt(np.diag(model.H[n])[moving])
        np.testing.assert_allclose(found.step[n][moving] * scale, expected * scale, atol=1e-7)
        assert not found.step[n][~moving].any()


def test_a_packed_matrix_takes_blocks_where_they_belong() -> None:
    pattern = Pattern([(0, 0), (2, 0), (2, 2), (1, 1), (3, 3)], 4)
    values = np.zeros((2, len(pattern)))
    block = np.array([[1.0, 2.0], [2.0, 3.0]])
    pattern.add(values, np.array([2, 0]), np.stack([block, 10 * block]))
    expected = np.zeros((4, 4))
    expected[np.ix_([2, 0], [2, 0])] = block
    np.testing.assert_array_equal(pattern.dense(values)[0], expected)
    np.testing.assert_array_equal(pattern.dense(values)[1], 10 * expected)
    np.testing.assert_array_equal(pattern.packed(pattern.dense(values)), values)


def test_a_tree_is_eliminated_without_new_entries() -> None:
    for seed in range(10):
        pattern = tree_pattern(20, np.random.default_rng(seed))
        assert elimination_plan(pattern).entries == (pattern.sum() - 20) // 2


def test_the_shipped_trees_are_eliminated_without_new_entries(
    limbs_functions: SkeletonFunctions,
) -> None:
    pattern = limbs_functions.normal_equations.pattern
    assert elimination_plan(pattern.position >= 0).entries == len(pattern) - pattern.size
    assert len(pattern) < 0.8 * pattern.size * (pattern.size + 1) / 2


@pytest.mark.parametrize("kind", ["compiled", "replay"])
def test_inverses_are_those_over_the_usable_freedoms(
    kind: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv(VARIABLE, kind)
    rng = np.random.default_rng(5)
    A = rng.normal(size=(21, 9, 6)) * 10.0 ** rng.uniform(-4, 4, 6)
    H = np.swapaxes(A, 1, 2) @ A
    usable = rng.random((21, 6)) < 0.8
    found = inverses(H, usable)
    for n in range(21):
        here = np.ix_(usable[n], usable[n])
        expected = np.zeros((6, 6))
        expected[here] = np.linalg.inv(H[n][here])
        np.testing.assert_allclose(found[n], expected, rtol=1e-9)


@pytest.mark.parametrize("kind", ["compiled", "replay"])
def test_matrices_are_made_from_their_entries(kind: str, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv(VARIABLE, kind)
    pairs = np.array([[0, 0], [2, 1]])
    found = symmetric_matrices(np.array([[1.0, 2.0], [3.0, 4.0]]), pairs, 3)
    np.testing.assert_array_equal(found[1], [[3, 0, 0], [0, 0, 4], [0, 4, 0]])
    np.testing.assert_array_equal(found[0], [[1, 0, 0], [0, 0, 2], [0, 2, 0]])
    assert symmetric_matrices(np.zeros((2, 0)), np.zeros((0, 2), np.int64), 3).sum() == 0


@pytest.mark.parametrize("kind", ["compiled", "replay"])
def test_what_is_undetermined_is_found_beside_frames_that_are_sure(
    kind: str, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setenv(VARIABLE, kind)
    rng = np.random.default_rng(6)
    A = rng.normal(size=(30, 9, 6))
    A[::3, :, 2] = A[::3, :, 4] - A[::3, :, 1]
    A[1::3, :, 5] = 0.0
    H = np.swapaxes(A, 1, 2) @ A
    free = rng.random((30, 6)) < 0.9
    pins, involved = undetermined(H, free)
    np.testing.assert_array_equal(pins, dependent_pivots(H, free))
    whole = free.copy()
    whole[:] = True
    pins, involved = undetermined(H, whole)
    np.testing.assert_array_equal(pins.sum(axis=1), 6 - np.linalg.matrix_rank(H, tol=1e-8))
    np.testing.assert_array_equal(involved[::3], np.tile([0, 1, 1, 0, 1, 0], (10, 1)))


def test_frames_that_a_step_cannot_be_found_for_do_not_disturb_the_others(
    library: ctypes.CDLL,
) -> None:
    rng = np.random.default_rng(8)
    pattern = tree_pattern(5, rng)
    model, low, high, guess = random_models(pattern, 8, rng)
    whole = step_of(library, pattern, model, low, high, guess)
    model.H[3] = np.nan
    spoilt = step_of(library, pattern, model, low, high, guess)
    keep = np.arange(8) != 3
    np.testing.assert_array_equal(spoilt.step[keep], whole.step[keep])


def test_the_functions_of_a_model_find_steps_in_the_backend_they_were_built_in(
    tree: Skeleton, built: Callable[[Skeleton, str], SkeletonFunctions]
) -> None:
    assert built(tree, "replay").stepper is dense_step
    assert built(tree, "casadi").stepper is dense_step
    if not isinstance(compiled_kernel(), Kernel):
        pytest.skip("no C compiler here")
    assert isinstance(built(tree, "compiled").stepper, CompiledStep)


def test_casadis_machine_evaluates_what_frames_share_once() -> None:
    x, p = ca.SX.sym("x"), ca.SX.sym("p")
    machine = CasadiMachine(ca.Function("f", [x, p], [x * p]))
    points = np.arange(5.0)[:, None]
    np.testing.assert_array_equal(machine(points, np.array([3.0]))[0], 3 * points)
    np.testing.assert_array_equal(machine(points, points)[0], points**2)
