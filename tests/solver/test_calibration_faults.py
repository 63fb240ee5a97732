"""Every fault of a static gets its own sentence; nothing is silently absorbed into sizes."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import replace

import numpy as np
import pytest
from numpy.typing import NDArray

from condyle.model import load_skeleton
from condyle.model.errors import FitError
from condyle.model.growth import sized_marker_at, sized_numbers
from condyle.model.skeleton import Size, Skeleton
from condyle.recording.recording import Recording
from condyle.solver.calibration import calibrate
from condyle.solver.frame_problem import SkeletonFunctions
from condyle.solver.posture import Posture
from condyle.solver.quality import Finding, calibration_findings

FloatArray = NDArray[np.float64]
Maker = Callable[..., Recording]
MODEL = load_skeleton("lower_limbs")
FUNCTIONS = SkeletonFunctions(MODEL)
NAMES = MODEL.marker_names
STATURE = 1.74


def someone(seed: int, **posture: float) -> FloatArray:
    """(60, markers, 3) m: a person of the model's own expectations who stands, in degrees if said."""
    rng = np.random.default_rng(seed)
    assert MODEL.person is not None
    scale = np.log(STATURE / MODEL.person.stature)
    factors = {s.name: [1.0, 1.0, 1.0] for s in MODEL.segments}
    for group in MODEL.sizing.groups:
        factor = float(np.exp(rng.normal(scale, 0.7 * MODEL.sizing.factor_sd)))
        for segment, axis in group.members:
            factors[segment][axis] = factor
    grown = replace(MODEL, sizes={n: Size((f[0], f[1], f[2])) for n, f in factors.items()})
    within = np.array([m.placed_within for m in MODEL.markers])[:, None]
    places = sized_marker_at(grown) + 0.7 * within * rng.standard_normal((len(NAMES), 3))
    person = replace(
        grown,
        markers=tuple(
            replace(m, placed=(float(x), float(y), float(z)))
            for m, (x, y, z) in zip(grown.markers, places, strict=True)
        ),
    )
    scalars = np.zeros((1, len(FUNCTIONS.kinematics.freedoms.scalars)))
    for k, name in enumerate(FUNCTIONS.kinematics.freedoms.scalars):
        expected = MODEL.sizing.standing.get(name)
        if expected is not None:
            scalars[0, k] = expected.value + 0.7 * expected.sd * rng.standard_normal()
        if name in posture:
            scalars[0, k] = np.radians(posture[name])
    upright = np.array([[[1.0, 0.0, 0.0, 0.0]]])
    still = FUNCTIONS.marker_positions(Posture(scalars, upright), sized_numbers(person, np.eye(3)))
    return np.repeat(still, 60, axis=0) + 0.0003 * rng.standard_normal((60, len(NAMES), 3))


@pytest.fixture
def told(recording_of: Maker) -> Callable[..., list[Finding]]:
    def findings(positions: FloatArray, model: Skeleton = MODEL, **given: float) -> list[Finding]:
        static = recording_of(NAMES, positions, up="+Y")
        return calibration_findings(calibrate(model, static, **given))

    return findings


Told = Callable[..., list[Finding]]


def row(name: str) -> int:
    return NAMES.index(name)


def test_a_sound_static_gets_no_alarm(told: Told) -> None:
    alarms = [
        [f.what for f in told(someone(seed), stature=STATURE) if f.needs_look] for seed in range(12)
    ]
    assert sum(bool(a) for a in alarms) <= 1, alarms


@pytest.mark.parametrize(
    ("one", "other"),
    [
        ("FE_lateral_right", "FE_medial_right"),
        ("LM_left", "MM_left"),
        ("TT_right", "FH_right"),
        ("FE_lateral_right", "FE_lateral_left"),
        ("ASIS_right", "PSIS_right"),
        ("CA_left", "MT2_left"),
    ],
)
def test_two_markers_exchanged_are_named(one: str, other: str, told: Told) -> None:
    positions = someone(3)
    positions[:, [row(one), row(other)]] = positions[:, [row(other), row(one)]]
    alarms = [f for f in told(positions, stature=STATURE) if f.needs_look]
    assert any("look exchanged" in f.what and one in f.what and other in f.what for f in alarms)
    assert "exchange them" in alarms[0].do


