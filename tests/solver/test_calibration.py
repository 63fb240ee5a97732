"""Sizing against synthetic persons, an independently written estimate, and what must be refused."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.optimize import least_squares
from scipy.spatial.transform import Rotation

from condyle.model.errors import FitError
from condyle.model.growth import sized_lengths, sized_numbers
from condyle.model.skeleton import Person, Size, Skeleton
from condyle.recording.recording import Recording
from condyle.solver.calibration import calibrate
from condyle.solver.frame_problem import SkeletonFunctions
from condyle.solver.posture import Posture
from condyle.solver.results import Calibration

FloatArray = NDArray[np.float64]
Maker = Callable[..., Recording]

LEG = """\
condyle: 1
name: one leg
person: {stature: 1.75, mass: 70}
segments:
  pelvis: {}
  thigh: {length: [[0, 0, 0], [0, -0.42, 0]]}
  shank: {length: [[0, 0, 0], [0, -0.43, 0]]}
joints:
  root:
    from: laboratory
    to: pelvis
    floating: {position: [px, py, pz], angles: {sequence: [y, x, -z], names: [turn, side, tilt]}}
  hip:
    from: pelvis
    to: thigh
    at: [-0.04, -0.08, 0.09]
    moves:
      - {rotate: z, coordinate: flexion, range: [-60, 120]}
      - {rotate: x, coordinate: adduction, range: [-60, 60]}
      - {rotate: y, coordinate: rotation, range: [-60, 60]}
  knee:
    from: thigh
    to: shank
    at: [0, -0.42, 0]
    moves: [{rotate: -z, coordinate: bend, range: [-40, 150]}]
markers:
  p1: {segment: pelvis, at: [0.05, 0.0, 0.12], placed_within: 0.008}
  p2: {segment: pelvis, at: [0.05, 0.01, -0.12], placed_within: 0.008}
  p3: {segment: pelvis, at: [-0.12, 0.02, 0.04], placed_within: 0.008}
  p4: {segment: pelvis, at: [-0.12, 0.02, -0.04], placed_within: 0.008}
  t1: {segment: thigh, at: [0, -0.42, 0.05], placed_within: 0.006}
  t2: {segment: thigh, at: [0, -0.42, -0.05], placed_within: 0.006}
  t3: {segment: thigh, at: [0.05, -0.2, 0.06], placed_within: 0.03}
  s1: {segment: shank, at: [0.04, -0.07, 0.01], placed_within: 0.008}
  s2: {segment: shank, at: [0, -0.43, 0.035], placed_within: 0.006}
  s3: {segment: shank, at: [0, -0.43, -0.035], placed_within: 0.006}
  loose: {segment: shank}
sizing:
  factor_sd: 0.08
  segments:
    thigh: {along: [y], across: [x, z]}
    shank: {along: [y], across: [x, z]}
  standing: {flexion: [5, 8], adduction: [0, 6], rotation: [0, 8], bend: [4, 6]}
