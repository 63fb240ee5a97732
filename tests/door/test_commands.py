"""The command line as a user meets it: what it writes, what it says, how it ends."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path

import numpy as np
import pandas as pd
import pytest
from typer.testing import CliRunner, Result

from condyle.cli import app
from condyle.demo_data import copy_study
from condyle.recording import read_recording, write_c3d

Run = Callable[..., Result]


@pytest.fixture(scope="module")
def study(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("study")
    copy_study(folder)
    return folder


@pytest.fixture(scope="module")
def run() -> Run:
    runner = CliRunner()

    def call(*arguments: object) -> Result:
        return runner.invoke(app, [str(argument) for argument in arguments])

    return call


@pytest.fixture(scope="module")
def subject(study: Path, run: Run) -> Path:
    path = study / "subject.yaml"
    result = run("calibrate", "lower_limbs", study / "static.c3d", "-o", path, "--mass", 64)
    assert result.exit_code == 0, result.output
    return path


@pytest.fixture(scope="module")
def solved(study: Path, subject: Path, run: Run) -> Path:
    result = run("solve", subject, study / "reach_aside.c3d", "-o", study / "out", "--no-smooth")
    assert result.exit_code == 0, result.output
    return study / "out" / "reach_aside"


def test_coordinates_hold_what_is_promised(solved: Path, study: Path) -> None:
    table = pd.read_parquet(solved / "coordinates.parquet")
    recording = read_recording(study / "reach_aside.c3d")
    assert list(table.columns[:2]) == ["frame", "time"]
    np.testing.assert_array_equal(table["frame"], recording.frame)
    np.testing.assert_allclose(table["time"], (table["frame"] - 1) / recording.rate)
    for name in ("knee_flexion_right", "pelvis_x", "pelvic_tilt", "pelvic_rotation_sum"):
        assert {name, f"{name}.sd"} <= set(table.columns)
    assert table["knee_flexion_left.at_limit"].dtype == bool
    assert "pelvis_x.at_limit" not in table
    assert table["knee_flexion_right"].between(-20, 165).all()
    assert (table["knee_flexion_right.sd"] > 0).all()
    assert table["toes_extension_right.sd"].isna().all()


def test_the_csv_is_plain_numbers_and_agrees(solved: Path) -> None:
    table = pd.read_csv(solved / "coordinates.csv")
    assert all(np.issubdtype(kind, np.number) for kind in table.dtypes)
    whole = pd.read_parquet(solved / "coordinates.parquet")
    np.testing.assert_allclose(
        table["hip_flexion_left"], whole["hip_flexion_left"], rtol=1e-8, atol=1e-8
    )
    meanings = pd.read_csv(solved / "columns.csv")
    assert list(meanings["column"]) == list(table.columns)
    assert meanings.set_index("column").loc["knee_flexion_right", "unit"] == "deg"


def test_markers_say_whether_and_why_not(solved: Path) -> None:
    table = pd.read_parquet(solved / "markers.parquet")
    assert list(table.columns) == [
        *("frame", "time", "marker", "x", "y", "z", "fit_x", "fit_y", "fit_z"),
        *("error", "used", "why_not"),
    ]
    used = table[table["used"]]
    assert (used["why_not"] == "").all()
    away = used[["x", "y", "z"]].to_numpy() - used[["fit_x", "fit_y", "fit_z"]].to_numpy()
    np.testing.assert_allclose(np.linalg.norm(away, axis=1), used["error"], atol=1e-12)
    assert set(table[~table["used"]]["why_not"]) == {"missing", "static_only", "not_in_model"}
    assert set(table[table["why_not"] == "static_only"]["marker"]) >= {"FE_medial_right"}


def test_segments_are_unit_quaternions_continuous_in_sign(solved: Path) -> None:
    table = pd.read_parquet(solved / "segments.parquet")
    q = table[table["segment"] == "shank_left"][["qw", "qx", "qy", "qz"]].to_numpy()
    np.testing.assert_allclose(np.linalg.norm(q, axis=1), 1, atol=1e-12)
    assert q[0, 0] >= 0
    assert ((q[1:] * q[:-1]).sum(axis=1) > 0).all()


def test_the_report_names_files_versions_and_warnings(solved: Path, subject: Path) -> None:
    report = json.loads((solved / "fit.json").read_text())
    assert report["up"] == {"axis": "+Z", "how": "as the sized skeleton keeps it"}
    assert len(report["trial"]["sha256"]) == 64
    assert report["subject"]["sized"] is True
    assert {"condyle", "casadi", "numpy"} <= set(report["versions"])
    assert report["frames_not_converged"] == []
    assert set(report["coordinates_not_observed"]) == {
        "toes_extension_right",
        "toes_extension_left",
    }
    assert report["largest_projected_gradient"] < 1e-8
    assert "not a diagnosis" in report["caution"]
    assert all({"what", "do"} <= set(warning) for warning in report["warnings"])


def test_a_trial_that_also_served_to_calibrate_is_flagged(
    study: Path, subject: Path, run: Run
) -> None:
    result = run("solve", subject, study / "static.c3d", "-o", study / "self", "--json")
    warnings = json.loads(result.stdout)["trials"][0]["warnings"]
    assert any("also served to calibrate" in warning["what"] for warning in warnings)


def test_several_trials_get_a_folder_each(study: Path, subject: Path, run: Run) -> None:
    trials = [study / "step_up.c3d", study / "reach_aside.c3d"]
    result = run("solve", subject, *trials, "-o", study / "both", "--from", 2.0, "--to", 2.1)
    assert result.exit_code == 0
    assert sorted(path.name for path in (study / "both").iterdir()) == ["reach_aside", "step_up"]
    assert len(pd.read_parquet(study / "both/step_up/coordinates.parquet")) == 11


def test_a_subject_file_edited_by_hand_still_means_what_it_says(
    study: Path, subject: Path, run: Run
) -> None:
    from condyle.model import load_skeleton

    skeleton = load_skeleton(subject)
    text = subject.read_text()
    first = skeleton.sizes["thigh_right"].factors[1]
    assert f"{first:.6f}".rstrip("0") in text
    edited = study / "edited.yaml"
    edited.write_text(text.replace(f"{first:.6f}".rstrip("0"), "1.25"))
    assert load_skeleton(edited).sizes["thigh_right"].factors[1] == 1.25


def test_pictures_are_drawn_beside_the_results(solved: Path, run: Run) -> None:
    result = run("picture", solved.parent, "--json")
    assert result.exit_code == 0, result.output
    pictures = [Path(path) for path in json.loads(result.stdout)["pictures"]]
    assert {path.name for path in pictures} == {"worst.png", "best.png", "contact_sheet.png"}
    assert all(path.stat().st_size > 20_000 for path in pictures)


def test_check_tells_what_no_marker_sees(run: Run) -> None:
    result = run("check", "lower_limbs")
    assert result.exit_code == 0
    assert (
        "not determined by any marker: toes_extension_right, toes_extension_left" in result.stdout
    )


def test_recording_answers_in_json(study: Path, run: Run) -> None:
    answer = json.loads(run("recording", study / "step_up.c3d", "--json").stdout)
    assert answer["rate"] == 100
    assert answer["up"] == "+Z"


# Bad input: a clear line (what, where, what to do), status 2, nothing written.


def bad_file(folder: Path, study: Path, kind: str) -> Path:
    path = folder / f"{kind}.c3d"
    whole = (study / "step_up.c3d").read_bytes()
    if kind == "not_a_c3d":
        path.write_text("time,x,y\n0,1,2\n")
    elif kind == "empty":
        path.write_bytes(b"")
    elif kind == "truncated":
        path.write_bytes(whole[: len(whole) // 2])
    elif kind == "header_only":
        path.write_bytes(whole[:512])
    return path


@pytest.mark.parametrize("kind", ["not_a_c3d", "empty", "truncated", "header_only", "absent"])
def test_a_bad_recording_is_named_and_nothing_is_written(
    kind: str, study: Path, subject: Path, run: Run, tmp_path: Path
) -> None:
    path = bad_file(tmp_path, study, kind)
    for arguments in (
        ("solve", subject, path, "-o", tmp_path / "out"),
        ("calibrate", "lower_limbs", path, "-o", tmp_path / "s.yaml"),
        ("recording", path),
    ):
        result = run(*arguments)
        assert result.exit_code == 2
        assert path.name in result.stderr
        assert "Traceback" not in result.output
    assert not (tmp_path / "out").exists()
    assert not (tmp_path / "s.yaml").exists()


def test_one_bad_trial_among_good_ones_stops_before_anything_is_fitted(
    study: Path, subject: Path, run: Run, tmp_path: Path
) -> None:
    bad = bad_file(tmp_path, study, "truncated")
    result = run("solve", subject, study / "step_up.c3d", bad, "-o", tmp_path / "out")
    assert result.exit_code == 2
    assert not (tmp_path / "out").exists()


def rewritten(study: Path, target: Path, **changes: object) -> Path:
    recording = read_recording(study / "static.c3d")
    write_c3d(target, replace(recording, **changes))
    return target


def test_no_common_label_gets_a_draft_map(study: Path, run: Run, tmp_path: Path) -> None:
    static = read_recording(study / "static.c3d")
    labels = tuple(f"spot {i}" for i in range(len(static.labels)))
    path = rewritten(study, tmp_path / "other.c3d", labels=labels)
    result = run("calibrate", "lower_limbs", path, "-o", tmp_path / "s.yaml")
    assert result.exit_code == 2
    assert "only 0 of the 32 markers of lower limbs have a label here" in result.stderr
    draft = tmp_path / "s_labels_draft.yaml"
    assert str(draft) in result.stderr
    again = run("calibrate", "lower_limbs", path, "-o", tmp_path / "s.yaml", "--labels", draft)
    assert again.exit_code in (0, 1), again.output
    truth = dict(zip(labels, static.labels, strict=True))
    guessed = [line.split(": ") for line in draft.read_text().splitlines()[1:]]
    right = sum(truth[label.strip("'\"")] == marker for marker, label in guessed)
    assert right >= 28


def test_exchanged_sides_are_refused(study: Path, run: Run, tmp_path: Path) -> None:
    static = read_recording(study / "static.c3d")
    other = {"right": "left", "left": "right"}
    swapped = tuple(
        f"{stem}_{other[side]}" if side in other else label
        for label in static.labels
        for stem, _, side in [label.rpartition("_")]
    )
    path = rewritten(study, tmp_path / "swapped.c3d", labels=swapped)
    result = run("calibrate", "lower_limbs", path, "-o", tmp_path / "s.yaml")
    assert result.exit_code == 2
    assert "left and right labels look exchanged" in result.stderr


@pytest.mark.parametrize("factor", [1000.0, 0.001])
def test_units_wrong_by_a_thousand_are_refused(
    factor: float, study: Path, subject: Path, run: Run, tmp_path: Path
) -> None:
    static = read_recording(study / "static.c3d")
    path = rewritten(study, tmp_path / "unit.c3d", positions=static.positions * factor)
    for arguments in (
        ("calibrate", "lower_limbs", path, "-o", tmp_path / "s.yaml"),
        ("solve", subject, path, "-o", tmp_path / "out"),
    ):
        result = run(*arguments)
        assert result.exit_code == 2
        assert "times the size" in result.stderr


def test_a_static_that_never_stands_still_is_refused(study: Path, run: Run, tmp_path: Path) -> None:
    trial = read_recording(study / "step_up.c3d")
    moving = (trial.time > 2.0) & (trial.time < 3.5)
    path = tmp_path / "moving.c3d"
    rows = np.flatnonzero(moving)
    part = slice(rows[0], rows[-1] + 1)
    write_c3d(
        path,
        replace(
            trial,
            positions=trial.positions[part],
            residuals=trial.residuals[part],
            cameras=trial.cameras[part],
        ),
    )
    result = run("calibrate", "lower_limbs", path, "-o", tmp_path / "s.yaml")
    assert result.exit_code == 2
    assert "never stands still" in result.stderr


def test_too_few_markers_are_refused(study: Path, subject: Path, run: Run, tmp_path: Path) -> None:
    trial = read_recording(study / "step_up.c3d")
    positions = np.full_like(trial.positions, np.nan)
    positions[:, 0] = trial.positions[:, 0]
    path = tmp_path / "one.c3d"
    write_c3d(path, replace(trial, positions=positions))
    result = run("solve", subject, path, "-o", tmp_path / "out")
    assert result.exit_code == 2
    assert "nothing can be determined" in result.stderr


def test_every_mistake_of_a_model_comes_in_one_report(run: Run, tmp_path: Path) -> None:
    model = tmp_path / "knee.yaml"
    model.write_text(
        "condyle: 1\nextends: lower_limbs\ncoordinates:\n  knee_flexon_right: {range: [0, 140]}\n"
        "markers:\n  spot: {segment: tigh_right}\n"
    )
    result = run("check", model)
    assert result.exit_code == 2
    assert "knee.yaml:4: no coordinate is called 'knee_flexon_right'." in result.stderr
    assert "Did you mean 'knee_flexion_right'?" in result.stderr
    assert "knee.yaml:6: no segment is called 'tigh_right'." in result.stderr


def test_an_output_that_cannot_be_written_is_named(
    study: Path, subject: Path, run: Run, tmp_path: Path
) -> None:
    (tmp_path / "file").write_text("in the way")
    result = run("solve", subject, study / "step_up.c3d", "-o", tmp_path / "file" / "out")
    assert result.exit_code == 2
    assert "cannot be written" in result.stderr
    result = run("calibrate", "lower_limbs", study / "static.c3d", "-o", tmp_path / "file" / "s")
    assert result.exit_code == 2


def test_a_full_disk_is_said_and_leaves_nothing_half_written(
    study: Path, subject: Path, run: Run, tmp_path: Path
) -> None:
    if not Path("/dev/full").exists():
        pytest.skip("no /dev/full on this system")
    out = tmp_path / "out"
    code = (
        "import resource, sys; resource.setrlimit(resource.RLIMIT_FSIZE, (20000, 20000)); "
        "import signal; signal.signal(signal.SIGXFSZ, signal.SIG_IGN); "
        "from condyle.cli import main; main()"
    )
    done = subprocess.run(
        [sys.executable, "-c", code, "solve", subject, study / "step_up.c3d", "-o", out],
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 2, done.stderr
    assert "cannot be written" in done.stderr
    assert "Traceback" not in done.stderr
    assert not [path for path in out.rglob("*") if path.is_file()]


def test_an_interrupt_ends_with_130(study: Path, subject: Path, tmp_path: Path) -> None:
    code = (
        "import condyle.pipeline as p\n"
        "def stop(*a, **k): raise KeyboardInterrupt\n"
        "p.fit_trial = stop\n"
        "from condyle.cli import main; main()"
    )
    done = subprocess.run(
        [sys.executable, "-c", code, "solve", subject, study / "step_up.c3d", "-o", tmp_path / "o"],
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 130
    assert "stopped" in done.stderr
    assert "Traceback" not in done.stderr


def test_a_defect_of_ours_goes_into_a_log(study: Path, subject: Path, tmp_path: Path) -> None:
    code = (
        "import condyle.pipeline as p\n"
        "def broken(*a, **k): raise RuntimeError('made on purpose')\n"
        "p.fit_trial = broken\n"
        "from condyle.cli import main; main()"
    )
    done = subprocess.run(
        [sys.executable, "-c", code, "solve", subject, study / "step_up.c3d", "-o", tmp_path / "o"],
        capture_output=True,
        text=True,
        check=False,
        env={**os.environ, "TMPDIR": str(tmp_path)},
    )
    assert done.returncode == 70
    assert "Traceback" not in done.stderr
    (log,) = tmp_path.glob("condyle-*.log")
    assert "made on purpose" in log.read_text()


def test_wrong_words_end_with_2(run: Run) -> None:
    assert run("solve").exit_code == 2
    assert run("dance").exit_code == 2
    assert run("solve", "lower_limbs", "x.c3d", "-o", "out", "--sideways").exit_code == 2


@pytest.mark.parametrize(
    "command", ["demo", "check", "recording", "calibrate", "solve", "picture", "movie"]
)
def test_every_command_has_help_with_an_example(command: str, run: Run) -> None:
    result = run(command, "--help")
    assert result.exit_code == 0
    assert f"Example: condyle {command}" in " ".join(result.stdout.split())


def test_a_solved_trial_has_rates_and_no_smooth_has_none(
    study: Path, subject: Path, run: Run, tmp_path: Path
) -> None:
    trial = study / "step_up.c3d"
    assert run("solve", subject, trial, "-o", tmp_path / "as_one", "--to", 1.0).exit_code in (0, 1)
    alone = run("solve", subject, trial, "-o", tmp_path / "alone", "--to", 1.0, "--no-smooth")
    assert alone.exit_code in (0, 1)
    one, each = (
        pd.read_parquet(tmp_path / name / "step_up/coordinates.parquet")
        for name in ("as_one", "alone")
    )
    for suffix in ("rate", "rate.sd", "accel", "accel.sd"):
        assert f"knee_flexion_right.{suffix}" in one
        assert f"knee_flexion_right.{suffix}" not in each
    time, angle = one["time"], one["knee_flexion_right"]
    inner = slice(1, -1)  # numpy's own ends are of first order
    np.testing.assert_allclose(
        one["knee_flexion_right.rate"][inner], np.gradient(angle, time)[inner], atol=4.0
    )
    meanings = pd.read_csv(tmp_path / "as_one/step_up/columns.csv").set_index("column")
    assert set(one.columns) <= set(meanings.index)
    assert meanings.loc["knee_flexion_right.rate", "unit"] == "deg/s"
    segments = pd.read_parquet(tmp_path / "as_one/step_up/segments.parquet")
    assert {"vx", "vy", "vz", "wx", "wy", "wz"} <= set(segments.columns)
    report = json.loads((tmp_path / "as_one/step_up/fit.json").read_text())
    assert report["smoothed"]
    assert report["smoothing"]["order"] in (3, 4)
    parts = report["uncertainty"]["parts"]["knee_flexion_right"]
    told = parts["white_noise"] + parts["markers_persisting"] + parts["calibration"]
    assert told == pytest.approx(1.0, abs=0.1)
    assert report["backend"]["name"] in ("compiled", "replay", "casadi")
    lonely = json.loads((tmp_path / "alone/step_up/fit.json").read_text())
    assert not lonely["smoothed"]
    assert lonely["smoothing"] is None


def test_an_unknown_loss_is_refused_and_a_known_one_is_kept(
    study: Path, subject: Path, run: Run, tmp_path: Path
) -> None:
    trial = study / "step_up.c3d"
    refused = run("solve", subject, trial, "-o", tmp_path / "x", "--loss", "absolute")
    assert refused.exit_code == 2
    assert "squares, huber, geman_mcclure" in refused.stderr
    assert not (tmp_path / "x").exists()
    done = run("solve", subject, trial, "-o", tmp_path / "y", "--to", 0.4, "--loss", "huber")
    assert done.exit_code in (0, 1)
    assert json.loads((tmp_path / "y/step_up/fit.json").read_text())["loss"] == "huber"


def test_covariances_are_written_for_those_who_ask(
    study: Path, subject: Path, run: Run, tmp_path: Path
) -> None:
    trial = study / "step_up.c3d"
    out = tmp_path / "out"
    result = run("solve", subject, trial, "-o", out, "--to", 0.5, "--covariance")
    assert result.exit_code in (0, 1), result.output
    table = pd.read_parquet(out / "step_up/coordinates.parquet")
    with np.load(out / "step_up/covariance.npz") as file:
        names, covariance = file["names"].tolist(), file["covariance"]
    knee = names.index("knee_flexion_right")
    np.testing.assert_allclose(
        covariance[:, knee, knee], table["knee_flexion_right.sd"] ** 2, rtol=1e-4
    )
    assert not list(study.glob("out/**/covariance.npz"))
