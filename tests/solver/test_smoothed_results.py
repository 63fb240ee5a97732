"""What a trial estimated as a whole leaves in its files, on a body whose movement is known."""

from __future__ import annotations

import json
from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from condyle.model.growth import sized_numbers
from condyle.model.skeleton import Skeleton
from condyle.recording.recording import Recording
from condyle.solver.frame_problem import SkeletonFunctions
from condyle.solver.posture import Posture, quaternions_of
from condyle.solver.result_files import save_trial
from condyle.solver.trial_fit import fit_trial

FloatArray = NDArray[np.float64]
RATE, FRAMES = 100.0, 600
SPIN = np.array([0.0, 2.0, 0.0])  # rad/s, laboratory axes
GONE = slice(200, 500)

BODY = """\
condyle: 1
name: a body with a flap
segments: {body: {}, flap: {}}
joints:
  root:
    from: laboratory
    to: body
    floating: {position: [px, py, pz], angles: {sequence: [y, x, -z], names: [turn, side, tilt]}}
  hinge:
    from: body
    to: flap
    at: [0.1, 0.3, 0]
    moves: [{rotate: z, coordinate: bend, range: [-20, 150], rest: 10}]
markers:
  b1: {segment: body, at: [0.12, 0.1, 0.05]}
  b2: {segment: body, at: [-0.1, 0.3, 0.02]}
  b3: {segment: body, at: [0.02, 0.5, -0.12]}
  b4: {segment: body, at: [0.05, 0.0, 0.15]}
  f1: {segment: flap, at: [0.2, 0.05, 0.02]}
  f2: {segment: flap, at: [0.3, -0.03, -0.06]}
"""


def bend(time: FloatArray) -> FloatArray:
    """rad"""
    return np.asarray(1.0 + 0.6 * np.sin(5 * time) + 0.1 * np.sin(13 * time))


@pytest.fixture(scope="module")
def skeleton(skeleton_of) -> Skeleton:
    made: Skeleton = skeleton_of(BODY)
    return made


@pytest.fixture(scope="module")
def seen_throughout(skeleton: Skeleton, recording_of) -> Recording:
    """It drifts along X and spins about the laboratory's Y."""
    functions = SkeletonFunctions(skeleton)
    time = np.arange(FRAMES) / RATE
    turns = Rotation.from_rotvec(time[:, None] * SPIN) * Rotation.from_rotvec([0.2, 0, 0.1])
    scalars = np.column_stack([0.5 * time, 0 * time, 0 * time, bend(time)])
    posture = Posture(scalars, quaternions_of(turns)[:, None])
    places = functions.marker_positions(posture, sized_numbers(skeleton, np.eye(3)))
    places = places + np.random.default_rng(1).normal(0, 0.0005, places.shape)
    made: Recording = recording_of(skeleton.marker_names, places, rate=RATE)
    return made


@pytest.fixture(scope="module")
def recording(seen_throughout: Recording) -> Recording:
    """Its flap is out of sight for three seconds."""
    places = seen_throughout.positions.copy()
    places[GONE, 4:] = np.nan
    return replace(seen_throughout, positions=places)


def saved(skeleton: Skeleton, recording: Recording, folder: Path, *, smooth: bool) -> Path:
    fit = fit_trial(skeleton, recording, up="Y", smooth=smooth)
    save_trial(fit, skeleton, folder, findings=[], origin={})
    return folder


@pytest.fixture(scope="module")
def smoothed(
    skeleton: Skeleton, recording: Recording, tmp_path_factory: pytest.TempPathFactory
) -> Path:
    return saved(skeleton, recording, tmp_path_factory.mktemp("out") / "as_one", smooth=True)


@pytest.fixture(scope="module")
def alone(
    skeleton: Skeleton, recording: Recording, tmp_path_factory: pytest.TempPathFactory
) -> Path:
    return saved(skeleton, recording, tmp_path_factory.mktemp("out") / "alone", smooth=False)


