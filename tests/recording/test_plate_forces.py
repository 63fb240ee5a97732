"""Force plates, against forces put in by hand and against a person's weight."""

from __future__ import annotations

import os
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

from condyle.model.errors import CondyleError
from condyle.recording import read_recording
from condyle.recording.plate_forces import read_plate_forces

DATA = Path(os.environ.get("CONDYLE_DATA", Path(__file__).resolve().parents[3] / "shared" / "data"))

FRAMES, SAMPLES = 6, 4

CORNERS_MM = np.array([[600, 400, 0], [0, 400, 0], [0, 0, 0], [600, 0, 0]], dtype=float)
"""The plate's +x +y, -x +y, -x -y and +x -y corners, as the C3D standard orders them: here in a laboratory
with Z up, they make the plate's Z point down only where x and y are taken so."""


def plate_file(
    make_c3d: Callable[..., bytes], path: Path, channels: np.ndarray, corners: np.ndarray
) -> Path:
    """A file with one plate of type 2: Fx, Fy, Fz, Mx, My, Mz in N and N mm, about its surface's middle."""
    analog = np.broadcast_to(channels, (FRAMES, SAMPLES, 6))
    groups = {
        "FORCE_PLATFORM": {
            "USED": np.array([1]),
            "TYPE": np.array([2]),
            "ZERO": np.array([0, 0]),
            "CORNERS": corners.T[:, :, None],
            "ORIGIN": np.zeros((3, 1)),
            "CHANNEL": np.arange(1, 7)[:, None],
        },
        "ANALOG": {
            "UNITS": ["N"] * 3 + ["Nmm"] * 3,
            "LABELS": ["Fx", "Fy", "Fz", "Mx", "My", "Mz"],
        },
    }
    path.write_bytes(
        make_c3d(np.full((FRAMES, 1, 3), 100.0), groups=groups, analog=analog, first=5)
    )
    return path


# By statics: M = r x F about the middle of the surface, so with F = (0, 0, Fz) the place is x = -My / Fz,
# y = Mx / Fz in plate axes. The corners below put the plate's x along +Y, its y along +X, its z down.
@pytest.mark.parametrize("sign", [1.0, -1.0], ids=["on the plate", "on the person"])
def test_a_weight_off_the_middle_pushes_up_where_it_stands(
    make_c3d: Callable[..., bytes], tmp_path: Path, sign: float
) -> None:
    corners = np.array([[600, 400, 0], [600, 0, 0], [0, 0, 0], [0, 400, 0]], dtype=float)
    x, y, weight = 120.0, -50.0, 700.0
    force = np.array([0.0, 0.0, sign * weight])
    moment = np.cross([x, y, 0.0], force)
    path = plate_file(make_c3d, tmp_path / "plate.c3d", np.r_[force, moment], corners)
    plates = read_plate_forces(path)
    assert plates is not None
    np.testing.assert_array_equal(plates.frame, np.arange(5, 5 + FRAMES))
    np.testing.assert_allclose(
        plates.force[:, 0], np.tile([0.0, 0.0, weight], (FRAMES, 1)), atol=1e-3
    )
    expected = np.array([0.300 + y / 1000, 0.200 + x / 1000, 0.0])
    np.testing.assert_allclose(plates.centre[:, 0], np.tile(expected, (FRAMES, 1)), atol=1e-6)
    assert plates.largest() == pytest.approx(weight)


def test_an_unloaded_plate_has_no_centre(make_c3d: Callable[..., bytes], tmp_path: Path) -> None:
    channels = np.array([0.0, 0.0, 5.0, 100.0, -200.0, 0.0])
    plates = read_plate_forces(plate_file(make_c3d, tmp_path / "p.c3d", channels, CORNERS_MM))
    assert plates is not None
    assert np.isnan(plates.centre).all()


def test_a_file_without_plates_has_none(make_c3d: Callable[..., bytes], tmp_path: Path) -> None:
    path = tmp_path / "none.c3d"
    path.write_bytes(make_c3d(np.full((3, 1, 3), 100.0)))
    assert read_plate_forces(path) is None


def test_what_is_no_recording_is_told(tmp_path: Path) -> None:
    path = tmp_path / "no.c3d"
    path.write_bytes(b"nothing of the kind")
    with pytest.raises(CondyleError):
        read_plate_forces(path)


# The body mass of the walker, from the recording's own description: 67.6 kg. Over many whole strides the mean
# vertical force is the weight.
@pytest.mark.real
@pytest.mark.skipif(not DATA.is_dir(), reason=f"no real recordings in {DATA}")
def test_the_plates_of_a_walker_carry_the_walkers_weight_under_the_feet() -> None:
    path = DATA / "treadmill-walk" / "walk.c3d"
    plates, recording = read_plate_forces(path), read_recording(path)
    assert plates is not None
    up = 1
    mass = plates.force[:, :, up].sum(axis=1).mean() / 9.81
    assert mass == pytest.approx(67.6, abs=0.5)
    heels = {side: recording.labels.index(f"CA_{side}") for side in ("right", "left")}
    for side, column in heels.items():
        heel = recording.positions[:, column]
        low = heel[:, up] < np.nanmin(heel[:, up]) + 0.01
        apart = np.linalg.norm((plates.centre - heel[:, None])[..., [0, 2]], axis=2)
        nearest = np.nanmin(np.where(np.isnan(apart), np.inf, apart), axis=1)
        assert np.median(nearest[low]) < 0.25, (
            side
        )  # within a foot's length of the heel that stands
