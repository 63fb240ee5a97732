"""The pelvis as drawn: a ring of tapered limbs and two wings, hung on ISB landmarks and hips.

Needs both ASIS, both PSIS and both hip centres; the proportions between them are drawn by eye
and scale with the distance of the hips.
"""

from __future__ import annotations

import itertools

import numpy as np
from numpy.typing import NDArray

from condyle.viz.bone_depth import SKIN, below_skin, direction
from condyle.viz.shapes import Ball, Chain, Limb, Plate, Shape
from condyle.viz.skeleton_plan import SegmentPlan

FloatArray = NDArray[np.float64]

HIP_WIDTH = 0.17
"""m; between the hip centres at which the radii below look right; others scale them."""


def pelvis(plan: SegmentPlan) -> list[Shape]:
    """A girdle: two winged hip bones on a sacrum, closed in front at the symphysis."""
    sides: list[tuple[FloatArray, FloatArray, FloatArray]] = []
    for side in ("right", "left"):
        front, back = (plan.landmarks.get(f"{stem}_{side}") for stem in ("ASIS", "PSIS"))
        hip = next((c for name, c in plan.centres.items() if name.endswith(f"_{side}")), None)
        if front is None or back is None or hip is None:
            return []
        sides.append((front, back, hip))
    (front_r, back_r, right_hip), (front_l, back_l, left_hip) = sides
    width = float(np.linalg.norm(right_hip - left_hip))
    right = direction(right_hip - left_hip)
    back, front = 0.5 * (back_r + back_l), 0.5 * (front_r + front_l)
    forward = front - back
    forward = direction(forward - right * (forward @ right))
    up = np.cross(right, forward)
    middle = 0.5 * (right_hip + left_hip)
    scale = width / HIP_WIDTH
    shapes = sacrum(back + SKIN * forward, forward, up, scale)
    symphysis = middle + (0.052 * forward - 0.030 * up) * scale
    for (asis, psis, hip), out in zip(sides, (right, -right), strict=True):
        crest = plan.landmarks.get(f"IC_{'right' if out is right else 'left'}")
        if crest is None:
            crest = 0.5 * (asis + psis) + (0.05 * up + 0.03 * out) * scale
        inside = middle + 0.09 * up * scale
        top = [below_skin(point, inside, 1.2 * SKIN) for point in (asis, crest, psis)]
        shapes += hip_bone(top, hip, symphysis, (out, forward, up), scale)
    return shapes


def sacrum(at: FloatArray, forward: FloatArray, up: FloatArray, scale: float) -> list[Shape]:
    """A wedge below the PSIS, curving backwards and then in."""
    top, middle, tip = (
        at + (a * forward + b * up) * scale
        for a, b in ((0.034, 0.022), (-0.002, -0.035), (0.016, -0.095))
    )
    return [
        Limb(top, middle, 0.024 * scale, 0.016 * scale),
        Limb(middle, tip, 0.016 * scale, 0.006 * scale),
    ]


def hip_bone(
    top: list[FloatArray],
    hip: FloatArray,
    symphysis: FloatArray,
    axes: tuple[FloatArray, FloatArray, FloatArray],
    scale: float,
) -> list[Shape]:
    """Wing, crest, socket, and the ring of pubis and ischium below it."""
    asis, crest, psis = top
    out, forward, up = axes
    roof = hip + (0.028 * up - 0.010 * out - 0.006 * forward) * scale
    joint = psis + (0.030 * forward - 0.012 * up) * scale
    ala = joint + (0.012 * forward + 0.014 * up - 0.032 * out) * scale
    front = asis - 0.030 * up * scale + 0.25 * (roof - asis)
    sit = hip + (-0.068 * up - 0.026 * forward - 0.024 * out) * scale
    pubis = symphysis + 0.009 * out * scale
    rim = crest_curve(asis, crest, psis)
    thin, bar = 0.0045 * scale, 0.0085 * scale
    fan = np.stack([np.stack([a, b, roof]) for a, b in itertools.pairwise(rim)])
    return [
        Plate(fan, thin),
        Chain(rim, 0.0068 * scale),
        Limb(psis, joint, bar, 0.012 * scale),
        Limb(joint, ala, 0.013 * scale, 0.019 * scale, 0.9),
        Limb(joint, roof, 0.012 * scale, 0.016 * scale, 0.9),
        Limb(asis, front, 0.0075 * scale, 0.007 * scale),
        Limb(front, roof, 0.007 * scale, 0.014 * scale),
        Ball(hip - 0.010 * out * scale, np.full(3, 0.0265 * scale)),
        Limb(hip + (0.012 * forward - 0.014 * out) * scale, pubis, 0.014 * scale, bar, 0.75),
        Limb(hip - (0.012 * up + 0.014 * out) * scale, sit, 0.016 * scale, 0.014 * scale, 0.8),
        Limb(sit, pubis - 0.016 * up * scale, 0.011 * scale, 0.007 * scale, 0.7),
        Limb(pubis, pubis - 0.018 * up * scale, 0.0095 * scale, 0.008 * scale),
    ]


def crest_curve(asis: FloatArray, crest: FloatArray, psis: FloatArray) -> FloatArray:
    """(6, 3) m: points of the arch (a quadratic) from ASIS to PSIS through the crest."""
    t = np.linspace(0.0, 1.0, 6)[:, None]
    top = 2.0 * crest - 0.5 * (asis + psis)
    return np.asarray((1.0 - t) ** 2 * asis + 2.0 * t * (1.0 - t) * top + t**2 * psis)
