"""Open recordings that nobody on this project made; what they hold is told by their own notes."""

from __future__ import annotations

import struct
from pathlib import Path

import numpy as np
import pytest

from condyle.model.errors import FitError
from condyle.recording import describe, read_recording, still_part, write_c3d
from condyle.recording.gaps import find_gaps

pytestmark = pytest.mark.real


@pytest.mark.parametrize(
    ("file", "markers", "frames", "rate", "up"),
    [
        ("treadmill-walk/static.c3d", 28, 150, 150, "+Y"),
        ("treadmill-walk/walk.c3d", 22, 4500, 150, "+Y"),
        ("plate-run/static.c3d", 38, 1, 200, None),
        ("plate-run/run.c3d", 28, 5000, 200, None),
        ("box-lift/stand.c3d", 37, 101, 50, None),
        ("box-lift/lift.c3d", 37, 181, 50, None),
        ("clinic-walk/walk.c3d", 16, 459, 100, "+Z"),
    ],
)
def test_a_recording_holds_what_its_notes_say(
    real_data: Path, file: str, markers: int, frames: int, rate: float, up: str | None
) -> None:
    trial = read_recording(real_data / file)
    assert (len(trial.labels), len(trial), trial.rate, trial.up) == (markers, frames, rate, up)
    assert trial.units == "mm"
    spread = describe(trial).spread
    assert spread is not None
    assert 0.5 < spread < 2.2  # m: a standing, walking or bending person, from memory, loose bound


def test_units_that_are_not_declared_are_told_with_a_remark(real_data: Path) -> None:
    for name in ("static", "run"):
        remarks = read_recording(real_data / "plate-run" / f"{name}.c3d").remarks
        assert any("no unit of length: taken as mm" in remark for remark in remarks)


def test_the_real_gaps_are_found(real_data: Path) -> None:
    gaps = find_gaps(read_recording(real_data / "clinic-walk" / "walk.c3d").present)
    assert (len(gaps.length), gaps.length.max()) == (32, 4)


def test_first_frame_events_plates_and_channels_are_kept(real_data: Path) -> None:
    trial = read_recording(real_data / "clinic-walk" / "walk.c3d")
    assert trial.first_frame == 2
    assert len(trial.plates) == 2
    assert trial.analog is not None
    assert trial.analog.rate == 2400
    assert trial.analog.values.shape == (459 * 24, 36)
    assert len(trial.events) == 5
    assert len(read_recording(real_data / "treadmill-walk" / "walk.c3d").events) == 133


def test_exact_zeros_in_a_real_recording_are_missing(real_data: Path) -> None:
    trial = read_recording(real_data / "treadmill-walk" / "walk.c3d")
    assert (~trial.present).sum() == 2
    assert np.nanmin(np.linalg.norm(trial.positions, axis=2)) > 0.1


def test_statics_stand_still_and_trials_do_not(real_data: Path) -> None:
    for name in ("treadmill-walk/static", "plate-run/static", "box-lift/stand"):
        trial = read_recording(real_data / f"{name}.c3d")
        assert still_part(trial, start=None, end=None).frames == slice(0, len(trial))
    for name in ("treadmill-walk/walk", "plate-run/run", "clinic-walk/walk"):
        with pytest.raises(FitError, match="never stands still"):
            still_part(read_recording(real_data / f"{name}.c3d"), start=None, end=None)


def test_a_real_recording_survives_being_written(real_data: Path, tmp_path: Path) -> None:
    trial = read_recording(real_data / "clinic-walk" / "walk.c3d")
    write_c3d(tmp_path / "walk.c3d", trial)
    back = read_recording(tmp_path / "walk.c3d")
    np.testing.assert_allclose(back.positions, trial.positions, atol=3e-7)
    assert (back.first_frame, back.labels, back.up) == (2, trial.labels, "+Z")
    assert [event.label for event in back.events] == [event.label for event in trial.events]


def test_an_independent_library_reads_the_same_real_points(real_data: Path, tmp_path: Path) -> None:
    other = pytest.importorskip("c3d", reason="NO CROSS-CHECK: the package c3d is not installed")
    path = real_data / "clinic-walk" / "walk.c3d"
    trial = read_recording(path)
    # the header repeats POINT:SCALE (-0.01) as -1, which the other library insists on
    content = bytearray(path.read_bytes())
    struct.pack_into("<f", content, 12, -0.01)
    (tmp_path / "walk.c3d").write_bytes(content)
    with (tmp_path / "walk.c3d").open("rb") as stream:
        frames = list(other.Reader(stream).read_frames())
    theirs = np.array([points for _, points, _ in frames])
    seen = trial.present
    assert ((theirs[..., 3] >= 0) == seen).all()
    np.testing.assert_allclose(theirs[seen][:, :3] / 1000, trial.positions[seen], atol=1e-6)
    analog = np.concatenate([samples.T for _, _, samples in frames])
    assert trial.analog is not None
    np.testing.assert_allclose(analog, trial.analog.values, rtol=1e-5, atol=1e-6)
