"""Bones of a four-legged animal, known by the landmarks that `four_legged` gives to trunk, skull, blade and paws.

As with a person's bones nothing is measured: joint centres and landmarks say how large and where,
and the shapes only help the eye. The long bones of the legs are the plain ones of `bones`.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
from numpy.typing import NDArray

from condyle.viz.shapes import Ball, Chain, Limb, Plate, Shape
from condyle.viz.skeleton_plan import NEAR, SegmentPlan, side_of

FloatArray = NDArray[np.float64]

RIBS, JOINED_RIBS = 11, 8
"""Ribs that are drawn a side, and how many of them reach the breast bone; a dog has 13 and 9."""

SIDES = (1.0, -1.0)
"""Right and left: the sign of Z."""


def animal_bone(plan: SegmentPlan) -> list[Shape]:
    """The bone that an animal's landmarks suggest; nothing for any other segment."""
    for make in (chest, hips, skull, blade, paw, tail):
        shapes = make(plan)
        if shapes:
            return shapes
    return []


def chest(plan: SegmentPlan) -> list[Shape]:
    """Vertebrae with their spines, ribs, and the breast bone from `sternum` by `keel` to its end."""
    withers, front, keel = (plan.landmark(stem) for stem in ("withers", "sternum", "keel"))
    back, widest = plan.landmark("sternum_end"), plan.landmark("ribs")
    if withers is None or front is None or keel is None or back is None or widest is None:
        return []
    spine = np.stack([plan.proximal, foremost_in_the_middle(plan)])
    size = float(np.linalg.norm(spine[1] - spine[0]))
    if size < NEAR:
        return []
    breast_bone = np.stack([back, keel, front])
    return [
        Chain(spine, 0.030 * size),
        Chain(breast_bone, 0.020 * size),
        *processes(spine, withers, size),
        *(
            Chain(path * [1.0, 1.0, side], 0.0125 * size)
            for path in right_ribs(spine, breast_bone, widest)
            for side in SIDES
        ),
    ]


def right_ribs(spine: FloatArray, breast_bone: FloatArray, widest: FloatArray) -> list[FloatArray]:
    """The ribs of the right side, the hindmost first; these end free."""
    paths = []
    for number, share in enumerate(np.linspace(0.04, 0.94, RIBS)):
        top = spine[0] + share * (spine[1] - spine[0])
        joined = number >= RIBS - JOINED_RIBS
        wide = float(np.interp(top[0], [spine[0, 0], widest[0], spine[1, 0]], [0.8, 1.0, 0.4]))
        ends = breast_bone[[0, -1], 0]
        foot = float(np.interp(number, [RIBS - JOINED_RIBS, RIBS - 1], ends))
        height = float(np.interp(foot, breast_bone[:, 0], breast_bone[:, 1]))
        low = np.array([foot if joined else top[0], height, 0.0])
        paths.append(rib(top, low, width=wide * abs(widest[2]), until=1.0 if joined else 0.62))
    return paths


def foremost_in_the_middle(plan: SegmentPlan) -> FloatArray:
    """The joint centre of a child that lies farthest forward, in the middle: the neck's."""
    centres = [c for c in plan.far_centres() if abs(c[2]) < 1e-6]
    return max(centres, key=lambda c: float(c[0]), default=plan.proximal)


def rib(top: FloatArray, low: FloatArray, *, width: float, until: float) -> FloatArray:
    """(12, 3) m: a right rib from the spine, out, back and down towards the breast bone."""
    turn = np.pi * until * np.linspace(0.0, 1.0, 12)
    down = (1.0 - np.cos(turn)) / 2.0
    path = top + down[:, None] * (low - top)
    path[:, 0] -= 0.35 * width * np.sin(turn)
    path[:, 2] = width * np.sin(turn) ** 0.8
    return np.asarray(path)


def processes(spine: FloatArray, withers: FloatArray, size: float) -> list[Shape]:
    """Spines of the vertebrae, highest at the withers."""
    along = spine[1] - spine[0]
    height = withers[1] - np.interp(withers[0], spine[:, 0], spine[:, 1])
    shapes: list[Shape] = []
    for share in np.linspace(0.04, 0.96, RIBS):
        foot = spine[0] + share * along
        lower = abs(foot[0] + 0.1 * size - withers[0]) / size
        tip = foot + height * np.array([-0.4, max(1.0 - 1.1 * lower, 0.35), 0.0])
        shapes.append(Limb(foot, tip, 0.018 * size, 0.014 * size))
    return shapes


def hips(plan: SegmentPlan) -> list[Shape]:
    """Lumbar vertebrae, the sacrum to the tail, and a hip bone a side from `hip_bone` to `seat_bone`."""
    fore, rear = plan.landmark("hip_bone"), plan.landmark("seat_bone")
    joints = [c for c in plan.far_centres() if abs(c[2]) > 1e-6]
    tails = [c for c in plan.far_centres() if abs(c[2]) <= 1e-6]
    if fore is None or rear is None or len(joints) < 2 or not tails:
        return []
    size = float(np.linalg.norm(fore - rear))
    joint = joints[0] * [1.0, 1.0, np.sign(joints[0][2]) * np.sign(fore[2])]
    inner = np.array([fore[0] - 0.15 * size, fore[1] - 0.08 * size, 0.35 * fore[2]])
    middle = inner * [1.0, 1.0, 0.0]
    shapes: list[Shape] = [Chain(np.stack([plan.proximal, middle, tails[0]]), 0.065 * size)]
    for share in np.linspace(0.1, 0.9, 6):
        foot = plan.proximal + share * (middle - plan.proximal)
        shapes.append(
            Limb(foot, foot + np.array([-0.05 * size, 0.20 * size, 0.0]), 0.05 * size, 0.035 * size)
        )
        wings = [foot + np.array([0.08 * size, -0.02 * size, side * 0.25 * size]) for side in SIDES]
        shapes += [Limb(foot, wing, 0.04 * size, 0.02 * size) for wing in wings]
    pubis = np.array([joint[0] - 0.10 * size, joint[1] - 0.22 * size, 0.0])
    for side in SIDES:
        corner, seam, socket, seat, low = (
            p * [1.0, 1.0, side] for p in (fore, inner, joint, rear, pubis)
        )
        shapes += [
            Plate(np.stack([[corner, seam, socket]]), 0.035 * size),
            Chain(np.stack([socket, seat]), 0.055 * size),
            Chain(np.stack([socket, low, seat]), 0.035 * size),
            Ball(socket, np.full(3, 0.10 * size)),
        ]
    return shapes


