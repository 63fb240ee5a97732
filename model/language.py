"""The vocabulary of the model language: every key, and what may stand there.

Each class is one kind of mapping in a file; each field's description completes the sentence
"Write ..." in a report, so what the reader accepts and what it tells a person never part. Values
keep the file's units (degrees, metres, kilograms): :mod:`condyle.model.building` converts them.
Every field may be absent for the parser's sake; `needs` lists those that a file must have, and
:mod:`condyle.model.shaping` asks for them.
"""

from __future__ import annotations

import re
from math import hypot, isfinite
from typing import Annotated, ClassVar, Literal, TypeAlias

from pydantic import (
    AfterValidator,
    BaseModel,
    ConfigDict,
    Discriminator,
    Field,
    PlainValidator,
    StrictBool,
    Tag,
)
from pydantic_core import PydanticCustomError

from condyle.model.skeleton import Vector

LARGEST_NUMBER = 1e9
"""Nothing in a body, in metres, kilograms or degrees, comes near; what does is a slip."""

MOST_COEFFICIENTS = 20
"""Of a polynomial; joint surfaces are published with up to about ten."""

AXES = {
    "x": (1.0, 0.0, 0.0),
    "y": (0.0, 1.0, 0.0),
    "z": (0.0, 0.0, 1.0),
    "-x": (-1.0, 0.0, 0.0),
    "-y": (0.0, -1.0, 0.0),
    "-z": (0.0, 0.0, -1.0),
}


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


def _not_yet(value: object) -> None:
    raise PydanticCustomError("not_yet", "this version of Condyle does not take it yet")


_NAME = re.compile(r"\S(?:[^\n\r\t\x00-\x1f\x7f]*\S)?")

Number: TypeAlias = Annotated[
    float, Field(strict=True, allow_inf_nan=False, ge=-LARGEST_NUMBER, le=LARGEST_NUMBER)
]
Positive: TypeAlias = Annotated[
    float, Field(strict=True, allow_inf_nan=False, gt=0.0, le=LARGEST_NUMBER)
]
NotNegative: TypeAlias = Annotated[
    float, Field(strict=True, allow_inf_nan=False, ge=0.0, le=LARGEST_NUMBER)
]
Name: TypeAlias = Annotated[str, Field(strict=True, pattern=_NAME.pattern, max_length=200)]
Text: TypeAlias = Annotated[str, Field(strict=True)]
Axis: TypeAlias = Annotated[Vector, PlainValidator(_as_axis)]
Place: TypeAlias = Annotated[Vector | str, PlainValidator(_as_place)]
Point: TypeAlias = Annotated[Vector, PlainValidator(_as_vector)]
Range: TypeAlias = Annotated[tuple[Number, Number], AfterValidator(_increasing)]
SignedAxis: TypeAlias = Literal["x", "y", "z", "-x", "-y", "-z"]
AxisLetter: TypeAlias = Literal["x", "y", "z"]
Up: TypeAlias = Literal["+X", "-X", "+Y", "-Y", "+Z", "-Z"]
JustTrue: TypeAlias = Annotated[bool, PlainValidator(_as_true)]
NotYet: TypeAlias = Annotated[None, PlainValidator(_not_yet)]


class Vocabulary(BaseModel):
    """A mapping of the language: only its own keys, frozen once read."""

    model_config = ConfigDict(extra="forbid", frozen=True)
    called: ClassVar[str] = "mapping"
    needs: ClassVar[tuple[str, ...]] = ()


class Turned(Vocabulary):
    """A fixed turn."""

    called = "turn"
    needs: ClassVar[tuple[str, ...]] = ("axis", "angle")
    axis: Axis | None = Field(None, description="x, y, z, -x, -y, -z, or three numbers")
    angle: Number | None = Field(None, description="one number, in degrees")


TurnedOrUpright: TypeAlias = Annotated[
    Annotated[Turned, Tag("turn")] | Annotated[Literal["upright"], Tag("word")],
    Discriminator(lambda value: "word" if isinstance(value, str) else "turn"),
]


class ShapeEntry(Vocabulary):
    """A mesh to draw; `reflected` (its z reversed before all else) is what the mirror sets."""

    called = "shape"
    needs: ClassVar[tuple[str, ...]] = ("mesh",)
    mesh: Name | None = Field(None, description="the name of a mesh file in the model's folder")
    at: Place = Field((0.0, 0.0, 0.0), description="three numbers, or a landmark of the segment")
    turned: Turned | None = Field(None, description="a turn such as {axis: z, angle: 90}")
    scale: Positive = Field(1.0, description="a positive number")
    reflected: StrictBool = Field(False, description="true or false")


