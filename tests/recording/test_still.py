from __future__ import annotations

import numpy as np
import pytest

from condyle.model.errors import FitError
from condyle.recording import Recording, still_part

RATE = 100.0


def recording(positions: np.ndarray, first_frame: int = 1) -> Recording:
    frames, markers = positions.shape[:2]
    return Recording(
        name="static",
        source="static.c3d",
        rate=RATE,
        first_frame=first_frame,
        labels=tuple(f"m{i}" for i in range(markers)),
        positions=positions,
        residuals=np.full((frames, markers), np.nan),
        cameras=np.zeros((frames, markers), dtype=np.int64),
    )


def walk_stand_walk() -> np.ndarray:
    """(500, 6, 3) m: two seconds at 1 m/s, one at rest, two at 1 m/s; noise of 0.5 mm."""
    rng = np.random.default_rng(2)
    time = np.arange(500) / RATE
    along = np.minimum(time, 2.0) + np.maximum(time - 3.0, 0.0)
    places = rng.uniform(0, 1, (6, 3)) + along[:, None, None] * np.array([1.0, 0, 0])
    return places + rng.normal(0, 5e-4, places.shape)


def test_the_part_at_rest_is_found() -> None:
    places = walk_stand_walk()
    part = still_part(recording(places), start=None, end=None)
    # the speed spans 0.1 s, so up to 0.05 s at either end count as moving
    assert 2.0 <= part.start <= 2.06
    assert 2.93 <= part.end <= 3.0
    np.testing.assert_allclose(part.positions, places[200:300].mean(axis=0), atol=3e-4)


def test_all_of_a_still_recording_is_still() -> None:
    rng = np.random.default_rng(1)
    places = rng.uniform(0, 1, (1, 5, 3)) + rng.normal(0, 2e-4, (150, 5, 3))
    assert still_part(recording(places), start=None, end=None).frames == slice(0, 150)


@pytest.mark.parametrize("frames", [1, 2, 20])
def test_short_recordings_are_still_as_a_whole(frames: int) -> None:
    places = np.tile(np.random.default_rng(1).uniform(0, 1, (1, 5, 3)), (frames, 1, 1))
    part = still_part(recording(places), start=None, end=None)
    assert part.frames == slice(0, frames)
    np.testing.assert_allclose(part.positions, places[0])


def test_slow_sway_is_taken_where_there_is_nothing_quieter() -> None:
    time = np.arange(300) / RATE
    sway = 0.03 * np.sin(2 * np.pi * 0.5 * time)  # peak 0.094 m/s
    places = np.ones((1, 5, 3)) + sway[:, None, None] * np.array([1.0, 0, 0])
    part = still_part(recording(places), start=None, end=None)
    assert part.frames.stop - part.frames.start == 50
    assert part.speed < 0.05


def test_a_recording_that_never_stands_still_says_how_slow_it_got() -> None:
    places = walk_stand_walk()[:200]
    with pytest.raises(FitError, match=r"never stands still.*at 1\.\d\d m/s.*--from and --to"):
        still_part(recording(places), start=None, end=None)


def test_one_swinging_arm_is_movement() -> None:
    time = np.arange(300) / RATE
    places = np.tile(np.random.default_rng(1).uniform(0, 1, (1, 10, 3)), (300, 1, 1))
    places[:, :2, 0] += (0.3 * np.sin(2 * np.pi * time))[:, None]
    with pytest.raises(FitError, match="never stands still"):
        still_part(recording(places), start=None, end=None)


def test_a_chosen_part_is_taken_whole() -> None:
    part = still_part(recording(walk_stand_walk(), first_frame=101), start=3.2, end=3.5)
    assert part.frames == slice(220, 251)
    assert (part.start, part.end) == (pytest.approx(3.2), pytest.approx(3.5))


def test_a_chosen_part_that_moves_is_refused() -> None:
    with pytest.raises(FitError, match=r"chosen part moves.*1\.\d\d m/s"):
        still_part(recording(walk_stand_walk()), start=0.5, end=1.5)


@pytest.mark.parametrize(
    ("start", "end"), [(-1.0, None), (None, 9.0), (3.0, 2.0), (9.0, 10.0), (float("nan"), None)]
)
def test_a_choice_outside_the_recording_is_refused(start: float | None, end: float | None) -> None:
    with pytest.raises(FitError, match=r"runs from 0\.000 s to 4\.990 s"):
        still_part(recording(walk_stand_walk()), start=start, end=end)


def test_markers_missing_throughout_the_part_have_no_place() -> None:
    places = walk_stand_walk()
    places[150:350, 2] = np.nan
    places[::3, 3] = np.nan
    part = still_part(recording(places), start=None, end=None)
    assert np.isnan(part.positions[2]).all()
    assert np.isfinite(np.delete(part.positions, 2, axis=0)).all()


def test_a_recording_without_any_marker_is_refused() -> None:
    with pytest.raises(FitError, match="no marker is seen"):
        still_part(recording(np.full((10, 3, 3), np.nan)), start=None, end=None)
