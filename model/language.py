"""The vocabulary of the model language: every key, and what may stand there.

Each class is one kind of mapping in a file; each field's description completes the sentence
"Write ..." in a report, so what the reader accepts and what it tells a person never part. Values
keep the file's units (degrees, metres, kilograms): :mod:`condyle.model.building` converts them.
The kinds of value are in :mod:`condyle.model.value_kinds`, the words for joints in
:mod:`condyle.model.joint_language`.
"""

from __future__ import annotations

from typing import Annotated, ClassVar, Literal

from pydantic import Field, StrictBool, WithJsonSchema

from condyle.model.joint_language import JointEntry, Turned
from condyle.model.skeleton import Regression
from condyle.model.value_kinds import (
    Axis,
    AxisLetter,
    Line,
    Name,
    Number,
    Place,
    Point,
    Positive,
    PositiveThree,
    Range,
    Spread,
    Text,
    Up,
    Vocabulary,
)

REGRESSIONS: tuple[Regression, ...] = ("harrington_2007", "bell_1990", "hara_2016")
"""Published regressions for a hip's centre that `centre_from` takes."""


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
    gyration: PositiveThree | None = Field(
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
    about: Line | None = Field(
        None, description="the place on the body in plain words, one line of at most 200 letters"
    )
    placed: Point | None = Field(None, description="three numbers, in metres")
    placed_sd: Spread | None = Field(
        None, description="three numbers that are not negative, in metres"
    )


class PlaneEntry(Vocabulary):
    """A plane of a segment."""

    called = "tie's plane"
    needs: ClassVar[tuple[str, ...]] = ("of", "through", "normal")
    of: Name | None = Field(None, description="a segment, or laboratory")
    through: Place | None = Field(None, description="three numbers, or a landmark of the segment")
    normal: Axis | None = Field(None, description="x, y, z, -x, -y, -z, or three numbers")


class EllipsoidEntry(Vocabulary):
    """An ellipsoid of a segment."""

    called = "tie's ellipsoid"
    needs: ClassVar[tuple[str, ...]] = ("of", "centre", "radii")
    of: Name | None = Field(None, description="a segment, or laboratory")
    centre: Place | None = Field(None, description="three numbers, or a landmark of the segment")
    radii: PositiveThree | None = Field(
        None, description="three positive numbers of metres, for x, y, z"
    )


class DistanceEntry(Vocabulary):
    """A distance from a point."""

    called = "tie's distance"
    needs: ClassVar[tuple[str, ...]] = ("from", "distance")
    from_: tuple[Name, Place] | None = Field(
        None, alias="from", description="a segment and a place on it: [pelvis, [0, 0, 0.1]]"
    )
    distance: Positive | None = Field(None, description="a positive number of metres")


class TieEntry(Vocabulary):
    """A point of one segment, and what it keeps to on another: one of the four kinds."""

    called = "tie"
    needs: ClassVar[tuple[str, ...]] = ("point",)
    point: tuple[Name, Place] | None = Field(
        None, description="a segment and a place on it: [hand, [0, -0.09, 0]]"
    )
    meets: tuple[Name, Place] | None = Field(
        None, description="a segment and a place on it: [bar, [0, 0, 0.25]]"
    )
    on_plane: PlaneEntry | None = Field(
        None, description="{of: laboratory, through: [0, 0, 0], normal: y}"
    )
    on_ellipsoid: EllipsoidEntry | None = Field(
        None, description="{of: thorax, centre: [x, y, z], radii: [x, y, z]}"
    )
    stays: DistanceEntry | None = Field(
        None, description="{distance: 0.12, from: [pelvis, [0, 0, 0.1]]}"
    )
    sd: Positive = Field(0.002, description="a positive number of metres")


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


class FreedJointEntry(Vocabulary):
    """What of a joint calibration may move."""

    called = "freed joint"
    place_sd: Positive | None = Field(None, description="a positive number of metres")
    axis_sd: Positive | None = Field(None, description="a positive number of degrees")
    centre_from: Annotated[Name, WithJsonSchema({"enum": list(REGRESSIONS)})] | None = Field(
        None, description=f"one of {', '.join(REGRESSIONS)}"
    )


class SizingEntry(Vocabulary):
    """What may differ between people."""

    called = "sizing"
    factor_sd: Positive = Field(0.08, description="a positive number, such as 0.08")
    segments: dict[Name, SizingSegmentEntry] = Field(
        default_factory=dict, description="segments with {along: ..., across: ..., with: ...}"
    )
    joints: dict[Name, FreedJointEntry] = Field(
        default_factory=dict,
        description="joints with {place_sd: ..., axis_sd: ..., centre_from: ...}",
    )
    standing: dict[Name, tuple[Number, Positive]] = Field(
        default_factory=dict, description="a value and a positive sd, such as [5, 5]"
    )


class SizeEntry(Vocabulary):
    """A sized segment."""

    called = "size"
    needs: ClassVar[tuple[str, ...]] = ("factors",)
    factors: PositiveThree | None = Field(None, description="three positive numbers, for x, y, z")
    sd: Spread | None = Field(None, description="three numbers that are not negative")


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
    ties: dict[Name, TieEntry] = Field(
        default_factory=dict,
        description="names, each with a point and what it keeps to",
    )
    sizing: SizingEntry = Field(
        default_factory=lambda: SizingEntry.model_validate({}),
        description="factor_sd, segments, joints, standing",
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