def test_every_number_has_rates_with_sds_in_degrees_and_metres(smoothed: Path) -> None:
    table = pd.read_parquet(smoothed / "coordinates.parquet")
    for name in ("px", "py", "pz", "turn", "side", "tilt", "turn_sum", "bend"):
        for suffix in ("rate", "rate.sd", "accel", "accel.sd"):
            assert table[f"{name}.{suffix}"].notna().any(), (name, suffix)
    time, inner = table["time"].to_numpy(), slice(5, 190)
    true = np.degrees(3.0 * np.cos(5 * time) + 1.3 * np.cos(13 * time))
    wrong = (table["bend.rate"] - true)[inner]
    assert np.abs(wrong).max() < 10
    assert (np.abs(wrong) < 4 * table["bend.rate.sd"][inner]).all()
    assert table["turn.rate"].mean() == pytest.approx(np.degrees(2.0), rel=0.01)
    assert table["px.rate"].mean() == pytest.approx(0.5, rel=0.01)


def test_where_it_is_not_told_and_two_frames_beside_it_has_no_rate(smoothed: Path) -> None:
    """Five frames tell a rate; at rest in a gap they would tell a jump."""
    table = pd.read_parquet(smoothed / "coordinates.parquet")
    assert table["bend.sd"].isna()[GONE].all()
    np.testing.assert_allclose(table["bend"][GONE], 10)
    without = np.zeros(FRAMES, dtype=bool)
    without[GONE.start - 2 : GONE.stop + 2] = True
    for suffix in ("rate", "rate.sd", "accel", "accel.sd"):
        np.testing.assert_array_equal(table[f"bend.{suffix}"].isna(), without)
        assert table[f"tilt.{suffix}"].notna().all()


def test_a_gap_does_not_make_other_numbers_doubtful(
    skeleton: Skeleton, seen_throughout: Recording, smoothed: Path, tmp_path: Path
) -> None:
    """A jump to rest is no movement by which an error could be thought to move."""
    folder = saved(skeleton, seen_throughout, tmp_path / "whole", smooth=True)
    with_gap, whole = (pd.read_parquet(one / "coordinates.parquet") for one in (smoothed, folder))
    for name in ("turn.rate.sd", "turn.accel.sd", "bend.accel.sd"):
        assert with_gap[name][100] == pytest.approx(whole[name][100], rel=0.3)


def test_segments_have_velocities_in_laboratory_axes(smoothed: Path) -> None:
    table = pd.read_parquet(smoothed / "segments.parquet")
    body = table[table["segment"] == "body"]
    np.testing.assert_allclose(
        body[["wx", "wy", "wz"]], np.tile(np.degrees(SPIN), (FRAMES, 1)), atol=1.5
    )
    np.testing.assert_allclose(
        body[["vx", "vy", "vz"]], np.tile([0.5, 0, 0], (FRAMES, 1)), atol=0.01
    )
    flap = table[table["segment"] == "flap"]
    jumps = np.zeros(FRAMES, dtype=bool)
    jumps[GONE.start - 2 : GONE.start + 2] = True
    jumps[GONE.stop - 2 : GONE.stop + 2] = True
    np.testing.assert_array_equal(flap["wz"].isna(), jumps)


def test_each_column_has_a_meaning_and_a_unit(smoothed: Path) -> None:
    table = pd.read_parquet(smoothed / "coordinates.parquet")
    meanings = pd.read_csv(smoothed / "columns.csv")
    assert list(meanings["column"]) == list(table.columns)
    assert meanings[["unit", "meaning"]].notna().all().all()
    units = meanings.set_index("column")["unit"]
    assert units["bend.rate"] == units["turn.rate.sd"] == "deg/s"
    assert units["px.accel"] == units["px.accel.sd"] == "m/s2"


