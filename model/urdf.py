"""A robot description as the text of a URDF file: what stands in which attribute.

Numbers are written so that they read back to the same double. Links between the moves of one
joint weigh nothing and carry no inertia; what a format demands and a person does not have (efforts,
speeds, limits of the unlimited) gets one large number, `UNLIMITED`.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from math import isfinite
from xml.etree import ElementTree as ET

import numpy as np
from numpy.typing import NDArray

from condyle.model.growth import size_factors, sized_joint_centres
from condyle.model.inertia import SegmentInertia, sized_inertias
from condyle.model.robot import RobotDescription, RobotJoint
from condyle.model.skeleton import Skeleton

FloatArray = NDArray[np.float64]

UNLIMITED = 1e6
"""N, N m, m/s, rad/s, m and rad where the format wants a limit and there is none."""

LEAST_INERTIA = 1e-15
"""kg and kg m^2: what MuJoCo puts on links without inertia. It refuses less, and this is less than
a billionth of any part of a finger."""

ROD_RADIUS = 0.01
"""m, of the rods drawn from joint to joint."""

ABOUT = (
    " A sized skeleton written by Condyle: metres, kilograms, radians. A measuring aid, not a "
    "diagnosis, and no promise that a machine may move a person. "
)


def urdf_text(skeleton: Skeleton, description: RobotDescription) -> str:
    """The URDF of a sized skeleton.

    Parameters
    ----------
    skeleton : Skeleton
    description : RobotDescription
        Its own. Joints whose function only a table can tell are written as plain joints.
    """
    robot = ET.Element("robot", name=_printable(description.name))
    robot.append(ET.Comment(ABOUT))
    robot.append(_for_mujoco())
    segment_of = {link: segment for segment, link in description.link_of_segment.items()}
    inertias, rods = sized_inertias(skeleton), _rods(skeleton)
    for link in description.links:
        element = ET.SubElement(robot, "link", name=link)
        segment = segment_of.get(link)
        if segment in inertias:
            element.append(_inertial(inertias[segment]))
        for start, end in rods.get(segment or "", ()):
            element.append(_rod(start, end))
    followed = {joint.mimic.joint for joint in description.joints if joint.mimic is not None}
    for joint in description.joints:
        robot.append(_joint(joint, turns_freely=joint.mimic is None and joint.name not in followed))
    ET.indent(robot)
    text = ET.tostring(robot, encoding="unicode")
    return f'<?xml version="1.0" encoding="utf-8"?>\n{text}\n'


def roll_pitch_yaw(rotation: FloatArray) -> tuple[float, float, float]:
    """The angles (rad) of Rz(yaw) Ry(pitch) Rx(roll), exact to rounding at any pitch.

    Roll is read off what yaw and pitch leave over, so that where they are ill-determined (pitch
    near 90 degrees) the three still belong together.
    """
    level = float(np.hypot(rotation[0, 0], rotation[1, 0]))
    pitch = float(np.arctan2(-rotation[2, 0], level))
    yaw = float(np.arctan2(rotation[1, 0], rotation[0, 0])) if level > 0 else 0.0
    sin, cos = np.sin(yaw), np.cos(yaw)
    y_after_yaw = np.array([-sin, cos, 0.0])
    roll = float(np.arctan2(-(y_after_yaw @ rotation[:, 2]), y_after_yaw @ rotation[:, 1]))
    return roll, pitch, yaw


def _for_mujoco() -> ET.Element:
    """What one engine must be told to keep every link, massless ones too; other readers pass over."""
    extension = ET.Element("mujoco")
    least = _number(LEAST_INERTIA)
    ET.SubElement(
        extension,
        "compiler",
        fusestatic="false",
        balanceinertia="false",
        boundmass=least,
        boundinertia=least,
    )
    return extension


def _inertial(inertia: SegmentInertia) -> ET.Element:
    element = ET.Element("inertial")
    ET.SubElement(element, "origin", xyz=_numbers(inertia.centre), rpy="0 0 0")
    ET.SubElement(element, "mass", value=_number(inertia.mass))
    xx, yy, zz = (_number(moment) for moment in inertia.moments)
    ET.SubElement(element, "inertia", ixx=xx, iyy=yy, izz=zz, ixy="0", ixz="0", iyz="0")
    return element


def _joint(joint: RobotJoint, *, turns_freely: bool) -> ET.Element:
    continuous = joint.kind == "revolute" and turns_freely and not _has_limit(joint)
    kind = "continuous" if continuous else joint.kind
    element = ET.Element("joint", name=joint.name, type=kind)
    ET.SubElement(element, "parent", link=joint.parent)
    ET.SubElement(element, "child", link=joint.child)
    pose = joint.parent_from_joint
    angles = roll_pitch_yaw(pose[:3, :3])
    ET.SubElement(element, "origin", xyz=_numbers(pose[:3, 3]), rpy=_numbers(angles))
    if joint.kind in ("fixed", "floating"):
        return element
    ET.SubElement(element, "axis", xyz=_numbers(joint.axis))
    effort = {"effort": _number(UNLIMITED), "velocity": _number(UNLIMITED)}
    if not continuous:
        lower = joint.lower if isfinite(joint.lower) else -UNLIMITED
        upper = joint.upper if isfinite(joint.upper) else UNLIMITED
        effort = {"lower": _number(lower), "upper": _number(upper), **effort}
    ET.SubElement(element, "limit", effort)
    if joint.mimic is not None:
        ET.SubElement(
            element,
            "mimic",
            joint=joint.mimic.joint,
            multiplier=_number(joint.mimic.multiplier),
            offset=_number(joint.mimic.offset),
        )
    return element


def _has_limit(joint: RobotJoint) -> bool:
    return isfinite(joint.lower) or isfinite(joint.upper)


def _rods(skeleton: Skeleton) -> Mapping[str, list[tuple[FloatArray, FloatArray]]]:
    """Segment -> lines to draw: from its own joint to its children's, else along its length."""
    factors = size_factors(skeleton)
    centres = sized_joint_centres(skeleton)
    rods: dict[str, list[tuple[FloatArray, FloatArray]]] = {}
    for i, (segment, joint) in enumerate(zip(skeleton.segments, skeleton.joints, strict=True)):
        start = factors[i] * np.array(joint.in_child)
        rods[segment.name] = [(start, end) for end in centres[segment.name].values()]
        if not rods[segment.name] and segment.length is not None:
            first, last = (factors[i] * np.array(end) for end in segment.length)
            rods[segment.name] = [(first, last)]
    return {name: [rod for rod in pair if (rod[0] != rod[1]).any()] for name, pair in rods.items()}


def _rod(start: FloatArray, end: FloatArray) -> ET.Element:
    """A thin cylinder, whose axis URDF takes along z."""
    along = end - start
    length = float(np.linalg.norm(along))
    yaw = float(np.arctan2(along[1], along[0]))
    pitch = float(np.arctan2(np.hypot(along[0], along[1]), along[2]))
    element = ET.Element("visual")
    ET.SubElement(
        element, "origin", xyz=_numbers((start + end) / 2), rpy=_numbers((0.0, pitch, yaw))
    )
    geometry = ET.SubElement(element, "geometry")
    ET.SubElement(geometry, "cylinder", radius=_number(ROD_RADIUS), length=_number(length))
    return element


def _number(value: float) -> str:
    """The shortest text that reads back to the same double."""
    return repr(float(value) + 0.0)


def _numbers(values: Iterable[float] | FloatArray) -> str:
    return " ".join(_number(value) for value in values)


def _printable(text: str) -> str:
    """XML has no way to write control characters."""
    return "".join(letter if letter.isprintable() else " " for letter in text)
