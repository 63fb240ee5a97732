from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import pytest

from condyle.model import load_skeleton, load_tree
from condyle.model.errors import ModelError
from condyle.model.skeleton import Skeleton

Reader = Callable[..., Skeleton]


def test_a_change_to_one_joint_on_both_sides_is_a_five_line_file(read: Reader) -> None:
    five_lines = """\
condyle: 1
name: stiff knees
extends: lower_limbs
coordinates:
  knee_flexion_right: {range: [0, 20], rest: 10}
"""
    base, stiff = load_skeleton("lower_limbs"), read(five_lines)
    for side in ("right", "left"):
        knee = stiff.coordinate(f"knee_flexion_{side}")
        assert (knee.lower, knee.upper) == pytest.approx((0, 0.3490658503988659))
        assert knee.rest == pytest.approx(0.17453292519943295)
    assert stiff.name == "stiff knees"
    assert stiff.segments == base.segments
    assert len(stiff.coordinates) == len(base.coordinates)


def test_files_merge_key_by_key_the_deepest_first(read: Reader, leg: str) -> None:
    middle = "condyle: 1\nextends: base.yaml\nsegments: {thigh: {mass: 11}}\n"
    top = "condyle: 1\nextends: middle.yaml\nsegments: {thigh: {gyration: [0.1, 0.1, 0.1]}}\n"
    thigh = read(top, base=leg, middle=middle).segments[1]
    assert (thigh.mass, thigh.centre_of_mass, thigh.gyration) == (11, (0, -0.18, 0), (0.1,) * 3)


def test_a_list_replaces_a_list(read: Reader, leg: str) -> None:
    top = "condyle: 1\nextends: base.yaml\njoints: {hip: {moves: [{rotate: x, coordinate: hip_flexion}]}}\n"
    moves = read(top, base=leg).joints[1].motion
    assert [move.axis for move in moves.moves] == [(1, 0, 0)]  # type: ignore[union-attr]


def test_null_removes_an_entry(read: Reader, leg: str) -> None:
    top = "condyle: 1\nextends: base.yaml\nmarkers: {cluster: null}\njoints: {hip: {moves: null, fixed: true}}\ncoordinates: null\n"
    found = read(top, base=leg)
    assert found.marker_names == ("ASIS", "thigh_a")
    assert "hip_flexion" not in [coordinate.name for coordinate in found.coordinates]


def test_null_that_removes_nothing_is_told(report: Callable[..., str], leg: str) -> None:
    top = "condyle: 1\nextends: base.yaml\nmarkers: {clustre: null}\n"
    assert report(top, base=leg) == (
        "leg.yaml:3: 'clustre' is empty (null), and there is no such entry to remove.\n"
        "  Write its value ({} where it has none), or delete the line."
    )


def test_a_mistake_is_told_in_the_file_that_holds_it(report: Callable[..., str], leg: str) -> None:
    wrong_base = leg.replace("mass: 9.8", "mass: heavy")
    top = "condyle: 1\nextends: base.yaml\nmarkers:\n  new: {segment: thih}\n"
    assert report(top, base=wrong_base) == (
        "base.yaml:9: 'mass' cannot be 'heavy'.\n"
        "  Write a positive number of kilograms.\n"
        "leg.yaml:4: no segment is called 'thih'.\n"
        "  Did you mean 'thigh'? The segments defined here: pelvis, shank, thigh."
    )


def test_a_broken_base_hides_no_mistake_and_adds_none(report: Callable[..., str]) -> None:
    top = "condyle: 1\nextends: base.yaml\nmarkers:\n  new: {segment: thigh, sdd: 1}\n"
    told = report(top, base="condyle: 1\nname: [\n").splitlines()
    assert [line.split(":")[0] for line in told if line[0] != " "] == ["base.yaml", "leg.yaml"]
    assert told[2] == "leg.yaml:4: 'sdd' is not a key of a marker."


def test_a_longer_circle_of_extends_is_told(report: Callable[..., str]) -> None:
    told = report(
        "condyle: 1\nextends: one.yaml\n",
        one="condyle: 1\nextends: two.yaml\n",
        two="condyle: 1\nname: a\nextends: one.yaml\n",
    )
    assert told.splitlines()[0] == (
        "two.yaml:3: 'extends' goes round in a circle: 'one.yaml' builds on this file."
    )


def test_a_base_stands_beside_the_file_that_names_it(tmp_path: Path, leg: str) -> None:
    (tmp_path / "study").mkdir()
    (tmp_path / "study" / "base.yaml").write_text(leg)
    (tmp_path / "study" / "middle.yaml").write_text("condyle: 1\nextends: base.yaml\n")
    top = tmp_path / "top.yaml"
    top.write_text("condyle: 1\nextends: study/middle.yaml\n")
    assert load_skeleton(top).marker_names == ("ASIS", "thigh_a", "cluster")


def test_the_merged_tree_is_plain_and_complete(tmp_path: Path, leg: str) -> None:
    (tmp_path / "base.yaml").write_text(leg)
    top = tmp_path / "top.yaml"
    top.write_text("condyle: 1\nextends: base.yaml\nmirror: {_right: _left}\nname: top\n")
    tree = load_tree(top)
    assert "extends" not in tree
    assert "mirror" not in tree
    assert tree["name"] == "top"
    assert tree["joints"]["knee"]["at"] == [0, -0.42, 0]  # type: ignore[index]


def test_a_nameless_model_is_called_by_its_file(tmp_path: Path, leg: str) -> None:
    path = tmp_path / "kick.yaml"
    path.write_text(leg.replace("name: leg\n", ""))
    assert load_skeleton(path).name == "kick"
    with pytest.raises(ModelError):
        load_skeleton(str(tmp_path))


OUTSIDE = [
    "../base.yaml", "/etc/passwd", "./../base.yaml", "models/../../base.yaml", "link.yaml",
]  # fmt: skip


@pytest.mark.parametrize("name", OUTSIDE)
def test_a_base_outside_the_model_s_folder_is_not_read(tmp_path: Path, leg: str, name: str) -> None:
    (tmp_path / "base.yaml").write_text(leg)
    folder = tmp_path / "models"
    folder.mkdir()
    (folder / "link.yaml").symlink_to(tmp_path / "base.yaml")
    (folder / "leg.yaml").write_text(f"condyle: 1\nextends: {name}\n")
    with pytest.raises(ModelError) as told:
        load_skeleton(folder / "leg.yaml")
    assert str(told.value) == (
        f"{folder}/leg.yaml:2: the base model '{name}' is not in the model's folder.\n"
        "  Put it beside the model, and name it from there."
    )


def test_a_base_below_may_build_on_one_beside_the_outermost(tmp_path: Path, leg: str) -> None:
    (tmp_path / "below").mkdir()
    (tmp_path / "base.yaml").write_text(leg)
    (tmp_path / "below" / "middle.yaml").write_text("condyle: 1\nextends: ../base.yaml\n")
    (tmp_path / "leg.yaml").write_text("condyle: 1\nextends: below/middle.yaml\n")
    assert load_skeleton(tmp_path / "leg.yaml").segment_names == ("pelvis", "thigh", "shank")