def test_the_report_tells_how_it_was_smoothed(smoothed: Path, alone: Path) -> None:
    told = json.loads((smoothed / "fit.json").read_text())
    assert told["smoothing"]["order"] in (3, 4)
    assert told["smoothing"]["white_noise"] == pytest.approx(0.0005, rel=0.3)
    assert told["smoothing"]["frames_bridged"] == {}
    assert told["coordinates_not_observed"] == {"bend": GONE.stop - GONE.start}
    assert told["frames_not_converged"] == []
    assert json.loads((alone / "fit.json").read_text())["smoothing"] is None


def test_a_short_gap_is_reported_as_bridged(
    skeleton: Skeleton, recording: Recording, recording_of, tmp_path: Path
) -> None:
    places = recording.positions[:180].copy()
    places[90:105, 4:] = np.nan
    short = recording_of(skeleton.marker_names, places, rate=RATE)
    folder = saved(skeleton, short, tmp_path / "short", smooth=True)
    told = json.loads((folder / "fit.json").read_text())
    assert told["smoothing"]["frames_bridged"] == {"bend": 15}
    assert told["coordinates_not_observed"] == {}
    markers = pd.read_parquet(folder / "markers.parquet")
    unseen = markers[(markers["marker"] == "f1") & markers["frame"].between(91, 105)]
    assert unseen["x"].isna().all()  # never written as measured
    assert (unseen["why_not"] == "missing").all()


def test_frames_by_themselves_have_no_rates(alone: Path) -> None:
    table = pd.read_parquet(alone / "coordinates.parquet")
    assert not [c for c in table.columns if "rate" in c or "accel" in c]
    segments = pd.read_parquet(alone / "segments.parquet")
    assert not {"vx", "vy", "vz", "wx", "wy", "wz"} & set(segments.columns)
    assert not pd.read_csv(alone / "columns.csv")["column"].str.contains("rate|accel").any()


@pytest.mark.parametrize("smooth", [True, False])
def test_covariances_on_request_hold_the_sds_and_what_joins_the_numbers(
    skeleton: Skeleton, recording: Recording, tmp_path: Path, *, smooth: bool
) -> None:
    fit = fit_trial(skeleton, recording, up="Y", smooth=smooth, covariance=True)
    save_trial(fit, skeleton, tmp_path / "out", findings=[], origin={})
    table = pd.read_parquet(tmp_path / "out" / "coordinates.parquet")
    with np.load(tmp_path / "out" / "covariance.npz") as file:
        frame, names, units, covariance = (
            file[key] for key in ("frame", "names", "units", "covariance")
        )
    assert covariance.dtype == np.float32
    assert covariance.shape == (FRAMES, len(names), len(names))
    np.testing.assert_array_equal(frame, table["frame"])
    assert dict(zip(names, units, strict=True))["px"] == "m"
    assert dict(zip(names, units, strict=True))["bend"] == "deg"
    for i, name in enumerate(names):
        variance = table[f"{name}.sd"].to_numpy() ** 2
        np.testing.assert_allclose(covariance[:, i, i], variance, rtol=1e-4)  # NaN where NaN
    np.testing.assert_allclose(covariance, np.swapaxes(covariance, 1, 2), rtol=1e-3, atol=1e-6)
    told = np.isfinite(covariance[100]).all(axis=0)
    assert np.linalg.eigvalsh(covariance[100][np.ix_(told, told)].astype(float)).min() > -1e-6
    bend = list(names).index("bend")
    assert np.isnan(covariance[350, bend]).all() == np.isnan(table["bend.sd"][350])
    # The flap's angle leans on the body's: one turned too far, the other not enough.
    assert np.abs(np.delete(covariance[100, bend], bend)).max() > 0.01 * covariance[100, bend, bend]


def test_nobody_who_does_not_ask_gets_covariances(smoothed: Path) -> None:
    assert not (smoothed / "covariance.npz").exists()
