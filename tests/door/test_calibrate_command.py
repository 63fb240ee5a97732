"""`condyle calibrate` with trials of movement and what the person told, from files to files."""

from __future__ import annotations

import json
from pathlib import Path

import numpy as np
import pytest
from typer.testing import CliRunner

import condyle
from condyle.cli import app
from condyle.demo_data import copy_study
from condyle.model.growth import sized_lengths


@pytest.fixture(scope="module")
def study(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("study")
    copy_study(folder)
    return folder


@pytest.fixture(scope="module")
def sized(study: Path) -> Path:
    subject = study / "subject.yaml"
    (study / "lengths.yaml").write_text("shank_right: 0.40\n")
    given = ["--stature", "1.74", "--mass", "68", "--lengths", str(study / "lengths.yaml")]
    given += ["--body-table", "de_leva_female", "--marker-diameter", "0.012", "--json"]
    trials = [str(study / "static.c3d"), str(study / "step_up.c3d")]
    told = CliRunner().invoke(
        app, ["calibrate", "lower_limbs", *trials, "-o", str(subject), *given]
    )
    assert told.exit_code in (0, 1), told.output
    (study / "answer.json").write_text(told.stdout)
    return subject


def test_movement_frees_joints_and_the_file_keeps_them(study: Path, sized: Path) -> None:
    answer = json.loads((study / "answer.json").read_text())
    assert answer["movement"]["trials"] == ["step_up"]
    assert 10 <= answer["movement"]["frames"] <= answer["movement"]["of_all"]
    skeleton = condyle.load_skeleton(sized)
    hip = next(joint for joint in skeleton.joints if joint.name == "hip_right")
    assert hip.placed is not None
    assert hip.placed_sd is not None
    assert 0.001 < max(hip.placed_sd) < 0.008
    np.testing.assert_allclose(hip.placed, answer["joints"]["hip_right"]["placed"], atol=1e-6)
    better = {number["name"]: number for number in answer["known_better"]}
    assert all(0 < n["after"] <= n["before"] * 1.0001 for n in better.values())
    assert (
        better["centre of hip_right, z"]["after"] < 0.9 * better["centre of hip_right, z"]["before"]
    )


def test_what_was_told_is_kept_for_the_record(sized: Path) -> None:
    kept = condyle.load_skeleton(sized).calibration
    assert kept["body_table"] == "de_leva_female"
    assert kept["marker_diameter"] == 0.012
    assert kept["lengths"] == {"shank_right": 0.40}
    thigh = next(s for s in condyle.load_skeleton(sized).segments if s.name == "thigh_right")
    assert thigh.mass_share == pytest.approx(0.1478)  # de Leva 1996, table 4, female


def test_a_trial_that_also_calibrated_is_flagged(study: Path, sized: Path) -> None:
    solved = condyle.solve(sized, [study / "step_up.c3d"], study / "results", smooth=False)
    assert any("also served to calibrate" in finding.what for finding in solved[0].findings)


def test_a_sized_file_edited_by_hand_means_what_it_says(study: Path, sized: Path) -> None:
    """A hip moved by a centimetre moves by a centimetre, and a thigh made longer is longer."""
    text = sized.read_text()
    before = condyle.load_skeleton(sized)
    hip = next(joint for joint in before.joints if joint.name == "hip_right")
    assert hip.placed is not None
    written = ", ".join(f"{x:g}" for x in (round(v, 6) for v in hip.placed))
    assert text.count(f"placed: [{written}]") == 1
    moved = [hip.placed[0], hip.placed[1] + 0.01, hip.placed[2]]
    factors = before.sizes["thigh_right"].factors
    old_size = f"[{factors[0]:g}, {factors[1]:g}, {factors[2]:g}]"
    assert text.count(f"factors: {old_size}") == 2  # thigh_right and thigh_left share theirs
    new_size = f"[{factors[0]:g}, 1.1, {factors[2]:g}]"
    text = text.replace(f"placed: [{written}]", f"placed: {moved}")
    text = text.replace(f"factors: {old_size}", f"factors: {new_size}", 1)
    edited = study / "edited.yaml"
    edited.write_text(text)
    after = condyle.load_skeleton(edited)
    other = next(joint for joint in after.joints if joint.name == "hip_right")
    assert other.placed == pytest.approx(moved)
    longer = sized_lengths(after)["thigh_right"] / sized_lengths(before)["thigh_right"]
    assert longer == pytest.approx(1.1 / factors[1])
    solved = condyle.solve(edited, [study / "step_up.c3d"], study / "edited_results", smooth=False)
    assert np.isfinite(solved[0].fit.rms())


def test_an_unknown_table_or_segment_is_refused_and_nothing_is_written(
    study: Path, tmp_path: Path
) -> None:
    static = str(study / "static.c3d")
    (tmp_path / "lengths.yaml").write_text("tigh_right: 0.4\n")
    for more, says in (
        (["--body-table", "mine"], "de_leva_male"),
        (["--lengths", str(tmp_path / "lengths.yaml")], "tigh_right"),
        (["--marker-diameter", "14"], "metres"),
    ):
        output = tmp_path / "subject.yaml"
        told = CliRunner().invoke(
            app, ["calibrate", "lower_limbs", static, "-o", str(output), *more]
        )
        assert told.exit_code == 2
        assert says in told.stderr
        assert not output.exists()
