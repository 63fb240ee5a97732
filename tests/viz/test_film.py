"""Films: what they show when, and files that are whole or not there, read back by imageio."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from collections.abc import Callable
from pathlib import Path

import imageio.v3 as iio
import imageio_ffmpeg
import numpy as np
import pytest
from PIL import Image

from condyle.model.errors import CondyleError
from condyle.solver.results import FittedMotion
from condyle.viz import film, offscreen
from condyle.viz.figure import build_figure
from condyle.viz.film import draw_film
from condyle.viz.film_plan import FilmError, camera_way, film_rows, plan_film
from condyle.viz.film_words import speed_text
from condyle.viz.look import Look
from condyle.viz.viewpoint import Room

Change = Callable[..., FittedMotion]
SMALL = Look(size=(400, 300))


def rows(motion: FittedMotion, **asked: float) -> np.ndarray:
    wanted = {"start": None, "end": None, "speed": 1.0, "rate": 25.0, **asked}
    return film_rows(motion, **wanted)  # type: ignore[arg-type]


# The leg has 21 frames at 20 Hz: 1 s from the first to the last.
def test_real_time_shows_the_frame_nearest_to_each_instant(leg: FittedMotion) -> None:
    shown = rows(leg)
    assert len(shown) == 26
    instants = np.arange(26) / 25.0
    nearest = np.abs(leg.time[:, None] - instants).min(axis=0)
    np.testing.assert_allclose(np.abs(leg.time[shown] - instants), nearest, atol=1e-12)


def test_four_times_slower_has_four_times_the_pictures(leg: FittedMotion) -> None:
    assert len(rows(leg, speed=0.25)) == 101
    assert len(rows(leg, speed=2.0)) == 13
    part = rows(leg, start=0.5, end=0.7)
    assert leg.time[part[0]] == pytest.approx(0.5)
    assert leg.time[part[-1]] == pytest.approx(0.7)


@pytest.mark.parametrize("speed", [0.0, -1.0, float("nan"), 1e9])
def test_a_speed_that_cannot_be_is_told(leg: FittedMotion, speed: float) -> None:
    with pytest.raises(FilmError, match="cannot be made"):
        rows(leg, speed=speed)


def test_times_outside_the_trial_are_told(leg: FittedMotion) -> None:
    with pytest.raises(FilmError, match=r"runs from 0\.000 s to 1\.000 s"):
        rows(leg, start=2.0)
    with pytest.raises(FilmError, match="no frame between"):
        rows(leg, start=0.6, end=0.4)


def test_the_speed_is_told_in_words() -> None:
    assert [speed_text(s) for s in (1.0, 0.25, 0.1, 3.0)] == [
        "real time",
        "4 times slower",
        "10 times slower",
        "3 times faster",
    ]


def walking(leg: FittedMotion, change: Change, metres: float, wobble: float) -> FittedMotion:
    """The leg over 10 s and so many metres, with a wobble at every other frame."""
    frames = 200
    pick = np.arange(frames) % len(leg.time)
    poses = leg.laboratory_from_segment[pick].copy()
    poses[:, :, 0, 3] += np.linspace(0, metres, frames)[:, None]
    poses[:, :, 1, 3] += wobble * (-1.0) ** np.arange(frames)[:, None]
    return change(
        leg,
        frame=np.arange(1, frames + 1),
        time=np.arange(frames) / 20.0,
        laboratory_from_segment=poses,
        measured=leg.measured[pick],
        fitted=leg.fitted[pick],
        used=leg.used[pick],
    )


def test_the_camera_follows_without_jolts(leg: FittedMotion, change: Change) -> None:
    motion = walking(leg, change, metres=8.0, wobble=0.03)
    shown = rows(motion)
    way = camera_way(motion, shown, stays=0.2, spacing=0.04)
    assert np.ptp(way[:, 0]) > 6.0
    steps = np.diff(way, axis=0)
    assert np.abs(np.diff(steps, axis=0)).max() < 0.004  # m from picture to picture, twice over
    assert np.ptp(way[:, 1]) < 0.02


def test_the_camera_stays_for_somebody_who_stays(leg: FittedMotion, change: Change) -> None:
    motion = walking(leg, change, metres=0.0, wobble=0.001)
    way = camera_way(motion, rows(motion), stays=1.0, spacing=0.04)
    assert not np.ptp(way, axis=0).any()


def test_the_figure_stays_in_the_picture_all_the_time(leg: FittedMotion, change: Change) -> None:
    motion = walking(leg, change, metres=5.0, wobble=0.0)
    shown = rows(motion)
    room = Room(0.05, 0.95, 0.15, 0.80)
    plan = plan_film(build_figure(motion), shown, SMALL, room, speed=1.0, rate=25.0)
    for row, camera in zip(shown, plan.cameras, strict=True):
        pixels = camera.project(motion.laboratory_from_segment[row, :, :3, 3], SMALL.size)
        assert ((pixels > 0) & (pixels < SMALL.size)).all()


def test_a_row_without_a_pose_does_not_stop_the_camera(leg: FittedMotion, change: Change) -> None:
    motion = walking(leg, change, metres=5.0, wobble=0.0)
    motion.laboratory_from_segment[50:60] = np.nan
    assert np.isfinite(camera_way(motion, rows(motion), stays=0.1, spacing=0.04)).all()


def test_films_have_the_pictures_size_and_duration_that_were_asked_for(
    leg: FittedMotion, tmp_path: Path
) -> None:
    told: list[float] = []
    files = [tmp_path / "leg.mp4", tmp_path / "leg.gif"]
    made = draw_film(leg, files, Look(size=(401, 301)), speed=0.5, watch=told.append)
    assert made.pictures == 51
    assert sorted(path.name for path in tmp_path.iterdir()) == ["leg.gif", "leg.mp4"]
    assert told[-1] == 1.0
    assert told == sorted(told)
    count, seconds = imageio_ffmpeg.count_frames_and_secs(str(files[0]))
    assert count == 51
    assert seconds == pytest.approx(51 / 25.0, abs=0.05)
    pictures = iio.imread(files[0])
    assert pictures.shape == (51, 300, 400, 3)
    assert iio.immeta(files[0])["fps"] == 25.0
    gif = iio.imread(files[1])
    assert gif.shape[:3] == (26, 150, 200)
    assert Image.open(files[1]).info["duration"] == 80
    assert np.abs(np.diff(pictures.astype(float), axis=0)).mean(axis=(1, 2, 3)).max() > 0.5
    shows_the_fitted_marker(leg, pictures[-1])


def shows_the_fitted_marker(leg: FittedMotion, picture: np.ndarray) -> None:
    """Orange and blue in the middle, letters at the top and the foot, a dot at the course's right end."""
    red, green, blue = np.moveaxis(picture.astype(float), 2, 0)
    middle = slice(60, 210)
    assert ((blue - red > 60) & (green > red))[middle].sum() > 20
    assert ((red - blue > 80) & (green < 0.88 * red))[middle].sum() > 10
    dark = picture.mean(axis=2) < 120
    assert dark[:50].sum() > 200
    assert dark[250:].sum() > 100
    assert ((red - blue > 80) & (green < 0.88 * red))[200:260, 370:].sum() > 3


