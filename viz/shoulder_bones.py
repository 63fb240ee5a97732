"""Collar bone and shoulder blade as drawn, in the axes that the thorax has in the reference posture.

The blade hangs on its landmarks (names of Wu et al. 2005): root of the spine TS, lower angle AI, angle of
the acromion AA, tip of the coracoid PC. Where a model has fewer, it follows those that there are.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from condyle.viz.bone_depth import direction
from condyle.viz.bone_design import Design, Part
from condyle.viz.bone_solids import Egg, Rod, frame_along, moved
from condyle.viz.shapes import Plate, Shape

FloatArray = NDArray[np.float64]

CLAVICLE = {"proximal": (0.0, 0.0, 0.0), "AC": (-0.058, 0.015, 0.142)}

SCAPULA = {
    "proximal": (0.0, 0.0, 0.0),
    "AA": (-0.026, -0.006, 0.004),
    "TS": (-0.076, -0.027, -0.094),
    "AI": (-0.082, -0.145, -0.079),
    "PC": (0.026, -0.035, -0.022),
    "distal": (0.004, -0.045, 0.012),
}

TOP = (-0.058, 0.012, -0.084)
"""m; the upper angle."""

CENTRE_TO_SOCKET = 0.0265
"""m; from the centre of the humeral head to the floor of the glenoid: head and cartilage."""

SHEET = 0.0023
"""m; half the thickness of the blade."""


def clavicle() -> Design:
    """An S: its inner two thirds bulge forward, its outer third is hollow in front and flat."""
    line = [
        (0.0, 0.0, 0.001),
        (0.008, 0.000, 0.025),
        (0.004, 0.001, 0.055),
        (-0.018, 0.004, 0.085),
        (-0.045, 0.010, 0.112),
        (-0.058, 0.014, 0.138),
    ]
    shapes: list[Shape] = [
        Rod(line, [0.0105, 0.0082, 0.0068, 0.0065, 0.0070, 0.0070]),
        Rod([(-0.040, 0.009, 0.116), (-0.050, 0.0135, 0.134)], [0.0055, 0.0055]),
        Rod([(-0.054, 0.010, 0.110), (-0.064, 0.0135, 0.132)], [0.0050, 0.0055]),
    ]
    return Design(CLAVICLE, [Part(shapes, 700)])


def scapula() -> Design:
    """The blade with its spine, acromion, socket and coracoid process."""
    root, low, corner, beak, head = (
        np.array(SCAPULA[name]) for name in ("TS", "AI", "AA", "PC", "distal")
    )
    inwards = direction(np.array([-0.030, -0.035, -0.060]) - head)
    socket = head + CENTRE_TO_SOCKET * inwards
    neck = socket + 0.013 * inwards
    return Design(
        SCAPULA,
        [
            Part(
                [
                    *blade(root, low, neck),
                    *spine_and_acromion(root, corner, neck),
                    *coracoid(neck, beak),
                    Egg(
                        tuple(socket + 0.006 * inwards),
                        (0.0135, 0.0085, 0.0185),
                        frame_along((0.1, 1.0, 0.0), inwards)[:, [1, 0, 2]],
                    ),
                    Rod([socket + 0.007 * inwards, neck], [0.0125, 0.0095]),
                ],
                2400,
                blend=0.006,
                carved=[Egg(head, (CENTRE_TO_SOCKET,) * 3)],
                grid=0.0013,
            )
        ],
    )


def blade(root: FloatArray, low: FloatArray, neck: FloatArray) -> list[Shape]:
    """The triangle, a little hollow towards the ribs, with thick outer and thin inner borders."""
    top = np.array(TOP)
    across = direction(np.cross(neck - low, root - low))
    behind = across if across[0] < 0.0 else -across
    middle = (root + low + neck) / 3.0 + 0.007 * behind
    under = moved(neck, 0.0, -0.012, 0.0)
    notch = neck + 0.25 * (top - neck) + (0.0, 0.006, 0.0)
    rim = [under, low, root, top, notch]
    fan = [[middle, a, b] for a, b in zip(rim, [*rim[1:], rim[0]], strict=True)]
    inner = 0.5 * (low + root) - 0.004 * behind
    return [
        Plate(np.array(fan), SHEET),
        Rod([under, 0.5 * (under + low) + (0.002, 0.0, 0.002), low], [0.0075, 0.0052, 0.0055]),
        Rod([low, inner, root, top], [0.0050, 0.0034, 0.0036, 0.0036]),
        Rod([top, notch], [0.0032, 0.0030]),
        Rod([notch, neck], [0.0032, 0.0060]),
    ]


def spine_and_acromion(root: FloatArray, corner: FloatArray, neck: FloatArray) -> list[Shape]:
    """The ridge that rises from the root outwards, and the roof over the joint that it ends in."""
    base = neck + 0.35 * (root - neck) + (-0.004, 0.004, 0.0)
    outer, front = np.array([-0.008, -0.006, 0.016]), np.array([0.008, -0.006, 0.006])
    joint = np.array([-0.002, -0.002, 0.000])
    crest = root + 0.62 * (corner - root) + (-0.006, 0.003, 0.0)
    return [
        Plate(np.array([[root, base, crest], [base, crest, corner]]), SHEET),
        Rod([root, crest, corner], [0.0038, 0.0048, 0.0058]),
        Plate(np.array([[corner, outer, joint], [outer, front, joint]]), 0.0040),
        Rod([corner, outer, front], [0.0055, 0.0050, 0.0045]),
    ]


def coracoid(neck: FloatArray, beak: FloatArray) -> list[Shape]:
    """A bent finger: up and inwards from above the socket, then forward and outwards."""
    bend = moved(neck, 0.018, 0.022, 0.000)
    return [Rod([moved(neck, 0.004, 0.008, 0.0), bend, beak], [0.0085, 0.0072, 0.0055])]
