"""The pelvis as drawn: two winged hip bones and the sacrum, in the axes of `pelvis`.

It hangs on both ASIS, PSIS and outermost points of the crest (Wu et al. 2002) and on the hip centres; the
sacrum's top lies at the lumbosacral joint. What is between them is drawn by eye.
"""

from __future__ import annotations

import itertools

import numpy as np
from numpy.typing import NDArray

from condyle.viz.bone_depth import SKIN, below_skin
from condyle.viz.bone_design import Design, Part
from condyle.viz.bone_solids import Drum, Egg, Rod, both_sides, frame_along, moved
from condyle.viz.shapes import Ball, Chain, Limb, Plate, Shape

FloatArray = NDArray[np.float64]

RIGHT = {
    "ASIS": (0.0471, 0.0859, 0.125),
    "PSIS": (-0.1079, 0.0859, 0.040),
    "IC": (-0.040, 0.143, 0.140),
    "hip": (0.0, 0.0, 0.0898),
}

MIRRORED = (1.0, 1.0, -1.0)

ANCHORS = {
    **{f"{name}_right": point for name, point in RIGHT.items() if name != "hip"},
    **{
        f"{name}_left": tuple(np.multiply(point, MIRRORED))
        for name, point in RIGHT.items()
        if name != "hip"
    },
    "child_right": RIGHT["hip"],
    "child_left": tuple(np.multiply(RIGHT["hip"], MIRRORED)),
    "child_middle": (-0.035, 0.078, 0.0),
}

SACRAL_SHEET = (
    ((-0.066, 0.052, 0.000), (-0.080, 0.054, 0.042), (-0.101, -0.010, 0.000)),
    ((-0.080, 0.054, 0.042), (-0.101, 0.000, 0.026), (-0.101, -0.010, 0.000)),
    ((-0.101, 0.000, 0.026), (-0.104, -0.044, 0.007), (-0.101, -0.010, 0.000)),
)
"""m; triangles of the sacrum's right half, from its wing to its lower corner."""

SOCKET = 0.0255
"""m; radius of the hip socket's hollow."""


def pelvis() -> Design:
    """Hip bones on a sacrum, closed in front at the symphysis."""
    return Design(
        ANCHORS,
        [
            Part(
                [*both_sides(*hip_bone()), *sacrum()],
                5200,
                blend=0.010,
                grid=0.002,
                carved=both_sides(*hollows()),
            )
        ],
    )


def sacrum() -> list[Shape]:
    """A wedge from the lumbosacral joint backwards and down, with wings to the hip bones, and the coccyx."""
    plateau = np.array([-0.041, 0.070, 0.0])
    wings = both_sides(
        Rod(
            [(-0.050, 0.066, 0.012), (-0.064, 0.060, 0.036), (-0.078, 0.056, 0.044)],
            [0.0150, 0.0160, 0.0130],
        ),
        Plate(np.array(SACRAL_SHEET), 0.0070),
    )
    return [
        Drum(plateau, frame_along((0.55, 1.0, 0.0)), (0.0165, 0.0245), 0.010, 0.004, 0.0),
        Rod(
            [
                (-0.048, 0.060, 0.0),
                (-0.082, 0.030, 0.0),
                (-0.104, -0.014, 0.0),
                (-0.102, -0.050, 0.0),
            ],
            [0.0200, 0.0150, 0.0100, 0.0075],
        ),
        Rod(
            [(-0.102, -0.050, 0.0), (-0.092, -0.070, 0.0), (-0.080, -0.079, 0.0)],
            [0.0075, 0.0058, 0.0040],
        ),
        Rod(
            [(-0.088, 0.068, 0.0), (-0.101, 0.034, 0.0), (-0.110, -0.004, 0.0)],
            [0.0070, 0.0065, 0.0050],
        ),
        Rod([(-0.060, 0.066, 0.0), (-0.092, 0.066, 0.0)], [0.0120, 0.0070]),
        *wings,
    ]


def hip_bone() -> list[Shape]:
    """Wing, crest, socket, and the ring of pubis and ischium below it, on the right."""
    hip = np.array(RIGHT["hip"])
    inside = np.array([0.0, 0.09, 0.0])
    asis, crest, psis = (
        below_skin(np.array(RIGHT[name]), inside, 1.0 * SKIN) for name in ("ASIS", "IC", "PSIS")
    )
    roof = moved(hip, -0.006, 0.030, -0.008)
    joint = moved(psis, 0.026, -0.014, 0.004)
    front = moved(asis, -0.008, -0.038, -0.010)
    sit = moved(hip, -0.030, -0.072, -0.026)
    spine = moved(hip, -0.050, -0.022, -0.026)
    pubis = np.array([0.052, -0.030, 0.009])
    rim = crest_curve(asis, crest, psis)
    fan = np.stack([np.stack([a, b, roof]) for a, b in itertools.pairwise(rim)])
    return [
        Plate(fan, 0.0042),
        Chain(rim, 0.0066),
        Limb(psis, joint, 0.0085, 0.012),
        Limb(joint, roof, 0.012, 0.016, 0.9),
        Limb(asis, front, 0.0075, 0.0070),
        Limb(front, roof, 0.0075, 0.014),
        Ball(moved(hip, -0.002, 0.0, -0.010), np.full(3, 0.0315)),
        Rod(
            [moved(hip, 0.014, 0.006, -0.022), (0.034, -0.010, 0.040), pubis],
            [0.0125, 0.0085, 0.0085],
        ),
        Rod(
            [moved(hip, -0.014, -0.012, -0.016), moved(hip, -0.028, -0.045, -0.022), sit],
            [0.0165, 0.0125, 0.0150],
        ),
        Limb(moved(hip, -0.026, -0.010, -0.018), spine, 0.0100, 0.0045),
        Rod(
            [
                moved(sit, 0.004, -0.006, 0.0),
                (0.012, -0.066, 0.040),
                moved(pubis, -0.004, -0.024, 0.002),
            ],
            [0.0110, 0.0072, 0.0075],
        ),
        Limb(pubis, moved(pubis, -0.003, -0.022, 0.0), 0.0090, 0.0075),
    ]


def hollows() -> list[Shape]:
    """The socket's hollow, open outwards and a little down."""
    hip = np.array(RIGHT["hip"])
    return [
        Egg(hip, (SOCKET, SOCKET, SOCKET)),
        Rod([hip, moved(hip, 0.010, -0.012, 0.040)], [SOCKET - 0.001, SOCKET + 0.004]),
    ]


def crest_curve(asis: FloatArray, crest: FloatArray, psis: FloatArray) -> FloatArray:
    """(7, 3) m: points of the arch (a quadratic) from ASIS to PSIS through the crest."""
    t = np.linspace(0.0, 1.0, 7)[:, None]
    top = 2.0 * crest - 0.5 * (asis + psis)
    return np.asarray((1.0 - t) ** 2 * asis + 2.0 * t * (1.0 - t) * top + t**2 * psis)
