"""A checked model, in the file's words and units, becomes a :class:`Skeleton` in SI and radians.

This is the one place where degrees become radians, shares of body mass become kilograms, names
of landmarks become places, and what a file left out gets its default.
"""

from __future__ import annotations

from collections.abc import Mapping
from math import nan, pi, radians
from typing import Literal

from condyle.model.coordinates import Declared, finished
from condyle.model.freed_joints import freed_joints, in_radians
from condyle.model.joint_language import Angles, JointEntry, MoveEntry, SphericalEntry, Turned
from condyle.model.joint_tree import joints_in_order
from condyle.model.language import MarkerEntry, ModelEntry, ShapeEntry
from condyle.model.places import resolved
from condyle.model.segment_checks import mesh_path
from condyle.model.sizing_groups import size_groups
from condyle.model.skeleton import (
    AngleReport,
    Coordinate,
    Expected,
    Fixed,
    Floating,
    Joint,
    Marker,
    Move,
    Moves,
    Person,
    Polynomial,
    Segment,
    Shape,
    Size,
    Sizing,
    Skeleton,
    Spherical,
    Spline,
    Turn,
    Vector,
)
from condyle.model.tree import Node, node_at
from condyle.model.tying import built_ties

PLACED_WITHIN_AT_LANDMARK = 0.010
"""m per axis: how closely a marker is put on a landmark that can be felt."""

PLACED_WITHIN_ELSEWHERE = 0.05
"""m per axis: how closely a marker is put where the model only draws it."""

_ORIGIN = (0.0, 0.0, 0.0)
_RADIANS_PER_DEGREE = pi / 180

Units = Mapping[str, Literal["rad", "m"]]


def build_skeleton(
    model: ModelEntry, declared: Mapping[str, Declared], tree: Node, source: str
) -> Skeleton:
    """Build the skeleton of a model without mistakes.

    Parameters
    ----------
    model : ModelEntry
        The model in the file's words.
    declared : name -> Declared
        Its coordinates, as :func:`condyle.model.checking.check_model` gives them.
    tree : Node
        The tree it was read from, for where its meshes are.
    source : str
        The file, for reports.
    """
    order = joints_in_order(model.joints)
    joints = tuple(_joint(name, model, declared) for name in order)
    segments = tuple(_segment(joint, joints, model, tree) for joint in joints)
    person = model.person
    return Skeleton(
        name=model.name,
        about=model.about,
        sources=tuple(model.sources),
        segments=segments,
        joints=joints,
        coordinates=_coordinates(joints, declared),
        markers=tuple(_marker(name, entry, model) for name, entry in model.markers.items()),
        ties=built_ties(model),
        sizing=_sizing(model, [segment.name for segment in segments], declared),
        person=None if person is None else Person(person.stature or nan, person.mass or nan),
        subject=_subject(model),
        sizes={
            name: Size(size.factors, size.sd) for name, size in model.sizes.items() if size.factors
        },
        labels=dict(model.labels),
        up=model.up,
        calibration=dict(model.calibration),
        source=source,
    )


def _subject(model: ModelEntry) -> Person | None:
    if model.subject is None:
        return None
    stature, mass = model.subject.stature, model.subject.mass
    return Person(nan if stature is None else stature, nan if mass is None else mass)


def _turn(turned: Turned | None) -> Turn | None:
    if turned is None or turned.axis is None or turned.angle is None:
        return None
    return Turn(turned.axis, radians(turned.angle))


def _segment(joint: Joint, joints: tuple[Joint, ...], model: ModelEntry, tree: Node) -> Segment:
    name = joint.child
    entry = model.segments[name]
    shapes = node_at(tree, "segments", name, "shapes")
    mass = entry.mass
    if entry.mass_share is not None and model.person is not None:
        mass = entry.mass_share * (model.person.mass or nan)
    centre = entry.centre_of_mass
    return Segment(
        name=name,
        mass=mass,
        mass_share=entry.mass_share,
        centre_of_mass=None if centre is None else resolved(centre, name, model),
        gyration=entry.gyration,
        landmarks=dict(entry.landmarks),
        length=_length(joint, joints, model),
        shapes=tuple(
            _shape(shape, name, model, node_at(shapes, index))
            for index, shape in enumerate(entry.shapes)
        ),
    )


def _length(
    joint: Joint, joints: tuple[Joint, ...], model: ModelEntry
) -> tuple[Vector, Vector] | None:
    """As written; else from the segment's joint centre to that of its first child."""
    written = model.segments[joint.child].length
    if written is not None:
        start, end = (resolved(place, joint.child, model) for place in written)
        return start, end
    first = next((one for one in joints if one.parent == joint.child), None)
    return None if first is None else (joint.in_child, first.at)


def _shape(shape: ShapeEntry, segment: str, model: ModelEntry, node: Node) -> Shape:
    mesh = mesh_path(node_at(node, "mesh"), shape.mesh or "").resolve()
    return Shape(
        mesh=str(mesh),
        at=resolved(shape.at, segment, model),
        turned=_turn(shape.turned),
        scale=shape.scale,
        reflected=shape.reflected,
    )