"""

GROUPS = ("pelvis", "thigh along y", "thigh across xz", "shank along y", "shank across xz")
STANDING = {"flexion": (5, 8), "adduction": (0, 6), "rotation": (0, 8), "bend": (4, 6)}
MEASUREMENT, FACTOR_SD, SCALE_SD, STATURE_SD = 0.001, 0.08, 0.10, 0.01  # the language's rule


@pytest.fixture(scope="module")
def leg(skeleton_of: Callable[[str], Skeleton]) -> Skeleton:
    skeleton = skeleton_of(LEG)
    assert tuple(group.name for group in skeleton.sizing.groups) == GROUPS
    return skeleton


def factors_of(log_sizes: FloatArray) -> dict[str, FloatArray]:
    p, ta, tx, sa, sx = np.exp(log_sizes)
    return {
        "pelvis": np.array([p, p, p]),
        "thigh": np.array([tx, ta, tx]),
        "shank": np.array([sx, sa, sx]),
    }


def poses_by_hand(
    position: FloatArray, turn: Rotation, angles: FloatArray, factors: dict[str, FloatArray]
) -> dict[str, tuple[FloatArray, FloatArray]]:
    """Rotation and origin of each segment, written out; Z-X-Y at the hip, -z at the knee."""
    R = turn.as_matrix()
    thigh_R = R @ Rotation.from_euler("ZXY", angles[:3]).as_matrix()
    thigh_o = position + R @ (factors["pelvis"] * [-0.04, -0.08, 0.09])
    shank_R = thigh_R @ Rotation.from_euler("Z", -angles[3]).as_matrix()
    shank_o = thigh_o + thigh_R @ (factors["thigh"] * [0, -0.42, 0])
    return {"pelvis": (R, position), "thigh": (thigh_R, thigh_o), "shank": (shank_R, shank_o)}


@dataclass(frozen=True)
class Someone:
    """A synthetic person and one frame of standing."""

    log_sizes: FloatArray
    log_scale: float
    places: FloatArray
    """(markers, 3) m in the sized segments."""
    positions: FloatArray
    """(1, markers, 3) m in the laboratory."""


def someone(leg: Skeleton, rng: np.random.Generator) -> Someone:
    """Everything drawn from what the model expects of people."""
    log_scale = SCALE_SD * rng.normal()
    log_sizes = log_scale + FACTOR_SD * rng.normal(size=5)
    factors = factors_of(log_sizes)
    expected = np.array(list(STANDING.values()), dtype=float)
    angles = np.radians(expected[:, 0] + expected[:, 1] * rng.normal(size=4))
    turn = Rotation.from_euler("YXZ", [rng.uniform(-3, 3), *0.1 * rng.normal(size=2)])
    poses = poses_by_hand(rng.normal(size=3), turn, angles, factors)
    places, points = [], []
    for marker in leg.markers:
        if marker.at is None:
            place = np.array([0.06, -0.2, 0.07])
        else:
            place = factors[marker.segment] * marker.at + marker.placed_within * rng.normal(size=3)
        rotation, origin = poses[marker.segment]
        places.append(place)
        points.append(origin + rotation @ place + MEASUREMENT * rng.normal(size=3))
    return Someone(log_sizes, log_scale, np.array(places), np.array([points]))


def found_sizes(result: Calibration) -> tuple[FloatArray, FloatArray]:
    """ln of the five factors, and their sd."""
    sizes = result.skeleton.sizes
    axes = [("pelvis", 0), ("thigh", 1), ("thigh", 0), ("shank", 1), ("shank", 0)]
    factors = np.array([sizes[segment].factors[axis] for segment, axis in axes])
    sds = np.array([sizes[segment].sd[axis] for segment, axis in axes])  # type: ignore[index]
    return np.log(factors), sds / factors


@dataclass(frozen=True)
class Crowd:
    people: list[Someone]
    results: list[Calibration]


@pytest.fixture(scope="module")
def crowd(leg: Skeleton, recording_of: Maker) -> Crowd:
    rng = np.random.default_rng(1)
    people = [someone(leg, rng) for _ in range(40)]
    results = [
        calibrate(leg, recording_of(leg.marker_names, one.positions, up="+Y")) for one in people
    ]
    return Crowd(people, results)


# Stated uncertainty covers the truth as often as it says: 95 % of 40 persons is 38 with sd 1.4.
@pytest.mark.slow
def test_sizes_of_synthetic_people_lie_within_their_stated_uncertainty(crowd: Crowd) -> None:
    assert all(result.converged for result in crowd.results)
    z = np.array(
        [
            (found - one.log_sizes) / sd
            for one, (found, sd) in zip(crowd.people, map(found_sizes, crowd.results), strict=True)
        ]
    )
    coverage = (np.abs(z) < 1.96).mean(axis=0)
    assert ((coverage >= 0.85) & (coverage <= 1)).all(), dict(zip(GROUPS, coverage, strict=True))
    assert 0.91 <= (np.abs(z) < 1.96).mean() <= 0.99
    # Neither too wide: the sd of 200 standardised errors is known to about 5 % (more where alike).
    assert 0.8 < z.std() < 1.2
    # The markers tell more than the prior knew (sd of a length among people: 0.128).
    assert np.median([found_sizes(result)[1][1] for result in crowd.results]) < 0.03


@pytest.mark.slow
def test_marker_places_of_synthetic_people_lie_within_their_stated_uncertainty(
    leg: Skeleton, crowd: Crowd
) -> None:
    z = np.array(
        [
            [
                (np.array(marker.placed) - place) / marker.placed_sd
                for marker, place in zip(result.markers, one.places, strict=True)
            ]
            for one, result in zip(crowd.people, crowd.results, strict=True)
        ]
    )
    coverage = (np.abs(z) < 1.96).mean(axis=(0, 2))
    names = [marker.name for marker in crowd.results[0].markers]
    # 120 components a marker: 95 % is 114 with sd 2.4, were they independent.
    assert {n: c for n, c in zip(names, coverage, strict=True) if not 0.85 <= c <= 1} == {}


@pytest.mark.slow
def test_lengths_come_back_far_better_than_they_are_known_beforehand(
    leg: Skeleton, crowd: Crowd
) -> None:
    wrong = []
    for one, result in zip(crowd.people, crowd.results, strict=True):
        factors = factors_of(one.log_sizes)
        lengths = sized_lengths(result.skeleton)
        wrong.append(
            [
                lengths["thigh"] - 0.42 * factors["thigh"][1],
                lengths["shank"] - 0.43 * factors["shank"][1],
            ]
        )
    # Markers within 6 to 8 mm of their places; lengths differ by 0.128 * 0.42 m = 54 mm.
    assert np.sqrt(np.mean(np.square(wrong), axis=0)).max() < 0.012


def residuals_with_departures(
    leg: Skeleton, points: FloatArray, scale: tuple[float, float]
) -> Callable[[FloatArray], FloatArray]:
    """Every term of the estimate as the language states it, the departures d written out.

    x: position 3, rotation vector 3, angles 4, ln factors 5, ln S, then d of each known marker.
    """
    known = [i for i, m in enumerate(leg.markers) if m.at is not None]
    expected = np.radians(np.array(list(STANDING.values()), dtype=float))

    def residuals(x: FloatArray) -> FloatArray:
        factors = factors_of(x[10:15])
        poses = poses_by_hand(x[:3], Rotation.from_rotvec(x[3:6]), x[6:10], factors)
        departures = x[16:].reshape(-1, 3)
        terms = [
            (x[10:15] - x[15]) / FACTOR_SD,
            [(x[15] - scale[0]) / scale[1]],
            (x[6:10] - expected[:, 0]) / expected[:, 1],
        ]
        for i, d in zip(known, departures, strict=True):
            marker = leg.markers[i]
            R, o = poses[marker.segment]
            place = factors[marker.segment] * np.array(marker.at) + d
            terms += [(points[i] - o - R @ place) / MEASUREMENT, d / marker.placed_within]
        return np.concatenate(terms)

    return residuals


@pytest.mark.parametrize("stature", [None, 1.9])
def test_scipy_reaches_the_same_estimate_with_departures_written_out(
    leg: Skeleton, recording_of: Maker, stature: float | None
) -> None:
    scale = (0.0, SCALE_SD) if stature is None else (np.log(1.9 / 1.75), STATURE_SD)
    for seed in range(3):
        one = someone(leg, np.random.default_rng(seed))
        static = recording_of(leg.marker_names, one.positions, up="+Y")
        result = calibrate(leg, static, stature=stature)
        own = result.own_posture
        # Started from the posture found but from the reference person's sizes.
        turn = Rotation.from_quat(own.quaternions[0, 0], scalar_first=True).as_rotvec()
        start = np.r_[own.scalars[0, :3], turn, own.scalars[0, 3:], np.zeros(6 + 30)]
        peer = least_squares(
            residuals_with_departures(leg, one.positions[0], scale),
            start + 0.02 * np.r_[np.ones(10), np.zeros(36)],
            x_scale="jac",
            ftol=1e-15,
            xtol=1e-15,
            gtol=1e-15,
            max_nfev=500,
        )
        assert result.cost == pytest.approx(peer.cost, rel=1e-9)
        np.testing.assert_allclose(found_sizes(result)[0], peer.x[10:15], atol=1e-6)
        assert result.log_scale == pytest.approx(peer.x[15], abs=1e-6)
        departures = [m.departure for m in result.markers if m.departure is not None]
        np.testing.assert_allclose(departures, peer.x[16:].reshape(-1, 3), atol=1e-7)
        # So is the covariance, but for what Gauss-Newton leaves out: residuals times curvature.
        whole = np.sqrt(np.diag(np.linalg.inv(peer.jac.T @ peer.jac)))
        np.testing.assert_allclose(found_sizes(result)[1], whole[10:15], rtol=0.03)


def test_the_sd_of_a_marker_place_is_that_of_the_whole_estimate(
    leg: Skeleton, recording_of: Maker
) -> None:
    """Places as functions of everything in the peer: nominal place grown, plus departure; and, of
    the marker without a nominal place, R'(y - o) with the noise of y."""
    one = someone(leg, np.random.default_rng(4))
    result = calibrate(leg, recording_of(leg.marker_names, one.positions, up="+Y"))
    own = result.own_posture
    turn = Rotation.from_quat(own.quaternions[0, 0], scalar_first=True).as_rotvec()
    start = np.r_[own.scalars[0, :3], turn, own.scalars[0, 3:], found_sizes(result)[0]]
    departures = [m.departure for m in result.markers if m.departure is not None]
    start = np.r_[start, result.log_scale, np.ravel(departures)]
    residuals = residuals_with_departures(leg, one.positions[0], (0.0, SCALE_SD))
    peer = least_squares(residuals, start, x_scale="jac", ftol=1e-15, xtol=1e-15, gtol=1e-15)
    cov = np.linalg.inv(peer.jac.T @ peer.jac)

    def places(x: FloatArray) -> FloatArray:
        factors = factors_of(x[10:15])
        R, o = poses_by_hand(x[:3], Rotation.from_rotvec(x[3:6]), x[6:10], factors)["shank"]
        known = [m for m in leg.markers if m.at is not None]
        nominal = [factors[m.segment] * np.array(m.at) for m in known]
        loose = R.T @ (one.positions[0, -1] - o)
        return np.r_[(np.array(nominal) + x[16:].reshape(-1, 3)).ravel(), loose]

    h = 1e-6
    columns = [
        (places(peer.x + h * e) - places(peer.x - h * e)) / (2 * h) for e in np.eye(len(start))
    ]
    J = np.column_stack(columns)
    variance = np.einsum("ij,jk,ik->i", J, cov, J)
    variance[-3:] += MEASUREMENT**2
    expected = np.sqrt(variance).reshape(-1, 3)
    found = np.array([marker.placed_sd for marker in result.markers])
    wrong = np.abs(found / expected - 1).max(axis=1)
    names = [marker.name for marker in result.markers]
    assert {n: round(float(w), 3) for n, w in zip(names, wrong, strict=True) if w > 0.05} == {}


