"""C3D files built byte by byte from the public standard, read back as its text says.

https://www.c3d.org/HTML/Documents/: header words, scale sign, fourth word, analog scaling.
"""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from condyle.model.errors import RecordingError
from condyle.recording import Recording, is_unnamed, read_recording

INTEL, DEC = 84, 85
Build = Callable[..., bytes]


@pytest.fixture
def read(make_c3d: Build, tmp_path: Path) -> Callable[..., Recording]:
    def build_and_read(*args: Any, **options: Any) -> Recording:
        path = tmp_path / "trial.c3d"
        path.write_bytes(make_c3d(*args, **options))
        return read_recording(path)

    return build_and_read


@pytest.fixture
def places() -> np.ndarray:
    """(frames, points, 3) mm, on a grid that 16-bit integers of 0.1 mm hold exactly."""
    return np.random.default_rng(3).integers(-9000, 9000, (6, 3, 3)) / 10.0


@pytest.mark.parametrize("processor", [INTEL, DEC])
@pytest.mark.parametrize("scale", [0.1, -0.1], ids=["integers", "reals"])
def test_every_way_of_storing_gives_the_same_recording(
    read: Any, places: np.ndarray, processor: int, scale: float
) -> None:
    fourth = np.zeros((6, 3), dtype=int)
    fourth[2, 1] = -1
    fourth[:, 2] = (0b0001011 << 8) | 200
    trial = read(places, processor=processor, scale=scale, fourth=fourth)
    expected = places / 1000
    expected[2, 1] = np.nan
    np.testing.assert_allclose(trial.positions, expected, atol=1e-7)
    # mask in the high byte: its eighth bit is the sign of the word; residual byte x |scale|
    np.testing.assert_allclose(trial.residuals[:, 2], 200 * 0.1 / 1000, rtol=1e-6)
    assert np.isnan(trial.residuals[:, :2]).all()
    assert (trial.cameras == np.array([0, 0, 3])).all()


def test_big_endian_files_are_refused_by_name(read: Any, places: np.ndarray) -> None:
    with pytest.raises(RecordingError, match=r"MIPS \(big-endian\) byte order.*Intel"):
        read(places, processor=86)


def test_the_number_of_frames_comes_from_the_parameters_not_from_the_header_range(
    read: Any,
) -> None:
    trial = read(np.ones((1000, 1, 3)), first=23, last=1024)
    assert len(trial) == 1000
    assert trial.first_frame == 23
    assert trial.frame[-1] == 1022
    assert trial.time[0] == pytest.approx(22 / 100)


def test_without_the_parameter_the_header_counts_the_frames(read: Any, places: Any) -> None:
    assert len(read(places, point={"FRAMES": None}, first=5)) == 6


def test_a_file_that_counts_from_zero_starts_at_one_and_says_so(read: Any, places: Any) -> None:
    trial = read(places, first=0)
    assert (trial.first_frame, len(trial)) == (1, 6)
    assert any("from 0" in remark for remark in trial.remarks)


def test_first_frames_beyond_16_bits_come_from_the_trial_group(read: Any, places: Any) -> None:
    field = {"ACTUAL_START_FIELD": np.array([70000 - 65536, 1])}
    assert read(places, groups={"TRIAL": field}).first_frame == 70000


def test_one_frame_is_a_recording(read: Any, places: Any) -> None:
    assert len(read(places[:1])) == 1
    still = read(places[:1], rate=0.0)
    assert still.rate == 1.0
    assert any("no frame rate" in remark for remark in still.remarks)


@pytest.mark.parametrize("hole", [(0.0, 0.0, 0.0), (np.nan, 1.0, 2.0), (np.inf, 1.0, 2.0)])
def test_zeros_and_numbers_that_are_none_are_missing(read: Any, places: Any, hole: Any) -> None:
    places[3, 1] = hole
    trial = read(places)
    assert np.isnan(trial.positions[3, 1]).all()
    assert trial.present.sum() == 6 * 3 - 1


def test_a_point_with_two_zero_coordinates_is_there(read: Any, places: Any) -> None:
    places[3, 1] = (0.0, 0.0, 5.0)
    assert read(places).present.all()


@pytest.mark.parametrize(
    ("units", "size", "expected"),
    [("mm", 1000, "mm"), ("MM", 1000, "mm"), ("m", 1, "m"), ("M ", 1, "m"), ("cm", 100, "cm")],
)
def test_declared_units_are_taken(read: Any, units: str, size: float, expected: str) -> None:
    trial = read(np.array([[[0, 1, 0], [0, 1.7, 0]]]) * size, units=units)
    assert trial.units == expected
    assert trial.positions[0, 1, 1] == pytest.approx(1.7)
    assert not trial.remarks


