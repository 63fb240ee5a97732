"""The picture of a model: arrows that point the right way, names that do not lie on one another."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from scipy.spatial.transform import Rotation

from condyle.model import load_skeleton
from condyle.model.kinematics import angle_report
from condyle.solver.posture import Posture
from condyle.viz.coordinate_senses import RestingModel, coordinate_senses, resting_model
from condyle.viz.figure import build_figure
from condyle.viz.model_sheet import AXIS_COLOURS, draw_model_sheet, range_text
from condyle.viz.palette import ORANGE
from condyle.viz.sheet_panels import plan_panels
from condyle.viz.side_labels import Label, set_labels, spread
from condyle.viz.turn_arrows import SWEEP, arrows_of

SMALL = 1e-3


def _moved(resting: RestingModel, name: str, by: float) -> np.ndarray:
    """(segments, 4, 4): the poses with one coordinate or angle a little larger.

    Reported angles become rotations by scipy's intrinsic Euler angles, not by the drawing's own step.
    """
    freedoms = resting.functions.kinematics.freedoms
    scalars, quaternions = resting.posture.scalars.copy(), resting.posture.quaternions.copy()
    if name in freedoms.scalars:
        scalars[0, freedoms.scalars.index(name)] += by
    for ball, joint_name in enumerate(freedoms.balls):
        report = angle_report(next(j for j in resting.skeleton.joints if j.name == joint_name))
        angles = np.array([by * (name == own) for own in report.names]) * report.signs
        sequence = "".join("XYZ"[axis] for axis in report.axes)
        turned = Rotation.from_euler(sequence, angles)
        quaternions[0, ball] = turned.as_quat(scalar_first=True)
    posture = Posture(scalars, quaternions)
    return np.asarray(resting.functions.poses(posture, resting.numbers)[0])


@pytest.mark.parametrize("name", ["lower_limbs", "full_body", "planar_linkage"])
def test_a_point_at_an_arrow_s_tail_goes_towards_its_head(name: str) -> None:
    resting = resting_model(load_skeleton(name))
    senses = coordinate_senses(resting)
    camera = np.array([0.6, 0.2, 0.77])
    bodies = {
        s: pose[:3, 3]
        for s, pose in zip(resting.skeleton.segment_names, resting.poses(), strict=True)
    }
    arrows = arrows_of(
        senses, size=1.7, roots=frozenset({"root"}), bodies=bodies, towards_camera=camera
    )
    before = resting.poses()
    for arrow in arrows:
        index = resting.skeleton.segment_index(arrow.sense.segment)
        after = _moved(resting, arrow.sense.name, SMALL)
        for tail, ahead in zip(arrow.path[:-1], arrow.path[1:], strict=True):
            point = np.linalg.inv(before[index]) @ np.append(tail, 1.0)
            went = (after[index] @ point)[:3] - tail
            cosine = went @ (ahead - tail) / np.linalg.norm(went) / np.linalg.norm(ahead - tail)
            assert cosine > 0.98, arrow.sense.name


def test_every_free_number_has_one_arrow_and_followers_none() -> None:
    skeleton = load_skeleton("lower_limbs")
    names = [sense.name for sense in coordinate_senses(resting_model(skeleton))]
    assert len(names) == len(set(names)) == 20
    assert "knee_flexion_right" in names
    assert "knee_adduction_right" not in names
    assert {"pelvic_tilt", "pelvis_y"} <= set(names)


def test_senses_are_those_of_the_model_file() -> None:
    """By hand: the hip flexes about +z through its centre, the knee about -z (ISB axes)."""
    senses = {s.name: s for s in coordinate_senses(resting_model(load_skeleton("lower_limbs")))}
    hip = senses["hip_flexion_right"]
    np.testing.assert_allclose(hip.direction, [0, 0, 1], atol=1e-8)
    np.testing.assert_allclose(hip.centre, [0, 0, 0.0898], atol=1e-6)
    tilt = senses["pelvic_tilt"]
    np.testing.assert_allclose(tilt.direction, [0, 0, -1], atol=1e-8)
    # The knee's polynomials at straight: 0.0791 of adduction and 0.3695 of rotation a degree.
    knee = np.array([0.0791, 0.3695, -1.0])
    np.testing.assert_allclose(
        senses["knee_flexion_right"].direction, knee / np.linalg.norm(knee), atol=1e-4
    )
    subtalar = senses["subtalar_inversion_right"].direction
    np.testing.assert_allclose(subtalar, [0.7144, 0.6691, -0.2048], atol=2e-4)
    height = senses["pelvis_y"]
    assert not height.turns
    np.testing.assert_allclose(height.direction, [0, 1, 0], atol=1e-8)
    assert range_text(height) == "slide, no range"
    assert range_text(hip) == "-45 to 165 deg"


def test_a_turn_s_arrow_goes_most_of_the_way_round_its_axis() -> None:
    senses = [
        s for s in coordinate_senses(resting_model(load_skeleton("planar_linkage"))) if s.turns
    ]
    bodies = {sense.segment: np.zeros(3) for sense in senses}
    camera = np.array([0.3, 0.3, 0.9])
    for arrow in arrows_of(
        senses,
        size=1.0,
        roots=frozenset(),
        bodies=bodies,
        towards_camera=camera / np.linalg.norm(camera),
    ):
        middle = arrow.sense.centre + arrow.sense.direction * float(
            (arrow.path[0] - arrow.sense.centre) @ arrow.sense.direction
        )
        spokes = arrow.path - middle
        reach = np.linalg.norm(spokes, axis=1)
        np.testing.assert_allclose(reach, reach[0])
        np.testing.assert_allclose(spokes @ arrow.sense.direction, 0, atol=1e-12)
        swept = np.arctan2(
            np.cross(spokes[:-1], spokes[1:]) @ arrow.sense.direction,
            (spokes[:-1] * spokes[1:]).sum(axis=1),
        )
        assert swept.sum() == pytest.approx(SWEEP)


def test_every_coordinate_and_marker_is_named_once() -> None:
    for name in ("lower_limbs", "full_body", "planar_linkage"):
        skeleton = load_skeleton(name)
        resting = resting_model(skeleton)
        senses = coordinate_senses(resting)
        panels = plan_panels(resting, build_figure(resting.motion(with_markers=False)), senses)
        shown = [sense.name for panel in panels for sense in panel.senses]
        assert sorted(shown) == sorted(sense.name for sense in senses)
        named = [marker for panel in panels for marker in panel.names]
        assert sorted(named) == sorted(skeleton.marker_names)


def test_names_beside_a_figure_keep_their_distance_and_their_order() -> None:
    rng = np.random.default_rng(1)
    labels = [Label(f"n{i}", "", (0, 0, 0), rng.uniform(0, 400, (1, 2))) for i in range(24)]
    placed = set_labels(labels, middle=200.0, top=20.0, bottom=480.0, gap=30.0)
    assert len(placed) == 24
    for right in (False, True):
        own = [one for one in placed if one.right == right]
        heights = np.array([one.y for one in own])
        places = np.array([one.place[1] for one in own])
        assert (np.diff(heights) >= 30.0 - 1e-9).all()
        assert (np.diff(places) >= 0).all()
        assert heights.min() >= 20.0 - 1e-9
        assert heights.max() <= 480.0 + 1e-9


def test_spread_names_stay_where_they_are_wanted_and_share_what_they_cannot_have() -> None:
    """Worked by hand: least squares under the gaps; alone where there is room."""
    np.testing.assert_allclose(spread(np.array([10.0, 50.0]), gap=20, low=0, high=99), [10, 50])
    np.testing.assert_allclose(spread(np.array([30.0, 30.0]), gap=20, low=0, high=99), [20, 40])
    np.testing.assert_allclose(spread(np.array([0.0, 0.0]), gap=20, low=0, high=99), [0, 20])


POST = """
condyle: 1
name: post
segments: {foot: {length: [[0, 0, 0], [0, 0.4, 0]]}, post: {landmarks: {top: [0, 0.5, 0]}}}
joints:
  ground: {from: laboratory, to: foot, fixed: true}
  socket:
    from: foot
    to: post
    at: [0, 0.2, 0]
    spherical: {angles: {sequence: [z, x, y], names: [nod, lean, spin]}}
markers: {top: {segment: post, at: [0.1, 0.5, 0]}, side: {segment: post, at: [0, 0.2, 0.1]}}
"""


def test_the_sheet_shows_arrows_of_all_axes_and_markers(tmp_path: Path) -> None:
    path = tmp_path / "post.yaml"
    path.write_text(POST)
    image = np.asarray(draw_model_sheet(load_skeleton(path))).astype(int)
    for colour in (*AXIS_COLOURS, ORANGE):
        hue = np.array(colour) / max(colour)
        shade = image / np.maximum(image.max(axis=2, keepdims=True), 1)
        near = (np.abs(shade - hue) < 0.12).all(axis=2) & (image.max(axis=2) > 70)
        assert near[140:-120].sum() > 300, colour


def test_a_model_without_markers_or_freedoms_is_drawn_too(tmp_path: Path) -> None:
    path = tmp_path / "stone.yaml"
    path.write_text(
        "condyle: 1\nname: stone\nsegments: {stone: {}}\n"
        "joints: {ground: {from: laboratory, to: stone, fixed: true}}\n"
    )
    assert draw_model_sheet(load_skeleton(path)).size[0] > 1000