def test_a_marker_on_the_wrong_segment_is_named_with_the_one_it_suits(told: Told) -> None:
    positions = someone(4)
    # Put on the head of the fibula instead of the side of the knee, 90 mm lower and more.
    positions[:, row("FE_lateral_right")] = positions[:, row("FH_right")] + [0.01, -0.025, 0.0]
    alarms = [f for f in told(positions, stature=STATURE) if f.needs_look]
    assert any("FE_lateral_right" in f.what and "shank_right" in f.what for f in alarms)


def test_exchanged_sides_are_refused(told: Told) -> None:
    positions = someone(5)
    order = [
        row(n.replace("_right", "_x").replace("_left", "_right").replace("_x", "_left"))
        for n in NAMES
    ]
    with pytest.raises(FitError, match="left and right labels look exchanged"):
        told(positions[:, order])


def test_wrong_units_are_refused(told: Told) -> None:
    with pytest.raises(FitError, match="look like mm"):
        told(1000 * someone(6))


@pytest.mark.parametrize("stature", [1.20, 2.20])
def test_a_wrong_stature_is_told_with_the_one_it_looks_like(stature: float, told: Told) -> None:
    alarms = [f.what for f in told(someone(7), stature=stature) if f.needs_look]
    assert any(f"stature of {stature:.2f} m" in what and "look like" in what for what in alarms)


def test_bent_knees_are_told(told: Told) -> None:
    positions = someone(8, knee_flexion_right=35, knee_flexion_left=35, hip_flexion_right=30)
    findings = told(positions, stature=STATURE)
    assert any("knee_flexion_right is" in f.what and f.needs_look for f in findings)
    assert any("zero of angles" in f.do for f in findings)


def test_without_medial_markers_what_nothing_tells_is_said(told: Told) -> None:
    positions = someone(9)
    for name in NAMES:
        if "medial" in name or name.startswith("MM"):
            positions[:, row(name)] = np.nan
    findings = told(positions, stature=STATURE)
    assert not any(f.needs_look for f in findings)
    assert any("next to nothing of" in f.what and "knee_right" in f.what for f in findings)


def test_a_static_of_one_frame_is_taken_and_said(told: Told) -> None:
    findings = told(someone(10)[:1], stature=STATURE)
    assert any("the still part is one frame" in f.what for f in findings)


def test_a_static_with_a_third_missing_gives_nearly_the_same_person(recording_of: Maker) -> None:
    positions = someone(11)
    whole = calibrate(MODEL, recording_of(NAMES, positions, up="+Y"), stature=STATURE)
    holes = np.random.default_rng(0).random(positions.shape[:2]) < 0.3
    holes[30] = False  # a frame that shows all
    with_holes = np.where(holes[..., None], np.nan, positions)
    part = calibrate(MODEL, recording_of(NAMES, with_holes, up="+Y"), stature=STATURE)
    for name, size in whole.skeleton.sizes.items():
        np.testing.assert_allclose(part.skeleton.sizes[name].factors, size.factors, atol=0.003)


def test_an_odd_segment_is_named(told: Told) -> None:
    """A shank a third too long, told by its own markers."""
    positions = someone(12)
    for name in ("LM", "MM", "CA", "MT1", "MT2", "MT5"):
        for side in ("right", "left"):
            positions[:, row(f"{name}_{side}"), 1] -= 0.15
    assert any("shank" in f.what and "larger" in f.what for f in told(positions, stature=STATURE))


def test_movement_given_as_static_is_refused_but_for_a_still_part(recording_of: Maker) -> None:
    positions = someone(13)
    moving = positions.copy()
    swing = 0.2 * np.sin(np.linspace(0, 20, 40))
    moving[:40, :, 0] += swing[:, None]
    moving[40:, :, 0] += swing[-1]
    walking = recording_of(NAMES, np.concatenate([moving[:40]] * 3), up="+Y")
    with pytest.raises(FitError, match="still"):
        calibrate(MODEL, walking, stature=STATURE)
    found = calibrate(MODEL, recording_of(NAMES, moving, up="+Y"), start=0.41, end=0.59)
    assert found.converged
