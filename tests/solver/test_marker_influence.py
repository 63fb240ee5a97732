"""What a misplaced marker does, against refitting: move it, fit again, compare."""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest

from condyle.model import load_skeleton
from condyle.model.skeleton import Skeleton
from condyle.solver.frame_fit import fit_frames
from condyle.solver.frame_problem import SkeletonFunctions
from condyle.solver.marker_influence import influence_at, marker_influence
from condyle.solver.posture import Posture
from condyle.solver.reported import reported_values
from condyle.solver.telling import drawn_postures, judged_postures, tell
from condyle.solver.trial_fit import frame_problem
from condyle.solver.upright import Upright

MILLIMETRE = 1e-3

LEVER = """
condyle: 1
name: lever
segments: {rod: {}}
joints:
  pin: {from: laboratory, to: rod, moves: [{rotate: z, coordinate: swing, range: [-60, 60]}]}
markers: {near: {segment: rod, at: [0, -0.3, 0], sd: 0.01}, far: {segment: rod, at: [0, -0.4, 0], sd: 0.02}}
"""


def test_a_lever_follows_its_markers_as_computed_by_hand(
    skeleton_of: Callable[[str], Skeleton],
) -> None:
    """One angle, markers at levers l with weights w: d angle / d place = w l / sum w l^2."""
    found = marker_influence(skeleton_of(LEVER))
    levers, weights = np.array([0.3, 0.4]), np.array([1e4, 2500.0])
    by_hand = weights * levers / (weights * levers**2).sum()
    np.testing.assert_allclose(found.rate[:, found.names.index("swing")], by_hand, rtol=1e-9)
    assert (found.axis[:, 0] == 0).all()  # along x, across the rod


@pytest.mark.parametrize(
    ("name", "marker"),
    [
        ("lower_limbs", "FE_lateral_right"),
        ("lower_limbs", "MT5_left"),
        ("planar_linkage", "coupler_middle"),
    ],
)
def test_the_influence_is_what_refitting_finds(name: str, marker: str) -> None:
    """A noise-free frame, one marker 1 mm to either side: central differences of two whole fits."""
    skeleton = load_skeleton(name)
    functions = SkeletonFunctions(skeleton)
    posture = _start(skeleton, functions)
    blank = frame_problem(
        skeleton, functions, np.zeros((1, len(skeleton.markers), 3)), Upright("+Y", "any")
    )
    true = functions.marker_positions(posture, blank.numbers)
    row = skeleton.marker_names.index(marker)
    segment = skeleton.segment_index(skeleton.markers[row].segment)
    turn = functions.poses(posture, blank.numbers)[0, segment, :3, :3]
    frames = np.repeat(true, 7, axis=0)
    for axis in range(3):
        frames[1 + 2 * axis, row] += MILLIMETRE * turn[:, axis]
        frames[2 + 2 * axis, row] -= MILLIMETRE * turn[:, axis]
    fits = fit_frames(frame_problem(skeleton, functions, frames, Upright("+Y", "any")))
    told = reported_values(functions.kinematics, fits.posture)
    values = np.stack([value for value, _ in told.values()], axis=1)
    refitted = (values[1::2] - values[2::2]).T / (2 * MILLIMETRE)
    first = frame_problem(skeleton, functions, frames[:1], Upright("+Y", "any"))
    rates, lost = influence_at(functions, first, fits.posture.take(np.array([0])))
    known = ~lost[0]
    assert known.sum() > 3
    largest = np.abs(refitted[known]).max()
    np.testing.assert_allclose(
        rates[0, row][known], refitted[known], rtol=0.02, atol=0.002 * largest
    )


def _start(skeleton: Skeleton, functions: SkeletonFunctions) -> Posture:
    """A posture that fits without error: ties closed by a fit, limits far away."""
    problem = frame_problem(
        skeleton, functions, np.zeros((1, len(skeleton.markers), 3)), Upright("+Y", "any")
    )
    if not skeleton.ties:
        posture = drawn_postures(problem, np.random.default_rng(3))
        return Posture(0.4 * posture.scalars + 0.6 * problem.rest().scalars, posture.quaternions)
    at_rest = functions.marker_positions(problem.rest(), problem.numbers)
    return fit_frames(frame_problem(skeleton, functions, at_rest, Upright("+Y", "any"))).posture


def test_a_lost_number_and_a_missing_marker_have_no_influence() -> None:
    skeleton = load_skeleton("lower_limbs")
    present = np.array([m.name != "CA_right" for m in skeleton.markers])
    found = marker_influence(skeleton, present=present)
    gone = skeleton.marker_names.index("CA_right")
    assert np.isnan(found.rate[gone]).all()
    unseen = tell(skeleton, present=present).unseen
    assert unseen
    for name in unseen:
        assert np.isnan(found.rate[:, found.names.index(name)]).all()
    ankle = found.names.index("ankle_dorsiflexion_right")
    other = skeleton.marker_names.index("MT2_right")
    assert found.rate[other, ankle] > 0


def test_shifting_all_markers_together_shifts_the_root_alone() -> None:
    """A law of the gain: the sum over the markers of a common shift moves the person, and no angle."""
    skeleton = load_skeleton("lower_limbs")
    functions = SkeletonFunctions(skeleton)
    problem, postures = judged_postures(functions, np.ones(len(skeleton.markers), dtype=bool))
    rates, lost = influence_at(functions, problem, postures)
    segments = [skeleton.segment_index(marker.segment) for marker in skeleton.markers]
    turns = functions.poses(postures, problem.numbers)[:, segments, :3, :3]
    total = np.einsum("nmck,nmlk->ncl", rates, turns)  # per shift along the laboratory's axes
    names = tuple(reported_values(functions.kinematics, postures))
    total[lost] = 0.0
    for column, name in enumerate(names):
        expected = np.zeros(3)
        if name in ("pelvis_x", "pelvis_y", "pelvis_z"):
            expected["xyz".index(name[-1])] = 1.0
        np.testing.assert_allclose(
            total[:, column], np.tile(expected, (len(total), 1)), atol=1e-7, err_msg=name
        )
