"""Tape-measured lengths: what is read, and what a wrong file gets."""

from __future__ import annotations

from pathlib import Path

import pytest

from condyle.model.errors import ModelError
from condyle.recording import read_lengths


def test_lengths_are_read_in_metres(tmp_path: Path) -> None:
    file = tmp_path / "lengths.yaml"
    file.write_text("{thigh_right: 0.43, shank_right: 0.41}\n")
    assert read_lengths(file) == {"thigh_right": 0.43, "shank_right": 0.41}
    file.write_text("")
    assert read_lengths(file) == {}


@pytest.mark.parametrize(
    ("text", "line", "says"),
    [
        ("thigh_right: 0.4\nshank_right: 41\n", 2, "no length of shank_right in metres"),
        ("thigh_right: 0.4\nthigh_right: 0.5\n", 2, "has a length already"),
        ("thigh_right: long\n", 1, "no length of thigh_right"),
        ("thigh_right: .nan\n", 1, "no length of thigh_right"),
        ("thigh_right: [0.4]\n", 1, "exactly one length"),
        ("- 0.4\n", 1, "not a list of lengths"),
        ("a: b: c\n", 1, "not YAML"),
    ],
)
def test_every_mistake_has_its_line(tmp_path: Path, text: str, line: int, says: str) -> None:
    file = tmp_path / "lengths.yaml"
    file.write_text(text)
    with pytest.raises(ModelError) as told:
        read_lengths(file)
    assert f"lengths.yaml:{line}:" in str(told.value)
    assert says in str(told.value)
