from __future__ import annotations

from dataclasses import replace
from math import nan
from pathlib import Path

import pytest
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from condyle.model import load_skeleton, load_tree, write_subject
from condyle.model.errors import CondyleError
from condyle.model.skeleton import Person, Size, Skeleton

SIZES = {"pelvis": Size((1.0123456, 1.1, 0.9), (0.01, 0.02, 1e-9))}
PLACED = {"ASIS_right": ((0.0512344, 0.09, 0.12), (0.001, 0.002, 0.003))}
CALIBRATION = {"model": "lower_limbs", "statics": ["a: b.c3d", "no"], "rms": 0.0034, "flags": {}}


def write(path: Path, model: str | Path = "lower_limbs", **changes: object) -> Skeleton:
    given_: dict[str, object] = {
        "sizes": SIZES,
        "placed": PLACED,
        "subject": Person(1.81, nan),
        "labels": {"ASIS_right": "12", "GT_left": "yes: #"},
        "up": "+Y",
        "calibration": CALIBRATION,
    }
    write_subject(path, load_tree(model), **{**given_, **changes})  # type: ignore[arg-type]
    return load_skeleton(path)


def test_a_written_model_is_the_same_skeleton_with_the_new_numbers(tmp_path: Path) -> None:
    read, base = write(tmp_path / "S.yaml"), load_skeleton("lower_limbs")
    assert read.sizes == {"pelvis": Size((1.012346, 1.1, 0.9), (0.01, 0.02, 1e-6))}
    assert read.labels == {"ASIS_right": "12", "GT_left": "yes: #"}
    assert read.up == "+Y"
    assert read.calibration == CALIBRATION
    assert read.subject is not None
    assert (read.subject.stature, read.subject.mass != read.subject.mass) == (1.81, True)
    first = replace(base.markers[0], placed=(0.051234, 0.09, 0.12), placed_sd=(0.001, 0.002, 0.003))
    rounded = replace(read.markers[0], placed=first.placed)
    assert read.markers[0].placed == pytest.approx(first.placed, abs=1e-6)
    same = replace(
        read, markers=(rounded, *read.markers[1:]), sizes={}, labels={}, up=None, subject=None,
        calibration={}, source=base.source,
    )  # fmt: skip
    assert same == replace(base, markers=(first, *base.markers[1:]))


def test_writing_a_subject_again_replaces_what_calibration_found(tmp_path: Path) -> None:
    write(tmp_path / "S.yaml")
    again = write(tmp_path / "T.yaml", tmp_path / "S.yaml", placed={}, sizes={}, labels={}, up=None)
    assert (again.sizes, again.labels, again.up) == ({}, {}, None)
    assert all(marker.placed is None for marker in again.markers)


def test_a_written_model_is_readable(tmp_path: Path) -> None:
    write(tmp_path / "S.yaml")
    lines = (tmp_path / "S.yaml").read_text().splitlines()
    assert lines[0].startswith("# A model sized to one person")
    assert "    centre_of_mass: [0, 0.0566, 0]" in lines
    assert "  pelvis: {factors: [1.012346, 1.1, 0.9], sd: [0.01, 0.02, 1e-06]}" in lines
    assert not any(line.startswith(("extends:", "mirror:")) for line in lines)
    assert max(map(len, lines)) < 140


def test_meshes_of_another_folder_are_copied_beside(tmp_path: Path, leg: str) -> None:
    models, study = tmp_path / "models", tmp_path / "study"
    (models / "bones").mkdir(parents=True)
    study.mkdir()
    (models / "bones" / "shank.stl").write_text("solid")
    shaped = leg.replace("shank: {}", "shank: {shapes: [{mesh: bones/shank.stl}]}")
    (models / "leg.yaml").write_text(shaped)
    moved = write(study / "S.yaml", models / "leg.yaml", sizes={}, placed={}, labels={})
    assert moved.segments[2].shapes[0].mesh == str(study / "S-meshes" / "shank.stl")
    beside = write(models / "S.yaml", models / "leg.yaml", sizes={}, placed={}, labels={})
    assert beside.segments[2].shapes[0].mesh == str(models / "bones" / "shank.stl")
    assert not (models / "S-meshes").exists()


def test_a_folder_that_is_not_there_is_told(tmp_path: Path) -> None:
    with pytest.raises(CondyleError, match="cannot be written"):
        write(tmp_path / "no" / "S.yaml")


@settings(
    max_examples=40, suppress_health_check=[HealthCheck.function_scoped_fixture], deadline=None
)
@given(
    st.lists(st.text(st.characters(exclude_categories=["Cs"])), min_size=3, max_size=3),
    st.floats(),
    st.integers(-(10**9), 10**9),
)
def test_texts_and_numbers_survive_writing(
    tmp_path: Path, texts: list[str], number: float, count: int
) -> None:
    path = tmp_path / "leg.yaml"
    if not path.exists():
        path.write_text(LEG)
    kept = {"texts": texts, "number": number, "count": count, "on": "1e3", "x": "0o7"}
    labels = dict(zip(("ASIS", "thigh_a", "cluster"), texts, strict=True))
    found = write(tmp_path / "S.yaml", path, sizes={}, placed={}, labels=labels, calibration=kept)
    assert found.labels == labels
    assert repr(found.calibration["number"]).removesuffix(".0") == repr(number).removesuffix(".0")
    assert {**found.calibration, "number": 0} == {**kept, "number": 0}


LEG = """\
condyle: 1
segments: {a: {}}
joints: {root: {from: laboratory, to: a, fixed: true}}
markers: {ASIS: {segment: a}, thigh_a: {segment: a}, cluster: {segment: a}}
"""
