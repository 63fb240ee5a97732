"""Bones to draw: one surface per segment, in its frame, built once; frames only move it.

A segment whose model names meshes is drawn by them. Else the landmarks of the trade that it carries
(ISB names, Wu et al. 2002 and 2005) tell a bone of the package, which is stretched onto them;
nothing is measured on bone, it only helps the eye. An animal's parts are made from their own
landmarks. Any other segment becomes a shaft or a hub of shafts between its joint centres and
landmarks, and one without either a small ball.
"""

from __future__ import annotations

import warnings
from collections.abc import Sequence
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from condyle.model.meshes import GrownShape, load_mesh, place_mesh
from condyle.solver.results import FittedMotion
from condyle.viz.animal_bones import animal_bone
from condyle.viz.bone_depth import below_skin, direction
from condyle.viz.bone_design import joined
from condyle.viz.bone_fitting import fit_bone
from condyle.viz.bone_library import shipped_bone
from condyle.viz.bone_signs import bone_of, known_points
from condyle.viz.bone_solids import swept
from condyle.viz.shapes import Ball, Limb, Shape, Surface, skin
from condyle.viz.skeleton_plan import NEAR, SegmentPlan, plan_segments, side_of

FloatArray = NDArray[np.float64]

BLEND = 0.012
"""m; how softly neighbouring parts grow together, for bones about as long as a thigh."""

LOOSE = 0.05
"""m; a joint this far from its bone gets a bar; the centre of a humeral head lies half as far from the blade."""

LINK = 0.006
"""m; radius of that bar."""


def build_bones(motion: FittedMotion) -> tuple[Surface, ...]:
    """One surface per segment, in the segment's frame (m), in the order of the segments."""
    return tuple(
        mesh_surface(motion.shapes[plan.name])
        if has_meshes(motion, plan.name)
        else segment_bone(plan)
        for plan in plan_segments(motion)
    )


def segment_bone(plan: SegmentPlan) -> Surface:
    """The stored bone that a segment's landmarks tell, or a plain one."""
    return known_bone(plan) or plain_bone(plan)


def known_bone(plan: SegmentPlan) -> Surface | None:
    """A bone of the package, laid into the segment; None where none suits it."""
    name = bone_of(plan)
    if name is None:
        return None
    bone = shipped_bone(name)
    points = fit_bone(bone, known_points(plan))
    if points is None:
        return None
    faces = bone.faces
    if side_of(plan.name) == "left":
        points, faces = points * [1.0, 1.0, -1.0], faces[:, ::-1]
    return with_links(plan, points, faces)


def with_links(plan: SegmentPlan, points: FloatArray, faces: NDArray[np.int64]) -> Surface:
    """The bone, with a bar to each joint that lies too far from it to seem joined."""
    surfaces = [(points, faces)]
    for centre in [*plan.centres.values(), *([plan.proximal] if plan.parent else [])]:
        away = np.linalg.norm(points - centre, axis=1)
        nearest = points[np.argmin(away)]
        if away.min() > LOOSE:
            way, even = np.linspace(nearest, centre, 6), np.full(6, LINK)
            aside = np.tile(across(centre - nearest), (6, 1))
            surfaces.append(swept(way, aside, even, even, sides=8))
    points, faces = joined(surfaces)
    return Surface(points, point_normals(points, faces), faces)


def across(way: FloatArray) -> FloatArray:
    """A unit vector square to another."""
    return direction(np.cross(way, np.eye(3)[np.argmin(np.abs(way))]))


def plain_bone(plan: SegmentPlan) -> Surface:
    """The bone that a segment's joint centres and landmarks suggest."""
    shapes = animal_bone(plan) or generic(plan)
    blend = min(BLEND, 1.5 * min(shape.thinnest for shape in shapes))
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
        ends = [plan.proximal, *ends] if something_hangs_at_the_origin(plan) else ends
    shapes: list[Shape] = [
        Limb(hub, end, 1.15 * radius, radius, 0.72)
        for end in ends
        if np.linalg.norm(end - hub) > 1e-6
    ]
    bumps = [
        Limb(foot_point, below_skin(mark, foot_point), 0.8 * radius, 0.55 * radius)
        for mark in plan.landmarks.values()
        for foot_point in [nearest_on(hub, ends, mark)]
        if radius < np.linalg.norm(mark - foot_point) < max(0.6 * max(lengths), 0.03)
    ]
    return shapes + bumps or [block(plan)]


def something_hangs_at_the_origin(plan: SegmentPlan) -> bool:
    """Whether the segment's own joint, or one of its children's at the same place, is there."""
    near = (np.linalg.norm(centre - plan.proximal) <= NEAR for centre in plan.centres.values())
    return plan.parent is not None or any(near)


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