def test_a_placed_marker_lies_where_it_was_measured(leg: Skeleton, recording_of: Maker) -> None:
    """The sized skeleton in its own static posture shows what was measured, but for the 1 mm."""
    one = someone(leg, np.random.default_rng(5))
    result = calibrate(leg, recording_of(leg.marker_names, one.positions, up="+Y"))
    functions = SkeletonFunctions(result.skeleton)
    numbers = sized_numbers(result.skeleton, np.eye(3))
    points = functions.marker_positions(result.own_posture, numbers)
    assert np.abs(points - one.positions).max() < 0.001
    np.testing.assert_allclose(points[0, -1], one.positions[0, -1], atol=1e-9)
    assert result.posture["bend"] == pytest.approx(result.own_posture.scalars[0, 6])


def test_calibrating_again_forgets_the_earlier_person(leg: Skeleton, recording_of: Maker) -> None:
    rng = np.random.default_rng(6)
    first, second = someone(leg, rng), someone(leg, rng)
    static = recording_of(leg.marker_names, second.positions, up="+Y")
    earlier = calibrate(leg, recording_of(leg.marker_names, first.positions, up="+Y"))
    again, fresh = calibrate(earlier.skeleton, static), calibrate(leg, static)
    np.testing.assert_allclose(found_sizes(again)[0], found_sizes(fresh)[0], atol=1e-8)


