"""The shipped trunk: the full body's own parts, and markers along a spine of two joints."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from condyle.model import load_skeleton
from condyle.model.growth import sized_numbers
from condyle.solver.frame_problem import SkeletonFunctions
from condyle.solver.posture import Posture

MODEL, BODY = load_skeleton("trunk"), load_skeleton("full_body")
PARTS = ("pelvis", "abdomen", "thorax", "neck", "head")


def test_its_parts_and_joints_are_the_full_bodys() -> None:
    assert {s.name for s in MODEL.segments} == set(PARTS)
    for name in PARTS:
        assert MODEL.segments[MODEL.segment_index(name)] == BODY.segments[BODY.segment_index(name)]
    joints = {j.name: j for j in BODY.joints}
    for joint in MODEL.joints:
        assert joint == joints[joint.name]


def test_there_are_12_free_coordinates() -> None:
    free = [c for c in MODEL.coordinates if c.follows is None]
    balls = [j for j in MODEL.joints if hasattr(j.motion, "angles")]
    assert len(free) + 3 * len(balls) == 12


def test_spine_markers_follow_one_another_up_the_back() -> None:
    functions = SkeletonFunctions(MODEL)
    freedoms = functions.kinematics.freedoms
    rest = Posture(np.zeros((1, len(freedoms.scalars))), np.array([[[1.0, 0, 0, 0]]]))
    places = functions.marker_positions(rest, sized_numbers(MODEL, np.eye(3)))[0]
    at = dict(zip(MODEL.marker_names, places, strict=True))
    order = ["sacrum", "L5", "L3", "L1", "T10", "T8", "C7"]
    heights = [at[name][1] for name in order]
    assert heights == sorted(heights)
    # The hollow of the loins: deeper than sacrum and T8, by some 20 to 50 mm (common practice).
    behind = -np.array([at[name][0] for name in order])
    assert 0.015 < min(behind[0], behind[5]) - behind[2] < 0.06


@pytest.mark.parametrize("word", ["flexion", "side_bend", "twist"])
def test_the_abdomen_takes_half_of_what_the_trunk_bends(word: str) -> None:
    functions = SkeletonFunctions(MODEL)
    freedoms = functions.kinematics.freedoms
    scalars = np.zeros((1, len(freedoms.scalars)))
    scalars[0, freedoms.scalars.index(f"lumbar_{word}")] = np.radians(40)
    posture = Posture(scalars, np.array([[[1.0, 0, 0, 0]]]))
    poses = functions.poses(posture, sized_numbers(MODEL, np.eye(3)))[0]
    turn = Rotation.from_matrix(poses[MODEL.segment_index("abdomen"), :3, :3])
    # Rotation sits higher up: a quarter below, three quarters above.
    share = 0.25 if word == "twist" else 0.5
    assert np.degrees(turn.magnitude()) == pytest.approx(40 * share, abs=1e-9)
