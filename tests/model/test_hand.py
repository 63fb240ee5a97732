"""The shipped hand: which way plus is, what a fist does, its proportions, and a real hand that reaches."""

from __future__ import annotations

import os
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray

from condyle.model import load_skeleton
from condyle.model.growth import sized_landmarks, sized_numbers
from condyle.recording import read_label_map, read_recording
from condyle.solver.calibration import calibrate
from condyle.solver.frame_problem import SkeletonFunctions
from condyle.solver.posture import Posture
from condyle.solver.trial_fit import fit_trial

FloatArray = NDArray[np.float64]
ROOT = Path(__file__).resolve().parents[2]
DATA = Path(os.environ.get("CONDYLE_DATA", ROOT.parent / "shared" / "data"))
MODEL = load_skeleton("hand")
FINGERS = ("index", "middle", "ring", "little")
TIPS = {**{f: f"{f}_distal_tip_right" for f in FINGERS}, "thumb": "thumb_distal_tip_right"}


@pytest.fixture(scope="module")
def functions() -> SkeletonFunctions:
    return SkeletonFunctions(MODEL)


def tip(functions: SkeletonFunctions, finger: str, **degrees: float) -> FloatArray:
    """A finger tip in the forearm's axes (m) with some coordinates set."""
    freedoms = functions.kinematics.freedoms
    scalars = np.zeros((1, len(freedoms.scalars)))
    for name, value in degrees.items():
        scalars[0, freedoms.scalars.index(f"{name}_right")] = np.radians(value)
    balls = np.tile([1.0, 0, 0, 0], (1, len(freedoms.balls), 1))
    poses = functions.poses(Posture(scalars, balls), sized_numbers(MODEL, np.eye(3)))[0]
    segment = f"{finger}_distal_right"
    place = sized_landmarks(MODEL)[segment][TIPS[finger]]
    return np.asarray((poses[MODEL.segment_index(segment)] @ [*place, 1.0])[:3])


@pytest.mark.parametrize("finger", FINGERS)
@pytest.mark.parametrize("joint", ["MCP", "PIP", "DIP"])
def test_plus_flexion_takes_a_finger_tip_towards_the_palm(
    functions: SkeletonFunctions, finger: str, joint: str
) -> None:
    moved = tip(functions, finger, **{f"{finger}_{joint}_flexion": 20}) - tip(functions, finger)
    assert moved[0] > 0.004  # X is towards the palm
    assert moved[1] > 0  # and nearer to the wrist


@pytest.mark.parametrize("finger", FINGERS)
def test_plus_deviation_is_to_the_little_fingers_side_at_wrist_and_knuckles(
    functions: SkeletonFunctions, finger: str
) -> None:
    for name in ("wrist_deviation", f"{finger}_MCP_deviation"):
        moved = tip(functions, finger, **{name: 10}) - tip(functions, finger)
        assert moved[2] < -0.005, name  # Z is to the thumb side


def test_the_thumb_leaves_the_palm_and_crosses_it(functions: SkeletonFunctions) -> None:
    rest = tip(functions, "thumb")
    assert tip(functions, "thumb", thumb_base_abduction=20)[0] > rest[0] + 0.01
    assert tip(functions, "thumb", thumb_base_flexion=30)[2] < rest[2] - 0.01
    for joint in ("MCP", "IP"):
        moved = tip(functions, "thumb", **{f"thumb_{joint}_flexion": 30}) - rest
        assert moved[2] < -0.005, joint


@pytest.mark.parametrize("finger", FINGERS)
def test_a_fist_brings_the_tips_to_the_palm_and_not_through_it(
    functions: SkeletonFunctions, finger: str
) -> None:
    """Loose: the bones' line of a tip ends 5 to 45 mm in front of the metacarpals' (common sense)."""
    bent = {f"{finger}_{joint}_flexion": v for joint, v in (("MCP", 85), ("PIP", 100), ("DIP", 60))}
    place = tip(functions, finger, **bent)
    wrist = -0.2673
    assert 0.005 < place[0] < 0.045
    assert wrist - 0.09 < place[1] < wrist - 0.01


def test_the_middle_finger_reaches_as_far_as_a_hand_is_long(functions: SkeletonFunctions) -> None:
    """Drillis & Contini 1966: 0.108 of stature from wrist to finger tip; 5 per cent."""
    assert MODEL.person is not None
    length = np.linalg.norm(tip(functions, "middle") - [0, -0.2673, -0.0179])
    assert length == pytest.approx(0.108 * MODEL.person.stature, rel=0.05)


def test_fingers_rank_as_hands_have_them(functions: SkeletonFunctions) -> None:
    reach = {finger: -tip(functions, finger)[1] for finger in FINGERS}
    assert reach["middle"] > max(reach["index"], reach["ring"])
    assert min(reach["index"], reach["ring"]) > reach["little"]


def test_there_are_28_free_coordinates_and_15_finger_joints() -> None:
    free = [c for c in MODEL.coordinates if c.follows is None]
    assert len(free) + 3 == 28
    joints = [j.name for j in MODEL.joints if any(w in j.name for w in ("base", "MCP", "IP"))]
    assert len(joints) == 15


@pytest.mark.real
def test_a_reaching_hand_is_explained_by_the_hand_of_the_examples() -> None:
    """What docs/hand.md tells, on five seconds of the recording."""
    file = DATA / "arm-hand" / "reach.csv"
    if not file.is_file():
        pytest.skip(f"REAL DATA ABSENT: {file}")
    labels = read_label_map(ROOT / "docs/examples/reach_labels.yaml")
    recording = read_recording(file, units="mm")
    model = load_skeleton(ROOT / "docs/examples/reach_hand.yaml")
    sized = calibrate(model, recording, labels=labels, up="+Z", start=0.0, end=0.5)
    fit = fit_trial(sized.skeleton, recording, start=5.0, end=10.0, smooth=True)
    assert fit.converged.all()
    assert fit.rms() < 0.006
    assert not fit.not_observed
    flexion = fit.values[:, fit.column("index_PIP_flexion_right")]
    assert np.radians(20) < np.ptp(flexion) < np.radians(100)
