"""`condyle check` beyond the tree: the placement sheet, the picture, where angles are singular."""

from __future__ import annotations

import json
import re
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest
from PIL import Image
from typer.testing import CliRunner, Result

import condyle
from condyle.cli import app
from condyle.model import load_skeleton
from condyle.placement_sheet import PAPER_WIDTH
from condyle.viz import offscreen

Run = Callable[..., Result]

ARM = """
condyle: 1
name: arm
segments: {trunk: {}, arm: {landmarks: {elbow: [0, -0.3, 0]}}}
joints:
  ground: {from: laboratory, to: trunk, fixed: true}
  shoulder:
    from: trunk
    to: arm
    spherical: {angles: {sequence: [y, -x, y], names: [plane, elevation, axial]}}
markers:
  elbow: {segment: arm, at: elbow, about: outer side of the elbow}
  wrist: {segment: arm, at: [0, -0.55, 0.02], placed_within: 0.008}
  stick: {segment: arm, at: [0.1, -0.4, 0]}
  later: {segment: arm}
"""


@pytest.fixture
def run() -> Run:
    runner = CliRunner()
    return lambda *arguments: runner.invoke(app, [str(argument) for argument in arguments])


@pytest.fixture
def arm(tmp_path: Path) -> Path:
    path = tmp_path / "arm.yaml"
    path.write_text(ARM)
    return path


def test_the_print_tells_where_angles_cannot_be_told_apart(run: Run, arm: Path) -> None:
    result = run("check", arm)
    assert result.exit_code == 0, result.output
    assert (
        "plane and axial cannot be told apart within 5 deg of elevation 0 or 180; "
        "read plane_sum there" in result.stdout
    )
    (region,) = json.loads(run("check", arm, "--json").stdout)["singular"]
    assert region["joint"] == "shoulder"
    assert (region["first"], region["third"], region["middle"]) == ("plane", "axial", "elevation")
    assert region["at"] == [0.0, 180.0]
    assert region["within"] == 5.0
    assert region["stays_told"] == "plane_sum"


def test_the_placement_sheet_fits_on_paper_and_has_every_marker(run: Run) -> None:
    result = run("check", "lower_limbs", "--marker-list")
    assert result.exit_code == 0, result.output
    lines = result.stdout.splitlines()
    assert max(map(len, lines)) <= PAPER_WIDTH
    skeleton = load_skeleton("lower_limbs")
    first_words = [line.split()[0] for line in lines if line]
    assert set(skeleton.marker_names) <= set(first_words)
    words = " ".join(result.stdout.split())
    assert "front upper corner of the pelvis" in words
    assert "not a diagnosis" in words


def test_the_sheet_says_what_it_knows_of_each_place(run: Run, arm: Path) -> None:
    lines = run("check", arm, "--marker-list").stdout.splitlines()
    entry = {line.split()[0]: line for line in lines if line and not line.startswith(" ")}
    assert "outer side of the elbow" in entry["elbow"]
    assert "10 mm" in entry["elbow"]
    assert "technical" in entry["wrist"]
    assert "8 mm" in entry["wrist"]
    assert "place from the static" in entry["later"]


def test_the_json_of_the_sheet_is_complete(run: Run, arm: Path) -> None:
    answer = json.loads(run("check", arm, "--marker-list", "--json").stdout)
    sheet = {one["marker"]: one for one in answer["marker_list"]}
    assert list(sheet) == ["elbow", "wrist", "stick", "later"]
    elbow = sheet["elbow"]
    assert elbow["segment"] == "arm"
    assert elbow["landmark"] == "elbow"
    assert elbow["about"] == "outer side of the elbow"
    assert elbow["placed_within"] == 0.01
    assert elbow["takes_part"]
    assert {move["name"] for move in elbow["moves"]} == {"plane", "elevation", "axial", "plane_sum"}
    rates = [move["rate"] for move in elbow["moves"]]
    assert rates == sorted(rates, reverse=True)
    assert all(move["unit"] == "deg" and move["along"] in "xyz" for move in elbow["moves"])
    assert not sheet["later"]["takes_part"]
    assert sheet["later"]["moves"] == []
    assert json.loads(run("check", arm, "--json").stdout)["marker_list"] is None


def test_a_picture_of_a_model_is_written_and_named(run: Run, arm: Path, tmp_path: Path) -> None:
    path, other = tmp_path / "arm.png", tmp_path / "arm.jpg"
    result = run("check", arm, "--picture", path)
    assert result.exit_code == 0, result.output
    assert str(path) in result.stdout
    answer = json.loads(run("check", arm, "--picture", other, "--json").stdout)
    assert answer["picture"] == str(other)
    for written in (path, other):
        with Image.open(written) as image:
            assert np.asarray(image.convert("L")).std() > 10


def test_a_picture_of_no_known_kind_is_refused_before_drawing(
    run: Run, arm: Path, tmp_path: Path
) -> None:
    result = run("check", arm, "--picture", tmp_path / "arm.doc")
    assert result.exit_code == 2
    assert "'.doc' is not a kind of picture" in result.stderr
    assert not (tmp_path / "arm.doc").exists()


def test_without_graphics_one_line_is_said_and_nothing_written(
    run: Run, arm: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    offscreen.open_pyvista.cache_clear()
    monkeypatch.setattr(offscreen, "can_draw", lambda window: False)
    result = run("check", arm, "--picture", tmp_path / "arm.png")
    monkeypatch.undo()
    offscreen.open_pyvista.cache_clear()
    assert result.exit_code == 2
    assert len(result.stderr.strip().splitlines()) == 1
    assert "no picture can be drawn" in result.stderr
    assert not (tmp_path / "arm.png").exists()


def test_the_door_takes_both_as_arguments(arm: Path, tmp_path: Path) -> None:
    report = condyle.check(arm, picture=tmp_path / "arm.png", marker_list=True)
    assert report.picture == str(tmp_path / "arm.png")
    assert report.marker_list is not None
    assert [one.marker for one in report.marker_list] == ["elbow", "wrist", "stick", "later"]


def test_each_line_that_the_page_shows_is_a_line_that_check_prints(run: Run) -> None:
    page = (Path(__file__).resolve().parents[2] / "docs" / "check.md").read_text()
    shown = [
        line
        for block in re.findall(r"```\n(.*?)```", page, flags=re.DOTALL)
        for line in block.splitlines()
    ]
    commands = [line for line in shown if line.startswith("condyle ")]
    assert commands == [
        "condyle check lower_limbs",
        "condyle check lower_limbs --picture check_lower_limbs.png",
        "condyle check lower_limbs --marker-list",
    ]
    said = run("check", "lower_limbs").stdout + run("check", "lower_limbs", "--marker-list").stdout
    for line in shown:
        assert line in commands or line in said.splitlines(), line