def skull(plan: SegmentPlan) -> list[Shape]:
    """A brain case, cheek arches, the muzzle to `nose`, and a lower jaw from its angle."""
    marks = [plan.landmark(stem) for stem in ("nose", "brow", "nape", "cheek", "jaw")]
    nose, brow, nape, cheek, jaw = marks
    if nose is None or brow is None or nape is None or cheek is None or jaw is None:
        return []
    size, width = float(np.linalg.norm(nose - nape)), abs(cheek[2])
    case = np.array([0.55 * cheek[0], 0.35 * brow[1], 0.0])
    brow_inside = brow + np.array([0.0, -0.15 * size, 0.0])
    nose_inside = nose + np.array([-0.06 * size, 0.04 * size, 0.0])
    chin = nose + np.array([-0.13 * size, -0.10 * size, 0.0])
    shapes: list[Shape] = [
        Ball(case, np.array([0.24 * size, 0.72 * brow[1], 0.68 * width])),
        Limb(brow_inside, nose_inside, 0.135 * size, 0.06 * size),
        Limb(case, nape, 0.09 * size, 0.035 * size),
    ]
    for side in SIDES:
        out = np.array([1.0, 1.0, side])
        ear = np.array([0.25 * cheek[0], cheek[1], 0.6 * width])
        eye = np.array([brow[0] + 0.02 * size, cheek[1], 0.45 * width])
        angle, beak = np.abs(jaw) * [1, -1, 1], chin + np.array([0.0, 0.0, 0.12 * width])
        shapes += [
            Chain(np.stack([ear, np.abs(cheek) * [1, -1, 1], eye]) * out, 0.030 * size),
            Chain(np.stack([ear, angle, beak]) * out, 0.035 * size),
        ]
    return shapes


def blade(plan: SegmentPlan) -> list[Shape]:
    """A shoulder blade: a triangle from its top edge to the shoulder, with its ridge outside."""
    top = plan.landmark("blade_top")
    if top is None or len(plan.far_centres()) != 1:
        return []
    shoulder = plan.far_centres()[0]
    length, out = (
        float(np.linalg.norm(top - shoulder)),
        -1.0 if side_of(plan.name) == "left" else 1.0,
    )
    fore = top + length * np.array([0.20, -0.16, 0.0])
    rear = top + length * np.array([-0.26, -0.05, 0.0])
    neck = shoulder + 0.15 * (top - shoulder)
    ridge = [
        p + np.array([0.0, 0.0, out * 0.08 * length]) for p in (0.9 * top + 0.1 * shoulder, neck)
    ]
    return [
        Plate(np.stack([[fore, top, neck], [top, rear, neck]]), 0.022 * length),
        Plate(np.stack([[top, ridge[0], neck], [ridge[0], ridge[1], neck]]), 0.018 * length),
        Limb(neck, shoulder, 0.055 * length, 0.075 * length),
    ]


def paw(plan: SegmentPlan) -> list[Shape]:
    """Four toes side by side, from the joint over their knuckles to the pads."""
    pads = [plan.landmark(stem) for stem in ("fore_toes", "hind_toes")]
    found = [p for p in pads if p is not None]
    if not found or plan.far_centres():
        return []
    pad, size = found[0], float(np.linalg.norm(found[0] - plan.proximal))
    spread = max(0.11 * size, 0.0085)
    return [shape for place in (-1.5, -0.5, 0.5, 1.5) for shape in toe(plan, pad, place, spread)]


def toe(plan: SegmentPlan, pad: FloatArray, place: float, spread: float) -> Sequence[Shape]:
    """One toe, `place` steps of `spread` (m) to the right; the outer ones are shorter."""
    aside = np.array([0.0, 0.0, place * spread])
    end = pad + aside - [0.3 * abs(place) * spread, -0.8 * spread, 0.0]
    start = plan.proximal + 0.45 * aside
    knuckle = end + np.array([-2.0 * spread, 1.4 * spread, 0.0])
    return [
        Chain(np.stack([start, knuckle, end]), 0.42 * spread),
        Ball(end - [0.3 * spread, 0.2 * spread, 0.0], spread * np.array([0.9, 0.55, 0.5])),
    ]


def tail(plan: SegmentPlan) -> list[Shape]:
    """A bar that tapers to `tail_tip`."""
    tip = plan.landmark("tail_tip")
    if tip is None:
        return []
    size = float(np.linalg.norm(tip - plan.proximal))
    return [Limb(plan.proximal, tip, 0.035 * size, 0.014 * size)]
