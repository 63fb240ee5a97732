from __future__ import annotations

from collections.abc import Callable
from math import inf, isnan, radians

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from condyle.model import load_skeleton
from condyle.model.skeleton import Floating, Moves, Polynomial, Skeleton, Spherical, Spline

Reader = Callable[..., Skeleton]

# The blocks of the language page that this version takes, around the names they need.
PAGE = """\
condyle: 1                       # language version
name: swing leg
about: One leg for the kicking study; the knee slides on the femur as it flexes.
sources: [de Leva 1996, Wu et al. 2002]
mirror: {_right: _left}          # every entry named ..._right gets a ..._left twin
person: {stature: 1.75, mass: 72}    # whom the numbers below describe, before sizing

segments:
  pelvis: {}
  thorax: {}
  upper_arm_right: {}
  shank_right: {}
  patella_right: {}
  forearm_right: {}
  thigh_right:
    mass_share: 0.1416           # of body mass
    centre_of_mass: [0, -0.18, 0]
    gyration: [0.14, 0.063, 0.14]        # radii about the centre of mass, for turning about x, y, z
    landmarks:
      FE_lateral_right: [0, -0.42, 0.045]
      FE_medial_right:  [0, -0.42, -0.045]
    length: [[0, 0, 0], [0, -0.42, 0]]   # what a tape would measure

joints:
  root:
    from: laboratory             # reserved name
    to: pelvis
    floating: {position: [pelvis_x, pelvis_y, pelvis_z],
               angles: {sequence: [y, x, -z], names: [pelvic_rotation, pelvic_obliquity, pelvic_tilt]}}
  shoulder_right:
    from: thorax
    to: upper_arm_right
    at: [-0.02, -0.03, 0.17]     # joint centre in the parent; default [0, 0, 0]
    in_child: [0, 0, 0]          # the same centre in the child; default [0, 0, 0]
    spherical: {angles: {sequence: [y, -x, y], names: [shoulder_plane_right, shoulder_elevation_right, shoulder_axial_right]},
                rest_sd: 60}
  knee_right:
    from: thigh_right
    to: shank_right
    at: [0, -0.42, 0]
    turned: {axis: x, angle: 3}  # fixed turn of the joint's frame in the parent
    moves:                       # elementary moves, applied in order from parent to child
      - {rotate: -z, coordinate: knee_flexion_right, range: [-5, 150], rest: 5}
      - {translate: x, follows: knee_flexion_right, spline: [[0, 0], [30, 0.004], [60, 0.001], [120, -0.012]]}
      - {rotate: y, coordinate: knee_axial_right, follows: knee_flexion_right, polynomial: [0, 0.18, -0.0011], between: [0, 120]}
  patella_right: {from: thigh_right, to: patella_right, fixed: true, at: [0.04, -0.40, 0]}
  trunk: {from: pelvis, to: thorax, fixed: true}
  elbow_right: {from: upper_arm_right, to: forearm_right, moves: [{rotate: y, coordinate: forearm_rotation_right}]}
  hip_right: {from: pelvis, to: thigh_right, fixed: true}

coordinates:                     # optional: change what a joint declared, by name
  knee_flexion_right: {range: [0, 140], rest: 10, rest_sd: 60}
  forearm_rotation_right: {held: 0}          # taken out of the fit, at this value

markers:
  FE_lateral_right: {segment: thigh_right, at: FE_lateral_right}
  thigh_a_right: {segment: thigh_right, at: [0.06, -0.2, 0.07], placed_within: 0.05, sd: 0.012}
  cluster_1_right: {segment: shank_right}    # place unknown: found from the static

sizing:                          # what may differ between people, and by how much
  factor_sd: 0.08                # spread of a size factor about this person's overall scale
  segments:
    thigh_right: {along: [y], across: [x, z], with: thigh_left}    # one length and one girth factor
  standing: {knee_flexion_right: [5, 5]}     # what is expected of a coordinate in the static
"""


def test_the_page_s_own_example_is_read(read: Reader) -> None:
    skeleton = read(PAGE)
    assert skeleton.about.startswith("One leg")
    assert skeleton.sources == ("de Leva 1996", "Wu et al. 2002")
    thigh = next(s for s in skeleton.segments if s.name == "thigh_right")
    assert thigh.mass == pytest.approx(0.1416 * 72)
    assert thigh.mass_share == 0.1416
    knee = next(j for j in skeleton.joints if j.name == "knee_right")
    assert isinstance(knee.motion, Moves)
    assert [move.coordinate for move in knee.motion.moves] == [
        "knee_flexion_right", None, "knee_axial_right",
    ]  # fmt: skip
    assert knee.turned.angle == pytest.approx(radians(3))  # type: ignore[union-attr]
    flexion, axial = map(skeleton.coordinate, ("knee_flexion_right", "knee_axial_right"))
    assert (flexion.lower, flexion.upper) == pytest.approx((0, radians(140)))
    assert (flexion.rest, flexion.rest_sd) == pytest.approx((radians(10), radians(60)))
    assert axial.follows == "knee_flexion_right"
    assert not axial.has_range
    assert skeleton.coordinate("forearm_rotation_right").held == 0
    assert [m.placed_within for m in skeleton.markers[:3]] == [0.010, 0.05, 0.05]
    assert [m.sd for m in skeleton.markers[:3]] == [0.006, 0.012, 0.006]
    assert skeleton.markers[0].landmark == "FE_lateral_right"
    assert skeleton.markers[2].at is None


