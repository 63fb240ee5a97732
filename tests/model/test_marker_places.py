"""`about`: the place of a marker in plain words, carried from the file to the file."""

from __future__ import annotations

from pathlib import Path

import pytest

from condyle.model import load_skeleton, load_tree
from condyle.model.errors import CondyleError
from condyle.model.writing import write_subject

MODEL = """
condyle: 1
name: leg
mirror: {_right: _left}
segments: {pelvis: {}, thigh_right: {}}
joints:
  root: {from: laboratory, to: pelvis, fixed: true}
  hip_right: {from: pelvis, to: thigh_right, moves: [{rotate: z, coordinate: hip_right}]}
markers:
  knee_right: {segment: thigh_right, at: [0, -0.4, 0.05], about: "outer bump: at the knee, bone"}
  side_right: {segment: thigh_right, at: [0, -0.2, 0.08]}
"""


def _read(text: str, folder: Path) -> Path:
    path = folder / "leg.yaml"
    path.write_text(text)
    return path


def test_the_words_are_read_mirrored_unchanged_and_empty_by_default(tmp_path: Path) -> None:
    about = {m.name: m.about for m in load_skeleton(_read(MODEL, tmp_path)).markers}
    assert about["knee_right"] == about["knee_left"] == "outer bump: at the knee, bone"
    assert about["side_right"] == about["side_left"] == ""


def test_the_words_are_merged_and_removed_like_any_key(tmp_path: Path) -> None:
    _read(MODEL, tmp_path)
    path = tmp_path / "other.yaml"
    path.write_text(
        "condyle: 1\nextends: leg.yaml\n"
        "markers: {knee_right: {about: null}, side_right: {about: on the side}}\n"
    )
    about = {m.name: m.about for m in load_skeleton(path).markers}
    assert about["knee_right"] == about["knee_left"] == ""
    assert about["side_right"] == about["side_left"] == "on the side"


def test_the_words_are_written_with_a_sized_person(tmp_path: Path) -> None:
    model, written = _read(MODEL, tmp_path), tmp_path / "subject.yaml"
    write_subject(
        written,
        load_tree(model),
        sizes={},
        placed={"knee_right": ((0.0, -0.41, 0.05), None)},
        subject=None,
        labels={},
        up="+Y",
        calibration={},
    )
    before, after = load_skeleton(model), load_skeleton(written)
    assert [m.about for m in after.markers] == [m.about for m in before.markers]


@pytest.mark.parametrize("words", ["3", '"two\\nlines"', '""', "[a, b]", '"%s"' % ("w" * 201)])
def test_anything_but_one_line_is_refused(words: str, tmp_path: Path) -> None:
    text = MODEL.replace('"outer bump: at the knee, bone"', words)
    with pytest.raises(CondyleError, match="'about' cannot be") as caught:
        load_skeleton(_read(text, tmp_path))
    assert "the place on the body in plain words, one line of at most 200 letters" in str(
        caught.value
    )


@pytest.mark.parametrize("name", ["lower_limbs", "full_body"])
def test_every_marker_of_the_shipped_bodies_has_its_place_in_words(name: str) -> None:
    for marker in load_skeleton(name).markers:
        assert len(marker.about) > 15, marker.name
        words = marker.about.split()
        assert not {"right", "left"} & set(words), marker.name
