from __future__ import annotations

from collections.abc import Callable
from pathlib import Path

import casadi as ca
import numpy as np
from ruamel.yaml import YAML

from condyle.model import load_tree
from condyle.model.growth import sized_numbers
from condyle.model.kinematics import Kinematics
from condyle.model.skeleton import Moves, Skeleton, Spherical

Reader = Callable[..., Skeleton]

BODY = """\
condyle: 1
mirror: {_right: _left}
segments:
  trunk: {landmarks: {AC_right: [0, 0.4, 0.2], SN: [0.1, 0.4, 0]}}
  arm_right:
    centre_of_mass: [0.01, -0.1, 0.02]
    gyration: [0.1, 0.05, 0.1]
    landmarks: {EL_right: [0, -0.3, 0.04]}
    length: [[0, 0, 0.01], EL_right]
  hand_right: {}
joints:
  root: {from: laboratory, to: trunk, fixed: true}
  shoulder_right:
    from: trunk
    to: arm_right
    at: AC_right
    in_child: [0, 0, 0.01]
    turned: {axis: [1, 2, 3], angle: 10}
    spherical: {angles: {sequence: [y, -x, z], names: [plane_right, lift_right, axial_right]}}
  elbow_right:
    from: arm_right
    to: hand_right
    at: [0, -0.3, 0.03]
    moves:
      - {rotate: z, coordinate: elbow_right, range: [0, 150]}
      - {rotate: -x, coordinate: carry_right}
      - {rotate: [0, 3, 4], follows: elbow_right, polynomial: [0, 1]}
      - {translate: z, coordinate: slide_right}
      - {translate: [0, 3, 4], coordinate: glide_right}
coordinates:
  elbow_right: {rest: 20}
markers:
  EL_right: {segment: arm_right, at: EL_right}
  wrist_right: {segment: hand_right, at: [0.1, 0.2, 0.3], sd: 0.01}
  chest: {segment: trunk, at: AC_left}
sizing:
  segments:
    arm_right: {along: [y], with: arm_left}
  standing: {elbow_right: [10, 5]}
"""


def test_twins_stand_after_the_written_entries(read: Reader) -> None:
    body = read(BODY)
    assert body.segment_names == ("trunk", "arm_right", "hand_right", "arm_left", "hand_left")
    assert [j.name for j in body.joints][3:] == ["shoulder_left", "elbow_left"]
    assert body.joints[4].parent == "arm_left"
    assert body.marker_names == ("EL_right", "wrist_right", "chest", "EL_left", "wrist_left")


def test_places_change_the_sign_of_z(read: Reader) -> None:
    body = read(BODY)
    trunk, arm = body.segments[0], body.segments[3]
    assert trunk.landmarks["AC_left"] == (0, 0.4, -0.2)
    assert "SN" in trunk.landmarks
    assert len(trunk.landmarks) == 3
    assert arm.centre_of_mass == (0.01, -0.1, -0.02)
    assert arm.gyration == (0.1, 0.05, 0.1)
    assert arm.landmarks == {"EL_left": (0, -0.3, -0.04)}
    assert arm.length == ((0, 0, -0.01), (0, -0.3, -0.04))
    assert body.joints[3].at == (0, 0.4, -0.2)
    assert body.joints[3].in_child == (0, 0, -0.01)
    assert body.markers[4].at == (0.1, 0.2, -0.3)
    assert body.markers[4].sd == 0.01


def test_rotation_axes_change_the_signs_of_x_and_y_and_translations_that_of_z(
    read: Reader,
) -> None:
    elbow = read(BODY).joints[4].motion
    assert isinstance(elbow, Moves)
    assert [move.axis for move in elbow.moves] == [
        (0, 0, 1), (1, 0, 0), (0, -0.6, 0.8), (0, 0, -1), (0, 0.6, -0.8),
    ]  # fmt: skip
    assert elbow.moves[2].follows == "elbow_left"
    assert elbow.moves[0].coordinate == "elbow_left"


def test_turns_and_reported_angles_are_mirrored(read: Reader) -> None:
    right, left = (read(BODY).joints[index] for index in (1, 3))
    x, y, z = right.turned.axis  # type: ignore[union-attr]
    assert left.turned.axis == (-x, -y, z)  # type: ignore[union-attr]
    assert left.turned.angle == right.turned.angle  # type: ignore[union-attr]
    assert isinstance(left.motion, Spherical)
    assert left.motion.angles.axes == (1, 0, 2)
    assert left.motion.angles.signs == (-1, 1, 1)
    assert left.motion.angles.names == ("plane_left", "lift_left", "axial_left")


def test_overrides_sizing_and_standing_are_mirrored(read: Reader) -> None:
    body = read(BODY)
    assert body.coordinate("elbow_left").rest == body.coordinate("elbow_right").rest > 0.3
    assert body.sizing.standing["elbow_left"] == body.sizing.standing["elbow_right"]
    groups = {group.name: group.members for group in body.sizing.groups}
    assert groups["arm_right+arm_left along y"] == (("arm_right", 1), ("arm_left", 1))


def test_an_entry_written_out_wins_over_its_twin(read: Reader) -> None:
    written = BODY.replace(
        "  chest:", "  wrist_left: {segment: hand_left, at: [0, 0, 0]}\n  chest:"
    )
    marker = next(m for m in read(written).markers if m.name == "wrist_left")
    assert (marker.at, marker.sd) == ((0, 0, 0), 0.006)