def test_a_measured_stature_is_honoured(leg: Skeleton, recording_of: Maker) -> None:
    one = someone(leg, np.random.default_rng(7))
    static = recording_of(leg.marker_names, one.positions, up="+Y")
    without = calibrate(leg, static)
    tall, small = (calibrate(leg, static, stature=h, mass=80.0) for h in (2.0, 1.5))
    assert tall.skeleton.subject == Person(2.0, 80.0)
    assert tall.log_scale == pytest.approx(np.log(2.0 / 1.75), abs=0.03)
    assert small.log_scale == pytest.approx(np.log(1.5 / 1.75), abs=0.03)
    assert small.log_scale < without.log_scale < tall.log_scale
    # What the markers do not tell well follows the stature.
    assert (found_sizes(tall)[0] > found_sizes(small)[0]).all()


@pytest.mark.parametrize(
    ("person", "says"),
    [({"stature": 175.0}, "--stature 175"), ({"mass": 7000.0}, "--mass 7000")],
)
def test_nobodys_stature_or_mass_is_refused(
    leg: Skeleton, recording_of: Maker, person: dict[str, float], says: str
) -> None:
    static = recording_of(leg.marker_names, someone(leg, np.random.default_rng(8)).positions)
    with pytest.raises(FitError, match=says):
        calibrate(leg, static, **person)  # type: ignore[arg-type]


