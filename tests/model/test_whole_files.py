from __future__ import annotations

import errno
import os
from pathlib import Path

import pytest

from condyle.model.errors import CondyleError
from condyle.model.whole_files import whole_file, whole_folder


def test_a_file_appears_when_it_is_whole(tmp_path: Path) -> None:
    path = tmp_path / "a.csv"
    with whole_file(path) as beside:
        beside.write_text("half")
        assert not path.exists()
        assert beside.suffix == ".csv"
        beside.write_text("whole")
    assert path.read_text() == "whole"
    assert os.listdir(tmp_path) == ["a.csv"]


@pytest.mark.parametrize("stop", [RuntimeError, KeyboardInterrupt])
def test_what_was_there_stays_when_writing_stops(tmp_path: Path, stop: type[BaseException]) -> None:
    path = tmp_path / "a.csv"
    path.write_text("before")
    with pytest.raises(stop), whole_file(path):
        raise stop
    assert path.read_text() == "before"
    assert os.listdir(tmp_path) == ["a.csv"]


def test_a_full_disk_is_told_by_the_path(tmp_path: Path) -> None:
    path = tmp_path / "a.csv"
    with pytest.raises(CondyleError) as told, whole_file(path):
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))
    assert str(told.value) == (
        f"{path}: cannot be written: No space left on device.\n"
        "  The disk is full: free some space, or write to another disk."
    )
    assert os.listdir(tmp_path) == []


def test_a_folder_that_is_not_there_is_told(tmp_path: Path) -> None:
    with (
        pytest.raises(CondyleError, match="Its folder does not exist"),
        whole_file(tmp_path / "no" / "a.csv"),
    ):
        raise AssertionError("the work began in vain")


def test_a_folder_or_a_device_is_never_replaced(tmp_path: Path) -> None:
    for path in (tmp_path, Path("/dev/null")):
        with pytest.raises(CondyleError, match="cannot be written"), whole_file(path):
            raise AssertionError("the work began in vain")
    assert not Path("/dev/null").is_file()


def test_the_fault_of_another_file_passes_through(tmp_path: Path) -> None:
    with pytest.raises(FileNotFoundError), whole_file(tmp_path / "a.csv"):
        (tmp_path / "other").read_text()


def test_a_new_file_may_be_read_by_whom_the_system_lets(tmp_path: Path) -> None:
    (tmp_path / "plain").write_text("")
    with whole_file(tmp_path / "a") as beside:
        beside.write_text("")
    assert (tmp_path / "a").stat().st_mode == (tmp_path / "plain").stat().st_mode


def test_a_folder_of_results_appears_whole(tmp_path: Path) -> None:
    final = tmp_path / "walk"
    final.mkdir()
    (final / "old.csv").write_text("kept")
    (final / "fit.json").write_text("replaced")
    with whole_folder(final) as beside:
        (beside / "fit.json").write_text("new")
        assert (final / "fit.json").read_text() == "replaced"
    assert (final / "fit.json").read_text() == "new"
    assert (final / "old.csv").read_text() == "kept"
    assert [path.name for path in tmp_path.iterdir()] == ["walk"]


def test_a_folder_that_cannot_be_filled_leaves_nothing(tmp_path: Path) -> None:
    def fill() -> None:
        with whole_folder(tmp_path / "walk") as beside:
            (beside / "first.csv").write_text("1")
            raise OSError(errno.ENOSPC, "No space left on device", str(beside / "second.csv"))

    with pytest.raises(CondyleError, match=r"walk: cannot be written.*\n.*disk is full"):
        fill()
    assert list(tmp_path.iterdir()) == []


def test_an_interrupt_leaves_the_earlier_folder_as_it_was(tmp_path: Path) -> None:
    def fill() -> None:
        with whole_folder(tmp_path / "walk") as beside:
            (beside / "first.csv").write_text("1")
            raise KeyboardInterrupt

    with pytest.raises(KeyboardInterrupt):
        fill()
    assert list(tmp_path.iterdir()) == []
