"""`condyle picture` and `condyle movie` as a user meets them: what is written, what is refused, and how."""

from __future__ import annotations

import json
import shutil
import subprocess
import sys
from collections.abc import Callable, Iterator
from pathlib import Path

import imageio_ffmpeg
import numpy as np
import pandas as pd
import pytest
from PIL import Image
from typer.testing import CliRunner, Result

from condyle.cli import app
from condyle.demo_data import copy_study
from condyle.viz import offscreen

Run = Callable[..., Result]


@pytest.fixture(scope="module")
def run() -> Run:
    runner = CliRunner()

    def call(*arguments: object) -> Result:
        return runner.invoke(app, [str(argument) for argument in arguments])

    return call


@pytest.fixture(scope="module")
def study(tmp_path_factory: pytest.TempPathFactory, run: Run) -> Path:
    """Half a second of two trials of the demo's person, legs only."""
    folder = tmp_path_factory.mktemp("study")
    copy_study(folder)
    subject = folder / "subject.yaml"
    made = run("calibrate", "lower_limbs", folder / "static.c3d", "-o", subject)
    assert made.exit_code == 0, made.output
    trials = [folder / "step_up.c3d", folder / "reach_aside.c3d"]
    asked = ("-o", folder / "out", "--no-smooth", "--from", 2.0, "--to", 2.5)
    solved = run("solve", subject, *trials, *asked)
    assert solved.exit_code in (0, 1), solved.output
    return folder


@pytest.fixture
def trial(study: Path, tmp_path: Path) -> Path:
    """A copy of one solved trial, to write into."""
    return Path(shutil.copytree(study / "out" / "step_up", tmp_path / "step_up"))


def names(result: Result) -> list[str]:
    assert result.exit_code == 0, result.output
    return [Path(path).name for path in json.loads(result.stdout)["pictures"]]


def test_one_frame_is_drawn_by_its_number_or_its_time(trial: Path, run: Run) -> None:
    table = pd.read_parquet(trial / "coordinates.parquet")
    frame, time = int(table["frame"][20]), float(table["time"][20])
    small = ("--size", "320x240", "--json")
    assert names(run("picture", trial, "--frame", frame, *small)) == [f"frame_{frame}.png"]
    again = run("picture", trial, "--time", time, "--view", "top", *small)
    assert names(again) == [f"frame_{frame}_top.png"]
    assert Image.open(trial / f"frame_{frame}.png").size == (320, 240)


def test_a_printed_picture_knows_its_density(trial: Path, run: Run) -> None:
    path = trial / "column.png"
    made = run("picture", trial, "--width-mm", 40, "--dpi", 150, "-o", path)
    assert made.exit_code == 0, made.output
    image = Image.open(path)
    assert image.width == 236  # 40 / 25.4 * 150
    assert image.info["dpi"] == pytest.approx((150, 150), abs=0.1)


