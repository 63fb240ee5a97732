"""The schema that ships is the reader's own, and judges files as the reader does.

Validated by `jsonschema`, a general-purpose implementation of JSON Schema draft 2020-12.
"""

from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import pytest
from jsonschema import Draft202012Validator
from ruamel.yaml import YAML

from condyle.model import load_tree, shipped_models
from condyle.model.json_schema import model_schema, schema_text
from condyle.model.reading import read_text
from condyle.model.tree import Mistakes, plain

ROOT = Path(__file__).resolve().parents[2]
SHIPPED = ROOT / "models_yaml" / "condyle-model.schema.json"
MODELS = [
    *sorted((ROOT / "models_yaml").glob("*.yaml")),
    *(
        path
        for path in sorted((ROOT / "docs" / "examples").glob("*.yaml"))
        if "condyle: 1" in path.read_text()
    ),
]
VALIDATOR = Draft202012Validator(model_schema())


def _values(text: str) -> object:
    """A file as the reader sees it: YAML 1.2, keys as text."""
    tree = read_text(text, "model.yaml", Mistakes())
    assert tree is not None
    return plain(tree)


def _faults(text: str) -> list[str]:
    return [
        "/".join(map(str, fault.absolute_path)) for fault in VALIDATOR.iter_errors(_values(text))
    ]


def test_the_shipped_schema_is_the_one_generated_from_the_code() -> None:
    remedy = "python -m condyle.model.json_schema > models_yaml/condyle-model.schema.json"
    assert SHIPPED.read_text(encoding="utf-8") == schema_text(), f"generate it again: {remedy}"


def test_the_schema_itself_is_valid() -> None:
    Draft202012Validator.check_schema(model_schema())


def test_every_key_tells_what_it_takes() -> None:
    schema = model_schema()
    for one in (schema, *schema["$defs"].values()):
        assert one["additionalProperties"] is False
        assert one["description"]
        assert all(value["description"] for value in one["properties"].values())


@pytest.mark.parametrize("path", MODELS, ids=lambda path: path.stem)
def test_every_model_and_example_validates(path: Path) -> None:
    assert _faults(path.read_text()) == []


@pytest.mark.parametrize("name", shipped_models())
def test_every_shipped_model_validates_merged_and_mirrored(name: str) -> None:
    assert list(VALIDATOR.iter_errors(load_tree(name))) == []


def test_what_changes_a_base_validates_without_what_the_base_has() -> None:
    assert _faults("condyle: 1\nextends: lower_limbs\njoints: {knee_right: {at: null}}") == []
    assert _faults("condyle: 1\nextends: lower_limbs\nmarkers: {thigh_right: null}") == []


WRONG = [
    ("name: leg", "joint: {}", ""),
    ("thigh: {mass: 9.8,", "thigh: {mas: 9.8,", "segments/thigh"),
    ("mass: 9.8", "mass: '9.8'", "segments/thigh/mass"),
    ("mass: 9.8", "mass: 0", "segments/thigh/mass"),
    ("rotate: -z", "rotate: w", "joints/knee/moves"),
    ("rotate: -z", "rotates: z", "joints/knee/moves"),
    ("range: [-30, 120]", "range: [-30]", "joints/hip/moves"),
    ("at: ASIS}", "at: [1, 2]}", "markers/ASIS/at"),
    ("sequence: [y, x, -z]", "sequence: [y, x, q]", "joints/root/floating"),
    ("name: leg", "ties: {a: {point: [thigh], meets: [pelvis, ASIS]}}", "ties/a/point"),
    ("name: leg", "sizing: {joints: {hip: {place_sd: -1}}}", "sizing/joints/hip/place_sd"),
    ("name: leg", "sizing: {joints: {hip: {centre_from: me_2024}}}", "sizing/joints/hip/centre"),
    ("condyle: 1\n", "", ""),
    ("  cluster:", '  "a\\nb":', "markers"),
]


@pytest.mark.parametrize(("old", "new", "where"), WRONG, ids=[slip[1] for slip in WRONG])
def test_a_mistake_does_not_validate(
    leg: str, report: Callable[..., str], old: str, new: str, where: str
) -> None:
    """What the schema refuses, the reader refuses too."""
    assert _faults(leg) == []
    wrong = leg.replace(old, new, 1)
    faults = _faults(wrong)
    assert faults
    assert all(fault.startswith(where) for fault in faults)
    assert report(wrong)


def test_the_schema_can_be_read_as_json_and_as_yaml() -> None:
    assert YAML(typ="safe", pure=True).load(SHIPPED.read_text()) == model_schema()
