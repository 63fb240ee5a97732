"""Functional centres and axes on movements made up from a known joint."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from numpy.typing import NDArray
from scipy.spatial.transform import Rotation

from condyle.model.errors import FitError
from condyle.recording.recording import Recording
from condyle.solver.cluster_poses import cluster_poses
from condyle.solver.functional_joints import symmetrical_axis, symmetrical_centre
from condyle.solver.joints_from_movement import joint_axis, joint_centre
from condyle.solver.rigid_alignment import align
from condyle.solver.sphere_centre import sphere_centre

FloatArray = NDArray[np.float64]
# Two clusters 100 mm wide; the joint 0.14 m from one and 0.2 m from the other.
PLATE = np.array([[0.05, 0, 0.05], [0.05, 0.01, -0.05], [-0.05, 0, 0.05], [-0.05, 0, -0.05]])
IN_PARENT, IN_CHILD = np.array([-0.05, -0.10, 0.08]), np.array([0.0, 0.20, 0.03])
SEEDS, FEWER_SEEDS = 200, 80


@dataclass(frozen=True)
class Movement:
    """Two segments joined at one point: true poses, and what cameras see of their markers."""

    parent: FloatArray  # (frames, 4, 4) laboratory from parent
    child: FloatArray
    parent_markers: FloatArray  # (frames, markers, 3) m
    child_markers: FloatArray
    axis_in_parent: FloatArray  # of the largest arc

    @property
    def centre(self) -> FloatArray:
        return carry(self.parent, IN_PARENT[None])[:, 0]


def movement(arcs: list[float], seed: int, *, noise: float = 0.0, frames: int = 200) -> Movement:
    """A joint turns within arcs (degrees) about three axes, while both segments go about."""
    rng = np.random.default_rng(seed)
    rest = Rotation.random(rng=rng)
    turns = np.radians(arcs) / 2 * rng.uniform(-1, 1, (frames, 3))
    relative = np.tile(np.eye(4), (frames, 1, 1))
    relative[:, :3, :3] = (rest * Rotation.from_rotvec(turns)).as_matrix()
    relative[:, :3, 3] = IN_PARENT - relative[:, :3, :3] @ IN_CHILD
    parent = np.tile(np.eye(4), (frames, 1, 1))
    parent[:, :3, :3] = Rotation.from_rotvec(0.3 * rng.standard_normal((frames, 3))).as_matrix()
    parent[:, :3, 3] = rng.normal(0, 0.3, (frames, 3))
    child = parent @ relative
    seen, of_child = (
        carry(pose, PLATE) + noise * rng.standard_normal((frames, 4, 3)) for pose in (parent, child)
    )
    return Movement(parent, child, seen, of_child, rest.as_matrix()[:, 0])


def carry(poses: FloatArray, points: FloatArray) -> FloatArray:
    turned: FloatArray = np.swapaxes(poses[:, :3, :3] @ points.T, 1, 2)
    return turned + poses[:, None, :3, 3]


def aligned(markers: FloatArray) -> FloatArray:
    """Poses of the plate, its shape known."""
    found = align(PLATE, markers, np.ones(markers.shape[:2]))
    poses = np.tile(np.eye(4), (len(markers), 1, 1))
    poses[:, :3, :3], poses[:, :3, 3] = found.rotation, found.translation
    return poses


def angle(one: FloatArray, other: FloatArray) -> FloatArray:
    """Degrees between lines."""
    degrees: FloatArray = np.degrees(np.arcsin(np.linalg.norm(np.cross(one, other), axis=-1)))
    return degrees


@settings(max_examples=30, deadline=None)
@given(seed=st.integers(0, 2**32 - 1))
def test_without_noise_every_method_gives_the_centre(seed: int) -> None:
    made = movement([45, 45, 10], seed)
    found = symmetrical_centre(made.parent, made.child)
    np.testing.assert_allclose(found.in_parent, IN_PARENT, atol=1e-9)
    np.testing.assert_allclose(found.in_child, IN_CHILD, atol=1e-9)
    np.testing.assert_allclose(found.in_laboratory, made.centre, atol=1e-9)
    spheres = sphere_centre(made.parent, made.child_markers)
    np.testing.assert_allclose(spheres.in_parent, IN_PARENT, atol=1e-9)
    np.testing.assert_allclose(spheres.in_laboratory, made.centre, atol=1e-9)
    assert max(found.residual_rms, spheres.residual_rms) < 1e-9
    assert found.doubts == spheres.doubts == ()


@settings(max_examples=30, deadline=None)
@given(seed=st.integers(0, 2**32 - 1))
def test_without_noise_the_hinge_gives_its_axis_and_a_point_on_it(seed: int) -> None:
    made = movement([45, 0, 0], seed)
    found = symmetrical_axis(made.parent, made.child)
    assert np.linalg.norm(np.cross(found.direction_in_parent, made.axis_in_parent)) < 1e-9
    off = np.cross(found.point_in_parent - IN_PARENT, made.axis_in_parent)
    assert np.linalg.norm(off) < 1e-9
    # The same line and point in the child: its axis is the child's own first one.
    assert np.linalg.norm(np.cross(found.direction_in_child, [1.0, 0, 0])) < 1e-9
    np.testing.assert_allclose(
        carry(made.child, found.point_in_child[None])[:, 0], found.point_in_laboratory, atol=1e-9
    )
    assert found.residual_rms < 1e-9
    assert found.doubts == ()


# Ehrig et al. 2006: with 1 mm of noise most methods come within 3 mm, given enough range; here
# with the 45 degrees that they ask for. Poses from markers whose shape nobody knows.
def test_with_1_mm_of_noise_and_45_degrees_centres_err_by_less_than_3_mm() -> None:
    score: list[float] = []
    spheres: list[float] = []
    for seed in range(SEEDS):
        made = movement([45, 45, 10], seed, noise=1e-3)
        parent, child = cluster_poses(made.parent_markers), cluster_poses(made.child_markers)
        for found, errors in (
            (symmetrical_centre(parent, child), score),
            (sphere_centre(parent, made.child_markers), spheres),
        ):
            assert found.doubts == ()
            errors.append(np.linalg.norm(found.in_laboratory - made.centre, axis=1).mean())
    assert np.mean(score) < 0.003
    assert np.percentile(score, 95) < 0.0035
    assert np.mean(spheres) < 0.003


def test_with_1_mm_of_noise_and_45_degrees_axes_err_by_less_than_1_degree() -> None:
    errors, told = [], []
    for seed in range(SEEDS):
        made = movement([45, 0, 0], seed, noise=1e-3)
        found = symmetrical_axis(
            cluster_poses(made.parent_markers), cluster_poses(made.child_markers)
        )
        assert found.doubts == ()
        in_laboratory = made.parent[:, :3, :3] @ made.axis_in_parent
        errors.append(angle(in_laboratory, found.direction_in_laboratory).mean())
        told.append(np.degrees(found.sd))
    assert np.mean(errors) < 1
    assert np.percentile(errors, 95) < 1
    assert 0.05 < np.mean(told) < 1


def test_the_stated_sd_of_a_centre_is_what_repeats_scatter() -> None:
    scores, bands = [], []
    for seed in range(FEWER_SEEDS):
        made = movement([60, 60, 10], seed, noise=1e-3)
        for fit in (
            symmetrical_centre(aligned(made.parent_markers), aligned(made.child_markers)),
            sphere_centre(made.parent, made.child_markers),
        ):
            scores.append(np.abs(fit.in_parent - IN_PARENT) / fit.sd)
            bands.append(fit.sd.mean())
    covered = (np.array(scores) < 1.96).mean()
    assert 0.88 < covered < 0.98
    assert np.mean(bands) < 0.002


# Halvorsen 2003: without the correction noise makes spheres look smaller. With white noise and a still
# parent nothing else is in the way, so the mean error over many seeds vanishes.
def test_the_spheres_centre_is_not_drawn_towards_the_markers() -> None:
    errors = []
    for seed in range(FEWER_SEEDS):
        made = movement([30, 30, 5], seed, noise=1e-3)
        still = (
            np.linalg.inv(made.parent)[:, None, :3, :3]
            @ (made.child_markers - made.parent[:, None, :3, 3])[..., None]
        )
        fit = sphere_centre(np.tile(np.eye(4), (len(still), 1, 1)), still[..., 0])
        towards = still[..., 0].mean(axis=(0, 1)) - IN_PARENT
        errors.append((fit.in_parent - IN_PARENT) @ towards / np.linalg.norm(towards))
    assert abs(np.mean(errors)) < 3 * np.std(errors) / np.sqrt(FEWER_SEEDS) + 5e-5
    assert np.std(errors) < 0.003


@settings(max_examples=20, deadline=None)
@given(seed=st.integers(0, 2**32 - 1))
def test_the_answer_is_the_same_whichever_segment_moves(seed: int) -> None:
    made = movement([50, 40, 10], seed, noise=1e-3)
    parent, child = aligned(made.parent_markers), aligned(made.child_markers)
    both = symmetrical_centre(parent, child)
    still = np.tile(np.eye(4), (len(parent), 1, 1))
    relative: FloatArray = np.linalg.inv(parent) @ child
    child_moves = symmetrical_centre(still, relative)
    parent_moves = symmetrical_centre(np.linalg.inv(relative), still)
    swapped = symmetrical_centre(child, parent)
    for other in (child_moves, parent_moves):
        np.testing.assert_allclose(other.in_parent, both.in_parent, atol=1e-9)
        np.testing.assert_allclose(other.in_child, both.in_child, atol=1e-9)
    np.testing.assert_allclose(swapped.in_parent, both.in_child, atol=1e-9)
    np.testing.assert_allclose(swapped.in_child, both.in_parent, atol=1e-9)
    axis, back = symmetrical_axis(parent, child), symmetrical_axis(child, parent)
    cross = np.cross(axis.direction_in_parent, back.direction_in_child)
    assert np.linalg.norm(cross) < 1e-9
    np.testing.assert_allclose(back.point_in_child, axis.point_in_parent, atol=1e-9)


@pytest.mark.parametrize("noise", [0.0, 1e-3])
def test_a_planar_motion_is_flagged_and_leaves_the_point_within_its_line(noise: float) -> None:
    made = movement([60, 0, 0], 3, noise=noise)
    parent, child = aligned(made.parent_markers), aligned(made.child_markers)
    for found in (symmetrical_centre(parent, child), sphere_centre(parent, made.child_markers)):
        (doubt,) = found.doubts
        assert doubt.startswith("The motion is almost planar: 5")
        assert "add movement in a second plane" in doubt
        off = np.cross(found.in_parent - IN_PARENT, made.axis_in_parent)
        assert np.linalg.norm(off) < 0.002
    if noise == 0:
        exact = symmetrical_centre(made.parent, made.child)
        assert exact.conditioning < 1e-9
        assert np.isnan(exact.sd).any()


def test_a_small_motion_is_flagged_and_a_balls_motion_is_no_hinge() -> None:
    small = movement([12, 12, 5], 1, noise=1e-3)
    ball = movement([45, 45, 10], 1, noise=1e-3)
    tiny = symmetrical_centre(aligned(small.parent_markers), aligned(small.child_markers))
    assert tiny.doubts[0].startswith("The motion is too small to tell: the segments turned by 1")
    assert (
        symmetrical_axis(small.parent, small.child).doubts[0].startswith("The motion is too small")
    )
    assert (
        symmetrical_axis(ball.parent, ball.child).doubts[0].startswith("This is no hinge's motion")
    )


def test_arcs_are_the_range_that_holds_95_percent_of_the_frames() -> None:
    made = movement([50, 30, 10], 5, frames=4000)
    arcs = np.degrees(symmetrical_centre(made.parent, made.child).arcs)
    np.testing.assert_allclose(arcs, 0.95 * np.array([50, 30, 10]), rtol=0.05)


def test_cluster_poses_follow_the_segment_and_bear_missing_markers() -> None:
    made = movement([45, 45, 10], 8)
    markers = carry(made.child, np.vstack([PLATE, [0.02, 0.06, 0.01]]))
    rng = np.random.default_rng(8)
    for frame, marker in enumerate(rng.integers(0, 5, len(markers))):
        markers[frame, marker] = np.nan  # no frame is complete
    markers[20, :3] = np.nan
    poses = cluster_poses(markers)
    assert np.isnan(poses[20]).all()
    known = np.isfinite(poses).all(axis=(1, 2))
    assert known.sum() == len(markers) - 1
    child_from_cluster = np.linalg.inv(made.child[known]) @ poses[known]
    np.testing.assert_allclose(
        child_from_cluster, child_from_cluster[:1].repeat(known.sum(), 0), atol=1e-9
    )
    np.testing.assert_allclose(poses[0, :3, :3], np.eye(3), atol=1e-9)
    np.testing.assert_allclose(poses[0, :3, 3], np.nanmean(markers[0], axis=0), atol=1e-9)


def test_two_markers_or_a_line_of_them_give_no_pose() -> None:
    made = movement([45, 45, 10], 8)
    line = np.array([[0, 0, 0], [0.05, 0, 0], [0.1, 0, 0], [0.12, 0, 0]])
    assert np.isnan(cluster_poses(carry(made.child, line))).all()
    assert np.isnan(cluster_poses(made.child_markers[:, :2])).all()


def recording(made: Movement) -> Recording:
    positions = np.concatenate([made.parent_markers, made.child_markers], axis=1)
    shape = positions.shape[:2]
    labels = tuple(f"{segment}_{i}" for segment in ("pelvis", "thigh") for i in range(4))
    return Recording(
        "leg",
        "leg.c3d",
        100.0,
        1,
        labels,
        positions,
        np.full(shape, np.nan),
        np.zeros(shape, np.int64),
    )


def test_a_recording_and_names_of_markers_are_enough() -> None:
    made = movement([45, 45, 10], 4)
    of = {"parent": [f"pelvis_{i}" for i in range(4)], "child": [f"thigh_{i}" for i in range(3)]}
    for method in ("symmetrical", "spheres"):
        found = joint_centre(recording(made), **of, method=method)
        np.testing.assert_allclose(found.in_laboratory, made.centre, atol=1e-9)
    hinge = movement([45, 0, 0], 4)
    axis = joint_axis(recording(hinge), **of).direction_in_laboratory
    assert angle(axis, hinge.parent[:, :3, :3] @ hinge.axis_in_parent).max() < 1e-6


def test_wrong_input_gets_a_sentence() -> None:
    made = recording(movement([45, 45, 10], 4))
    pelvis, thigh = [f"pelvis_{i}" for i in range(4)], [f"thigh_{i}" for i in range(3)]
    with pytest.raises(
        FitError, match=r"leg.c3d has no marker 'thigh_9'.\n  Did you mean 'thigh_3'"
    ):
        joint_centre(made, parent=pelvis, child=[*thigh, "thigh_9"])
    with pytest.raises(FitError, match=r"the child has 2 markers.\n  Name 3 or more"):
        joint_axis(made, parent=pelvis, child=thigh[:2])
    with pytest.raises(FitError, match="no method is called 'score'"):
        joint_centre(made, parent=pelvis, child=thigh, method="score")  # type: ignore[arg-type]
    short = movement([45, 45, 10], 4, frames=9)
    with pytest.raises(FitError, match="both segments are known in 9 of 9 frames"):
        symmetrical_centre(short.parent, short.child)
