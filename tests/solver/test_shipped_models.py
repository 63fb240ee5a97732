"""What every shipped model must do: be judged, fit its own motion exactly, mirror, and grow evenly.

What a single model says of itself is held in tests of its own.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from condyle.model import load_skeleton, shipped_models
from condyle.model.growth import sized_joint_centres, sized_lengths, sized_numbers
from condyle.model.skeleton import LABORATORY, Size, Skeleton, Spherical
from condyle.solver.calibration import calibrate
from condyle.solver.cold_start import tightened
from condyle.solver.frame_fit import fit_frames
from condyle.solver.frame_problem import FrameProblem, SkeletonFunctions
from condyle.solver.posture import Posture, quaternions_of
from condyle.solver.reported import reported_values
from condyle.solver.telling import tell
from condyle.solver.trial_fit import frame_problem
from condyle.solver.upright import Upright

FloatArray = NDArray[np.float64]

MODELS = sorted(shipped_models())
UNSEEN = {
    "lower_limbs": {"toes_extension_right", "toes_extension_left"},
    "full_body": {"toes_extension_right", "toes_extension_left"},
}
"""What a model's own markers cannot tell; all others tell everything."""
TWO_SIDED = ["four_legged", "full_body", "lower_limbs", "trunk", "upper_limb"]
MIRROR = np.array([1.0, 1.0, -1.0])
REVERSED = {
    "pelvis_z", "thorax_z", "chest_z", "pelvic_rotation", "pelvic_obliquity",
    "lumbar_side_bend", "lumbar_twist", "neck_side_bend", "neck_twist",
    "thorax_side_bend", "thorax_twist", "chest_heading", "chest_roll", "back_side_bend",
    "back_twist", "head_side_bend", "head_roll", "tail_side_bend",
}  # fmt: skip
"""Numbers of the middle whose sign a mirror turns round."""


def without_pulls(skeleton: Skeleton) -> Skeleton:
    """A fit without noise should find its motion, not a compromise with what a joint would like."""
    joints = tuple(
        replace(j, motion=replace(j.motion, rest_sd=None)) if isinstance(j.motion, Spherical) else j
        for j in skeleton.joints
    )
    return replace(skeleton, joints=joints)


class Made:
    """A model, postures of it in which the ties hold, and the markers that these make."""

    def __init__(self, name: str, frames: int, seed: int) -> None:
        self.skeleton = without_pulls(load_skeleton(name))
        self.functions = SkeletonFunctions(self.skeleton)
        self.numbers = sized_numbers(self.skeleton, np.eye(3))
        rng = np.random.default_rng(seed)
        freedoms = self.functions.kinematics.freedoms
        unseen = UNSEEN.get(name, set())
        scalars = np.empty((frames, len(freedoms.scalars)))
        for k, coordinate in enumerate(freedoms.scalars):
            c = self.skeleton.coordinate(coordinate)
            low, high = (c.lower, c.upper) if c.has_range else (c.rest - 0.3, c.rest + 0.3)
            near = (c.rest + (low + high) / 2) / 2 + (high - low) / 6 * rng.uniform(-1, 1, frames)
            scalars[:, k] = c.rest if coordinate in unseen else near
            if c.held is not None:
                scalars[:, k] = c.held
        turns = Rotation.from_rotvec(rng.normal(0, 0.3, (frames * len(freedoms.balls), 3)))
        balls = quaternions_of(turns).reshape(frames, -1, 4)
        self.truth = self._closed(Posture(scalars, balls))
        self.positions = self.functions.marker_positions(self.truth, self.numbers)

    def problem(self, positions: FloatArray) -> FrameProblem:
        return frame_problem(self.skeleton, self.functions, positions, Upright("+Y", "made up"))

    def _closed(self, posture: Posture) -> Posture:
        if not len(self.functions.ties):
            return posture
        # A fit gives way to its markers a little; to markers that it made itself, less every time.
        for _ in range(6):
            problem = self.problem(self.functions.marker_positions(posture, self.numbers))
            posture = tightened(problem, posture, problem.bounds(), damping=1e-3).posture
        return posture

    def told(self, posture: Posture) -> dict[str, FloatArray]:
        told = reported_values(self.functions.kinematics, posture)
        return {name: values for name, (values, _) in told.items() if not name.endswith("_sum")}


def wrapped(angle: FloatArray) -> FloatArray:
    return np.asarray((angle + np.pi) % (2 * np.pi) - np.pi)