def test_null_written_out_keeps_a_twin_from_being_made(read: Reader) -> None:
    written = BODY.replace("  chest:", "  wrist_left: null\n  chest:")
    assert "wrist_left" not in read(written).marker_names


def test_a_slip_on_the_written_side_is_told_once(report: Callable[..., str]) -> None:
    assert report(BODY.replace("from: arm_right", "from: arn_right")) == (
        "leg.yaml:21: no segment is called 'arn_right'.\n"
        "  Did you mean 'arm_right'? The segments defined here: "
        "arm_left, arm_right, hand_left, hand_right, trunk."
    )


def test_suffixes_come_in_pairs_of_their_own(report: Callable[..., str]) -> None:
    told = report(BODY.replace("{_right: _left}", "{_right: _left, _left: _right}"))
    assert told.splitlines()[0] == "leg.yaml:2: '_left: _right' is no pair of endings."


def test_a_mesh_is_reflected_and_keeps_its_name(read: Reader, tmp_path: Path) -> None:
    (tmp_path / "arm_right.stl").write_text("solid")
    shape = "    shapes: [{mesh: arm_right.stl, at: [0, 0, 0.1], turned: {axis: x, angle: 90}}]\n"
    body = read(BODY.replace("    length: [[0", shape + "    length: [[0"))
    right, left = body.segments[1].shapes[0], body.segments[3].shapes[0]
    assert (right.reflected, left.reflected) == (False, True)
    assert right.mesh == left.mesh == str(tmp_path / "arm_right.stl")
    assert left.at == (0, 0, -0.1)
    assert left.turned.axis == (-1, 0, 0)  # type: ignore[union-attr]


def test_equal_coordinates_on_both_sides_are_mirrored_postures(read: Reader) -> None:
    """The law behind every sign: reflected in z = 0, the right side's markers are the left's."""
    random = np.random.default_rng(11)
    body = read(BODY.replace("length: [[0, 0, 0.01], EL_right]", "shapes: []"))
    kinematics = Kinematics(body)
    markers = ca.Function(
        "markers",
        [kinematics.scalars, kinematics.quaternions, kinematics.numbers],
        [kinematics.marker_positions],
    )
    numbers = sized_numbers(body, np.eye(3))
    names = kinematics.freedoms.scalars
    sides = {name: random.normal() for name in names if name.endswith("_right")}
    scalars = [sides[name.replace("_left", "_right")] for name in names]
    right = random.normal(size=4)
    right /= np.linalg.norm(right)
    left = right * [1, -1, -1, 1]  # a rotation vector is axial, as a rotation axis is
    assert kinematics.freedoms.balls == ("shoulder_right", "shoulder_left")
    places = markers(scalars, [*right, *left], numbers).full().reshape(-1, 3)
    where = dict(zip(body.marker_names, places, strict=True))
    for name in ("EL", "wrist"):
        expected = where[f"{name}_right"] * [1, 1, -1]
        np.testing.assert_allclose(where[f"{name}_left"], expected, atol=1e-12)
        assert abs(where[f"{name}_left"]).min() > 0.001


def test_mirroring_the_mirrored_side_gives_back_the_first(tmp_path: Path) -> None:
    """Mirroring twice is the identity: of all that a file can say on one side."""
    extra = """\
ties:
  grip_right: {point: [hand_right, [1, 2, 3]], meets: [trunk, AC_left]}
  wall_right: {point: [trunk, SN], on_plane: {of: hand_right, through: [1, 2, 3], normal: [1, 2, 3]}}
  ball_right: {point: [trunk, SN], on_ellipsoid: {of: arm_right, centre: EL_right, radii: [1, 2, 3]}}
  rod_right: {point: [hand_right, [1, 2, 3]], stays: {distance: 1, from: [trunk, AC_right]}}
sizes: {arm_right: {factors: [1, 2, 3], sd: [1, 2, 3]}}
"""
    full = (
        (BODY + extra)
        .replace("axial_right]}}", "axial_right]}, cone: 150, twist: [-100, 70]}\n    placed: [1, 2, 3]")
        .replace("    at: [0, -0.3, 0.03]\n", "    at: [0, -0.3, 0.03]\n    axis_turn: [1, 2, 3]\n")
        .replace("  standing:", "  joints: {elbow_right: {place_sd: 0.01, axis_sd: 2}}\n  standing:")
    )  # fmt: skip
    (tmp_path / "right.yaml").write_text(full)
    both = load_tree(tmp_path / "right.yaml")
    left_only = _without_right(both)
    assert len(str(left_only)) < 0.7 * len(str(both))
    with (tmp_path / "left.yaml").open("w") as file:
        YAML().dump({"condyle": 1, "mirror": {"_left": "_right"}, **left_only}, file)
    assert load_tree(tmp_path / "left.yaml") == both


def _without_right(value: object) -> dict[str, object]:
    """A tree without its entries whose names end in _right."""
    assert isinstance(value, dict)
    return {
        key: _without_right(child) if isinstance(child, dict) else child
        for key, child in value.items()
        if not key.endswith("_right")
    }