class SegmentEntry(Vocabulary):
    """One rigid body."""

    called = "segment"
    mass: Positive | None = Field(None, description="a positive number of kilograms")
    mass_share: Annotated[Positive, Field(le=1.0)] | None = Field(
        None, description="a share of body mass, above 0 and up to 1"
    )
    centre_of_mass: Place | None = Field(
        None, description="three numbers in metres, or a landmark of the segment"
    )
    gyration: tuple[Positive, Positive, Positive] | None = Field(
        None, description="three positive radii in metres, for turning about x, y, z"
    )
    landmarks: dict[Name, Point] = Field(
        default_factory=dict, description="names with three numbers each, in metres"
    )
    length: tuple[Place, Place] | None = Field(
        None, description="two places: [[0, 0, 0], [0, -0.4, 0]], or landmarks of the segment"
    )
    shapes: list[ShapeEntry] = Field(
        default_factory=list, description="a list of shapes such as {mesh: femur.stl}"
    )


class Angles(Vocabulary):
    """How an orientation is reported."""

    called = "report of angles"
    needs: ClassVar[tuple[str, ...]] = ("sequence", "names")
    sequence: tuple[SignedAxis, SignedAxis, SignedAxis] | None = Field(
        None, description="three of x, y, z, -x, -y, -z, such as [y, x, -z]"
    )
    names: tuple[Name, Name, Name] | None = Field(None, description="three names")


class FloatingEntry(Vocabulary):
    """Six freedoms from the laboratory."""

    called = "floating joint"
    needs: ClassVar[tuple[str, ...]] = ("position", "angles")
    position: tuple[Name, Name, Name] | None = Field(
        None, description="three names, for the position along x, y, z"
    )
    angles: Angles | None = Field(None, description="{sequence: [y, x, -z], names: [three names]}")


class SphericalEntry(Vocabulary):
    """Three rotational freedoms."""

    called = "spherical joint"
    needs: ClassVar[tuple[str, ...]] = ("angles",)
    angles: Angles | None = Field(None, description="{sequence: [y, -x, y], names: [three names]}")
    rest_sd: Positive | None = Field(None, description="a positive number of degrees")
    cone: NotYet = Field(None, description="the joint without it, or as three rotating moves")
    twist: NotYet = Field(None, description="the joint without it, or as three rotating moves")


class MoveEntry(Vocabulary):
    """One elementary move, by a coordinate of its own or following another."""

    called = "move"
    rotate: Axis | None = Field(None, description="x, y, z, -x, -y, -z, or three numbers")
    translate: Axis | None = Field(None, description="x, y, z, -x, -y, -z, or three numbers")
    coordinate: Name | None = Field(None, description="the name of a coordinate")
    range: Range | None = Field(None, description="two numbers, lower then upper")
    rest: Number | None = Field(None, description="one number, in degrees or metres")
    rest_sd: Positive | None = Field(None, description="a positive number of degrees or metres")
    held: Number | None = Field(None, description="one number, in degrees or metres")
    follows: Name | None = Field(None, description="the name of a coordinate")
    polynomial: (
        Annotated[list[Number], Field(min_length=1, max_length=MOST_COEFFICIENTS)] | None
    ) = Field(None, description=f"1 to {MOST_COEFFICIENTS} coefficients, the constant first")
    spline: Annotated[list[tuple[Number, Number]], Field(min_length=2)] | None = Field(
        None, description="two or more points such as [[0, 0], [30, 0.004]]"
    )
    between: Range | None = Field(None, description="two numbers, lower then upper")


class JointEntry(Vocabulary):
    """How a segment hangs on its parent."""

    called = "joint"
    needs: ClassVar[tuple[str, ...]] = ("from", "to")
    from_: Name | None = Field(None, alias="from", description="a segment, or laboratory")
    to: Name | None = Field(None, description="the segment that this joint carries")
    at: Place = Field((0.0, 0.0, 0.0), description="three numbers, or a landmark of the parent")
    in_child: Place = Field(
        (0.0, 0.0, 0.0), description="three numbers, or a landmark of the child"
    )
    turned: TurnedOrUpright | None = Field(None, description="{axis: x, angle: 3}, or upright")
    floating: FloatingEntry | None = Field(None, description="{position: ..., angles: ...}")
    spherical: SphericalEntry | None = Field(None, description="{angles: ...}")
    moves: list[MoveEntry] | None = Field(
        None, description="a list of moves such as {rotate: z, coordinate: knee_flexion}"
    )
    fixed: JustTrue | None = Field(None, description="true")
    placed: NotYet = Field(None, description="the joint without it")
    placed_sd: NotYet = Field(None, description="the joint without it")


