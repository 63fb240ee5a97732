"""The kinds of value in the model language: a number, an axis, a place, a name.

Each kind says twice what it takes: to the parser, and to the JSON Schema by which an editor
completes and checks a file (:mod:`condyle.model.json_schema`). A kind that is checked by a function
of ours states its schema beside it.
"""

from __future__ import annotations

import re
from math import hypot, isfinite
from typing import Annotated, ClassVar, Literal, TypeAlias

from pydantic import (
    AfterValidator,
    BaseModel,
    ConfigDict,
    Field,
    PlainValidator,
    WithJsonSchema,
)
from pydantic_core import PydanticCustomError

from condyle.model.skeleton import Vector

LARGEST_NUMBER = 1e9
"""Nothing in a body, in metres, kilograms or degrees, comes near; what does is a slip."""

LONGEST_NAME = 200
"""Characters; reports and tables repeat names."""

LONGEST_LINE = 200
"""Characters of a text in one line; sheets on paper repeat it."""

AXES = {
    "x": (1.0, 0.0, 0.0),
    "y": (0.0, 1.0, 0.0),
    "z": (0.0, 0.0, 1.0),
    "-x": (-1.0, 0.0, 0.0),
    "-y": (0.0, -1.0, 0.0),
    "-z": (0.0, 0.0, -1.0),
}

_NAME = re.compile(r"^\S(?:[^\n\r\t\x00-\x1f\x7f]*\S)?$")

_NUMBER_SCHEMA = {"type": "number", "minimum": -LARGEST_NUMBER, "maximum": LARGEST_NUMBER}
_THREE_NUMBERS_SCHEMA = {"type": "array", "items": _NUMBER_SCHEMA, "minItems": 3, "maxItems": 3}
_NAME_SCHEMA = {"type": "string", "pattern": _NAME.pattern}


def _is_number(value: object) -> bool:
    if isinstance(value, bool) or not isinstance(value, int | float):
        return False
    return isfinite(value) and abs(value) <= LARGEST_NUMBER


def _three_numbers(value: object) -> Vector | None:
    if not isinstance(value, list) or len(value) != 3 or not all(map(_is_number, value)):
        return None
    return float(value[0]), float(value[1]), float(value[2])


def _as_axis(value: object) -> Vector:
    if isinstance(value, str) and value in AXES:
        return AXES[value]
    vector = _three_numbers(value)
    if vector is None:
        raise PydanticCustomError("axis", "an axis cannot be this")
    length = hypot(*vector)
    if length == 0.0:
        raise PydanticCustomError("no_direction", "the axis has no direction: its length is zero")
    return vector[0] / length, vector[1] / length, vector[2] / length


def _as_place(value: object) -> Vector | str:
    if isinstance(value, str) and _NAME.fullmatch(value):
        return value
    vector = _three_numbers(value)
    if vector is None:
        raise PydanticCustomError("place", "a place cannot be this")
    return vector


def _as_vector(value: object) -> Vector:
    vector = _three_numbers(value)
    if vector is None:
        raise PydanticCustomError("vector", "three numbers cannot be this")
    return vector


def _as_true(value: object) -> bool:
    if value is not True:
        raise PydanticCustomError("true", "this can only be true")
    return True


def _increasing(pair: tuple[float, float]) -> tuple[float, float]:
    if pair[0] >= pair[1]:
        raise PydanticCustomError("reversed", "the lower end must come first, and below the upper")
    return pair


Number: TypeAlias = Annotated[
    float, Field(strict=True, allow_inf_nan=False, ge=-LARGEST_NUMBER, le=LARGEST_NUMBER)
]
Positive: TypeAlias = Annotated[
    float, Field(strict=True, allow_inf_nan=False, gt=0.0, le=LARGEST_NUMBER)
]
NotNegative: TypeAlias = Annotated[
    float, Field(strict=True, allow_inf_nan=False, ge=0.0, le=LARGEST_NUMBER)
]
HalfTurn: TypeAlias = Annotated[float, Field(strict=True, allow_inf_nan=False, ge=-180.0, le=180.0)]
Name: TypeAlias = Annotated[str, Field(strict=True, pattern=_NAME.pattern, max_length=LONGEST_NAME)]
Text: TypeAlias = Annotated[str, Field(strict=True)]
Line: TypeAlias = Annotated[str, Field(strict=True, pattern=_NAME.pattern, max_length=LONGEST_LINE)]
Axis: TypeAlias = Annotated[
    Vector,
    PlainValidator(_as_axis),
    WithJsonSchema({"anyOf": [{"enum": list(AXES)}, _THREE_NUMBERS_SCHEMA]}),
]
Place: TypeAlias = Annotated[
    Vector | str,
    PlainValidator(_as_place),
    WithJsonSchema({"anyOf": [_THREE_NUMBERS_SCHEMA, _NAME_SCHEMA]}),
]
Point: TypeAlias = Annotated[
    Vector, PlainValidator(_as_vector), WithJsonSchema(_THREE_NUMBERS_SCHEMA)
]
Range: TypeAlias = Annotated[tuple[Number, Number], AfterValidator(_increasing)]
TwistRange: TypeAlias = Annotated[tuple[HalfTurn, HalfTurn], AfterValidator(_increasing)]
Spread: TypeAlias = tuple[NotNegative, NotNegative, NotNegative]
PositiveThree: TypeAlias = tuple[Positive, Positive, Positive]
SignedAxis: TypeAlias = Literal["x", "y", "z", "-x", "-y", "-z"]
AxisLetter: TypeAlias = Literal["x", "y", "z"]
Up: TypeAlias = Literal["+X", "-X", "+Y", "-Y", "+Z", "-Z"]
JustTrue: TypeAlias = Annotated[bool, PlainValidator(_as_true), WithJsonSchema({"const": True})]


class Vocabulary(BaseModel):
    """A mapping of the language: only its own keys, frozen once read.

    `needs` lists the keys that a file must have; :mod:`condyle.model.shaping` asks for them. To the
    parser every field may be absent.
    """

    model_config = ConfigDict(extra="forbid", frozen=True)
    called: ClassVar[str] = "mapping"
    needs: ClassVar[tuple[str, ...]] = ()
