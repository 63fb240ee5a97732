"""Foot and toes as drawn: heel, instep and five rays, from the heel and metatarsal landmarks.

Only the outer two rays and the second are ever measured; the others are spread between them.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from condyle.viz.bone_depth import SKIN, below_skin, direction
from condyle.viz.shapes import Ball, Limb, Shape
from condyle.viz.skeleton_plan import SegmentPlan, find

FloatArray = NDArray[np.float64]

FOOT_LENGTH = 0.14
"""m; from ankle to the metatarsal heads at which the radii below look right; others scale them."""


def ray_heads(first: FloatArray, fifth: FloatArray, second: FloatArray | None) -> FloatArray:
    """(5, 3) m: metatarsal heads spread on a shallow arc from first to fifth."""
    t = np.linspace(0.0, 1.0, 5)
    heads = first + t[:, None] * (fifth - first)
    bulge = np.zeros(3) if second is None else second - heads[1]
    return np.asarray(heads + (np.sin(np.pi * t) / np.sin(np.pi / 4.0))[:, None] * bulge)


def inner_heads(heads: FloatArray) -> FloatArray:
    """The heads drawn together, so that the outer two lie under the skin."""
    middle = heads.mean(axis=0)
    half = 0.5 * float(np.linalg.norm(heads[4] - heads[0]))
    return np.asarray(middle + (heads - middle) * max(1.0 - 1.2 * SKIN / max(half, SKIN), 0.5))


def foot(plan: SegmentPlan) -> list[Shape]:
    """Heel, instep, and five metatarsals to the ball of the foot."""
    heel, first, fifth = (plan.landmark(stem) for stem in ("CA", "MT1", "MT5"))
    if heel is None or first is None or fifth is None:
        return []
    ankle = plan.proximal
    heads = ray_heads(first, fifth, plan.landmark("MT2"))
    scale = float(np.linalg.norm(heads.mean(axis=0) - heel)) / 1.25 / FOOT_LENGTH
    up = direction(np.cross(fifth - first, heads.mean(axis=0) - heel))
    up = up if up @ (ankle - heel) >= 0.0 else -up
    heads = inner_heads(heads)
    heads = heads - 0.004 * up * scale
    heel_bone = below_skin(heel, ankle, 0.024 * scale)
    instep = ankle + 0.38 * (heads[1] - ankle) + 0.004 * up * scale
    outside = heel_bone + 0.52 * (heads[4] - heel_bone)
    bases = instep + np.linspace(0.0, 1.0, 5)[:, None] * (outside - instep)
    under = ankle - 0.014 * up * scale
    rays: list[Shape] = [
        Limb(base, head, 0.0075 * scale, thick * scale, 0.78)
        for base, head, thick in zip(
            bases, heads, (0.0095, 0.0078, 0.0074, 0.0072, 0.0074), strict=True
        )
    ]
    return [
        Ball(heel_bone, np.array([0.021, 0.019, 0.017]) * scale),
        Limb(heel_bone, under, 0.0165 * scale, 0.017 * scale, 0.92),
        Limb(under, instep, 0.0165 * scale, 0.0115 * scale),
        Limb(heel_bone, outside, 0.013 * scale, 0.009 * scale, 0.85),
        Limb(instep, outside, 0.0115 * scale, 0.009 * scale),
        *rays,
    ]


def toes(plan: SegmentPlan) -> list[Shape]:
    """Five short toes, going on from the parent's metatarsals."""
    heel, first, fifth = (find(plan.parent_points, stem) for stem in ("CA", "MT1", "MT5"))
    if heel is None or first is None or fifth is None or plan.centres:
        return []
    heads = ray_heads(first, fifth, find(plan.parent_points, "MT2"))
    middle = heads.mean(axis=0)
    scale = float(np.linalg.norm(middle - heel)) / 1.25 / FOOT_LENGTH
    up = direction(np.cross(first - fifth, middle - heel))
    up = up if up[1] >= 0.0 else -up
    ahead = direction(np.array([1.0, 0.0, 0.0]) - up * up[0])
    shapes: list[Shape] = []
    for head, length, thick in zip(
        inner_heads(heads) - 0.006 * up * scale,
        (0.046, 0.041, 0.036, 0.031, 0.026),
        (0.0082, 0.0062, 0.0058, 0.0056, 0.0056),
        strict=True,
    ):
        start = head + 0.011 * ahead * scale
        joint = start + (0.55 * length * ahead + 0.002 * up) * scale
        tip = head + (length * ahead - 0.006 * up) * scale
        shapes += [
            Limb(start, joint, thick * scale, 0.85 * thick * scale, 0.85),
            Limb(joint, tip, 0.85 * thick * scale, 0.85 * thick * scale),
        ]
    return shapes