def test_floating_and_spherical_joints_report_as_told(read: Reader) -> None:
    skeleton = read(PAGE)
    root, shoulder = (
        next(j.motion for j in skeleton.joints if j.name == name)
        for name in ("root", "shoulder_right")
    )
    assert isinstance(root, Floating)
    assert root.position == ("pelvis_x", "pelvis_y", "pelvis_z")
    assert (root.angles.axes, root.angles.signs) == ((1, 0, 2), (1, 1, -1))
    assert isinstance(shoulder, Spherical)
    assert shoulder.rest_sd == pytest.approx(radians(60))
    assert skeleton.coordinate("pelvis_x").unit == "m"


def test_functions_are_rewritten_for_radians_and_metres(read: Reader) -> None:
    skeleton = read(PAGE)
    knee = next(j.motion for j in skeleton.joints if j.name == "knee_right")
    assert isinstance(knee, Moves)
    slide, axial = knee.moves[1].function, knee.moves[2].function
    assert isinstance(slide, Spline)
    assert slide.points[1] == pytest.approx((radians(30), 0.004))
    assert isinstance(axial, Polynomial)
    assert axial.between == pytest.approx((0, radians(120)))


@given(
    st.lists(st.floats(-3, 3), min_size=1, max_size=5),
    st.sampled_from(["rotate", "translate"]),
    st.sampled_from(["rotate", "translate"]),
    st.floats(-120, 120),
)
def test_a_polynomial_means_the_same_in_either_units(
    coefficients: list[float], driver: str, driven: str, x: float
) -> None:
    from condyle.model.building import _function
    from condyle.model.joint_language import MoveEntry

    to_input = radians(1) if driver == "rotate" else 1.0
    to_output = radians(1) if driven == "rotate" else 1.0
    move = MoveEntry.model_validate({"polynomial": coefficients})
    found = _function(move, to_input, to_output)
    assert isinstance(found, Polynomial)
    meant = np.polynomial.polynomial.polyval(x, coefficients) * to_output
    got = np.polynomial.polynomial.polyval(x * to_input, found.coefficients)
    assert got == pytest.approx(meant, rel=1e-9, abs=1e-6)


def test_joints_come_parents_first_else_as_they_are_written(read: Reader) -> None:
    order = [joint.name for joint in read(PAGE).joints]
    assert order == [
        "root", "trunk", "shoulder_right", "elbow_right", "hip_right", "knee_right", "patella_right",
        "shoulder_left", "elbow_left", "hip_left", "knee_left", "patella_left",
    ]  # fmt: skip


@pytest.mark.parametrize(
    ("limits", "rest"),
    [("range: [-30, 120]", 0.0), ("range: [10, 30]", 20.0), ("range: [-40, -20]", -30.0)],
)
def test_rest_is_zero_or_the_middle_of_a_range_that_excludes_it(
    read: Reader, leg: str, limits: str, rest: float
) -> None:
    changed = leg.replace("range: [-30, 120], rest: 5", limits)
    assert read(changed).coordinate("hip_flexion").rest == pytest.approx(radians(rest))


def test_without_range_a_coordinate_is_unlimited(read: Reader, leg: str) -> None:
    hip = read(leg.replace(", range: [-30, 120], rest: 5", "")).coordinate("hip_flexion")
    assert (hip.lower, hip.upper, hip.held) == (-inf, inf, None)


def test_the_default_length_runs_from_a_joint_centre_to_that_of_the_first_child(
    read: Reader, leg: str
) -> None:
    skeleton = read(leg.replace("    at: [0, 0, 0.09]", "    at: ASIS\n    in_child: [0, 0.01, 0]"))
    pelvis, thigh, shank = skeleton.segments
    assert pelvis.length == ((0, 0, 0), (0.05, 0.09, 0.12))
    assert thigh.length == ((0, 0.01, 0), (0, -0.42, 0))
    assert shank.length is None


def test_a_coordinate_may_drive_moves_in_several_joints(read: Reader, leg: str) -> None:
    shared = leg.replace(
        "coordinate: knee_flexion, range: [-5, 150]", "coordinate: hip_flexion"
    ).replace("follows: knee_flexion", "follows: hip_flexion")
    names = [c.name for c in read(shared).coordinates]
    assert names == ["px", "py", "pz", "hip_flexion", "knee_axial"]


def test_others_may_follow_a_following_coordinate_wherever_it_stands(
    read: Reader, leg: str
) -> None:
    chained = leg.replace("follows: knee_flexion, spline", "follows: knee_axial, spline")
    knee = read(chained).joints[2].motion
    assert isinstance(knee, Moves)
    assert knee.moves[1].follows == "knee_axial"