class CoordinateEntry(Vocabulary):
    """What the file changes of a coordinate that a joint declared."""

    called = "coordinate"
    range: Range | None = Field(None, description="two numbers, lower then upper")
    rest: Number | None = Field(None, description="one number, in degrees or metres")
    rest_sd: Positive | None = Field(None, description="a positive number of degrees or metres")
    held: Number | None = Field(None, description="one number, in degrees or metres")


class MarkerEntry(Vocabulary):
    """A marker; `placed` and `placed_sd` are what calibration found."""

    called = "marker"
    needs: ClassVar[tuple[str, ...]] = ("segment",)
    segment: Name | None = Field(None, description="the segment that the marker sits on")
    at: Place | None = Field(None, description="three numbers, or a landmark of the segment")
    placed_within: Positive | None = Field(None, description="a positive number of metres")
    sd: Positive = Field(0.006, description="a positive number of metres")
    placed: Point | None = Field(None, description="three numbers, in metres")
    placed_sd: tuple[NotNegative, NotNegative, NotNegative] | None = Field(
        None, description="three numbers that are not negative, in metres"
    )


class PersonEntry(Vocabulary):
    """Whom the numbers describe."""

    called = "person"
    needs: ClassVar[tuple[str, ...]] = ("stature", "mass")
    stature: Annotated[Positive, Field(le=3.0)] | None = Field(
        None, description="a positive number of metres, up to 3"
    )
    mass: Positive | None = Field(None, description="a positive number of kilograms")


class SubjectEntry(PersonEntry):
    """Whom a sized file describes; what nobody measured is left out."""

    called = "subject"
    needs: ClassVar[tuple[str, ...]] = ()


class SizingSegmentEntry(Vocabulary):
    """Which axes of a segment share a factor."""

    called = "segment's sizing"
    along: list[AxisLetter] | None = Field(None, description="a list of x, y, z")
    across: list[AxisLetter] | None = Field(None, description="a list of x, y, z")
    with_: Name | None = Field(None, alias="with", description="the name of another segment")


class SizingEntry(Vocabulary):
    """What may differ between people."""

    called = "sizing"
    factor_sd: Positive = Field(0.08, description="a positive number, such as 0.08")
    segments: dict[Name, SizingSegmentEntry] = Field(
        default_factory=dict, description="segments with {along: ..., across: ..., with: ...}"
    )
    joints: NotYet = Field(None, description="the model without it")
    standing: dict[Name, tuple[Number, Positive]] = Field(
        default_factory=dict, description="a value and a positive sd, such as [5, 5]"
    )


class SizeEntry(Vocabulary):
    """A sized segment."""

    called = "size"
    needs: ClassVar[tuple[str, ...]] = ("factors",)
    factors: tuple[Positive, Positive, Positive] | None = Field(
        None, description="three positive numbers, for x, y, z"
    )
    sd: tuple[NotNegative, NotNegative, NotNegative] | None = Field(
        None, description="three numbers that are not negative"
    )


class ModelEntry(Vocabulary):
    """A whole file, after `extends` and `mirror`."""

    called = "model"
    condyle: Literal[1] = Field(1, description="1, the version of the language")
    name: Text = Field("", description="a text")
    about: Text = Field("", description="a text")
    sources: list[Text] = Field(default_factory=list, description="a list of texts")
    extends: Name | None = Field(None, description="a shipped model's name, or a path")
    mirror: dict[Name, Name] = Field(
        default_factory=dict, description="pairs of endings such as {_right: _left}"
    )
    person: PersonEntry | None = Field(None, description="{stature: 1.75, mass: 72}")
    segments: dict[Name, SegmentEntry] = Field(
        default_factory=dict, description="names, each with the keys of a segment, or {}"
    )
    joints: dict[Name, JointEntry] = Field(
        default_factory=dict, description="names, each with the keys of a joint"
    )
    coordinates: dict[Name, CoordinateEntry] = Field(
        default_factory=dict, description="names, each with range, rest, rest_sd or held"
    )
    markers: dict[Name, MarkerEntry] = Field(
        default_factory=dict, description="names, each with the keys of a marker"
    )
    ties: NotYet = Field(None, description="the model without it")
    sizing: SizingEntry = Field(
        default_factory=lambda: SizingEntry.model_validate({}),
        description="factor_sd, segments, standing",
    )
    sizes: dict[Name, SizeEntry] = Field(
        default_factory=dict, description="segments with {factors: [x, y, z], sd: [x, y, z]}"
    )
    subject: SubjectEntry | None = Field(None, description="{stature: 1.75, mass: 72}")
    labels: dict[Name, Text] = Field(
        default_factory=dict, description="{model marker name: label in the recording}"
    )
    up: Up | None = Field(None, description="one of +X, -X, +Y, -Y, +Z, -Z")
    calibration: dict[str, object] = Field(
        default_factory=dict, description="a mapping; Condyle keeps it as it is"
    )
