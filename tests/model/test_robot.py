"""What a URDF says of a skeleton, looked at without any engine."""

from __future__ import annotations

from collections.abc import Callable
from xml.etree import ElementTree as ET

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from condyle.model.errors import CondyleError
from condyle.model.robot import WORLD, JointValue, refuse_curves, straight_line
from condyle.model.robot_chains import robot_description
from condyle.model.skeleton import Polynomial, Skeleton, Spline
from condyle.model.urdf import UNLIMITED, urdf_text

Read = Callable[[str], Skeleton]

numbers = st.floats(-10, 10)

NAMES = """\
condyle: 1
name: "a & b < c \\u0007 — 'd' \\"e\\""
segments: {world: {}, "x & <y>": {}, bend: {}, bend_link: {}, "é": {}}
joints:
  bend: {from: laboratory, to: bend, fixed: true, at: [0.1, 0.2, 0.30000000000000004]}
  tilt:
    from: bend
    to: world
    in_child: [0.1, 0, 0]
    moves: [{rotate: x, coordinate: bend}, {rotate: y, coordinate: bend}, {rotate: z, follows: bend, polynomial: [1, 2]}]
  tilt_move_3: {from: bend, to: bend_link, moves: [{rotate: x, coordinate: "x < 1 & 'y'", range: [-10, 20]}]}
  ball:
    from: world
    to: "x & <y>"
    spherical: {angles: {sequence: [y, -x, y], names: [a, b, c]}, cone: 100}
  twin:
    from: world
    to: "é"
    moves: [{translate: z, coordinate: way}]
"""


@pytest.fixture
def parsed(skeleton_of: Read) -> ET.Element:
    skeleton = skeleton_of(NAMES)
    return ET.fromstring(urdf_text(skeleton, robot_description(skeleton, np.eye(3))).encode())


def test_names_survive_and_are_unique_among_links_and_among_joints(parsed: ET.Element) -> None:
    links = [link.attrib["name"] for link in parsed.findall("link")]
    joints = [joint.attrib["name"] for joint in parsed.findall("joint")]
    assert len(set(links)) == len(links) == len(joints) + 1
    assert len(set(joints)) == len(joints)
    assert {"x & <y>", "bend", "bend_link", "é", WORLD, "world_2"} <= set(links)
    assert {"bend", "bend_2", "x < 1 & 'y'", "a", "b", "c", "way"} <= set(joints)
    assert parsed.attrib["name"] == "a & b < c   — 'd' \"e\""


def test_every_link_but_the_first_hangs_on_one_joint(parsed: ET.Element) -> None:
    links = [link.attrib["name"] for link in parsed.findall("link")]
    children = [joint.find("child").attrib["link"] for joint in parsed.findall("joint")]  # type: ignore[union-attr]
    assert links[0] == WORLD
    assert sorted(children) == sorted(links[1:])


def limits(parsed: ET.Element, name: str) -> tuple[str, float, float]:
    joint = next(j for j in parsed.findall("joint") if j.attrib["name"] == name)
    limit = joint.find("limit")
    assert limit is not None
    lower, upper = (float(limit.attrib.get(end, "nan")) for end in ("lower", "upper"))
    return joint.attrib["type"], lower, upper


def test_limits_are_the_ranges_in_radians_and_what_is_unlimited_says_so(parsed: ET.Element) -> None:
    kind, lower, upper = limits(parsed, "x < 1 & 'y'")
    assert (kind, lower, upper) == ("revolute", np.radians(-10), np.radians(20))
    assert limits(parsed, "b") == ("revolute", 0.0, np.radians(100))
    assert limits(parsed, "a")[0] == limits(parsed, "c")[0] == "continuous"
    assert limits(parsed, "way") == ("prismatic", -UNLIMITED, UNLIMITED)
    # Engines want one number of a joint that others follow, so it is not `continuous`.
    assert limits(parsed, "bend") == ("revolute", -UNLIMITED, UNLIMITED)


def test_numbers_read_back_to_the_same_double(parsed: ET.Element) -> None:
    origin = parsed.find("joint[@name='bend_2']/origin")
    assert origin is not None
    assert [float(word) for word in origin.attrib["xyz"].split()] == [0.1, 0.2, 0.30000000000000004]


@given(slope=numbers, intercept=numbers, x=st.lists(numbers, min_size=2, unique=True))
def test_points_on_a_line_are_a_straight_line(
    slope: float, intercept: float, x: list[float]
) -> None:
    knots = np.unique(np.round(x, 3))
    if len(knots) < 2:
        return
    points = tuple((float(k), float(slope * k + intercept)) for k in knots)
    assert straight_line(Polynomial((intercept, slope, 0.0, 0.0), between=(0, 1))) is not None
    line = straight_line(Spline(points))
    assert line is not None
    np.testing.assert_allclose(line[0] * knots + line[1], [y for _, y in points], atol=1e-10)


def test_a_bend_of_a_thousandth_is_no_straight_line() -> None:
    assert straight_line(Polynomial((0.0, 1.0, 1e-9))) is None
    assert straight_line(Spline(((0.0, 0.0), (1.0, 1.001), (2.0, 2.0)))) is None


def test_lines_of_lines_are_lines_and_grow_once() -> None:
    value = JointValue("q", (Polynomial((1.0, 2.0)), Polynomial((3.0, -0.5))), gain=1.5)
    assert value.line() == (1.5 * -1.0, 1.5 * 2.5)
    x = np.linspace(-2, 2, 9)
    np.testing.assert_allclose(value(x), 1.5 * (-x + 2.5), rtol=0, atol=1e-15)
    assert JointValue("q", (Polynomial((0.0, 1.0)), Polynomial((0.0, 0.0, 1.0)))).line() is None


def test_held_coordinates_and_constants_leave_no_joint(skeleton_of: Read) -> None:
    text = NAMES + "coordinates: {bend: {held: 30}, way: {held: 0.2}}\n"
    description = robot_description(skeleton_of(text), np.eye(3))
    moving = {joint.name for joint in description.joints if joint.kind != "fixed"}
    assert moving == {"x < 1 & 'y'", "a", "b", "c"}


def test_every_curve_is_named_in_the_refusal(tree: Skeleton) -> None:
    with pytest.raises(CondyleError) as told:
        refuse_curves(robot_description(tree, np.eye(3)))
    assert [
        line for line in str(told.value).splitlines() if "follows" in line and "  " in line
    ] == [
        "  elbow_move_2 follows bend",
        "  twist follows bend",
        "  wrist_move_1 follows bend",
    ]