@pytest.mark.parametrize("units", [None, "", "foot"])
@pytest.mark.parametrize(("size", "expected"), [(1000, "mm"), (1, "m")])
def test_missing_units_are_told_from_the_spread_with_a_remark(
    read: Any, units: str | None, size: float, expected: str
) -> None:
    trial = read(np.array([[[0, 1, 0], [0, 1.7, 0]]]) * size, units=units)
    assert trial.units == expected
    assert trial.positions[0, 1, 1] == pytest.approx(1.7)
    assert any(f"taken as {expected}" in remark for remark in trial.remarks)


@pytest.mark.parametrize(("units", "size", "words"), [("mm", 1, "small"), ("m", 1000, "large")])
def test_units_wrong_by_1000_are_remarked_and_not_mended(
    read: Any, units: str, size: float, words: str
) -> None:
    trial = read(np.array([[[0, 1, 0], [0, 2.7, 0]]]) * size, units=units)
    assert trial.units == units
    assert any(f"1000 times too {words}" in remark for remark in trial.remarks)


@pytest.mark.parametrize(
    ("declared", "up"), [("+Z", "+Z"), ("Y", "+Y"), ("-y", "-Y"), ("up", None), (None, None)]
)
def test_the_up_axis_is_what_the_screen_calls_up(
    read: Any, places: Any, declared: str | None, up: str | None
) -> None:
    trial = read(places, point={"X_SCREEN": ["+X"], "Y_SCREEN": declared and [declared]})
    assert trial.up == up
    assert any("up axis" in remark for remark in trial.remarks) == (declared == "up")


def test_labels_lose_padding_and_prefix_and_keep_all_else(read: Any, places: Any) -> None:
    labels = ["Picker:knee in-side ", " toe.tip", "Picker:heel-1"]
    assert read(places, labels=labels).labels == ("knee in-side", "toe.tip", "heel-1")


def test_labels_in_latin_1_are_readable(read: Any, places: Any) -> None:
    assert read(places, labels=["genou-côté", "b", "c"]).labels[0] == "genou-côté"


def test_more_than_255_points_keep_their_labels(read: Any) -> None:
    labels = [f"point_{i}" for i in range(600)]
    trial = read(np.ones((2, 600, 3)), labels=labels)
    assert trial.labels == tuple(labels)


def test_points_without_a_name_are_kept_and_told_apart(read: Any) -> None:
    labels = ["", "*12", "7", "", "heel", "U3", "*12"]
    trial = read(np.ones((2, 7, 3)), labels=labels)
    assert len(set(trial.labels)) == 7
    unnamed = [label for label in trial.labels if is_unnamed(label)]
    assert [label for label in trial.labels if label not in unnamed] == ["heel", "U3"]


def test_points_beyond_the_labels_have_no_name(read: Any, places: Any) -> None:
    trial = read(places, labels=["heel"])
    assert [is_unnamed(label) for label in trial.labels] == [False, True, True]
    assert any("1 of 3 points" in remark for remark in trial.remarks)


def test_of_two_points_with_one_label_the_better_seen_is_kept(read: Any, places: Any) -> None:
    fourth = np.zeros((6, 3), dtype=int)
    fourth[:4, 0] = -1
    fourth[5, 2] = -1
    trial = read(places, labels=["heel", "toe", "heel"], fourth=fourth)
    assert trial.labels == ("toe", "heel")
    np.testing.assert_allclose(trial.positions[0, 1], places[0, 2] / 1000, atol=1e-7)
    said = " ".join(trial.remarks)
    assert "2 points are called heel" in said
    assert "seen in 1 frames where it was not" in said


def test_two_subjects_are_not_mixed(read: Any) -> None:
    labels = ["A:heel", "B:heel", "A:toe", "B:toe"]
    fourth = np.zeros((3, 4), dtype=int)
    fourth[:2, 0] = -1  # A's heel is seen once, but A's toe and B's heel always
    fourth[:, 3] = -1
    trial = read(np.ones((3, 4, 3)), labels=labels, fourth=fourth)
    assert trial.labels == ("heel", "B:heel", "toe", "B:toe")
    assert any("A" in remark and "B" in remark for remark in trial.remarks)


def test_points_declared_as_no_positions_are_dropped_and_counted(read: Any) -> None:
    labels = ["S:heel", "S:knee angle", "push", "S:toe"]
    point = {"ANGLES": ["knee angle"], "FORCES": ["push"], "POWERS": ["absent"]}
    trial = read(np.ones((2, 4, 3)), labels=labels, point=point)
    assert trial.labels == ("heel", "toe")
    assert any("1 angles, 1 forces" in remark for remark in trial.remarks)


