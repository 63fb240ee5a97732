"""Thigh and shank as drawn: femur, tibia and fibula between joint centres and ISB landmarks.

The radii are drawn by eye for a person of middle size and scale with the segment's length.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from condyle.viz.bone_depth import SKIN, below_skin, direction
from condyle.viz.shapes import Ball, Chain, Limb, Shape
from condyle.viz.skeleton_plan import SegmentPlan

FloatArray = NDArray[np.float64]

THIGH_LENGTH, SHANK_LENGTH = 0.42, 0.41
"""m; the lengths at which the radii below look right; others scale them."""


def thigh(plan: SegmentPlan) -> list[Shape]:
    """A femur: head, neck, trochanter, a slightly bowed shaft, two condyles."""
    trochanter = plan.landmark("GT")
    knee = plan.distal_centre("FE_lateral", "FE_medial")
    if trochanter is None or knee is None:
        return []
    head = plan.proximal
    scale = float(np.linalg.norm(knee - head)) / THIGH_LENGTH
    axis = direction(knee - head)
    lateral = below_skin(trochanter, head, 2.0 * SKIN)
    side = lateral - head
    side = direction(side - axis * (side @ axis))
    forward = np.cross(axis, side)
    forward = forward if forward[0] >= 0.0 else -forward
    base = lateral + (0.035 * axis - 0.012 * side) * scale
    shapes: list[Shape] = [
        Ball(head, np.full(3, 0.0235 * scale)),
        Limb(head, lateral + 0.020 * axis * scale, 0.013 * scale, 0.017 * scale, 0.9),
        Limb(lateral, base, 0.014 * scale, 0.018 * scale),
        Limb(
            base,
            knee - 0.025 * axis * scale,
            0.0165 * scale,
            0.0195 * scale,
            0.74,
            0.010 * forward * scale,
        ),
    ]
    return shapes + knuckles(plan, knee, ("FE_lateral", "FE_medial"), 0.021 * scale, side)


def knuckles(
    plan: SegmentPlan,
    centre: FloatArray,
    stems: tuple[str, str],
    radius: float,
    side: FloatArray,
) -> list[Shape]:
    """The two rounded ends of a long bone, towards the named landmarks or to both sides."""
    shapes: list[Shape] = []
    for stem, sign in zip(stems, (1.0, -1.0), strict=True):
        mark = plan.landmark(stem)
        way = side * (sign * 2.2 * radius) if mark is None else mark - centre
        reach = max(float(np.linalg.norm(way)) - SKIN - 0.9 * radius, 0.5 * radius)
        shapes.append(Limb(centre, centre + direction(way) * reach, radius, radius))
    return shapes


def shank(plan: SegmentPlan) -> list[Shape]:
    """A tibia with plateau and inner malleolus, and a thin fibula beside it."""
    outer, inner = plan.landmark("LM"), plan.landmark("MM")
    ankle = plan.distal_centre("LM", "MM")
    if outer is None or inner is None or ankle is None:
        return []
    knee = plan.proximal
    scale = float(np.linalg.norm(ankle - knee)) / SHANK_LENGTH
    axis = direction(ankle - knee)
    side = outer - inner
    side = direction(side - axis * (side @ axis))
    forward = np.cross(axis, side)
    forward = forward if forward[0] >= 0.0 else -forward
    plateau = knee + 0.030 * axis * scale
    neck = knee + (0.085 * axis + 0.006 * forward) * scale
    end = ankle - 0.020 * axis * scale
    condyle = 0.019 * side * scale
    shapes: list[Shape] = [
        Chain(np.stack([plateau + condyle, plateau - condyle]), 0.018 * scale),
        Limb(plateau, neck, 0.026 * scale, 0.0155 * scale),
        Limb(neck, end, 0.0145 * scale, 0.0135 * scale, 0.82),
        Limb(end, below_skin(inner, ankle, 1.7 * SKIN), 0.0135 * scale, 0.010 * scale),
    ]
    bump = plan.landmark("TT")
    if bump is not None:
        top = plateau + (0.018 * axis + 0.010 * forward) * scale
        shapes.append(Limb(top, below_skin(bump, neck, 1.6 * SKIN), 0.015 * scale, 0.010 * scale))
    return shapes + fibula(plan, knee, below_skin(outer, ankle), side, axis, scale)


def fibula(
    plan: SegmentPlan,
    knee: FloatArray,
    foot_end: FloatArray,
    side: FloatArray,
    axis: FloatArray,
    scale: float,
) -> list[Shape]:
    """The thin bone from the fibula's head to the outer malleolus."""
    head = plan.landmark("FH")
    if head is None:
        head = knee + (0.048 * axis + 0.048 * side) * scale
    top = below_skin(head, knee + 0.05 * axis * scale)
    low = foot_end - 0.035 * axis * scale - 0.003 * side * scale
    return [
        Limb(top, top + 0.03 * axis * scale, 0.0095 * scale, 0.006 * scale),
        Limb(top + 0.03 * axis * scale, low, 0.006 * scale, 0.0065 * scale, 0.85),
        Limb(low, foot_end, 0.0075 * scale, 0.009 * scale),
    ]
