"""The shipped models that are small enough for closed forms: the linkage and the sagittal leg."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray

from condyle.model import load_skeleton
from condyle.model.growth import sized_numbers
from condyle.model.skeleton import Size
from condyle.recording.recording import Recording
from condyle.solver.calibration import calibrate
from condyle.solver.frame_fit import FrameFits, fit_frames
from condyle.solver.frame_problem import FrameProblem, SkeletonFunctions
from condyle.solver.posture import Posture
from condyle.solver.telling import judged_postures, tell

FloatArray = NDArray[np.float64]

CRANK, COUPLER, ROCKER, BASE = 0.060, 0.180, 0.140, 0.200
"""m, the bars of `planar_linkage`, typed in again."""


def fitted(
    name: str, free: dict[str, FloatArray], seen: tuple[str, ...]
) -> tuple[FrameFits, SkeletonFunctions]:
    """Fit markers that a posture made, without noise; only the markers named are seen."""
    skeleton = load_skeleton(name)
    functions = SkeletonFunctions(skeleton)
    numbers = sized_numbers(skeleton, np.eye(3))
    frames = len(next(iter(free.values())))
    scalars = np.zeros((frames, len(functions.kinematics.freedoms.scalars)))
    for key, values in free.items():
        scalars[:, functions.kinematics.freedoms.scalars.index(key)] = values
    truth = Posture(scalars, np.zeros((frames, 0, 4)))
    measured = functions.marker_positions(truth, numbers)
    sd = np.array([m.sd for m in skeleton.markers])
    known = np.array([m.name in seen for m in skeleton.markers])
    weights = np.tile(known / sd**2, (frames, 1))
    measured = np.where(weights[..., None] > 0, measured, 0.0)
    return fit_frames(FrameProblem(functions, measured, weights, numbers)), functions


def column(fits: FrameFits, functions: SkeletonFunctions, name: str) -> FloatArray:
    return fits.posture.scalars[:, functions.kinematics.freedoms.scalars.index(name)]


def test_the_linkage_obeys_the_law_of_cosines_over_a_full_turn() -> None:
    crank = np.radians(np.linspace(0, 360, 361))
    # The crank's own end is all that is seen of the moving bars; the tie tells the rest.
    seen = ("frame_left", "frame_right", "frame_below", "crank_end")
    fits, functions = fitted("planar_linkage", {"crank_angle": crank}, seen)
    assert fits.solution.converged.all()
    numbers = sized_numbers(functions.skeleton, np.eye(3))
    residual, _ = functions.ties.residuals(fits.posture, numbers)
    assert np.abs(residual).max() < 1e-4
    assert functions.ties.freedom_taken(fits.posture, numbers) == 2
    # Diagonal from the crank's end to the rocker's pin, then the law of cosines in the triangle of
    # diagonal, coupler and rocker.
    diagonal = np.sqrt(CRANK**2 + BASE**2 - 2 * CRANK * BASE * np.cos(crank))
    inner = np.arccos((diagonal**2 + ROCKER**2 - COUPLER**2) / (2 * diagonal * ROCKER))
    below = np.arctan2(CRANK * np.sin(crank), BASE - CRANK * np.cos(crank))
    expected = np.degrees(np.pi - inner - below)
    found = np.degrees(column(fits, functions, "rocker_angle"))
    np.testing.assert_allclose(found, expected, atol=0.01)


def test_the_sagittal_legs_joint_angles_are_differences_of_its_segment_angles() -> None:
    time = np.linspace(0, 1, 60)
    thigh = np.radians(10 + 25 * np.sin(2 * np.pi * time))
    shank = thigh - np.radians(35 + 30 * np.sin(2 * np.pi * time + 1))
    foot = shank + np.radians(-5 + 15 * np.sin(2 * np.pi * time + 2))
    skeleton = load_skeleton("sagittal_leg")
    free = {"thigh_angle": thigh, "shank_angle": shank, "foot_angle": foot, "hip_y": 0.9 + 0 * time}
    fits, functions = fitted("sagittal_leg", free, skeleton.marker_names)
    for name, expected in (
        ("thigh_angle", thigh),
        ("shank_angle", shank),
        ("foot_angle", foot),
        ("knee_flexion", thigh - shank),
        ("ankle_dorsiflexion", foot - shank),
    ):
        np.testing.assert_allclose(column(fits, functions, name), expected, atol=1e-6, err_msg=name)
    numbers = sized_numbers(skeleton, np.eye(3))
    assert functions.ties.freedom_taken(fits.posture, numbers) == 2


THIGH, SHANK = 0.4222, 0.4403
"""m, de Leva 1996, male: the segments of `sagittal_leg`, typed in again."""


def plane(angle: float, point: tuple[float, float]) -> tuple[FloatArray, FloatArray]:
    """A point of a segment turned by an angle, and what a change of the angle does to it."""
    c, s = np.cos(angle), np.sin(angle)
    turned = np.array([c * point[0] - s * point[1], s * point[0] + c * point[1]])
    return turned, np.array([-turned[1], turned[0]])


def test_the_sagittal_legs_sds_are_those_of_three_rods_in_a_plane() -> None:
    # The same rods without pointers or ties: hip x and y, then three angles from the vertical.
    skeleton = load_skeleton("sagittal_leg")
    functions = SkeletonFunctions(skeleton)
    present = np.ones(len(skeleton.markers), dtype=bool)
    _, postures = judged_postures(functions, present)
    scalars = functions.kinematics.freedoms.scalars
    angles = [scalars.index(f"{name}_angle") for name in ("thigh", "shank", "foot")]
    of = {"thigh": 0, "shank": 1, "foot": 2}
    variances = []
    for thigh, shank, foot in postures.scalars[:, angles]:
        information = np.zeros((5, 5))
        for marker in skeleton.markers:
            assert marker.at is not None
            depth, rates = of[marker.segment], np.zeros((2, 5))
            rates[:, :2] = np.eye(2)
            chain = [(thigh, (0.0, -THIGH)), (shank, (0.0, -SHANK))][:depth]
            last = ((thigh, shank, foot)[depth], marker.at[:2])
            for column, (angle, point) in enumerate([*chain, last]):
                rates[:, 2 + column] = plane(angle, point)[1]
            information += rates.T @ rates / marker.sd**2
        cov = np.linalg.inv(information)
        tell_differences = np.array([[0, 0, 1, -1, 0], [0, 0, 0, -1, 1]])
        variances.append(
            np.append(np.diag(cov), np.diag(tell_differences @ cov @ tell_differences.T))
        )
    expected = np.median(np.sqrt(variances), axis=0)
    told = tell(skeleton).sd
    names = ("hip_x", "hip_y", "thigh_angle", "shank_angle", "foot_angle")
    for name, sd in zip((*names, "knee_flexion", "ankle_dorsiflexion"), expected, strict=True):
        assert told[name] == pytest.approx(sd, rel=2e-3), name


@pytest.mark.parametrize("name", ["planar_linkage", "sagittal_leg"])
def test_models_are_judged_where_their_ties_hold(name: str) -> None:
    # At an open tie its equation points elsewhere, and tells what no closed posture does.
    skeleton = load_skeleton(name)
    functions = SkeletonFunctions(skeleton)
    problem, postures = judged_postures(functions, np.ones(len(skeleton.markers), dtype=bool))
    residual, _ = functions.ties.residuals(postures, problem.numbers)
    assert np.abs(residual).max() < 1e-4


SENSES = [
    ("sagittal_leg", "thigh_angle", "shank", 0, 1),
    ("sagittal_leg", "shank_angle", "foot", 0, 1),
    ("sagittal_leg", "foot_angle", "foot", 1, 1),
    ("sagittal_leg", "knee_flexion", "knee_pointer", 0, -1),
    ("sagittal_leg", "ankle_dorsiflexion", "ankle_pointer", 1, 1),
    ("planar_linkage", "crank_angle", "crank", 1, 1),
    ("planar_linkage", "frame_heading", "frame", 2, -1),
]
"""Model, coordinate, segment, axis, and the sense in which plus moves a point far out on the segment."""
FAR_OUT = {
    "foot": (0.2011, -0.055, 0.0),
    "ankle_pointer": (0.2011, -0.055, 0.0),
    "crank": (CRANK, 0.0, 0.0),
    "frame": (BASE, 0.0, 0.0),
}


@pytest.mark.parametrize(("model", "coordinate", "segment", "axis", "sign"), SENSES)
def test_plus_means_what_the_page_says(
    model: str, coordinate: str, segment: str, axis: int, sign: int
) -> None:
    skeleton = load_skeleton(model)
    functions = SkeletonFunctions(skeleton)
    names = functions.kinematics.freedoms.scalars
    scalars = np.zeros((2, len(names)))
    scalars[1, names.index(coordinate)] = np.radians(10)
    numbers = sized_numbers(skeleton, np.eye(3))
    poses = functions.poses(Posture(scalars, np.zeros((2, 0, 4))), numbers)
    point = [*FAR_OUT.get(segment, (0.0, -SHANK, 0.0)), 1.0]
    places = poses[:, skeleton.segment_index(segment)] @ point
    assert sign * (places[1] - places[0])[axis] > 0.005


@pytest.mark.parametrize("share", [0.6, 1.2])
def test_a_leg_grown_evenly_is_found_so_from_a_still_recording(share: float) -> None:
    skeleton = load_skeleton("sagittal_leg")
    assert skeleton.person is not None
    functions = SkeletonFunctions(skeleton)
    even = {segment.name: Size((share,) * 3) for segment in skeleton.segments}
    numbers = sized_numbers(replace(skeleton, sizes=even), np.eye(3))
    names = functions.kinematics.freedoms.scalars
    scalars = np.zeros((5, len(names)))
    # What the model expects of an ordinary standing person.
    for name, degrees in (
        ("thigh_angle", 2),
        ("shank_angle", -3),
        ("knee_flexion", 5),
        ("ankle_dorsiflexion", 3),
    ):
        scalars[:, names.index(name)] = np.radians(degrees)
    positions = functions.marker_positions(Posture(scalars, np.zeros((5, 0, 4))), numbers)
    count = len(skeleton.markers)
    still = Recording(
        name="made up",
        source="made-up.c3d",
        rate=100.0,
        first_frame=1,
        labels=skeleton.marker_names,
        positions=positions,
        residuals=np.zeros((5, count)),
        cameras=np.zeros((5, count), dtype=np.uint8),
        units="m",
        up="+Y",
    )
    found = calibrate(skeleton, still, stature=share * skeleton.person.stature, up="+Y").skeleton
    for name in ("thigh", "shank", "foot"):
        np.testing.assert_allclose(found.sizes[name].factors, share, rtol=0.02, err_msg=name)
    # The pointers grow with what they follow, or the ties would not close.
    assert found.sizes["knee_pointer"].factors[1] == found.sizes["shank"].factors[1]
    assert found.sizes["ankle_pointer"].factors[0] == found.sizes["foot"].factors[0]
