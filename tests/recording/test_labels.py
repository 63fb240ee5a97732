from __future__ import annotations

from pathlib import Path

import pytest

from condyle.model.errors import CondyleError
from condyle.recording import match_labels, read_label_map


def test_names_match_but_for_case_and_prefix() -> None:
    found = match_labels(["heel", "Toe", "knee"], ["HEEL", "spare", "B:toe"], {})
    assert found.columns == {"heel": 0, "Toe": 2, "knee": None}
    assert found.missing == ("knee",)
    assert found.unknown == ("spare",)


def test_a_label_alike_to_the_letter_comes_first() -> None:
    labels = ["B:heel", "HEEL", "heel"]
    assert match_labels(["heel"], labels, {}).columns["heel"] == 2
    assert match_labels(["heel"], labels[:2], {}).columns["heel"] == 1


def test_the_map_wins_and_falls_back_on_nothing() -> None:
    found = match_labels(["heel", "toe"], ["heel", "toe", "h1"], {"heel": "h1", "toe": "t1"})
    assert found.columns == {"heel": 2, "toe": None}
    assert found.unknown == ("heel", "toe")


def test_a_mapped_label_is_not_given_to_a_second_marker() -> None:
    found = match_labels(["heel", "toe"], ["toe"], {"heel": "toe"})
    assert found.columns == {"heel": 0, "toe": None}


def test_mapped_labels_may_keep_their_prefix() -> None:
    assert match_labels(["heel"], ["h1"], {"heel": "A:h1"}).columns["heel"] == 0


def write(tmp_path: Path, text: str) -> Path:
    path = tmp_path / "map.yaml"
    path.write_text(text, encoding="utf-8")
    return path


def test_a_map_is_read_as_yaml_1_2(tmp_path: Path) -> None:
    text = "heel: on  # a plain word\ntoe: 12\nknee: 'a: b'\n"
    assert read_label_map(write(tmp_path, text)) == {"heel": "on", "toe": "12", "knee": "a: b"}
    assert read_label_map(write(tmp_path, "# nothing\n")) == {}


def test_every_mistake_of_a_map_is_told_with_its_line(tmp_path: Path) -> None:
    path = write(tmp_path, "heel: a\nheel: b\ntoe:\nknee: [1]\nhip: c\nback: c\n")
    with pytest.raises(CondyleError) as caught:
        read_label_map(path)
    text = str(caught.value)
    for line, words in [
        (2, "already, on line 1"),
        (3, "'toe' has no label"),
        (4, "exactly one label"),
        (5, "more than one marker"),
        (6, "more than one marker"),
    ]:
        assert any(t.startswith(f"{path}:{line}:") and words in t for t in text.splitlines()), words


@pytest.mark.parametrize(
    ("text", "words"),
    [
        ("- a\n- b\n", ":1: this is not a map"),
        ("a: b\n  c: [\n", "not YAML"),
        ("a: !!python/object:os.system x\nb: {\n", "not YAML"),
        ("a: &x b\nc: *y\n", "not YAML"),
    ],
)
def test_what_is_no_map_is_refused(tmp_path: Path, text: str, words: str) -> None:
    with pytest.raises(CondyleError, match=words):
        read_label_map(write(tmp_path, text))


def test_a_map_that_cannot_be_read_is_refused(tmp_path: Path) -> None:
    with pytest.raises(CondyleError, match="cannot be read"):
        read_label_map(tmp_path / "absent.yaml")
    (tmp_path / "bytes.yaml").write_bytes(b"\xff\xfe\x80")
    with pytest.raises(CondyleError, match="not UTF-8"):
        read_label_map(tmp_path / "bytes.yaml")