def test_a_film_of_no_known_kind_is_told_before_anything_is_drawn(
    leg: FittedMotion, tmp_path: Path
) -> None:
    with pytest.raises(FilmError, match=r"'\.avi' is no kind of film"):
        draw_film(leg, [tmp_path / "leg.avi"], SMALL)


def test_a_worker_that_dies_is_told_and_leaves_nothing(
    leg: FittedMotion, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(film, "give", lambda worker, job: worker.kill())
    with pytest.raises(FilmError, match="a process that draws the film stopped"):
        draw_film(leg, [tmp_path / "leg.mp4"], SMALL)
    assert not list(tmp_path.iterdir())


def test_a_folder_that_is_not_there_is_told(leg: FittedMotion, tmp_path: Path) -> None:
    with pytest.raises(CondyleError, match="cannot be written"):
        draw_film(leg, [tmp_path / "none" / "leg.mp4"], SMALL)


def test_without_graphics_no_film_is_begun(
    leg: FittedMotion, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.setattr(offscreen, "can_draw", lambda window: False)
    with pytest.raises(offscreen.NoGraphicsError, match="libosmesa6 alone"):
        draw_film(leg, [tmp_path / "leg.mp4"], SMALL)
    assert not list(tmp_path.iterdir())


FILMING = """
import pickle, sys
from pathlib import Path
from condyle.viz.film import draw_film
from condyle.viz.look import Look
def watch(share):
    print(share, flush=True)
draw_film(pickle.load(open(sys.argv[1], "rb")), [Path(sys.argv[2])], Look(size=(400, 300)),
          speed=0.02, watch=watch)
"""


def listening() -> None:
    signal.signal(signal.SIGINT, signal.SIG_DFL)


@pytest.mark.skipif(not hasattr(signal, "pthread_sigmask"), reason="Ctrl-C as POSIX sends it")
def test_ctrl_c_leaves_no_file_and_no_process(leg: FittedMotion, tmp_path: Path) -> None:
    import pickle

    motion, out = tmp_path / "motion", tmp_path / "out"
    motion.write_bytes(pickle.dumps(leg))
    out.mkdir()
    child = subprocess.Popen(
        [sys.executable, "-c", FILMING, str(motion), str(out / "leg.mp4")],
        stdout=subprocess.PIPE,
        stderr=subprocess.PIPE,
        text=True,
        start_new_session=True,
        # Tests may run in the background of a shell, which hands on a deaf ear to Ctrl-C.
        preexec_fn=listening,  # noqa: PLW1509
    )
    assert child.stdout is not None
    assert child.stdout.readline()  # drawing has begun
    os.killpg(child.pid, signal.SIGINT)
    child.communicate(timeout=60)
    assert child.returncode != 0
    assert not list(out.iterdir())
    time.sleep(0.2)
    with pytest.raises(ProcessLookupError):
        os.killpg(child.pid, 0)
