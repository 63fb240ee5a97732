"""The model language as a JSON Schema, so that editors complete and check a file while it is written.

It is generated from the vocabulary the reader uses (:mod:`condyle.model.language`), so the two
cannot part. Decided here: the schema is of *one file*, before `extends` and `mirror`. A base may hold
what this file leaves out, so no key is asked for but `condyle`; any entry may be `null`, which
removes that of a base. Inside a list, which always replaces a list whole, an entry must be
complete. What lies between two values (unknown names, cycles, ranges) only the reader tells.
"""

from __future__ import annotations

import json
import sys
from typing import Any

from pydantic.json_schema import GenerateJsonSchema

from condyle.model.joint_language import MoveEntry
from condyle.model.language import ModelEntry, ShapeEntry
from condyle.model.value_kinds import LONGEST_NAME

DIALECT = "https://json-schema.org/draft/2020-12/schema"

_COMPLETE_IN_LISTS = (MoveEntry, ShapeEntry)
_NEVER_NULL = ("condyle", "calibration")
_NULL = {"type": "null"}
_SAID = ("description", "default")

Schema = dict[str, Any]


class _WithoutTitles(GenerateJsonSchema):
    """Field names are told well enough by the keys themselves."""

    def field_title_should_be_set(self, schema: Any) -> bool:
        return False


def model_schema() -> Schema:
    """The JSON Schema (draft 2020-12) of a model file, as plain values."""
    schema = ModelEntry.model_json_schema(by_alias=True, schema_generator=_WithoutTitles)
    definitions: dict[str, Schema] = schema["$defs"]
    for one in (schema, *definitions.values()):
        one.pop("title", None)
        for key, value in one["properties"].items():
            if key not in _NEVER_NULL:
                one["properties"][key] = _entry(value)
    for name, one in definitions.items():
        one["type"] = ["object", "null"]
        for kind in _COMPLETE_IN_LISTS:
            if name == kind.__name__:
                one["type"] = "object"
                one["required"] = list(kind.needs)
    schema["description"] = "A model file of Condyle: a skeleton, its markers, and how it may grow."
    schema["required"] = ["condyle"]
    return {"$schema": DIALECT, "title": "Condyle model", **schema}


def schema_text() -> str:
    """The schema as the file that ships, ``condyle-model.schema.json``."""
    return json.dumps(model_schema(), indent=1, ensure_ascii=False) + "\n"


def _entry(schema: Schema) -> Schema:
    """One key's schema, rewritten from what the reader holds to what a file may say."""
    said = {key: value for key, value in schema.items() if key in _SAID and value is not None}
    value = {key: value for key, value in schema.items() if key not in _SAID}
    choices = [one for one in value.get("anyOf", [value]) if one != _NULL]
    if len(choices) > 1:
        return {"anyOf": [*choices, _NULL], **said}
    return {**_or_null(choices[0]), **said}


def _or_null(schema: Schema) -> Schema:
    """The same schema, or null, without an `anyOf` where that can be: it hides what is wrong."""
    if "patternProperties" in schema:  # names to entries; pydantic lets keys that are no names pass
        ((pattern, entry),) = schema["patternProperties"].items()
        names = {"pattern": pattern, "maxLength": LONGEST_NAME}
        entries = {"propertyNames": names, "additionalProperties": _entry(entry)}
        return {"type": ["object", "null"], **entries}
    if "$ref" in schema:  # the definitions allow null themselves
        return schema
    if "enum" in schema:
        return {"enum": [*schema["enum"], None]}
    if isinstance(schema.get("type"), str):
        return {**schema, "type": [schema["type"], "null"]}
    return {"anyOf": [schema, _NULL]}


if __name__ == "__main__":
    sys.stdout.write(schema_text())