def _joint(name: str, model: ModelEntry, declared: Mapping[str, Declared]) -> Joint:
    entry = model.joints[name]
    parent, child = entry.from_ or "", entry.to or ""
    return Joint(
        name=name,
        parent=parent,
        child=child,
        motion=_motion(entry, {name: one.unit for name, one in declared.items()}),
        at=resolved(entry.at, parent, model),
        in_child=resolved(entry.in_child, child, model),
        turned="upright" if isinstance(entry.turned, str) else _turn(entry.turned),
        placed=entry.placed,
        placed_sd=entry.placed_sd,
        axis_turn=in_radians(entry.axis_turn),
        axis_turn_sd=in_radians(entry.axis_turn_sd),
    )


def _motion(entry: JointEntry, units: Units) -> Floating | Spherical | Moves | Fixed:
    if entry.floating is not None:
        position = entry.floating.position or ("", "", "")
        return Floating(position, _angle_report(entry.floating.angles))
    if entry.spherical is not None:
        return _spherical(entry.spherical)
    if entry.moves is not None:
        return Moves(tuple(_move(move, units) for move in entry.moves))
    return Fixed()


def _spherical(entry: SphericalEntry) -> Spherical:
    twist = entry.twist
    return Spherical(
        angles=_angle_report(entry.angles),
        rest_sd=None if entry.rest_sd is None else radians(entry.rest_sd),
        cone=None if entry.cone is None else radians(entry.cone),
        twist=None if twist is None else (radians(twist[0]), radians(twist[1])),
    )


def _angle_report(angles: Angles | None) -> AngleReport:
    if angles is None or angles.sequence is None or angles.names is None:
        raise AssertionError("a model without its angles passed the checks")
    first, second, third = (
        ("xyz".index(axis[-1]), -1 if axis.startswith("-") else 1) for axis in angles.sequence
    )
    axes = (first[0], second[0], third[0])
    return AngleReport(axes, (first[1], second[1], third[1]), angles.names)


def _move(move: MoveEntry, units: Units) -> Move:
    kind: Literal["rotate", "translate"] = "rotate" if move.rotate else "translate"
    axis = move.rotate or move.translate
    if axis is None:
        raise AssertionError("a move without its axis passed the checks")
    function = None
    if move.follows is not None:
        to_input = _RADIANS_PER_DEGREE if units[move.follows] == "rad" else 1.0
        to_output = _RADIANS_PER_DEGREE if kind == "rotate" else 1.0
        function = _function(move, to_input, to_output)
    return Move(kind, axis, move.coordinate, move.follows, function)


def _function(move: MoveEntry, to_input: float, to_output: float) -> Polynomial | Spline | None:
    """A function from degrees or metres to degrees or metres, rewritten for SI and radians."""
    if move.polynomial is not None:
        coefficients = tuple(
            value * to_output / to_input**power for power, value in enumerate(move.polynomial)
        )
        between = move.between
        if between is not None:
            between = (between[0] * to_input, between[1] * to_input)
        return Polynomial(coefficients, between)
    if move.spline is not None:
        return Spline(tuple((x * to_input, y * to_output) for x, y in move.spline))
    return None


def _coordinates(
    joints: tuple[Joint, ...], declared: Mapping[str, Declared]
) -> tuple[Coordinate, ...]:
    """Every named coordinate, in the order in which the joints name them first."""
    order: dict[str, None] = {}
    for joint in joints:
        if isinstance(joint.motion, Floating):
            order.update(dict.fromkeys(joint.motion.position))
        elif isinstance(joint.motion, Moves):
            named = (move.coordinate for move in joint.motion.moves)
            order.update(dict.fromkeys(name for name in named if name is not None))
    return tuple(finished(declared[name]) for name in order)


def _marker(name: str, entry: MarkerEntry, model: ModelEntry) -> Marker:
    segment = entry.segment or ""
    landmark = entry.at if isinstance(entry.at, str) else None
    within = entry.placed_within
    if within is None:
        within = PLACED_WITHIN_AT_LANDMARK if landmark else PLACED_WITHIN_ELSEWHERE
    return Marker(
        name=name,
        segment=segment,
        at=None if entry.at is None else resolved(entry.at, segment, model),
        landmark=landmark,
        placed_within=within,
        sd=entry.sd,
        about=entry.about or "",
        placed=entry.placed,
        placed_sd=entry.placed_sd,
    )


def _sizing(model: ModelEntry, segments: list[str], declared: Mapping[str, Declared]) -> Sizing:
    standing: dict[str, Expected] = {}
    for name, (value, sd) in model.sizing.standing.items():
        is_metres = name in declared and declared[name].unit == "m"
        to_si = 1.0 if is_metres else _RADIANS_PER_DEGREE
        standing[name] = Expected(value * to_si, sd * to_si)
    groups = size_groups(segments, model.sizing.segments)
    return Sizing(model.sizing.factor_sd, groups, standing, freed_joints(model.sizing.joints))
