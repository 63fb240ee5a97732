"""The words for joints: how a segment hangs on its parent and how it may move there.

Like the rest of the vocabulary (:mod:`condyle.model.language`) in the file's units; each field's
description completes the sentence "Write ..." in a report.
"""

from __future__ import annotations

from typing import Annotated, ClassVar, Literal, TypeAlias

from pydantic import Discriminator, Field, Tag

from condyle.model.value_kinds import (
    Axis,
    JustTrue,
    Name,
    Number,
    Place,
    Point,
    Positive,
    Range,
    SignedAxis,
    Spread,
    TwistRange,
    Vocabulary,
)

MOST_COEFFICIENTS = 20
"""Of a polynomial; joint surfaces are published with up to about ten."""


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
    """Three rotational freedoms.

    `cone` and `twist` limit them: how far the child's Y leans, and how far it turns about that Y.
    """

    called = "spherical joint"
    needs: ClassVar[tuple[str, ...]] = ("angles",)
    angles: Angles | None = Field(None, description="{sequence: [y, -x, y], names: [three names]}")
    rest_sd: Positive | None = Field(None, description="a positive number of degrees")
    cone: Annotated[Positive, Field(le=180.0)] | None = Field(
        None, description="an angle above 0 and up to 180 degrees"
    )
    twist: TwistRange | None = Field(
        None, description="two numbers from -180 to 180 degrees, lower then upper"
    )


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
    """How a segment hangs on its parent; `placed` and `axis_turn` are what calibration found."""

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
    placed: Point | None = Field(None, description="three numbers, in metres")
    placed_sd: Spread | None = Field(
        None, description="three numbers that are not negative, in metres"
    )
    axis_turn: Point | None = Field(
        None, description="three numbers, in degrees: a rotation vector in the parent"
    )
    axis_turn_sd: Spread | None = Field(
        None, description="three numbers that are not negative, in degrees"
    )
