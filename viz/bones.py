"""Bones to draw: tapered limbs between the joint centres and landmarks a skeleton declares.

A segment whose model names meshes is drawn by them. Otherwise nothing is measured on bone: the
shapes only help the eye. Known ISB landmarks (Wu et al.
2002) turn a segment into a pelvis, thigh, shank, foot or toes; any other segment becomes a shaft
or a hub of shafts between its joint centres and landmarks, and one without either a small ball.
One mesh per segment in the segment's frame, built once: frames only move it.
"""

from __future__ import annotations

import warnings
from collections.abc import Callable, Sequence
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from condyle.model.meshes import GrownShape, load_mesh, place_mesh
from condyle.solver.results import FittedMotion
from condyle.viz.bone_depth import below_skin
from condyle.viz.foot_bones import foot, toes
from condyle.viz.leg_bones import shank, thigh
from condyle.viz.pelvic_girdle import pelvis
from condyle.viz.shapes import Ball, Limb, Shape, Surface, skin
from condyle.viz.skeleton_plan import NEAR, SegmentPlan, plan_segments

FloatArray = NDArray[np.float64]

BLEND = 0.012
"""m; how softly neighbouring parts grow together, for bones about as long as a thigh."""

HEAD_HEIGHT = 0.22
"""m; from the top of the neck to the crown where no landmark tells."""


def build_bones(motion: FittedMotion) -> tuple[Surface, ...]:
    """One surface per segment, in the segment's frame (m), in the order of the segments."""
    return tuple(
        mesh_surface(motion.shapes[plan.name])
        if has_meshes(motion, plan.name)
        else plain_bone(plan)
        for plan in plan_segments(motion)
    )


def plain_bone(plan: SegmentPlan) -> Surface:
    """The bone that a segment's joint centres and landmarks suggest."""
    shapes, blend = bone_shapes(plan)
    return skin(shapes, blend=blend)


def has_meshes(motion: FittedMotion, segment: str) -> bool:
    """Whether a segment has meshes and all are still there; warns where one is not.

    Results may have moved to a machine without the model: they can still be drawn.
    """
    meshes = [grown.shape.mesh for grown in motion.shapes.get(segment, ())]
    gone = [mesh for mesh in meshes if not Path(mesh).is_file()]
    for mesh in gone:
        warnings.warn(f"{mesh} is not there; {segment} is drawn as a plain bone", stacklevel=3)
    return bool(meshes) and not gone


def mesh_surface(shapes: Sequence[GrownShape]) -> Surface:
    """A segment's own meshes, placed and stretched (m), as one surface.

    Raises
    ------
    MeshError
        Where one is damaged.
    """
    placed = [place_mesh(load_mesh(grown.shape.mesh), grown) for grown in shapes]
    starts = np.cumsum([0, *(len(points) for points, _ in placed[:-1])])
    points = np.concatenate([points for points, _ in placed])
    faces = np.concatenate([f + start for (_, f), start in zip(placed, starts, strict=True)])
    return Surface(points, point_normals(points, faces), faces)


def point_normals(points: FloatArray, faces: NDArray[np.int64]) -> FloatArray:
    """(n, 3) Unit normals: those of the faces around each point, weighted by their areas."""
    corners = points[faces]
    across = np.cross(corners[:, 1] - corners[:, 0], corners[:, 2] - corners[:, 0])
    normals = np.zeros_like(points)
    np.add.at(normals, faces.ravel(), np.repeat(across, 3, axis=0))
    return np.asarray(normals / np.maximum(np.linalg.norm(normals, axis=1, keepdims=True), 1e-30))


def bone_shapes(plan: SegmentPlan) -> tuple[list[Shape], float]:
    """The parts of a segment's bone and how softly they blend (m)."""
    makers: tuple[Callable[[SegmentPlan], list[Shape]], ...] = (
        pelvis,
        thigh,
        shank,
        foot,
        toes,
        head,
    )
    for make in makers:
        shapes = make(plan)
        if shapes:
            return shapes, 0.006 if make in (foot, toes) else BLEND
    shapes = generic(plan)
    return shapes, min(BLEND, 1.5 * min(shape.thinnest for shape in shapes))


def head(plan: SegmentPlan) -> list[Shape]:
    """An egg on a short neck, up to the highest landmark where there is one."""
    if plan.name != "head":
        return []
    heights = [float(p[1] - plan.proximal[1]) for p in plan.landmarks.values()]
    height = float(np.clip(max(heights, default=HEAD_HEIGHT), 0.6 * HEAD_HEIGHT, HEAD_HEIGHT))
    middle = plan.proximal + np.array([0.02, 0.56, 0.0]) * [1.0, height, 1.0]
    return [
        Ball(middle, np.array([0.40, 0.44, 0.32]) * height),
        Limb(plan.proximal, middle, 0.018, 0.03),
    ]


def generic(plan: SegmentPlan) -> list[Shape]:
    """Shafts from the joint to each child, else to where the landmarks lead, else a small ball."""
    ends = plan.far_centres() or landmark_end(plan)
    if not ends:
        return [block(plan)]
    lengths = [float(np.linalg.norm(end - plan.proximal)) for end in ends]
    radius = float(np.clip(0.045 * max(lengths), 0.006, 0.018))
    hub = plan.proximal
    if len(ends) > 1:
        hub = np.mean([plan.proximal, *ends], axis=0)
        ends = [plan.proximal, *ends] if plan.parent is not None else ends
    shapes: list[Shape] = [
        Limb(hub, end, 1.15 * radius, radius, 0.72)
        for end in ends
        if np.linalg.norm(end - hub) > 1e-6
    ]
    bumps = [
        Limb(foot_point, below_skin(mark, foot_point), 0.8 * radius, 0.55 * radius)
        for mark in plan.landmarks.values()
        for foot_point in [nearest_on(hub, ends, mark)]
        if radius < np.linalg.norm(mark - foot_point) < max(0.5 * max(lengths), 0.03)
    ]
    return shapes + bumps or [block(plan)]


def landmark_end(plan: SegmentPlan) -> list[FloatArray]:
    """The mean of the landmarks farthest from the joint, or each, where they lie around it."""
    points = np.array(list(plan.landmarks.values())).reshape(-1, 3)
    reach = np.linalg.norm(points - plan.proximal, axis=1)
    if not len(points) or reach.max() <= NEAR:
        return []
    ends = points[reach > 0.8 * reach.max()]
    mean = ends.mean(axis=0)
    opposite = np.linalg.norm(mean - plan.proximal) < 0.5 * reach.max()
    return list(ends) if opposite else [mean]


def nearest_on(hub: FloatArray, ends: list[FloatArray], point: FloatArray) -> FloatArray:
    """The point of the shafts from the hub to the ends that lies nearest."""
    feet = []
    for end in ends:
        along = end - hub
        t = np.clip((point - hub) @ along / max(float(along @ along), 1e-12), 0.08, 0.92)
        feet.append(hub + t * along)
    return min(feet, key=lambda foot_point: float(np.linalg.norm(point - foot_point)))


def block(plan: SegmentPlan) -> Ball:
    """A small ball at the joint, sized by what hangs around it."""
    around = [float(np.linalg.norm(p - plan.proximal)) for p in plan.parent_points.values()]
    radius = float(np.clip(0.045 * max(around, default=0.4), 0.008, 0.02))
    return Ball(plan.proximal, radius * np.array([1.1, 0.9, 1.0]))