def test_a_stature_without_a_reference_person_is_refused(
    leg: Skeleton, recording_of: Maker
) -> None:
    static = recording_of(leg.marker_names, someone(leg, np.random.default_rng(8)).positions)
    with pytest.raises(FitError, match="does not say whom"):
        calibrate(replace(leg, person=None), static, stature=1.7)


def test_a_held_coordinate_is_as_certain_as_a_fixed_joint(
    leg: Skeleton, skeleton_of: Callable[[str], Skeleton], recording_of: Maker
) -> None:
    moves = "moves: [{rotate: -z, coordinate: bend, range: [-40, 150]}]"
    assert moves in LEG
    text = LEG.replace(", bend: [4, 6]", "")
    held = skeleton_of(text.replace("range: [-40, 150]", "held: 6"))
    fixed = skeleton_of(text.replace(moves, "turned: {axis: -z, angle: 6}\n    fixed: true"))
    one = someone(leg, np.random.default_rng(9))
    static = recording_of(leg.marker_names, one.positions, up="+Y")
    by_hold, by_build = calibrate(held, static), calibrate(fixed, static)
    np.testing.assert_allclose(found_sizes(by_hold)[0], found_sizes(by_build)[0], atol=1e-6)
    np.testing.assert_allclose(found_sizes(by_hold)[1], found_sizes(by_build)[1], rtol=1e-6)
    assert by_hold.posture["bend"] == pytest.approx(np.radians(6))
    assert by_hold.undetermined == ()