def test_axes_ellipsoids_and_a_ghost_change_the_picture(
    study: Path, trial: Path, run: Run, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(study)
    small = ("--size", "320x240", "--time", 2.2)
    plain = trial / "plain.png"
    assert run("picture", trial, *small, "-o", plain).exit_code == 0
    subject = ("--subject", study / "subject.yaml")
    for options in (
        ("--axes", *subject),
        ("--ellipsoids", *subject),
        ("--ghost", study / "out" / "reach_aside", "--together"),
        ("--theme", "dark"),
    ):
        other = trial / "other.png"
        made = run("picture", trial, *small, *options, "-o", other)
        assert made.exit_code == 0, made.output
        one, two = (np.asarray(Image.open(path).convert("RGB"), float) for path in (plain, other))
        assert (np.abs(one - two).max(axis=2) > 20).sum() > 60, options


def test_the_subject_must_be_the_one_the_trial_was_solved_with(
    study: Path, trial: Path, run: Run, tmp_path: Path
) -> None:
    changed = tmp_path / "changed.yaml"
    changed.write_text((study / "subject.yaml").read_text() + "\n# changed\n")
    made = run("picture", trial, "--axes", "--subject", changed)
    assert made.exit_code == 2
    assert "is not the subject it was solved with" in made.stderr


@pytest.mark.parametrize(
    ("options", "said"),
    [
        (("--frame", 1, "--time", 2.0), "both choose the frame"),
        (("--frame", 99999), "there is no frame 99999"),
        (("--time", 50), "there is no frame at 50 s"),
        (("--view", "nowhere"), "no view is called 'nowhere', and no file either"),
        (("--size", "wide"), "--size wide: this is no size"),
        (("--size", "9x9"), "cannot be drawn here"),
        (("--theme", "pink"), "no theme is called 'pink'; the themes are light, dark"),
        (("--exaggerate", 0), "Give a number above 0"),
        (("--width-mm", 0), "cannot be drawn"),
        (("-o", "fit.doc"), "'.doc' is not a kind of picture"),
        (("--transparent", "-o", "fit.jpg"), "JPEG holds no transparency"),
    ],
)
def test_what_cannot_be_drawn_is_told(
    trial: Path, run: Run, options: tuple[object, ...], said: str
) -> None:
    before = sorted(trial.iterdir())
    made = run("picture", trial, *options)
    assert made.exit_code == 2
    assert said in made.stderr
    assert sorted(trial.iterdir()) == before


def test_one_file_does_not_hold_two_trials(study: Path, run: Run) -> None:
    for command, file in (("picture", "a.png"), ("movie", "a.mp4")):
        made = run(command, study / "out", "-o", study / file)
        assert made.exit_code == 2
        assert "reach_aside, step_up" in made.stderr


def test_a_movie_is_written_into_the_trials_folder(trial: Path, run: Run) -> None:
    made = run(
        "movie", trial, "--from", 2.1, "--to", 2.3, "--speed", 0.5, "--size", "320x240", "--json"
    )
    assert made.exit_code == 0, made.output
    (answer,) = json.loads(made.stdout)["movies"]
    assert answer["files"] == [str(trial / "movie.mp4")]
    assert answer["pictures"] == 11
    count, seconds = imageio_ffmpeg.count_frames_and_secs(str(trial / "movie.mp4"))
    assert count == 11
    assert seconds == pytest.approx(0.44, abs=0.05)


@pytest.fixture
def no_graphics(monkeypatch: pytest.MonkeyPatch) -> Iterator[None]:
    """A machine on which every child that tries to draw dies, as VTK does without a GL library."""
    offscreen.open_pyvista.cache_clear()
    monkeypatch.setattr(offscreen, "PROBE", "import os; os.kill(os.getpid(), 11)")
    yield
    monkeypatch.undo()
    offscreen.open_pyvista.cache_clear()


@pytest.mark.usefixtures("no_graphics")
def test_without_graphics_pictures_and_films_are_refused_in_one_line(trial: Path, run: Run) -> None:
    before = sorted(trial.iterdir())
    for command in ("picture", "movie"):
        made = run(command, trial)
        assert made.exit_code == 2
        assert len(made.stderr.strip().splitlines()) == 1
        assert "libegl1 libgl1-mesa-dri" in made.stderr
        assert "libosmesa6 alone" in made.stderr
    assert sorted(trial.iterdir()) == before


@pytest.mark.usefixtures("no_graphics")
def test_without_graphics_everything_else_goes_on(study: Path, run: Run, tmp_path: Path) -> None:
    trial = study / "step_up.c3d"
    asked = ("-o", tmp_path, "--from", 2.0, "--to", 2.1, "--no-smooth")
    assert run("solve", study / "subject.yaml", trial, *asked).exit_code in (0, 1)
    assert (tmp_path / "step_up" / "fit.json").is_file()
    assert run("report", tmp_path / "step_up").exit_code in (0, 1)
    assert (tmp_path / "step_up" / "report.html").is_file()
    assert run("check", "lower_limbs").exit_code == 0
    assert run("recording", trial).exit_code == 0


PLAIN_BONE = """
import sys
import numpy as np
from condyle.viz.shapes import Ball, skin
surface = skin([Ball(np.zeros(3), np.full(3, 0.02))], blend=0.001)
print(len(surface.faces) > 100, "pyvista" in sys.modules, "vtkmodules.vtkRenderingCore" in sys.modules)
"""


def test_a_bone_is_made_without_touching_what_draws() -> None:
    child = subprocess.run(
        [sys.executable, "-c", PLAIN_BONE], capture_output=True, text=True, check=True, timeout=60
    )
    assert child.stdout.split() == ["True", "False", "False"]
