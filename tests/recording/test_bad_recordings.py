"""Whatever is wrong with a file: one clear line, never a crash."""

from __future__ import annotations

import os
import subprocess
import sys
import textwrap
from collections.abc import Callable
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from condyle.model.errors import RecordingError
from condyle.recording import read_recording

Build = Callable[..., bytes]


def complaint(path: Path) -> str:
    with pytest.raises(RecordingError) as caught:
        read_recording(path)
    text = str(caught.value)
    assert text.startswith(f"{path}: ")
    assert "\n" not in text
    return text


def complaint_about(tmp_path: Path, content: bytes) -> str:
    path = tmp_path / "trial.c3d"
    path.write_bytes(content)
    return complaint(path)


def test_paths_that_are_no_file_are_refused(tmp_path: Path) -> None:
    assert "no such file" in complaint(tmp_path / "absent.c3d")
    assert "a folder" in complaint(tmp_path)
    os.mkfifo(tmp_path / "pipe.c3d")
    assert "not a regular file" in complaint(tmp_path / "pipe.c3d")


@pytest.mark.skipif(os.geteuid() == 0, reason="root may read everything")
def test_files_without_the_right_to_read_are_refused(tmp_path: Path) -> None:
    path = tmp_path / "secret.c3d"
    path.write_bytes(b"\x02\x50")
    path.chmod(0)
    assert "cannot be read" in complaint(path)


def test_other_content_is_refused(tmp_path: Path) -> None:
    assert "empty" in complaint_about(tmp_path, b"")
    assert "not a C3D" in complaint_about(tmp_path, b"time,x,y,z\n" * 100)
    (tmp_path / "trial.doc").write_text("time,x,y,z\n")
    assert "'.doc' files cannot be read" in complaint(tmp_path / "trial.doc")


def test_a_c3d_under_another_name_is_still_a_c3d(make_c3d: Build, tmp_path: Path) -> None:
    path = tmp_path / "trial.old"
    path.write_bytes(make_c3d(np.ones((2, 2, 3))))
    assert len(read_recording(path)) == 2


def test_files_without_content_are_refused(make_c3d: Build, tmp_path: Path) -> None:
    assert "no frames" in complaint_about(tmp_path, make_c3d(np.ones((0, 3, 3))))
    assert "no points" in complaint_about(tmp_path, make_c3d(np.ones((3, 0, 3))))
    only_angles = make_c3d(np.ones((3, 1, 3)), labels=["bend"], point={"ANGLES": ["bend"]})
    assert "none of its points is a position" in complaint_about(tmp_path, only_angles)


def test_a_file_cut_anywhere_is_refused(make_c3d: Build, tmp_path: Path) -> None:
    whole = make_c3d(np.ones((60, 8, 3)))
    needed = len(whole) - (len(whole) - 60 * 8 * 16) % 512
    for length in [1, 2, 3, 100, 511, 512, 513, 700, 1023, 1024, 1100, 2000, 5000, needed - 1]:
        complaint_about(tmp_path, whole[:length])


def test_a_cut_file_says_how_many_frames_are_missing(make_c3d: Build, tmp_path: Path) -> None:
    whole = make_c3d(np.ones((64, 8, 3)))  # 128 bytes a frame, 16 whole blocks
    assert "11 of 64 frames are missing" in complaint_about(tmp_path, whole[: -10 * 128 - 1])


def test_a_last_block_need_not_be_filled_up(make_c3d: Build, tmp_path: Path) -> None:
    whole = make_c3d(np.ones((65, 8, 3)))
    (tmp_path / "trial.c3d").write_bytes(whole[: -3 * 128])
    assert len(read_recording(tmp_path / "trial.c3d")) == 65