def test_a_spherical_joints_rest_sd_pulls_in_the_static_too(
    skeleton_of: Callable[[str], Skeleton], recording_of: Maker
) -> None:
    """The language: `rest_sd` of a spherical joint is a pull per component of log R. Of the shank
    only markers on its long axis are seen, so nothing but the pull tells its turn about it."""
    head, tail = LEG.split("    moves: [{rotate: -z")
    tail = tail.split("\n", 1)[1]
    ball = (
        "    spherical: {angles: {sequence: [z, x, y], names: [k1, k2, k3]}, rest_sd: 10}\n" + tail
    )
    text = (head + ball).replace(", bend: [4, 6]", "")
    on_axis = {"[0.04, -0.07, 0.01]": "[0, -0.1, 0]", "[0, -0.43, 0.035]": "[0, -0.43, 0]"}
    on_axis["[0, -0.43, -0.035]"] = "[0, -0.3, 0]"
    for old, new in on_axis.items():
        text = text.replace(old, new)
    skeleton = skeleton_of(text.replace("  loose: {segment: shank}\n", ""))
    functions = SkeletonFunctions(skeleton)
    posture = Posture(
        np.array([[0.1, 0.9, 0.2, 0.05, 0, 0.02]]),
        np.tile([1.0, 0, 0, 0], (1, 2, 1)),
    )
    points = functions.marker_positions(posture, sized_numbers(skeleton, np.eye(3)))
    result = calibrate(skeleton, recording_of(skeleton.marker_names, points, up="+Y"))
    assert result.undetermined == ()
    assert result.posture["k3"] == pytest.approx(0.0, abs=1e-3)


# --- what a static may be, and what not -----------------------------------------------------------


@pytest.fixture(scope="module")
def standing(limbs: Skeleton, limbs_functions: SkeletonFunctions, recording_of: Maker) -> Recording:
    """Somebody 6 % larger than the reference, standing for a second, markers 5 mm astray."""
    rng = np.random.default_rng(10)
    person = replace(limbs, sizes={s.name: Size((1.06, 1.06, 1.06)) for s in limbs.segments})
    freedoms = limbs_functions.kinematics.freedoms
    scalars = np.zeros((100, len(freedoms.scalars)))
    for name, angle in (("hip_flexion", 10), ("knee_flexion", 5), ("ankle_dorsiflexion", 4)):
        for side in ("right", "left"):
            scalars[:, freedoms.scalars.index(f"{name}_{side}")] = np.radians(angle)
    scalars[:, freedoms.scalars.index("pelvis_y")] = 0.95
    turn = Rotation.from_euler("YXZ", [0.7, 0.02, -0.15]).as_quat(scalar_first=True)
    posture = Posture(scalars, np.tile(turn, (100, 1, 1)))
    positions = limbs_functions.marker_positions(posture, sized_numbers(person, np.eye(3)))
    positions = positions + 0.005 * rng.normal(size=positions.shape[1:])
    positions += 0.0005 * rng.normal(size=positions.shape)
    return recording_of(limbs.marker_names, positions, up="+Y")


def test_the_shipped_model_finds_the_size_of_a_larger_person(
    limbs: Skeleton, standing: Recording
) -> None:
    result = calibrate(limbs, standing)
    lengths, reference = sized_lengths(result.skeleton), sized_lengths(limbs)
    for segment in ("thigh_right", "shank_right", "thigh_left", "shank_left"):
        assert lengths[segment] == pytest.approx(1.06 * reference[segment], abs=0.012)
    assert result.log_scale == pytest.approx(np.log(1.06), abs=0.05)
    assert result.converged
    assert np.degrees(result.posture["knee_flexion_right"]) == pytest.approx(5, abs=5)


def test_one_frame_serves_as_a_static(limbs: Skeleton, standing: Recording) -> None:
    row = standing.positions[:1]
    one = replace(
        standing, positions=row, residuals=standing.residuals[:1], cameras=standing.cameras[:1]
    )
    whole, single = calibrate(limbs, standing), calibrate(limbs, one)
    assert single.still == (0.0, 0.0)
    for segment, length in sized_lengths(whole.skeleton).items():
        assert sized_lengths(single.skeleton)[segment] == pytest.approx(length, abs=0.003)


def test_a_third_of_the_samples_may_be_missing(limbs: Skeleton, standing: Recording) -> None:
    positions = standing.positions.copy()
    positions[np.random.default_rng(11).random(positions.shape[:2]) < 0.3] = np.nan
    whole = calibrate(limbs, standing)
    holed = calibrate(limbs, replace(standing, positions=positions))
    assert holed.converged
    for segment, length in sized_lengths(whole.skeleton).items():
        assert sized_lengths(holed.skeleton)[segment] == pytest.approx(length, abs=0.001)


