"""Thigh and shank as drawn: femur; tibia, fibula and kneecap; the talus below them.

In the axes of the lower limbs' segments. Landmarks are given on the bone's outside, and bone begins about
`SKIN` below them. The kneecap rides on the shank: its ligament does not stretch, and seen from there
it stays before the knee at every angle.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from condyle.viz.bone_depth import SKIN, below_skin, direction
from condyle.viz.bone_design import Design, Part
from condyle.viz.bone_solids import Drum, Egg, Rod, frame_along
from condyle.viz.shapes import Ball, Limb, Shape

FloatArray = NDArray[np.float64]

THIGH = {
    "proximal": (0.0, 0.0, 0.0),
    "distal": (0.0, -0.4222, 0.0),
    "GT": (-0.010, 0.0, 0.067),
    "FE_lateral": (0.0, -0.4222, 0.0475),
    "FE_medial": (0.0, -0.4222, -0.0475),
}

SHANK = {
    "proximal": (0.0, 0.0, 0.0),
    "distal": (0.0, -0.4403, 0.0),
    "TT": (0.035, -0.070, 0.008),
    "FH": (-0.015, -0.060, 0.052),
    "LM": (-0.0039, -0.4455, 0.037),
    "MM": (0.0039, -0.4351, -0.037),
}

TALUS = {
    "proximal": (0.0, 0.0, 0.0),
    "parent.LM": (-0.0039, -0.0052, 0.037),
    "parent.MM": (0.0039, 0.0052, -0.037),
}

DOWN, OUT, FORWARD = (
    np.array([0.0, -1.0, 0.0]),
    np.array([0.0, 0.0, 1.0]),
    np.array([1.0, 0.0, 0.0]),
)


def femur() -> Design:
    """Head, neck, trochanters, a slightly bowed shaft, two condyles."""
    head, knee = (np.array(THIGH[name]) for name in ("proximal", "distal"))
    lateral = below_skin(np.array(THIGH["GT"]), head, 2.0 * SKIN)
    base = lateral + 0.035 * DOWN - 0.012 * OUT
    shapes: list[Shape] = [
        Ball(head, np.full(3, 0.0235)),
        Limb(head, lateral + 0.020 * DOWN, 0.013, 0.017, 0.9),
        Limb(lateral, base, 0.014, 0.018),
        Egg((-0.013, -0.060, 0.026), (0.009, 0.014, 0.010)),
        *(
            Rod([(0.005, -0.350, 0.006), (0.002, -0.402, z)], [0.0120, 0.0175])
            for z in (-0.018, 0.021)
        ),
        Limb(base, knee + 0.025 * -DOWN, 0.0165, 0.0195, 0.74, 0.010 * FORWARD),
        *(knuckle(knee, np.array(THIGH[name])) for name in ("FE_lateral", "FE_medial")),
        Egg((0.004, -0.4130, 0.0190), (0.0235, 0.0220, 0.0140)),
        Egg((0.004, -0.4130, -0.0180), (0.0225, 0.0220, 0.0140)),
        Egg((-0.010, -0.4240, 0.0215), (0.0255, 0.0220, 0.0155)),
        Egg((-0.010, -0.4245, -0.0215), (0.0260, 0.0225, 0.0155)),
    ]
    groove = Rod([(-0.040, -0.432, 0.0), (-0.012, -0.450, 0.0)], [0.009, 0.008])
    return Design(THIGH, [Part(shapes, 2400, blend=0.010, carved=[groove])])


def knuckle(centre: FloatArray, mark: FloatArray, radius: float = 0.021) -> Limb:
    """The rounded end of a long bone towards a landmark."""
    way = mark - centre
    reach = float(np.linalg.norm(way)) - SKIN - 0.9 * radius
    return Limb(centre, centre + direction(way) * reach, radius, radius)


def shank() -> Design:
    """Tibia, fibula, kneecap."""
    return Design(SHANK, [tibia(), fibula(), Part([kneecap()], 260)])


def tibia() -> Part:
    """Plateau, tuberosity, a shaft with a sharp shin, inner malleolus."""
    ankle, inner = (np.array(SHANK[name]) for name in ("distal", "MM"))
    plateau = 0.032 * DOWN
    neck = 0.085 * DOWN + 0.006 * FORWARD
    end = ankle - 0.024 * DOWN
    top = plateau + 0.018 * DOWN + 0.010 * FORWARD
    shapes: list[Shape] = [
        Drum(
            np.array([-0.003, -0.0325, 0.0]),
            frame_along((0.0, 1.0, 0.0)),
            (0.0235, 0.0380),
            0.0110,
            0.0070,
            0.0,
        ),
        Limb(plateau + 0.008 * DOWN, neck, 0.024, 0.0155),
        Limb(neck, end, 0.0145, 0.0135, 0.82),
        Rod(
            [
                (0.022, -0.082, 0.006),
                (0.016, -0.150, 0.003),
                (0.010, -0.260, -0.001),
                (0.002, -0.360, -0.003),
            ],
            [0.0080, 0.0060, 0.0060, 0.0070],
        ),
        Rod([(0.003, -0.350, -0.002), (0.001, -0.412, 0.001)], [0.0120, 0.0185]),
        Limb(end - (0.0, 0.0, 0.013), below_skin(inner, ankle, 1.2 * SKIN), 0.0105, 0.0085),
        Egg((0.000, -0.4180, 0.006), (0.0175, 0.0095, 0.0170)),
        Limb(top, below_skin(np.array(SHANK["TT"]), neck, 1.2 * SKIN), 0.015, 0.0085),
    ]
    return Part(shapes, 1800, blend=0.009)


def fibula() -> Part:
    """The thin bone from its head to the outer malleolus."""
    outer = below_skin(np.array(SHANK["LM"]), np.array(SHANK["distal"]))
    top = below_skin(np.array(SHANK["FH"]), 0.05 * DOWN, 1.6 * SKIN)
    low = outer - 0.035 * DOWN - 0.003 * OUT
    shapes: list[Shape] = [
        Limb(top, top + 0.03 * DOWN, 0.0095, 0.006),
        Limb(top + 0.03 * DOWN, low, 0.006, 0.0065, 0.85),
        Limb(low, outer, 0.0075, 0.009),
    ]
    return Part(shapes, 700, blend=0.008)


def kneecap() -> Shape:
    """A thick disc before the femur's groove."""
    return Egg((0.0335, 0.004, 0.001), (0.0095, 0.0205, 0.0215))


def talus() -> Design:
    """The spool between the malleoli, and the head in front of it."""
    shapes: list[Shape] = [
        Rod([(0.0, -0.004, -0.008), (0.0, -0.004, 0.009)], [0.0155, 0.0160]),
        Egg((-0.006, -0.014, 0.001), (0.021, 0.010, 0.015)),
        Rod([(0.008, -0.008, -0.001), (0.031, -0.012, -0.007)], [0.0125, 0.0125]),
    ]
    return Design(TALUS, [Part(shapes, 600, blend=0.006)])
