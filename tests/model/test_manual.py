"""The manual of the language: it tells every key, and everything it shows can be read."""

from __future__ import annotations

import re
from pathlib import Path

import pytest

from condyle.model import load_skeleton, shipped_models
from condyle.model.joint_language import (
    Angles,
    FloatingEntry,
    JointEntry,
    MoveEntry,
    SphericalEntry,
)
from condyle.model.language import (
    CoordinateEntry,
    DistanceEntry,
    EllipsoidEntry,
    FreedJointEntry,
    MarkerEntry,
    ModelEntry,
    PlaneEntry,
    SegmentEntry,
    ShapeEntry,
    SizeEntry,
    SizingEntry,
    SizingSegmentEntry,
    TieEntry,
)
from condyle.model.reading import read_text
from condyle.model.tree import Mistakes, plain
from condyle.model.value_kinds import Vocabulary

ROOT = Path(__file__).resolve().parents[2]
MANUAL = (ROOT / "models_yaml" / "README.md").read_text(encoding="utf-8")

TABLES: dict[str, type[Vocabulary]] = {
    "The file": ModelEntry,
    "Segments": SegmentEntry,
    "Shapes": ShapeEntry,
    "Joints": JointEntry,
    "Floating joints": FloatingEntry,
    "Spherical joints": SphericalEntry,
    "Reported angles": Angles,
    "Moves": MoveEntry,
    "Coordinates": CoordinateEntry,
    "Markers": MarkerEntry,
    "Ties": TieEntry,
    "Planes": PlaneEntry,
    "Ellipsoids": EllipsoidEntry,
    "Distances": DistanceEntry,
    "Sizing": SizingEntry,
    "Sized segments": SizingSegmentEntry,
    "Freed joints": FreedJointEntry,
    "A sized person's file": SizeEntry,
}
SECTIONS = {
    part.splitlines()[0]: part for part in re.split(r"^#{2,3} ", MANUAL, flags=re.MULTILINE)[1:]
}
BLOCKS = re.findall(r"```yaml\n(.*?)```", MANUAL, re.DOTALL)
ROWS = [
    (section, line) for section in TABLES for line in SECTIONS[section].splitlines()
    if line.startswith("| `")
]  # fmt: skip


@pytest.mark.parametrize("section", TABLES)
def test_a_table_tells_every_key_and_no_other(section: str) -> None:
    told = {
        key
        for name, line in ROWS
        if name == section
        for key in re.findall(r"`(\w+)`", line.split("|")[1])
    }
    assert told == {field.alias or name for name, field in TABLES[section].model_fields.items()}


@pytest.mark.parametrize(("section", "row"), ROWS, ids=lambda text: text.split("|")[-2:][0])
def test_every_row_ends_with_an_example_that_is_read(section: str, row: str) -> None:
    keys = re.findall(r"`(\w+)`", row.split("|")[1])
    example = re.fullmatch(r" `(.+)` ", row.split("|")[-2])
    assert example, row
    mistakes = Mistakes()
    tree = read_text(example[1], "example", mistakes)
    assert not mistakes
    assert tree is not None
    assert set(tree.entries) <= set(keys)
    entry = TABLES[section].model_validate(plain(tree))
    assert entry.model_fields_set


@pytest.mark.parametrize("text", BLOCKS, ids=lambda text: " ".join(text.split())[:50])
def test_every_block_is_a_whole_model_that_is_read(text: str, tmp_path: Path) -> None:
    path = tmp_path / "shown.yaml"
    path.write_text(text, encoding="utf-8")
    assert load_skeleton(path).segments


def test_what_the_blocks_say_of_the_mirror_is_so(tmp_path: Path) -> None:
    (text,) = (block for block in BLOCKS if "heel_left" in block)
    path = tmp_path / "shown.yaml"
    path.write_text(text, encoding="utf-8")
    names = load_skeleton(path).marker_names
    assert {"shin_left", "heel_left", "MT2_right"} <= set(names)
    assert not {"heel_right", "MT2_left"} & set(names)


def test_every_default_told_is_the_reader_s() -> None:
    assert MarkerEntry().sd == 0.006
    assert TieEntry().sd == 0.002
    assert SizingEntry().factor_sd == 0.08
    for section, key, default in [
        ("Markers", "sd", "0.006"),
        ("Ties", "sd", "0.002"),
        ("Sizing", "factor_sd", "0.08"),
    ]:
        (row,) = (row for name, row in ROWS if name == section and row.startswith(f"| `{key}` "))
        assert f"| {default} |" in row


def test_every_shipped_model_is_listed() -> None:
    table = MANUAL.split("| shipped model |")[1].split("\n\n")[0]
    listed = re.findall(r"^\| `(\w+)` \|", table, re.MULTILINE)
    assert sorted(listed) == sorted(shipped_models())


def test_its_contents_lead_somewhere() -> None:
    anchors = {re.sub(r"[^\w -]", "", section).lower().replace(" ", "-") for section in SECTIONS}
    linked = set(re.findall(r"\(#([\w-]+)\)", MANUAL))
    assert linked
    assert linked <= anchors
    for path in re.findall(r"\]\(([\w./-]+)\)", MANUAL):
        assert (ROOT / "models_yaml" / path).exists()