@pytest.mark.parametrize("name", MODELS)
def test_a_models_markers_tell_all_but_what_is_said(name: str) -> None:
    assert set(tell(load_skeleton(name)).unseen) == UNSEEN.get(name, set())


@pytest.mark.parametrize("name", MODELS)
def test_made_up_motion_is_found_again(name: str) -> None:
    made = Made(name, frames=10, seed=3)
    fits = fit_frames(made.problem(made.positions))
    assert fits.solution.converged.all()
    expected, found = made.told(made.truth), made.told(fits.posture)
    for key, values in expected.items():
        np.testing.assert_allclose(wrapped(found[key] - values), 0, atol=1e-6, err_msg=key)


def other_side(name: str) -> str:
    if name.endswith("_right"):
        return name.removesuffix("_right") + "_left"
    return name.removesuffix("_left") + "_right" if name.endswith("_left") else name


@pytest.mark.parametrize("name", TWO_SIDED)
def test_mirrored_markers_give_the_same_clinical_angles(name: str) -> None:
    made = Made(name, frames=4, seed=5)
    names = made.skeleton.marker_names
    swapped = np.full_like(made.positions, np.nan)
    for i, marker in enumerate(names):
        if other_side(marker) in names:
            swapped[:, names.index(other_side(marker))] = made.positions[:, i] * MIRROR
    as_recorded = np.where(np.isfinite(swapped[:, :, :1]), made.positions, np.nan)
    told = made.told(fit_frames(made.problem(as_recorded)).posture)
    mirrored = made.told(fit_frames(made.problem(swapped)).posture)
    for key, values in told.items():
        sign = -1 if key in REVERSED else 1
        off = wrapped(mirrored[other_side(key)] - sign * values)
        np.testing.assert_allclose(off, 0, atol=2e-6, err_msg=key)


@pytest.mark.parametrize("stature_share", [0.6, 1.2])
@pytest.mark.parametrize("name", MODELS)
def test_a_person_grown_evenly_has_every_length_in_proportion(
    name: str, stature_share: float
) -> None:
    skeleton = load_skeleton(name)
    factors = {s.name: Size((stature_share,) * 3) for s in skeleton.segments}
    before = sized_joint_centres(skeleton)
    after = sized_joint_centres(replace(skeleton, sizes=factors))
    for segment, centres in before.items():
        if segment == LABORATORY:
            continue
        for child, centre in centres.items():
            np.testing.assert_allclose(after[segment][child], stature_share * centre, atol=1e-12)


LENGTHS = [
    # Drillis & Contini 1966 (a transcription): shares of stature, within 5 per cent. The upper arm
    # from joint centre to joint centre as de Leva 1996 has it (from memory); that table's begins at
    # the acromion.
    ("upper_limb", "upper_arm_right", 0.2817 / 1.741),
    ("upper_limb", "forearm_right", 0.146),
    ("lower_limbs", "thigh_right", 0.245),
    ("lower_limbs", "shank_right", 0.246),
    ("sagittal_leg", "thigh", 0.245),
    ("sagittal_leg", "shank", 0.246),
    ("hand", "forearm_right", 0.146),
]


@pytest.mark.parametrize("stature", [1.0, 2.1])
@pytest.mark.parametrize(("name", "segment", "share"), LENGTHS)
def test_a_person_of_any_stature_is_sized_to_published_proportions(
    name: str, segment: str, share: float, stature: float, recording_of
) -> None:
    model = load_skeleton(name)
    assert model.person is not None
    even = {s.name: Size((stature / model.person.stature,) * 3) for s in model.segments}
    grown = replace(model, sizes=even)
    functions = SkeletonFunctions(grown)
    freedoms = functions.kinematics.freedoms
    standing = model.sizing.standing
    scalars = np.array(
        [
            [
                standing[n].value if n in standing else model.coordinate(n).rest
                for n in freedoms.scalars
            ]
        ]
    )
    posture = Posture(scalars, np.tile([1.0, 0, 0, 0], (1, len(freedoms.balls), 1)))
    markers = functions.marker_positions(posture, sized_numbers(grown, np.eye(3)))
    static = recording_of(model.marker_names, np.repeat(markers, 5, axis=0), up="+Y")
    found = calibrate(model, static, stature=stature, up="+Y").skeleton
    length = sized_lengths(found)[segment]
    assert length == pytest.approx(
        share * stature, rel=0.06 if segment.startswith("forearm") else 0.05
    )
