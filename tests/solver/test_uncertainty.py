"""Stated uncertainty against closed forms, repeated noise and the distribution of residuals."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy import stats
from scipy.spatial.transform import Rotation

from condyle.model.growth import sized_numbers
from condyle.model.skeleton import Skeleton
from condyle.recording.recording import Recording
from condyle.solver.frame_fit import FrameFits, fit_frames
from condyle.solver.frame_problem import FrameProblem, SkeletonFunctions
from condyle.solver.observability import covariance, undetermined
from condyle.solver.posture import Posture
from condyle.solver.reported import Reported, report, reported_values
from condyle.solver.trial_fit import fit_trial

FloatArray = NDArray[np.float64]

CLUSTER = """\
condyle: 1
name: square cluster
segments: {plate: {}}
joints:
  root:
    from: laboratory
    to: plate
    floating: {position: [x, y, z], angles: {sequence: [x, y, z], names: [a, b, c]}}
markers:
  one: {segment: plate, at: [0.05, 0.05, 0], sd: 0.001}
  two: {segment: plate, at: [0.05, -0.05, 0], sd: 0.001}
  three: {segment: plate, at: [-0.05, -0.05, 0], sd: 0.001}
  four: {segment: plate, at: [-0.05, 0.05, 0], sd: 0.001}
"""


# To first order Cov = sigma^2 [sum |r|^2 I - r r']^-1, r from the centroid (any textbook of least
# squares): a square of 100 mm with four markers of 1 mm has 0.573, 0.573 and, about its normal,
# 0.405 degrees; its centre sigma / sqrt(4) a direction.
def test_the_sd_of_a_square_clusters_orientation_is_the_closed_form(
    skeleton_of: Callable[[str], Skeleton], recording_of: Callable[..., Recording]
) -> None:
    skeleton = skeleton_of(CLUSTER)
    places = np.array([marker.at for marker in skeleton.markers], dtype=float)
    fitted = fit_trial(skeleton, recording_of(skeleton.marker_names, places[None]), up="+Y")
    sd = {c.name: fitted.sd[0, i] for i, c in enumerate(fitted.columns)}
    found = np.degrees([sd["a"], sd["b"], sd["c"]])
    np.testing.assert_allclose(found, [0.573, 0.573, 0.405], atol=6e-4)
    np.testing.assert_allclose([sd["x"], sd["y"], sd["z"]], 0.0005, rtol=1e-9)


NOISE = 0.001
"""m: small enough that angles answer in proportion."""
DRAWS = 2000


@dataclass(frozen=True)
class Draws:
    """One posture measured two thousand times."""

    functions: SkeletonFunctions
    truth: Posture
    fits: FrameFits
    reported: Reported


@pytest.fixture(scope="module", params=["tree", "limbs"])
def draws(request: pytest.FixtureRequest) -> Draws:
    functions: SkeletonFunctions = request.getfixturevalue(f"{request.param}_functions")
    rng = np.random.default_rng(1)
    free = [c for c in functions.skeleton.coordinates if c.follows is None]
    middle = [(c.lower + c.upper) / 2 if c.has_range else 0.1 for c in free]
    balls = len(functions.kinematics.freedoms.balls)
    # Middle angles well away from a singularity.
    turns = Rotation.from_euler("YXZ", np.tile([0.4, 0.7, -0.3], (balls, 1)))
    truth = Posture(np.array([middle]), turns.as_quat(scalar_first=True)[None])
    numbers = sized_numbers(functions.skeleton, np.eye(3))
    points = functions.marker_positions(truth, numbers)
    measured = points + NOISE * rng.normal(size=(DRAWS, *points.shape[1:]))
    weights = np.full(measured.shape[:2], 1 / NOISE**2)
    fits = fit_frames(FrameProblem(functions, measured, weights, numbers))
    return Draws(functions, truth, fits, report(functions.kinematics, fits))


def standardised(draws: Draws) -> dict[str, FloatArray]:
    """(draws,) error over its stated sd, of every determined number."""
    told = reported_values(draws.functions.kinematics, draws.truth)
    found = {}
    for i, column in enumerate(draws.reported.columns):
        sd = draws.reported.sd[:, i]
        if np.isfinite(sd).all():
            error = draws.reported.values[:, i] - told[column.name][0][0]
            if column.unit == "rad":
                error = (error + np.pi) % (2 * np.pi) - np.pi
            found[column.name] = error / sd
    return found


# The spread of 2000 draws tells an sd to 1.6 %; 5 % is three times that.
def test_repeated_noise_spreads_as_stated(draws: Draws) -> None:
    assert draws.fits.solution.converged.all()
    ratios = {name: float(z.std()) for name, z in standardised(draws).items()}
    assert len(ratios) >= 18
    assert {name: ratio for name, ratio in ratios.items() if abs(ratio - 1) > 0.05} == {}


def test_ninety_five_per_cent_intervals_cover_the_truth_as_often_as_they_say(draws: Draws) -> None:
    coverage = {name: float((np.abs(z) < 1.96).mean()) for name, z in standardised(draws).items()}
    assert {name: share for name, share in coverage.items() if not 0.93 <= share <= 0.97} == {}


# Sum of squared residuals over sigma^2 is chi-squared with 3 markers minus the determined freedoms.
def test_what_is_left_is_chi_squared_with_the_right_degrees_of_freedom(draws: Draws) -> None:
    determined = int((~draws.fits.involved[0]).sum())
    dof = 3 * len(draws.functions.skeleton.markers) - determined
    squares = 2 * draws.fits.solution.cost
    # Of the mean of 2000 draws, four of its sds.
    assert squares.mean() == pytest.approx(dof, abs=4 * np.sqrt(2 * dof / DRAWS))
    assert stats.kstest(squares, stats.chi2(dof).cdf).pvalue > 1e-3
    assert stats.kstest(squares, stats.chi2(dof + 2).cdf).pvalue < 1e-6


def test_covariance_is_numpys_inverse_over_what_is_free() -> None:
    rng = np.random.default_rng(2)
    A = rng.normal(size=(5, 9, 6)) * [1, 1e3, 1e-3, 1, 10, 1]
    H = np.swapaxes(A, 1, 2) @ A
    free = np.ones((5, 6), dtype=bool)
    free[:, 3] = False
    free[2, 1] = False
    found = covariance(H, free)
    for n in range(5):
        rows = np.flatnonzero(free[n])
        expected = np.zeros((6, 6))
        expected[np.ix_(rows, rows)] = np.linalg.inv(H[n][np.ix_(rows, rows)])
        np.testing.assert_allclose(found[n], expected, rtol=1e-8)


def test_what_nothing_tells_is_the_null_space_of_numpy() -> None:
    """Rank by numpy.linalg.matrix_rank; who takes part, by the null space's own entries."""
    rng = np.random.default_rng(3)
    for n in range(30):
        size, rank = 7, int(rng.integers(3, 8))
        A = rng.normal(size=(rank, size))
        A[:, n % size] = 0.0  # one freedom that moves nothing
        H = (A.T @ A)[None]
        free = np.ones((1, size), dtype=bool)
        pins, involved = undetermined(H, free)
        kept = np.flatnonzero(~pins[0])
        assert len(kept) == np.linalg.matrix_rank(A)
        assert np.linalg.matrix_rank(A[:, kept]) == len(kept)
        vectors = np.linalg.svd(A)[2]
        null = vectors[np.linalg.matrix_rank(A) :]
        expected = (null**2).sum(axis=0) > 1e-6
        np.testing.assert_array_equal(involved[0], expected)


