"""The demo study: its script and its files agree, and it is what it says it is."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from condyle.demo_data import (
    Study,
    compare_lengths,
    compare_with_truth,
    copy_study,
    read_person,
    read_truth,
)
from condyle.demo_data.cameras import STATIC_ONLY, STRAY
from condyle.demo_data.make import make_study
from condyle.demo_data.movements import reach_aside_plan, static_plan, step_up_plan
from condyle.demo_data.person import invent_person
from condyle.demo_data.reaching import posture_of
from condyle.demo_data.skin import AMPLITUDES, skin_displacements
from condyle.model.errors import CondyleError
from condyle.model.loading import load_skeleton
from condyle.recording.gaps import find_gaps
from condyle.recording.reading import read_recording
from condyle.solver.calibration import calibrate
from condyle.solver.frame_problem import SkeletonFunctions
from condyle.solver.reported import reported_values
from condyle.solver.results import Calibration, TrialFit
from condyle.solver.trial_fit import fit_trial

PERSON = invent_person()
PLANS = [static_plan(), step_up_plan(), reach_aside_plan()]
SAME = 1e-6
"""m and rad: closer than this, script and files have not parted."""


@pytest.fixture(scope="module")
def study(tmp_path_factory: pytest.TempPathFactory) -> Study:
    return copy_study(tmp_path_factory.mktemp("demo") / "study")


@pytest.fixture(scope="module")
def calibrated(study: Study) -> Calibration:
    return calibrate(load_skeleton(study.model), read_recording(study.static.recording))


@pytest.fixture(scope="module")
def fits(study: Study, calibrated: Calibration) -> list[TrialFit]:
    return [fit_trial(calibrated.skeleton, read_recording(t.recording)) for t in study.trials]


def test_the_script_writes_the_study_that_ships(study: Study, tmp_path: Path) -> None:
    make_study(tmp_path)
    for trial in (study.static, *study.trials):
        shipped, anew = (
            read_recording(trial.recording),
            read_recording(tmp_path / trial.recording.name),
        )
        assert (shipped.labels, shipped.first_frame, shipped.rate, shipped.up) == (
            anew.labels,
            anew.first_frame,
            anew.rate,
            anew.up,
        )
        np.testing.assert_allclose(shipped.positions, anew.positions, rtol=0, atol=SAME)
        np.testing.assert_array_equal(shipped.cameras, anew.cameras)
        truth, truth_anew = read_truth(trial.truth), read_truth(tmp_path / trial.truth.name)
        assert truth.units == truth_anew.units
        np.testing.assert_array_equal(truth.frame, truth_anew.frame)
        for name, values in truth.values.items():
            np.testing.assert_allclose(values, truth_anew.values[name], rtol=0, atol=SAME)
    person, person_anew = (
        read_person(study.person_truth),
        read_person(tmp_path / "truth_person.yaml"),
    )
    assert person.lengths == pytest.approx(person_anew.lengths, abs=SAME)
    assert person.person == person_anew.person
    for name, place in person.markers.items():
        assert place == pytest.approx(person_anew.markers[name], abs=SAME)


def test_truth_and_recording_are_on_one_clock(study: Study) -> None:
    for trial in (study.static, *study.trials):
        recording, truth = read_recording(trial.recording), read_truth(trial.truth)
        np.testing.assert_array_equal(recording.frame, truth.frame)
        np.testing.assert_allclose(recording.time, truth.time, rtol=0, atol=1e-12)


def test_medial_markers_are_in_the_static_alone(study: Study) -> None:
    assert set(STATIC_ONLY) <= set(read_recording(study.static.recording).labels)
    for trial in study.trials:
        assert not set(STATIC_ONLY) & set(read_recording(trial.recording).labels)


def test_the_recordings_have_gaps_and_a_stray_point_but_lose_nothing(study: Study) -> None:
    segment_of = {marker.name: marker.segment for marker in PERSON.skeleton.markers}
    for trial in study.trials:
        recording = read_recording(trial.recording)
        assert recording.up == "+Z"
        assert recording.units == "mm"
        stray = recording.labels.index(STRAY)
        seen = np.delete(recording.present, stray, axis=1)
        names = [label for label in recording.labels if label != STRAY]
        lengths = sorted(find_gaps(seen).length)
        assert len(lengths) >= 5
        assert lengths[-1] == 100
        assert all(5 <= length <= 40 for length in lengths[:-1])
        assert 0.2 < recording.present[:, stray].mean() < 0.8
        for segment in set(segment_of.values()):
            own = [i for i, name in enumerate(names) if segment_of[name] == segment]
            fewest = min(2, len(own) - 1)  # a clavicle or an ulna wears a single marker
            assert seen[:, own].sum(axis=1).min() >= fewest, segment


def test_skin_slides_most_on_the_thigh_and_not_at_all_in_the_mean_static() -> None:
    skeleton = PERSON.skeleton
    kinematics = SkeletonFunctions(skeleton).kinematics
    told = [
        {name: value for name, (value, _) in reported_values(kinematics, posture).items()}
        for posture in (posture_of(plan, skeleton) for plan in PLANS)
    ]
    assert np.abs(skin_displacements(skeleton, told[0], told[0])).max() < 0.001
    moved = np.linalg.norm(skin_displacements(skeleton, told[1], told[0]), axis=2).max(axis=0)
    by_kind = {
        kind: max(
            m for m, k in zip(moved, skeleton.markers, strict=True) if k.segment.startswith(kind)
        )
        for kind in AMPLITUDES
    }
    assert by_kind["thigh"] > by_kind["shank"] > by_kind["foot"]
    # Fiorentino et al. 2017: 3 to 54 mm over pelvis and thigh.
    assert 0.003 < by_kind["pelvis"] < 0.054
    assert 0.010 < by_kind["thigh"] < 0.054


def test_the_study_can_be_written_where_a_folder_can_be(study: Study, tmp_path: Path) -> None:
    paths = [
        study.person_truth,
        *(p for t in (study.static, *study.trials) for p in (t.recording, t.truth)),
    ]
    assert all(path.is_file() for path in paths)
    assert sum(path.stat().st_size for path in paths) < 1_500_000
    occupied = tmp_path / "occupied"
    occupied.write_text("")
    with pytest.raises(CondyleError, match="occupied: cannot be written"):
        copy_study(occupied)


def test_a_fit_that_is_the_truth_has_no_error(study: Study, fits: list[TrialFit]) -> None:
    truth = read_truth(study.trials[0].truth)
    fit = with_true_values(fits[0], study.trials[0].truth)
    for errors in compare_with_truth(fit, truth):
        assert errors.rms == pytest.approx(0.0, abs=1e-9)
        assert errors.covered == 1.0
        assert "toes" not in errors.name


def test_a_known_error_is_told_as_it_is(study: Study, fits: list[TrialFit]) -> None:
    fit = with_true_values(fits[0], study.trials[0].truth)
    values, sd = fit.values.copy(), fit.sd.copy()
    right, left = fit.column("knee_flexion_right"), fit.column("knee_flexion_left")
    values[:, right] -= np.deg2rad(2.0)
    values[:, left] += np.deg2rad(1.0)
    sd[:, [right, left]] = np.deg2rad(0.9)
    found = compare_with_truth(
        replace(fit, values=values, sd=sd), read_truth(study.trials[0].truth)
    )
    knee = next(errors for errors in found if errors.name == "knee_flexion")
    assert knee.unit == "deg"
    assert knee.rms == pytest.approx(np.sqrt(2.5))
    assert knee.bias == pytest.approx(-2.0)
    assert knee.rms_about_bias == pytest.approx(0.0, abs=1e-9)
    assert knee.covered == pytest.approx(0.5)
    assert knee.frames == 2 * len(fit.motion.time)


def test_a_whole_turn_is_no_error(study: Study, fits: list[TrialFit]) -> None:
    fit = with_true_values(fits[0], study.trials[0].truth)
    values = fit.values.copy()
    values[:, fit.column("pelvic_rotation")] += 2 * np.pi
    found = compare_with_truth(replace(fit, values=values), read_truth(study.trials[0].truth))
    assert next(e for e in found if e.name == "pelvic_rotation").rms == pytest.approx(0.0, abs=1e-9)


def test_the_person_has_the_lengths_that_the_truth_tells(study: Study) -> None:
    for length in compare_lengths(PERSON.skeleton, read_person(study.person_truth)):
        assert length.error_mm == pytest.approx(0.0, abs=1e-5)


def test_calibration_and_fit_come_near_the_truth(
    study: Study, calibrated: Calibration, fits: list[TrialFit]
) -> None:
    for length in compare_lengths(calibrated.skeleton, read_person(study.person_truth)):
        assert abs(length.error_mm) < 15, length.segment
    for trial, fit in zip(study.trials, fits, strict=True):
        assert fit.converged.all()
        assert STRAY in fit.other_labels
        assert fit.rms() < 0.020  # Hicks et al. 2015 (from memory, loose bound)
        found = {errors.name: errors for errors in compare_with_truth(fit, read_truth(trial.truth))}
        # McGinley et al. 2009: more than 5 degrees is of concern (from memory, loose bound).
        for name in ("hip_flexion", "knee_flexion", "hip_adduction", "pelvic_tilt"):
            assert found[name].rms < 5.0, name


def with_true_values(fit: TrialFit, path: Path) -> TrialFit:
    truth = read_truth(path)
    return replace(fit, values=np.column_stack([truth.values[c.name] for c in fit.columns]))