def test_a_planar_model_stands_upright_and_may_have_several_roots(read: Reader, leg: str) -> None:
    planar = leg.replace(
        "floating: {position: [px, py, pz], angles: {sequence: [y, x, -z], names: [turn, side, tilt]}}",
        "turned: upright\n    moves: [{translate: x, coordinate: px}, {rotate: z, coordinate: tilt}]",
    ).replace("joints:\n", "joints:\n  bar: {from: laboratory, to: bar, fixed: true}\n", 1)
    skeleton = read(planar.replace("  shank: {}", "  shank: {}\n  bar: {}"))
    assert skeleton.segment_names == ("bar", "pelvis", "thigh", "shank")
    assert skeleton.joints[1].turned == "upright"
    assert skeleton.coordinate("px").unit == "m"


SIZINGS = {
    "": ["pelvis", "thigh", "shank"],
    "thigh: {along: [y]}": ["pelvis", "thigh along y", "thigh across xz", "shank"],
    "thigh: {across: [x, z]}": ["pelvis", "thigh along y", "thigh across xz", "shank"],
    "thigh: {along: [x, y, z], across: []}": ["pelvis", "thigh along xyz", "shank"],
    "thigh: {with: shank}": ["pelvis", "thigh+shank"],
    "thigh: {along: [y], with: shank}": [
        "pelvis", "thigh+shank along y", "thigh+shank across xz",
    ],
    "thigh: {along: [y], with: shank}, shank: {with: thigh}": [
        "pelvis", "thigh+shank along y", "thigh+shank across xz",
    ],
    "thigh: {along: [y], with: shank}, shank: {along: [x], with: pelvis}": [
        "pelvis+thigh+shank along x", "pelvis+thigh+shank across yz",
    ],
}  # fmt: skip


@pytest.mark.parametrize(("sizing", "groups"), SIZINGS.items())
def test_size_groups_cover_every_axis_of_every_segment_once(
    read: Reader, leg: str, sizing: str, groups: list[str]
) -> None:
    skeleton = read(leg + f"sizing: {{segments: {{{sizing}}}}}\n")
    assert [group.name for group in skeleton.sizing.groups] == groups
    members = [member for group in skeleton.sizing.groups for member in group.members]
    assert sorted(members) == sorted((n, axis) for n in skeleton.segment_names for axis in range(3))
    assert skeleton.sizing.factor_sd == 0.08


def test_joined_segments_share_along_with_along_and_across_with_across(
    read: Reader, leg: str
) -> None:
    joined = "sizing: {segments: {thigh: {along: [y], with: shank}, shank: {along: [x]}}}\n"
    groups = read(leg + joined).sizing.groups
    assert groups[1].members == (("thigh", 1), ("shank", 0))
    assert groups[2].members == (("thigh", 0), ("thigh", 2), ("shank", 1), ("shank", 2))


def test_what_is_expected_in_the_static_is_in_radians_and_metres(read: Reader, leg: str) -> None:
    expected = "sizing: {standing: {hip_flexion: [5, 4], py: [1, 0.1], tilt: [3, 2]}}\n"
    standing = read(leg + expected).sizing.standing
    assert standing["hip_flexion"].sd == pytest.approx(radians(4))
    assert (standing["py"].value, standing["py"].sd) == (1, 0.1)
    assert standing["tilt"].value == pytest.approx(radians(3))


def test_a_sized_file_keeps_who_and_how(read: Reader, leg: str) -> None:
    sized = leg.replace(
        "{segment: shank}", "{segment: shank, placed: [0, 1, 2], placed_sd: [0, 0, 1]}"
    )
    sized += (
        "sizes: {thigh: {factors: [1, 1.1, 1], sd: [0.1, 0.1, 0.1]}, shank: {factors: [2, 2, 2]}}\n"
    )
    sized += "subject: {mass: 61}\nlabels: {ASIS: Hüfte}\nup: +Z\ncalibration: {static: a.c3d, n: [1, ~]}\n"
    found = read(sized)
    assert found.sizes["thigh"].factors == (1, 1.1, 1)
    assert found.sizes["shank"].sd is None
    assert found.subject is not None
    assert isnan(found.subject.stature)
    assert found.subject.mass == 61
    assert (found.labels, found.up) == ({"ASIS": "Hüfte"}, "+Z")
    assert found.calibration == {"static": "a.c3d", "n": [1, None]}
    assert found.markers[2].placed == (0, 1, 2)


def test_the_shipped_model_is_sound_and_symmetric() -> None:
    skeleton = load_skeleton("lower_limbs")
    rights = [m for m in skeleton.markers if m.name.endswith("_right")]
    lefts = {m.name: m for m in skeleton.markers if m.name.endswith("_left")}
    assert len(rights) == len(lefts) > 10
    for right in rights:
        left = lefts[right.name.replace("_right", "_left")]
        if right.at is not None and left.at is not None:
            assert left.at == (right.at[0], right.at[1], -right.at[2])