@pytest.mark.parametrize(
    ("options", "words"),
    [
        ({"point": {"USED": np.array([2])}}, "3 points a frame by its header but 2"),
        ({"point": {"SCALE": np.array([0.1])}}, "whether points are integers"),
        ({"groups": {"ANALOG": {"USED": np.array([4])}}}, "analog counts contradict"),
        ({"rate": 0.0}, "no frame rate"),
        ({"rate": float("nan")}, "no frame rate"),
        ({"groups": {"ANALOG": {"RATE": np.array([1e12])}}}, "1e+12 Hz makes no sense"),
        ({"point": {"FRAMES": np.array([60000])}}, "frames are missing"),
    ],
)
def test_contradictions_are_named(
    make_c3d: Build, tmp_path: Path, options: dict[str, Any], words: str
) -> None:
    assert words in complaint_about(tmp_path, make_c3d(np.ones((5, 3, 3)), **options))


@pytest.mark.parametrize(
    ("group", "words"),
    [
        ({"SCALE": None}, "ANALOG:SCALE has 0 values for 2 channels"),  # crashes the library
        ({"OFFSET": None}, "ANALOG:OFFSET has 0 values for 2 channels"),
        ({"RATE": np.array([300.0])}, "analog at 300 Hz is not 2 times 100 Hz"),
        ({"USED": np.array([3])}, "3 channels of 2 samples but 4 values"),
    ],
)
def test_analog_channels_that_cannot_be_scaled_are_refused(
    make_c3d: Build, tmp_path: Path, group: dict[str, Any], words: str
) -> None:
    content = make_c3d(np.ones((5, 3, 3)), analog=np.ones((5, 2, 2)), groups={"ANALOG": group})
    assert words in complaint_about(tmp_path, content)


MUTATIONS = 200

FUZZ = """
import sys
from pathlib import Path
import numpy as np
from condyle.model.errors import RecordingError
from condyle.recording import Recording, describe, read_recording, report_lines

folder = Path(sys.argv[1])
whole = [(folder / name).read_bytes() for name in ("integers.c3d", "reals.c3d")]
refused = 0
for seed in range(int(sys.argv[2])):
    rng = np.random.default_rng(seed)
    data = bytearray(whole[seed % 2])
    for _ in range(rng.integers(1, 4)):
        # most in the header's first words and in the parameters, where counts and links are
        low, high = [(0, 24), (512, 2048), (512, 2048), (0, len(data))][rng.integers(4)]
        data[rng.integers(low, high)] = rng.choice([0, 1, 127, 128, 255, rng.integers(256)])
    if rng.random() < 0.15:
        data = data[: rng.integers(len(data))]
    (folder / "mutant.c3d").write_bytes(data)
    try:
        report_lines(describe(read_recording(folder / "mutant.c3d")))
    except RecordingError:
        refused += 1
print(refused)
"""


def test_mutated_files_are_read_or_refused_and_nothing_else(
    make_c3d: Build, tmp_path: Path
) -> None:
    rng = np.random.default_rng(5)
    groups = {
        "EVENT": {"USED": np.array([1]), "LABELS": ["on"], "TIMES": np.array([[0.0], [0.1]])},
        "FORCE_PLATFORM": {
            "USED": np.array([1]),
            "TYPE": np.array([2]),
            "CORNERS": rng.normal(size=(3, 4, 1)),
            "ORIGIN": rng.normal(size=(3, 1)),
            "CHANNEL": np.arange(1, 7).reshape(6, 1),
        },
    }
    for name, scale in (("integers", 0.05), ("reals", -0.05)):
        content = make_c3d(
            rng.uniform(-1000, 1000, (12, 4, 3)),
            scale=scale,
            labels=["S:a", "S:b", "*3", "q"],
            point={"Y_SCREEN": ["+Z"], "ANGLES": ["q"]},
            groups=groups,
            analog=rng.normal(size=(12, 2, 6)),
        )
        (tmp_path / f"{name}.c3d").write_bytes(content)
    # a process of its own, so that a crash of the library is a failure and not the end of the run
    done = subprocess.run(
        [sys.executable, "-c", textwrap.dedent(FUZZ), str(tmp_path), str(MUTATIONS)],
        capture_output=True,
        text=True,
        timeout=120,
        check=False,
    )
    assert done.returncode == 0, f"exit {done.returncode}: {done.stderr[-500:]}"
    assert 0 < int(done.stdout) < MUTATIONS
