"""What is written comes back, here and in an independent library."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from condyle.model.errors import RecordingError
from condyle.recording import (
    AnalogSignals,
    Event,
    ForcePlate,
    Recording,
    read_recording,
    write_c3d,
)


def made_up(frames: int = 12, markers: int = 4) -> Recording:
    rng = np.random.default_rng(4)
    positions = rng.normal(0, 0.5, (frames, markers, 3))
    residuals = rng.uniform(1e-4, 2e-3, (frames, markers))
    cameras = rng.integers(1, 8, (frames, markers))
    hidden = rng.random((frames, markers)) < 0.2
    positions[hidden] = residuals[hidden] = np.nan
    cameras[hidden] = 0
    return Recording(
        name="trial",
        source="trial.c3d",
        rate=120.0,
        first_frame=23,
        labels=tuple(f"point {i}" for i in range(markers)),
        positions=positions,
        residuals=residuals,
        cameras=cameras,
        up="+Z",
        units="mm",
        events=(Event(0.25, "reach"), Event(75.5, "let go")),
    )


@pytest.mark.parametrize("markers", [4, 300])
def test_a_written_recording_comes_back(tmp_path: Path, markers: int) -> None:
    trial = made_up(markers=markers)
    path = tmp_path / "trial.c3d"
    write_c3d(path, trial)
    back = read_recording(path)
    np.testing.assert_allclose(back.positions, trial.positions, atol=2e-7)
    step = np.nanmax(np.abs(trial.positions)) / 32000  # the standard's recommended scale
    np.testing.assert_allclose(back.residuals, trial.residuals, atol=0.51 * step)
    assert (back.cameras == trial.cameras).all()
    for name in ("name", "rate", "first_frame", "labels", "up", "units", "events", "remarks"):
        assert getattr(back, name) == getattr(trial, name), name
    assert list(tmp_path.iterdir()) == [path]


def test_channels_and_plates_come_back(tmp_path: Path) -> None:
    rng = np.random.default_rng(1)
    analog = AnalogSignals(tuple("abcdef"), ("N",) * 6, 240.0, rng.normal(size=(24, 6)))
    plate = ForcePlate(2, rng.normal(size=(4, 3)), rng.normal(size=3), (0, 1, 2, 3, 4, 5))
    write_c3d(tmp_path / "t.c3d", replace(made_up(), analog=analog, plates=(plate,)))
    back = read_recording(tmp_path / "t.c3d")
    assert back.analog is not None
    np.testing.assert_allclose(back.analog.values, analog.values, atol=1e-6)
    assert (back.analog.labels, back.analog.rate) == (analog.labels, 240.0)
    np.testing.assert_allclose(back.plates[0].corners, plate.corners, atol=1e-6)
    np.testing.assert_allclose(back.plates[0].origin, plate.origin, atol=1e-6)
    assert back.plates[0].channels == plate.channels


def test_an_independent_library_reads_what_is_written(tmp_path: Path) -> None:
    other = pytest.importorskip("c3d", reason="NO CROSS-CHECK: the package c3d is not installed")
    trial = made_up()
    write_c3d(tmp_path / "t.c3d", trial)
    with (tmp_path / "t.c3d").open("rb") as stream:
        reader = other.Reader(stream)
        frames = list(reader.read_frames(camera_sum=True))
    theirs = np.array([points for _, points, _ in frames])
    assert [number for number, _, _ in frames] == trial.frame.tolist()
    assert [label.strip() for label in reader.point_labels] == list(trial.labels)
    assert reader.point_rate == 120.0
    seen = trial.present
    assert ((theirs[..., 3] >= 0) == seen).all()
    np.testing.assert_allclose(theirs[seen][:, :3], trial.positions[seen] * 1000, atol=2e-4)
    np.testing.assert_allclose(theirs[seen][:, 3], trial.residuals[seen] * 1000, atol=0.05)
    assert (theirs[seen][:, 4] == trial.cameras[seen]).all()


def test_a_recording_that_cannot_be_written_leaves_nothing(tmp_path: Path) -> None:
    with pytest.raises(RecordingError, match="cannot be written"):
        write_c3d(tmp_path / "absent" / "t.c3d", made_up())
    with pytest.raises(RecordingError, match="1 to 65535"):
        write_c3d(tmp_path / "t.c3d", replace(made_up(), first_frame=65530))
    (tmp_path / "folder.c3d").mkdir()
    with pytest.raises(RecordingError, match="cannot be written"):
        write_c3d(tmp_path / "folder.c3d", made_up())
    assert [path.name for path in tmp_path.iterdir()] == ["folder.c3d"]


def test_a_disk_that_fills_up_is_no_success(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    import ezc3d

    def short(self: object, path: str, **_: object) -> None:
        Path(path).write_bytes(b"\x02\x50" + bytes(700))

    monkeypatch.setattr(ezc3d.c3d, "write", short)
    with pytest.raises(RecordingError, match="could not be written whole"):
        write_c3d(tmp_path / "t.c3d", made_up())
    assert not list(tmp_path.iterdir())