def test_analog_channels_are_scaled_by_the_standard(read: Any, places: Any) -> None:
    raw = np.arange(6 * 2 * 2).reshape(6, 2, 2)
    group = {"SCALE": np.array([0.5, 2.0]), "OFFSET": np.array([3, -4])}
    group |= {"GEN_SCALE": np.array([10.0]), "LABELS": ["push", "pull"], "UNITS": ["N", "V"]}
    trial = read(places, analog=raw, groups={"ANALOG": group})
    assert trial.analog is not None
    assert (trial.analog.rate, trial.analog.labels) == (200.0, ("push", "pull"))
    # value = (raw - OFFSET) x SCALE x GEN_SCALE
    expected = (raw.reshape(12, 2) - [3, -4]) * [0.5, 2.0] * 10
    np.testing.assert_allclose(trial.analog.values, expected)


def test_unsigned_samples_stay_positive(read: Any, places: Any) -> None:
    group = {"FORMAT": ["UNSIGNED"], "OFFSET": np.array([2048, 40000])}
    trial = read(places, scale=0.1, analog=np.full((6, 1, 2), 50000), groups={"ANALOG": group})
    np.testing.assert_allclose(trial.analog.values, np.full((6, 2), [50000 - 2048, 10000]))


def test_plates_are_in_metres_and_their_channels_count_from_zero(read: Any, places: Any) -> None:
    corners = np.random.default_rng(1).normal(size=(3, 4, 2)) * 500
    plates = {
        "USED": np.array([2]),
        "TYPE": np.array([2, 2]),
        "CORNERS": corners,
        "ORIGIN": np.array([[1.5, 0.0], [-2.0, 0.0], [-40.0, -40.0]]),
        "CHANNEL": np.array([[1, 7], [2, 8], [3, 9], [4, 10], [5, 11], [6, 12]]),
    }
    trial = read(places, analog=np.ones((6, 1, 8)), groups={"FORCE_PLATFORM": plates})
    assert [plate.channels for plate in trial.plates] == [(0, 1, 2, 3, 4, 5), ()]
    np.testing.assert_allclose(trial.plates[1].corners, corners[:, :, 1].T / 1000, rtol=1e-6)
    np.testing.assert_allclose(trial.plates[0].origin, [0.0015, -0.002, -0.04], rtol=1e-6)
    assert any("plate 2 names analog channels" in remark for remark in trial.remarks)


def test_events_are_in_seconds_and_in_order(read: Any, places: Any) -> None:
    events = {
        "USED": np.array([2]),
        "LABELS": ["reach", "Step"],
        "CONTEXTS": ["General", "Left"],
        "TIMES": np.array([[1.0, 0.0], [2.5, 40.25]]),
    }
    trial = read(places, groups={"EVENT": events})
    assert [(event.label, event.time) for event in trial.events] == [
        ("Left Step", 40.25),
        ("reach", 62.5),
    ]


def test_old_files_keep_their_events_in_the_header(read: Any, places: Any) -> None:
    trial = read(places, header_events=[(0.5, "on"), (0.25, "off")])
    assert [(event.label, event.time) for event in trial.events] == [("off", 0.25), ("on", 0.5)]


def test_an_independent_library_reads_the_same(make_c3d: Build, tmp_path: Path) -> None:
    other = pytest.importorskip("c3d", reason="NO CROSS-CHECK: the package c3d is not installed")
    rng = np.random.default_rng(8)
    fourth = rng.integers(0, 0x7FFF, (7, 5))
    fourth[rng.random((7, 5)) < 0.2] = -1
    places = rng.uniform(-900, 900, (7, 5, 3))
    # in Intel order only: the other library misreads the zeros of DEC files
    for scale in (-0.25, 0.25):
        path = tmp_path / "trial.c3d"
        options = {"fourth": fourth, "processor": INTEL, "scale": scale, "first": 4}
        path.write_bytes(make_c3d(places, **options))
        trial = read_recording(path)
        with path.open("rb") as stream:
            frames = list(other.Reader(stream).read_frames(camera_sum=True))
        theirs = np.array([points for _, points, _ in frames])
        assert [number for number, _, _ in frames] == trial.frame.tolist()
        seen = theirs[..., 3] >= 0
        assert (seen == trial.present).all()
        np.testing.assert_allclose(trial.positions[seen] * 1000, theirs[seen][:, :3], atol=1e-3)
        residuals = np.nan_to_num(trial.residuals[seen]) * 1000
        np.testing.assert_allclose(residuals, theirs[seen][:, 3], rtol=1e-6)
        assert (trial.cameras[seen] == theirs[seen][:, 4]).all()