def test_a_static_that_lacks_a_third_of_its_markers_still_sizes(
    limbs: Skeleton, standing: Recording
) -> None:
    positions = standing.positions.copy()
    gone = np.random.default_rng(12).permutation(len(limbs.markers))[: len(limbs.markers) // 3]
    positions[:, gone] = np.nan
    result = calibrate(limbs, replace(standing, positions=positions))
    assert result.converged
    reference = sized_lengths(limbs)
    for segment in ("thigh_right", "shank_right"):
        length = sized_lengths(result.skeleton)[segment]
        assert length == pytest.approx(1.06 * reference[segment], abs=0.03)


def exchanged(static: Recording) -> Recording:
    other = {"_right": "_left", "_left": "_right"}
    labels = []
    for label in static.labels:
        ending = next((e for e in other if label.endswith(e)), "")
        labels.append(label.removesuffix(ending) + other.get(ending, ""))
    return replace(static, labels=tuple(labels))


def test_exchanged_sides_are_refused(limbs: Skeleton, standing: Recording) -> None:
    with pytest.raises(FitError, match="left and right labels look exchanged"):
        calibrate(limbs, exchanged(standing))


def test_sides_exchanged_back_by_a_map_are_accepted(limbs: Skeleton, standing: Recording) -> None:
    swapped = exchanged(standing)
    labels = dict(zip(standing.labels, swapped.labels, strict=True))
    result = calibrate(limbs, swapped, labels=labels)
    assert result.cost == pytest.approx(calibrate(limbs, standing).cost, rel=1e-9)
    assert result.skeleton.labels == labels


@pytest.mark.parametrize(("factor", "units"), [(1000.0, "m"), (0.001, "mm")])
def test_lengths_wrong_by_a_thousand_are_refused(
    limbs: Skeleton, standing: Recording, factor: float, units: str
) -> None:
    wrong = replace(standing, positions=factor * standing.positions, units=units)
    right = {"m": "mm", "mm": "m"}[units]
    with pytest.raises(FitError, match=f"read as {units}; they look like {right}"):
        calibrate(limbs, wrong)


def test_a_static_that_never_stands_still_is_refused(limbs: Skeleton, standing: Recording) -> None:
    walking = standing.positions + np.linspace(0, 1.2, 100)[:, None, None] * [1, 0, 0]
    with pytest.raises(FitError, match="never stands still"):
        calibrate(limbs, replace(standing, positions=walking))


def test_too_few_markers_are_refused(limbs: Skeleton, standing: Recording) -> None:
    positions = standing.positions.copy()
    positions[:, 2:] = np.nan
    with pytest.raises(FitError):
        calibrate(limbs, replace(standing, positions=positions))


def test_the_room_does_not_matter(limbs: Skeleton, standing: Recording) -> None:
    turn = Rotation.from_euler("X", 90, degrees=True).as_matrix().round()
    moved = replace(standing, positions=standing.positions @ turn.T + [3, -1, 2], up="+Z")
    before, after = calibrate(limbs, standing), calibrate(limbs, moved)
    assert after.cost == pytest.approx(before.cost, rel=1e-9)
    for one, other in zip(before.markers, after.markers, strict=True):
        np.testing.assert_allclose(one.placed, other.placed, atol=1e-7)
        np.testing.assert_allclose(one.placed_sd, other.placed_sd, rtol=1e-5)
    assert (before.up, after.up) == ("+Y", "+Z")


def test_up_is_found_from_the_posture_where_nothing_declares_it(
    limbs: Skeleton, standing: Recording
) -> None:
    turn = Rotation.from_euler("X", 90, degrees=True).as_matrix().round()
    result = calibrate(limbs, replace(standing, positions=standing.positions @ turn.T, up=None))
    assert result.up == "+Z"
    assert "pelvis" in result.up_how