def test_a_frame_that_determines_everything_has_nothing_undetermined() -> None:
    A = np.random.default_rng(4).normal(size=(20, 12, 6))
    pins, involved = undetermined(np.swapaxes(A, 1, 2) @ A, np.ones((20, 6), dtype=bool))
    assert not pins.any()
    assert not involved.any()


def test_a_limit_that_is_reached_does_not_make_its_coordinate_certain(
    skeleton_of: Callable[[str], Skeleton], recording_of: Callable[..., Recording]
) -> None:
    text = CLUSTER.replace(
        "    floating: {position: [x, y, z], angles: {sequence: [x, y, z], names: [a, b, c]}}",
        "    moves:\n      - {translate: x, coordinate: x, range: [-1, 0.01]}",
    )
    skeleton = skeleton_of(text)
    places = np.array([marker.at for marker in skeleton.markers], dtype=float)
    positions = places + np.array([[[0.005, 0, 0]], [[0.02, 0, 0]]])
    fitted = fit_trial(skeleton, recording_of(skeleton.marker_names, positions))
    np.testing.assert_array_equal(fitted.at_limit[:, 0], [False, True])
    np.testing.assert_allclose(fitted.values[:, 0], [0.005, 0.01], atol=1e-12)
    np.testing.assert_allclose(fitted.sd[:, 0], 0.0005, rtol=1e-9)
